# Each window against lm() on the same rows.

market <- demo_market(firms = 30, months = 100)
position <- function(month) month %/% 100 * 12 + month %% 100
month_panel <- function(data = market) suppressMessages(asset_panel(data, "firm", "month"))

window_lm <- function(firm, month, formula, length = Inf, half_life = NULL, data = market) {
  age <- position(month) - position(data$month)
  rows <- data[data$firm == firm & age >= 0 & age < length & is.finite(data$ret), ]
  age <- position(month) - position(rows$month)
  rows$w <- (if (is.null(half_life)) 1 else 2^(-age / half_life)) * rows$a
  lm(formula, rows, weights = w)
}
market$a <- 1
some_rows <- function(n = 60) with_own_random_numbers(7, sample(nrow(market), n))

expect_windows <- function(found, fits, min_obs, errors = TRUE) {
  enough <- vapply(fits, nobs, 0) >= min_obs
  expect_gt(sum(enough), 20)
  expect_gt(sum(!enough), 3)
  expect_identical(is.na(found$beta_mkt), !enough)
  expect_identical(found$n_obs, as.integer(vapply(fits, nobs, 0)))
  expect_identical(is.na(found$reason), enough)
  want <- t(vapply(fits[enough], function(fit) {
    s <- summary(fit)
    c(coef(fit), s$coefficients[-1, 2], s$sigma^2, s$r.squared)
  }, numeric(7)))
  got <- as.matrix(found[enough, c("alpha", "beta_mkt", "beta_smb", "se_mkt", "se_smb", "resid.var", "r.squared")])
  columns <- if (errors) 1:7 else 1:3
  expect_equal(unname(got[, columns]), unname(want[, columns]), tolerance = 1e-11)
}

test_that("rolling windows equal lm() on each window, with gaps and missing returns", {
  x <- exposures(month_panel(), ret ~ mkt + smb, window = window_rolling(36, min_obs = 20))
  rows <- some_rows()
  fits <- lapply(rows, function(i) window_lm(market$firm[i], market$month[i], ret ~ mkt + smb, 36))
  expect_windows(augment(x)[rows, ], fits, 20)
  i <- rows[which(!is.na(augment(x)$alpha[rows]))[1]]
  fit <- window_lm(market$firm[i], market$month[i], ret ~ mkt + smb, 36)
  expect_equal(vcov(x)[, , i], vcov(fit)[-1, -1], tolerance = 1e-11)
})

test_that("expanding and full windows equal lm()", {
  x <- exposures(month_panel(), ret ~ mkt + smb, window = window_expanding(20))
  rows <- some_rows()
  fits <- lapply(rows, function(i) window_lm(market$firm[i], market$month[i], ret ~ mkt + smb))
  expect_windows(augment(x)[rows, ], fits, 20)
  full <- augment(exposures(month_panel(), ret ~ mkt + smb))
  last <- max(market$month)
  fit <- window_lm(full$asset[3], last, ret ~ mkt + smb)
  expect_equal(full$beta_smb[3], coef(fit)[["smb"]], tolerance = 1e-11)
  expect_equal(unique(full$period), last)
})

test_that("weights are those of lm()", {
  market$a <- exp(market$size - 6)
  x <- exposures(month_panel(market), ret ~ mkt + smb, window = window_rolling(36, min_obs = 20), weights = "a")
  rows <- some_rows()
  fits <- lapply(rows, function(i) window_lm(market$firm[i], market$month[i], ret ~ mkt + smb, 36, data = market))
  expect_windows(augment(x)[rows, ], fits, 20)
  market$a[9] <- -1
  expect_error(
    exposures(month_panel(market), ret ~ mkt, window = window_rolling(36), weights = "a"),
    class = "lambdabar_error_input"
  )
})

test_that("decaying windows have weighted slopes, and errors that allow for the weights", {
  x <- exposures(month_panel(), ret ~ mkt + smb, window = window_decay(15, 20))
  rows <- some_rows()
  fits <- lapply(rows, function(i) window_lm(market$firm[i], market$month[i], ret ~ mkt + smb, Inf, 15))
  found <- augment(x)[rows, ]
  expect_windows(found, fits, 20, errors = FALSE)
  # Homoskedastic errors: b = L y, Var = s2 L L', s2 = rss / tr(M'WM), by plain matrices.
  j <- which(!is.na(found$alpha))[1]
  fit <- fits[[j]]
  X <- model.matrix(fit)
  w <- fit$weights
  L <- solve(crossprod(X, w * X), t(w * X))
  M <- diag(nrow(X)) - X %*% L
  s2 <- sum(w * residuals(fit)^2) / sum(diag(t(M) %*% (w * M)))
  expect_equal(found$resid.var[j], s2, tolerance = 1e-10)
  expect_equal(c(found$se_mkt[j], found$se_smb[j]), unname(sqrt(s2 * diag(L %*% t(L))))[2:3], tolerance = 1e-10)
})

# Neither a mean of a million times the spread nor an outlier that has left may cost digits.
test_that("windows keep their digits", {
  set.seed(3)
  T <- 400
  f <- rnorm(T, 0, 0.05)
  base <- cbind(level = 1e6 * 0.05 + 0.8 * f + rnorm(T, 0, 0.05), struck = 0.8 * f + rnorm(T, 0, 0.05))
  base[70, "struck"] <- 1e7
  panel <- asset_panel(stack_returns(base, cbind(mkt = f)), "asset", "period")
  for (window in list(window_rolling(36), window_rolling(120))) {
    found <- augment(exposures(panel, ret ~ mkt, window = window))
    for (asset in colnames(base)) {
      own <- found[found$asset == asset, ]
      for (t in c(260, 321, 400)) {
        i <- (t - window$length + 1):t
        d <- f[i] - mean(f[i])
        y <- base[i, asset] - base[t, asset]
        expect_equal(own$beta_mkt[t], sum(d * y) / sum(d^2), tolerance = 1e-11)
      }
    }
  }
  far <- augment(exposures(panel, ret ~ I(mkt + 5e4), window = window_rolling(36)))
  near <- augment(exposures(panel, ret ~ mkt, window = window_rolling(36)))
  expect_equal(far[["beta_I(mkt + 50000)"]], near$beta_mkt, tolerance = 1e-9)
})

test_that("close to collinear factors and exact fits are solved from the rows", {
  set.seed(4)
  f <- rnorm(90)
  factors <- cbind(a = f, b = f + 1e-5 * rnorm(90))
  returns <- cbind(own = factors[, "a"], other = f + rnorm(90))
  panel <- asset_panel(stack_returns(returns, factors), "asset", "period")
  found <- augment(exposures(panel, ret ~ a + b, window = window_rolling(40)))
  fit <- lm(returns[51:90, "other"] ~ factors[51:90, ])
  expect_equal(unlist(found[180, c("beta_a", "beta_b")], use.names = FALSE), unname(coef(fit)[2:3]), tolerance = 1e-6)
  expect_equal(c(found$beta_a[90], found$beta_b[90]), c(1, 0), tolerance = 1e-9)
  constant <- cbind(a = c(rep(1, 45), rnorm(45)))
  panel <- asset_panel(stack_returns(returns, constant), "asset", "period")
  found <- augment(exposures(panel, ret ~ a, window = window_rolling(40)))
  expect_match(found$reason[42], "constant or collinear")
  expect_true(is.na(found$beta_a[42]) && !is.na(found$beta_a[60]))
})

test_that("leads and lags are summed over one regression, and see no later factor", {
  panel <- month_panel()
  x <- augment(exposures(panel, ret ~ mkt, window = window_rolling(40, 20), lead_lag = c(1, 2)))
  months <- sort(unique(market$month))
  mkt <- market$mkt[match(months, market$month)]
  at <- function(shift) {
    t <- match(market$month, months) + shift
    ifelse(t >= 1 & t <= length(months), mkt[pmax(t, 1)], NA)
  }
  shifted <- cbind(l2 = at(-2), l1 = at(-1), l0 = at(0), a1 = at(1))
  i <- which(!is.na(x$alpha))[200]
  t <- match(market$month, months)
  window <- market$firm == market$firm[i] & t <= t[i] - 1 & t >= t[i] - 40 + 1 + 2
  fit <- lm(market$ret[window] ~ shifted[window, ])
  expect_equal(x$beta_mkt[i], sum(coef(fit)[-1]), tolerance = 1e-10)
  expect_equal(x$se_mkt[i], sqrt(sum(vcov(fit)[-1, -1])), tolerance = 1e-10)
  expect_equal(x$n_obs[i], nobs(fit))

  # Fowler and Rorke (1983): w_1 = (1 + rho_1) / (1 + 2 rho_1) on lead and lag.
  x <- augment(exposures(panel, ret ~ mkt, window = window_rolling(40, 20), lead_lag = 1, lead_lag_form = "fowler_rorke"))
  window <- market$firm == market$firm[i] & t <= t[i] - 1 & t >= t[i] - 40 + 1 + 1
  fit <- lm(market$ret[window] ~ shifted[window, 2:4])
  centred <- mkt[(t[i] - 39):t[i]] - mean(mkt[(t[i] - 39):t[i]])
  rho <- sum(centred[-1] * centred[-40]) / sum(centred^2)
  w <- c(1 + rho, 1 + 2 * rho, 1 + rho) / (1 + 2 * rho)
  expect_equal(x$beta_mkt[i], sum(w * coef(fit)[-1]), tolerance = 1e-10)
  expect_equal(x$se_mkt[i], sqrt(drop(t(w) %*% vcov(fit)[-1, -1] %*% w)), tolerance = 1e-10)
  expect_error(
    exposures(panel, ret ~ mkt, lead_lag = c(0, 1), lead_lag_form = "fowler_rorke"),
    class = "lambdabar_error_unsupported"
  )
})

test_that("shrinkage weighs each beta by its own error", {
  panel <- month_panel()
  raw <- augment(exposures(panel, ret ~ mkt, window = window_rolling(48, 24)))
  month <- 202212
  own <- raw[raw$period == month & !is.na(raw$alpha), ]
  b <- own$beta_mkt
  e2 <- own$se_mkt^2
  for (rule in c("vasicek", "raw")) {
    x <- suppressWarnings(exposures(panel, ret ~ mkt, window = window_rolling(48, 24), shrink = rule))
    found <- augment(x)[raw$period == month & !is.na(raw$alpha), ]
    tau2 <- var(b) - if (rule == "vasicek") mean(e2) else 0
    expect_gt(tau2, 0)
    k <- tau2 / (tau2 + e2)
    expect_equal(found$beta_mkt, mean(b) + k * (b - mean(b)), tolerance = 1e-11)
    expect_equal(found$se_mkt, sqrt(k * e2), tolerance = 1e-11)
    expect_error(vcov(x), class = "lambdabar_error_unsupported")
  }
  x <- suppressWarnings(exposures(panel, ret ~ mkt, window = window_rolling(48, 24), shrink = "paule_mandel"))
  found <- augment(x)[raw$period == month & !is.na(raw$alpha), ]
  excess <- function(tau2) {
    m <- weighted.mean(b, 1 / (tau2 + e2))
    sum((b - m)^2 / (tau2 + e2)) - (length(b) - 1)
  }
  tau2 <- uniroot(excess, c(0, 10 * var(b)), tol = 1e-13)$root
  m <- weighted.mean(b, 1 / (tau2 + e2))
  expect_equal(found$beta_mkt, m + tau2 / (tau2 + e2) * (b - m), tolerance = 1e-8)
})

test_that("the last trading day of a month carries its beta", {
  set.seed(5)
  days <- seq(as.Date("2021-01-01"), as.Date("2021-12-31"), by = "day")
  days <- days[!format(days, "%u") %in% c("6", "7")]
  f <- rnorm(length(days), 0, 0.01)
  returns <- cbind(a = f + rnorm(length(days), 0, 0.02), b = 0.5 * f + rnorm(length(days), 0, 0.02))
  panel <- asset_panel(stack_returns(returns, cbind(mkt = f), period = days), "asset", "period")
  daily <- tidy(exposures(panel, ret ~ mkt, window = window_rolling(60)))
  monthly <- tidy(exposures(panel, ret ~ mkt, window = window_rolling(60), every = "month"))
  expect_equal(nrow(monthly), 24)
  expect_equal(monthly$month, rep(202101:202112, 2))
  merged <- merge(monthly, daily, by = c("asset", "period", "term"))
  expect_equal(nrow(merged), 24)
  expect_identical(merged$estimate.x, merged$estimate.y)
})

test_that("neither the order of rows nor the number of threads changes a bit", {
  window <- window_rolling(36, min_obs = 20)
  x <- augment(exposures(month_panel(), ret ~ mkt + smb, window = window))
  shuffled <- with_own_random_numbers(2, sample(nrow(market)))
  y <- augment(exposures(month_panel(market[shuffled, ]), ret ~ mkt + smb, window = window))
  expect_identical(as.list(y), as.list(x[shuffled, ]))
  by_month <- order(market$month)
  y <- augment(exposures(month_panel(market[by_month, ]), ret ~ mkt + smb, window = window))
  expect_identical(as.list(y), as.list(x[by_month, ]))
  old <- options(lambdabar.threads = 1)
  on.exit(options(old))
  expect_identical(augment(exposures(month_panel(), ret ~ mkt + smb, window = window)), x)
})

test_that("later returns never touch an earlier beta", {
  cut <- 202101
  later <- market
  later$ret[later$month > cut] <- 7 * later$ret[later$month > cut] + 1e5
  for (window in list(window_rolling(36, 20), window_expanding(20), window_decay(12, 20))) {
    x <- augment(exposures(month_panel(), ret ~ mkt + smb, window = window))
    y <- augment(exposures(month_panel(later), ret ~ mkt + smb, window = window))
    early <- market$month <= cut
    expect_identical(as.list(y[early, ]), as.list(x[early, ]))
    expect_false(identical(x$beta_mkt[!early], y$beta_mkt[!early]))
  }
})

test_that("requests that cannot be met name what is wrong", {
  panel <- month_panel()
  expect_error(window_rolling(10, 20), class = "lambdabar_error_input")
  expect_error(exposures(panel, ret ~ mkt, window = 60), class = "lambdabar_error_input")
  expect_error(exposures(panel, ret ~ size, window = window_rolling(36)), class = "lambdabar_error_input")
  expect_error(exposures(panel, ret ~ mkt, window = window_rolling(4), lead_lag = 2), class = "lambdabar_error_input")
  market$still <- 1
  expect_error(exposures(month_panel(market), ret ~ still), class = "lambdabar_error_no_variation")
})

test_that("betas print as a table", {
  shown <- capture.output(print(exposures(month_panel(), ret ~ mkt, window = window_rolling(36, 20))))
  expect_match(shown[2], "from the last 36 months, 20 returns at least")
  expect_true(any(grepl("^Without    fewer than 20 returns in the window", shown)))
  expect_lte(max(nchar(shown)), 80)
})
