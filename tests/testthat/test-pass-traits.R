by_period <- function(rows, formula, weights = NULL) {
  split(rows, rows$month) |>
    lapply(function(d) {
      d$w <- if (is.null(weights)) 1 else d[[weights]]
      d <- d[is.finite(rowSums(as.matrix(d[c("ret", "size", "value", "w")]))) & d$w > 0, ]
      stats::lm(formula, d, weights = w)
    })
}

test_that("slopes, errors and R2 of each period are those of lm()", {
  rows <- small_rows()
  rows$ret[c(2, 17)] <- NA
  rows$size[40] <- Inf
  rows$w <- runif(nrow(rows))
  rows$w[c(8, 9)] <- 0
  for (weights in list(NULL, "w")) {
    fit <- price_traits(small_panel(rows), ret ~ size + value, weights = weights)
    fits <- by_period(rows, ret ~ size + value, weights)
    series <- period_premia(fit)
    expect_equal(series$estimate, unname(unlist(lapply(fits, coef))), tolerance = 1e-12)
    expect_equal(series$std.error, unname(unlist(lapply(fits, function(f) sqrt(diag(vcov(f)))))), tolerance = 1e-12)
    expect_equal(series$r.squared[series$term == "size"], unname(vapply(fits, function(f) summary(f)$r.squared, 1)), tolerance = 1e-12)
    expect_equal(coef(fit), rowMeans(vapply(fits, coef, numeric(3))), tolerance = 1e-12)
    expect_equal(glance(fit)$r.squared, mean(vapply(fits, function(f) summary(f)$r.squared, 1)), tolerance = 1e-12)
    expect_identical(nobs(fit), sum(vapply(fits, nobs, 1)))
  }
})

test_that("averages can weigh periods by assets and slopes by precision", {
  rows <- small_rows()
  rows <- rows[!(rows$month > 202306 & rows$firm > "f07"), ]
  fits <- by_period(rows, ret ~ size + value)
  b <- vapply(fits, coef, numeric(3))
  n <- vapply(fits, nobs, 1)
  se <- vapply(fits, function(f) sqrt(diag(vcov(f))), numeric(3))
  by_assets <- price_traits(small_panel(rows), ret ~ size + value, average = "assets", errors = err_iid())
  expect_equal(coef(by_assets), drop(b %*% (n / sum(n))), tolerance = 1e-12)
  by_precision <- price_traits(small_panel(rows), ret ~ size + value, average = "precision", errors = err_iid(adjust = FALSE))
  w <- t(apply(1 / se^2, 1, function(x) x / sum(x)))
  expect_equal(coef(by_precision), rowSums(w * b), tolerance = 1e-12)
  # Hand computation of the covariance of weighted averages and its small-sample factor
  rows_p <- t(w * (b - rowSums(w * b)))
  expect_equal(vcov(by_precision), crossprod(rows_p), tolerance = 1e-12)
  omega <- n / sum(n)
  factor <- sum(omega^2) / (sum(omega^2) - 2 * sum(omega^3) + sum(omega^2)^2)
  expect_equal(vcov(by_assets)["size", "size"], factor * sum((omega * (b["size", ] - coef(by_assets)[["size"]]))^2), tolerance = 1e-12)
})

test_that("a lost period is counted with its reason and does not enter", {
  rows <- small_rows()
  rows$size[rows$month == 202303] <- 5
  rows$ret[rows$month == 202304 & rows$firm > "f03"] <- NA
  rows$ret[rows$month == 202305] <- NA
  rows$value[rows$month == 202307] <- 2 * rows$size[rows$month == 202307]
  expect_warning(fit <- price_traits(small_panel(rows), ret ~ size + value), class = "lambdabar_warning_sample")
  used <- sample_used(fit)
  status <- c("estimated", "estimated", "no_variation", "too_few_assets", "empty", "estimated", "rank_deficient", rep("estimated", 3))
  expect_identical(used$status, status)
  expect_identical(used$period, 202301:202310)
  expect_match(used$reason[3], "size does not vary")
  expect_match(used$reason[4], "ret missing in 9; 3 complete rows are too few")
  expect_match(used$reason[7], "value is a combination of earlier terms")
  expect_identical(used$n_used[3:5], c(0, 0, 0))
  expect_identical(sum(used$n_used), nobs(fit))
  kept <- rows[!rows$month %in% c(202303, 202304, 202305, 202307), ]
  expect_equal(coef(fit), coef(price_traits(small_panel(kept), ret ~ size + value)), tolerance = 1e-13)
  expect_true(all(is.na(period_premia(fit)$estimate[period_premia(fit)$status != "estimated"])))
})

test_that("a term that only varies over time is an error that names it", {
  error <- expect_error(price_traits(small_panel(), ret ~ size + mkt), class = "lambdabar_error_no_variation")
  expect_identical(error$term, "mkt")
  expect_match(conditionMessage(error), "pooled")
  expect_error(price_traits(small_panel(), ret ~ 0 + mkt + size), class = "lambdabar_error_no_variation")
  rows <- small_rows()
  rows$twice <- 2 * rows$size
  error <- expect_error(price_traits(small_panel(rows), ret ~ size + twice), class = "lambdabar_error_rank")
  expect_identical(error$term, "twice")
})

test_that("too little data, negative weights and odd arguments are errors", {
  rows <- small_rows()
  expect_error(price_traits(small_panel(rows[rows$month == 202301, ]), ret ~ size), class = "lambdabar_error_sample")
  expect_error(price_traits(small_panel(), ret ~ size, min_assets = 50), class = "lambdabar_error_sample")
  rows$w <- 1
  rows$w[20] <- -1
  error <- expect_error(price_traits(small_panel(rows), ret ~ size, weights = "w"), class = "lambdabar_error_input")
  expect_identical(error[c("column", "row", "asset", "period")], list(column = "w", row = 20, asset = "f03", period = 202302L))
  expect_error(price_traits(rows, ret ~ size), class = "lambdabar_error_input")
  expect_error(price_traits(small_panel(), ret ~ size, average = "median"), class = "lambdabar_error_input")
  expect_error(price_traits(small_panel(), ret ~ size, errors = "hac"), class = "lambdabar_error_input")
  expect_error(price_traits(small_panel(), ret ~ size, errors = err_eiv()), class = "lambdabar_error_unsupported")
  expect_error(price_traits(small_panel(), ret ~ size, errors = err_hetero()), class = "lambdabar_error_unsupported")
})

test_that("industry dummies and interactions agree with lm() by period", {
  rows <- small_rows()
  rows$industry <- factor(rep(c("salt", "glass", "nets"), length.out = nrow(rows)))
  fit <- price_traits(small_panel(rows), ret ~ size:industry + industry)
  fits <- lapply(split(rows, rows$month), function(d) coef(lm(ret ~ size:industry + industry, d)))
  expect_equal(coef(fit), rowMeans(do.call(cbind, fits)), tolerance = 1e-11)
})

test_that("augment() gives residuals at the averaged premia and marks used rows", {
  rows <- small_rows()
  rows$ret[3] <- NA
  fit <- price_traits(small_panel(rows), ret ~ size + value)
  out <- augment(fit)
  expected <- drop(cbind(1, rows$size, rows$value) %*% coef(fit))
  expect_equal(out$.fitted, expected, tolerance = 1e-14)
  expect_equal(out$.resid, rows$ret - expected, tolerance = 1e-13)
  expect_identical(which(!out$.used), 3L)
})
