moving_fit <- function(T = 90, shift = 0, seed = 6) {
  set.seed(seed)
  slopes <- cbind(rnorm(T, 0.1), rnorm(T, 0.3) + shift * (seq_len(T) > T / 2))
  price_traits(slope_panel(slopes), y ~ x1)
}

test_that("premia of parts are means of the series with its own error", {
  fit <- moving_fit()
  x <- matrix(period_premia(fit)$estimate, ncol = 2, byrow = TRUE)[, 2]
  found <- subperiod_premia(fit, 3, err_iid())
  own <- found[found$term == "x1", ]
  blocks <- split(x, rep(1:3, each = 30))
  expect_equal(own$estimate, unname(vapply(blocks, mean, 1)))
  expect_equal(own$std.error, unname(vapply(blocks, function(b) sd(b) / sqrt(30), 1)))
  expect_identical(own$from, c(1L, 31L, 61L))
  w <- 1 / own$std.error^2
  centre <- sum(w * own$estimate) / sum(w)
  equality <- attr(found, "equality")
  expect_equal(equality$statistic[2], sum(w * (own$estimate - centre)^2))
  expect_equal(equality$p.value[2], pchisq(equality$statistic[2], 2, lower.tail = FALSE))
  by_date <- subperiod_premia(fit, c(31, 61), err_iid())
  expect_equal(by_date$estimate, found$estimate)
  expect_output(print(found), "Equal")
  expect_error(subperiod_premia(fit, 100), class = "lambdabar_error_input")
  expect_error(subperiod_premia(fit, c(31, 400)), class = "lambdabar_error_input")
  expect_error(subperiod_premia(pooled(small_panel(), ret ~ size)), class = "lambdabar_error_unsupported")
})

test_that("rolling premia are means over the window", {
  fit <- moving_fit()
  x <- matrix(period_premia(fit)$estimate, ncol = 2, byrow = TRUE)[, 2]
  found <- rolling_premia(fit, 24, term = "x1")
  expect_identical(nrow(found), 67L)
  expect_equal(found$estimate[10], mean(x[10:33]))
  expect_equal(found$std.error[10], sd(x[10:33]) / sqrt(24))
  expect_equal(found$conf.high[10], mean(x[10:33]) + qt(0.975, 23) * sd(x[10:33]) / sqrt(24))
  expect_identical(found$period[10], 33L)
  expect_error(rolling_premia(fit, 91), class = "lambdabar_error_sample")
  expect_error(rolling_premia(fit, 24, term = "size"), class = "lambdabar_error_input")
})

test_that("the break statistic is the largest Wald statistic over dates", {
  fit <- moving_fit(shift = 0.8)
  x <- matrix(period_premia(fit)$estimate, ncol = 2, byrow = TRUE)[, 2]
  dates <- 14:76
  by_hand <- vapply(dates, function(tau) {
    a <- x[seq_len(tau)]
    b <- x[(tau + 1):90]
    (mean(a) - mean(b))^2 / (sum((a - mean(a))^2) / tau^2 + sum((b - mean(b))^2) / (90 - tau)^2)
  }, 1)
  found <- break_test(fit, "x1", series = err_iid())
  expect_equal(found$statistic, max(by_hand), tolerance = 1e-10)
  expect_match(found$note, paste0("from ", dates[which.max(by_hand)] + 1, "$"))
  expect_lt(found$p.value, 0.05)
  expect_match(attr(found, "reading"), "rejected at the 5 % level for x1")
  lagged <- break_test(fit, "x1", series = err_hac(2))
  tau <- 45
  u <- c(x[1:tau] - mean(x[1:tau]), -(x[(tau + 1):90] - mean(x[(tau + 1):90]))) / rep(c(tau, 90 - tau), c(tau, 90 - tau))
  V <- sum(u^2) + 2 * (2 / 3 * sum(u[-1] * u[-90]) + 1 / 3 * sum(u[-(1:2)] * u[1:88]))
  scan <- cpp_scan_breaks(x, 0.15, series_options(err_hac(2)), 0:89)
  expect_equal(scan$wald[tau - 13], (mean(x[1:tau]) - mean(x[(tau + 1):90]))^2 / V, tolerance = 1e-10)
  expect_equal(lagged$statistic, max(scan$wald))
  expect_error(break_test(fit, trim = 0.6), class = "lambdabar_error_input")
  expect_error(break_test(moving_fit(T = 3)), class = "lambdabar_error_sample")
})

test_that("p-values of the break test give the tabulated critical values", {
  # From memory, Andrews (2003), Econometrica 71, Table 1: one parameter, trimming 0.15:
  # 7.12, 8.68, 12.16 at 10, 5, 1 %.
  expect_equal(sup_wald_p(c(7.12, 8.68, 12.16), 0.15), c(0.10, 0.05, 0.01), tolerance = 0.08)
  # The limit simulated: 4,000 bridges of 500 steps.
  set.seed(1)
  walk <- apply(matrix(rnorm(500 * 4000, 0, 1 / sqrt(500)), 500), 2, cumsum)
  r <- seq_len(500) / 500
  bridge <- (walk - outer(r, walk[500, ]))^2 / (r * (1 - r))
  sup <- apply(bridge[r >= 0.15 & r <= 0.85, ], 2, max)
  expect_equal(mean(sup > 8.68), 0.05, tolerance = 0.25)
  expect_equal(mean(sup > 6), sup_wald_p(6, 0.15), tolerance = 0.15)
  expect_true(all(diff(sup_wald_p(seq(0, 30, 0.5), 0.15)) <= 0))
})
