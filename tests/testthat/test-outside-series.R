# Sums over periods against general-purpose covariance functions, a worked series, and the
# definitions written out in base R.

# Autocorrelated slopes of different persistence, none near a unit root.
slope_series <- function(T = 120, rho = c(0.2, 0.5, -0.3), seed = 31) {
  set.seed(seed)
  series <- vapply(rho, function(r) as.vector(stats::filter(rnorm(T), r, "recursive")), numeric(T))
  sweep(series, 2, c(0.5, 1, -1), "+")
}

# The rows of the averages: the deviations over T.
rows_of <- function(series) sweep(series, 2, colMeans(series)) / nrow(series)

hac <- function(fit, ..., adjust = FALSE) vcov(restate(fit, err_hac(..., adjust = adjust)))

outside_names <- c(bartlett = "Bartlett", parzen = "Parzen", qs = "Quadratic Spectral", truncated = "Truncated")

test_that("a panel reproduces the slope series it was made from", {
  series <- slope_series()
  fit <- price_traits(slope_panel(series), y ~ x1 + x2)
  expect_close(premium_series(fit), series, 1e-13, scale = 1)
  expect_close(coef(fit), colMeans(series), 1e-13)
})

test_that("the series 1, 2, 4, 7, 11 has the errors worked out by hand", {
  # Deviations -4, -3, -1, 2, 6: autocovariance sums 66, 25, -8, -26, so that the Bartlett sums
  # are 66, 91, 94, 82.5 for 0 to 3 lags.
  fit <- price_traits(slope_panel(cbind(0, c(1, 2, 4, 7, 11))), y ~ x1, errors = err_iid(adjust = FALSE))
  expect_close(premium_series(fit)[, "x1"], c(1, 2, 4, 7, 11), 1e-14)
  expect_close(coef(fit)[["x1"]], 5, 1e-14)
  for (lags in 0:3) {
    sum <- c(66, 91, 94, 82.5)[lags + 1]
    expect_close(hac(fit, lags = lags)["x1", "x1"], sum / 25, 1e-14)
    expect_close(hac(fit, lags = lags, adjust = TRUE)["x1", "x1"], sum / 20, 1e-14)
  }
})

test_that("every kernel with given lags equals sandwich on the slope series", {
  skip_if_not_installed("sandwich")
  series <- slope_series()
  fit <- price_traits(slope_panel(series), y ~ x1 + x2)
  outside <- lm(series ~ 1)
  same <- function(kernel, lags, divisor, prewhiten = FALSE) {
    expected <- sandwich::kernHAC(
      outside, bw = divisor, kernel = outside_names[[kernel]], prewhite = prewhiten, adjust = FALSE, tol = 0
    )
    actual <- suppressWarnings(hac(fit, lags = lags, kernel = kernel, prewhiten = prewhiten))
    expect_close(actual, expected, 1e-11)
  }
  for (prewhiten in c(FALSE, TRUE)) {
    for (lags in c(1, 4, 11)) {
      # "Bartlett with L lags" divides by L + 1 (Newey and West 1987).
      same("bartlett", lags, lags + 1, prewhiten)
      same("parzen", lags, lags + 1, prewhiten)
    }
    for (bandwidth in c(0.7, 3, 8.25)) same("qs", bandwidth, bandwidth, prewhiten)
    for (lags in c(1, 2)) same("truncated", lags, lags, prewhiten)
  }
  for (lags in c(0, 3, 6)) {
    for (prewhiten in c(FALSE, TRUE)) {
      expected <- sandwich::NeweyWest(outside, lag = lags, prewhite = prewhiten, adjust = FALSE)
      expect_close(hac(fit, lags = lags, prewhiten = prewhiten), expected, 1e-11)
    }
  }
})

test_that("the factor T/(T-1) is that of one series at a time", {
  skip_if_not_installed("sandwich")
  series <- slope_series()
  fit <- price_traits(slope_panel(series), y ~ x1 + x2, errors = err_hac(lags = 4))
  one <- vapply(1:3, function(j) sandwich::NeweyWest(lm(series[, j] ~ 1), lag = 4, prewhite = FALSE, adjust = TRUE), 1)
  expect_close(diag(vcov(fit)), one, 1e-12)
  by_lrvar <- vapply(1:3, function(j) sandwich::lrvar(series[, j], type = "Newey-West", lag = 4, prewhite = FALSE), 1)
  expect_close(diag(vcov(fit)), by_lrvar, 1e-12)
  # Weights given outright.
  weights <- 1 - 0:4 / 5
  expect_close(
    hac(fit, lags = 4), sandwich::vcovHAC(lm(series ~ 1), weights = weights, adjust = FALSE), 1e-12
  )
  plain <- vcov(restate(fit, err_iid()))
  expect_close(plain, stats::cov(series) / nrow(series), 1e-12)
  t_test <- stats::t.test(series[, 2])
  tidied <- tidy(restate(fit, err_iid()))[2, ]
  expect_close(tidied$p.value, t_test$p.value, 1e-11)
  expect_close(c(tidied$conf.low, tidied$conf.high), t_test$conf.int, 1e-12)
})

test_that("Newey and West's lags equal bwNeweyWest, weight 0 on the constant", {
  skip_if_not_installed("sandwich")
  for (seed in 31:34) {
    series <- slope_series(T = 90 + seed, seed = seed)
    fit <- price_traits(slope_panel(series), y ~ x1 + x2)
    outside <- lm(series ~ 1)
    for (kernel in c("bartlett", "parzen", "qs")) {
      for (prewhiten in c(FALSE, TRUE)) {
        expected <- sandwich::bwNeweyWest(
          outside, kernel = outside_names[[kernel]], prewhite = as.integer(prewhiten), weights = c(0, 1, 1)
        )
        chosen <- restate(fit, err_hac("newey_west", kernel, prewhiten = prewhiten, adjust = FALSE))
        if (kernel == "qs") {
          expect_close(glance(chosen)$bandwidth, expected, 1e-11)
        } else {
          expect_identical(glance(chosen)$lags, floor(expected))
          expected <- floor(expected) + 1
        }
        expect_close(
          vcov(chosen),
          sandwich::kernHAC(
            outside, bw = expected, kernel = outside_names[[kernel]], prewhite = prewhiten, adjust = FALSE, tol = 0
          ), 1e-10
        )
      }
    }
  }
})

# Andrews (1991), Econometrica 59, 817-858: the AR(1) plug-in, without a constant in the AR; his
# constants as sandwich::bwAndrews 3.0-2 has them.
plain_andrews <- function(series, weights, kernel) {
  T <- nrow(series)
  fits <- apply(series, 2, function(x) {
    ar <- lm(x[-1] ~ 0 + x[-T])
    c(rho = unname(coef(ar)), s2 = sum(residuals(ar)^2) / (T - 1))
  })
  rho <- fits["rho", ]
  s4 <- fits["s2", ]^2
  bottom <- sum(weights * s4 / (1 - rho)^4)
  alpha1 <- sum(weights * 4 * rho^2 * s4 / ((1 - rho)^6 * (1 + rho)^2)) / bottom
  alpha2 <- sum(weights * 4 * rho^2 * s4 / (1 - rho)^8) / bottom
  switch(kernel,
    bartlett = 1.1447 * (alpha1 * T)^(1 / 3), parzen = 2.6614 * (alpha2 * T)^(1 / 5),
    qs = 1.3221 * (alpha2 * T)^(1 / 5), truncated = 0.6611 * (alpha2 * T)^(1 / 5)
  )
}

# Andrews and Monahan (1992), Econometrica 60, 953-966: VAR(1) without constant by lm.
plain_prewhitening <- function(rows) {
  T <- nrow(rows)
  var <- lm(rows[-1, ] ~ 0 + rows[-T, ])
  list(residuals = unname(residuals(var)), recolour = solve(diag(ncol(rows)) - t(coef(var))))
}

test_that("Andrews' bandwidth equals bwAndrews where a constant in its AR is zero", {
  skip_if_not_installed("sandwich")
  # bwAndrews fits its AR(1) with a constant, which is zero when the first and the last slope
  # are the average.
  series <- slope_series()
  for (j in 1:3) {
    middle <- series[2:119, j] - mean(series[2:119, j])
    series[, j] <- c(0, middle, 0) + j
  }
  fit <- price_traits(slope_panel(series), y ~ x1 + x2)
  outside <- lm(series ~ 1)
  for (kernel in names(outside_names)) {
    chosen <- suppressWarnings(restate(fit, err_hac("andrews", kernel, adjust = FALSE)))
    bandwidth <- sandwich::bwAndrews(outside, kernel = outside_names[[kernel]], prewhite = 0, weights = c(0, 1, 1))
    expect_close(glance(chosen)$bandwidth, bandwidth, 1e-10)
    expect_close(glance(chosen)$bandwidth, plain_andrews(rows_of(series), c(0, 1, 1), kernel), 1e-11)
    expect_close(
      vcov(chosen),
      sandwich::kernHAC(outside, bw = bandwidth, kernel = outside_names[[kernel]], prewhite = FALSE, adjust = FALSE, tol = 0),
      1e-10
    )
  }
})

test_that("Andrews' bandwidth and prewhitening follow their definitions", {
  skip_if_not_installed("sandwich")
  series <- slope_series(seed = 77)
  rows <- rows_of(series)
  white <- plain_prewhitening(rows)
  fit <- price_traits(slope_panel(series), y ~ x1 + x2)
  for (kernel in names(outside_names)) {
    for (prewhiten in c(FALSE, TRUE)) {
      chosen <- suppressWarnings(restate(fit, err_hac("andrews", kernel, prewhiten = prewhiten, adjust = FALSE)))
      seen <- if (prewhiten) white$residuals else rows
      bandwidth <- plain_andrews(seen, c(0, 1, 1), kernel)
      expect_close(glance(chosen)$bandwidth, bandwidth, 1e-10)
      total <- plain_kernel_sum(seen, function(j) sandwich::kweights(j / bandwidth, outside_names[[kernel]]))
      if (prewhiten) total <- white$recolour %*% total %*% t(white$recolour)
      expect_close(vcov(chosen), total, 1e-10)
    }
  }
})

test_that("the rule of thumb gives the lags of its formula", {
  # Newey and West (1994), Review of Economic Studies 61, 631-653, from memory:
  # floor(4 (T/100)^(2/9)).
  for (rule in list(c(50, 3), c(100, 4), c(202, 4), c(600, 5))) {
    series <- slope_series(T = rule[1])
    fit <- price_traits(slope_panel(series), y ~ x1 + x2, errors = err_hac(adjust = FALSE))
    expect_identical(glance(fit)$lags, rule[2])
    expect_close(vcov(fit), plain_kernel_sum(rows_of(series), bartlett_weight(rule[2])), 1e-11)
  }
})

test_that("lags count calendar periods when some are missing", {
  series <- slope_series(T = 60)
  # Two months without a row, one after another, and a month with too few assets.
  month <- function(t) 200001L + 100L * ((t - 1L) %/% 12L) + (t - 1L) %% 12L
  rows <- slope_panel(series)$data
  rows <- rows[!rows$period %in% c(20, 21) & !(rows$period == 40 & rows$asset > 2), ]
  rows$period <- month(rows$period)
  panel <- quiet_panel(rows, "asset", "period")
  fit <- price_traits(panel, y ~ x1 + x2)
  expect_identical(sum(sample_used(fit)$status == "estimated"), 57L)

  used <- setdiff(1:60, c(20, 21, 40))
  calendar <- matrix(0, 60, 3)
  calendar[used, ] <- rows_of(series[used, ])
  weights <- list(
    bartlett = bartlett_weight(5),
    # Parzen's weights at j/6, and below the quadratic spectral ones: Andrews (1991), from memory.
    parzen = function(j) ifelse(j <= 3, 1 - 6 * (j / 6)^2 + 6 * (j / 6)^3, 2 * pmax(0, 1 - j / 6)^3),
    truncated = function(j) as.numeric(j <= 5)
  )
  for (kernel in names(weights)) {
    expect_close(suppressWarnings(hac(fit, lags = 5, kernel = kernel)), plain_kernel_sum(calendar, weights[[kernel]]), 1e-11)
  }
  y <- function(j) 6 * pi * j / (5 * 2.5)
  expect_close(
    hac(fit, lags = 2.5, kernel = "qs"),
    plain_kernel_sum(calendar, function(j) 3 / y(j)^2 * (sin(y(j)) / y(j) - cos(y(j)))), 1e-11
  )
  # The gaps matter: closing them would give another sum.
  closed <- plain_kernel_sum(calendar[used, ], bartlett_weight(5))
  expect_gt(max(abs(hac(fit, lags = 5) / closed - 1)), 0.01)
  # 'observed' takes the periods that have rows as the calendar: 58 of them, one not estimated.
  observed <- quiet_panel(rows, "asset", "period", frequency = "observed")
  expect_close(
    hac(price_traits(observed, y ~ x1 + x2), lags = 5), plain_kernel_sum(calendar[-c(20, 21), ], bartlett_weight(5)), 1e-11
  )
})
