# Real returns: Finance of package gmm, twenty stocks, 4,034 days.

test_that("rolling 250-day betas of twenty stocks equal lm() on each window", {
  skip_if_not_installed("gmm")
  local <- new.env()
  utils::data("Finance", package = "gmm", envir = local)
  raw <- as.matrix(local$Finance)
  days <- as.Date(rownames(raw))
  factors <- cbind(mkt = raw[, "rm"] - raw[, "rf"], smb = raw[, "smb"], hml = raw[, "hml"])
  panel <- asset_panel(stack_returns(raw[, 1:20], factors, period = days), "asset", "period")
  found <- augment(exposures(panel, ret ~ mkt + smb + hml, window = window_rolling(250)))
  expect_equal(sum(is.na(found$reason)), 20 * (length(days) - 99))
  for (stock in colnames(raw)[c(1, 12)]) {
    own <- found[found$asset == stock, ]
    for (t in c(250, 1731, length(days))) {
      rows <- (t - 249):t
      fit <- lm(raw[rows, stock] ~ factors[rows, ])
      expect_equal(unlist(own[t, c("alpha", "beta_mkt", "beta_smb", "beta_hml")], use.names = FALSE), unname(coef(fit)), tolerance = 1e-10)
      expect_equal(own$se_hml[t], sqrt(vcov(fit)[4, 4]), tolerance = 1e-10)
    }
  }
})
