test_that("arguments are checked when a structure is made", {
  bad <- list(
    quote(err_hac(lags = -1)), quote(err_hac(lags = 2.5)), quote(err_hac(lags = "many")),
    quote(err_hac(kernel = "box")), quote(err_hac(prewhiten = NA)), quote(err_hac("newey_west", "truncated")),
    quote(err_iid(adjust = "no")), quote(err_eiv("exact")), quote(err_eiv(series = err_hetero())),
    quote(err_moments(err_cluster("a"))), quote(err_hetero("HC9")), quote(err_cluster()),
    quote(err_cluster(1)), quote(err_cluster(g = "a")), quote(err_cluster("a", "a")), quote(err_cluster("a", small = "some"))
  )
  for (call in bad) expect_error(eval(call), class = "lambdabar_error_input", info = deparse1(call))
})

test_that("a structure prints its name", {
  expect_output(print(err_hac(lags = 4)), "Bartlett, 4 lags")
  expect_output(print(err_cluster("firm", "month")), "clustered by firm and month")
  expect_identical(format(err_eiv("robust", err_hac("andrews", "qs", TRUE))), "estimated betas, quadratic spectral, Andrews 1991, prewhitened")
})

test_that("the truncated kernel may give no error, never a small one", {
  # Slopes that alternate have a negative long-run variance under one truncated lag.
  T <- 12
  rows <- data.frame(a = rep(1:4, T), t = rep(seq_len(T), each = 4), x = rep(c(-1, 1, -2, 2), T))
  rows$y <- rows$x * rep(c(1, -1), length.out = T)[rows$t] + rep(c(0.1, 0.1, -0.05, -0.05), T)
  panel <- asset_panel(rows, "a", "t")
  fit <- price_traits(panel, y ~ x, errors = err_iid())
  suppressWarnings(odd <- restate(fit, err_hac(lags = 1, kernel = "truncated")))
  expect_true(is.na(tidy(odd)$std.error[2]))
  suppressWarnings(
    expect_warning(restate(fit, err_hac(lags = 1, kernel = "truncated")), class = "lambdabar_warning_covariance")
  )
})

test_that("glance() says what was done", {
  panel <- small_panel()
  fit <- price_traits(panel, ret ~ size, errors = err_hac(lags = 2, adjust = FALSE))
  expect_identical(glance(fit)[c("lags", "bandwidth", "adjust", "df", "n_periods")], tibble::tibble(lags = 2, bandwidth = 3, adjust = FALSE, df = 9, n_periods = 10L))
  expect_identical(glance(price_traits(panel, ret ~ size))$lags, floor(4 * (10 / 100)^(2 / 9)))
})
