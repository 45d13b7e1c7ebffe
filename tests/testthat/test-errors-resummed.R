ar_fit <- function(T = 80, rho = 0.5, seed = 4, ...) {
  set.seed(seed)
  slopes <- cbind(0.2 + as.numeric(stats::filter(rnorm(T), rho, "recursive")), rnorm(T, 0.3), 0.1 + rnorm(T))
  price_traits(slope_panel(slopes), y ~ x1 + x2, ...)
}

# V = sum over pairs of periods of kappa(s, t) h_s h_t'.
pair_sum <- function(rows, kappa) {
  T <- nrow(rows)
  weights <- outer(seq_len(T), seq_len(T), Vectorize(kappa))
  t(rows) %*% weights %*% rows
}

test_that("cosines are their sum over pairs of periods, and all of them are independent periods", {
  fit <- ar_fit()
  rows <- unname(influence_rows(fit))
  T <- nrow(rows)
  B <- 7
  wave <- function(j, t) cos(pi * j * (t - 0.5) / T)
  expected <- pair_sum(rows, function(s, t) 2 / B * sum(wave(seq_len(B), s) * wave(seq_len(B), t)))
  found <- restate(fit, err_cosine(B))
  expect_equal(unname(vcov(found)), expected, tolerance = 1e-10)
  expect_equal(generics::glance(found)$df, B)
  expect_equal(vcov(restate(fit, err_cosine(T - 1))), vcov(restate(fit, err_iid())), tolerance = 1e-10)
  expect_identical(generics::glance(restate(fit, err_cosine()))$df, floor(0.4 * T^(2 / 3)))
  t <- generics::tidy(found)
  expect_equal(t$p.value, 2 * pt(-abs(t$statistic), B))
  # Joint tests: Hotelling's scaling (Lazarus and others 2018).
  joint <- term_test(found, "x1", "x2")
  b <- coef(found)[2:3]
  wald <- sum(b * solve(vcov(found)[2:3, 2:3], b))
  expect_equal(joint$statistic, wald / 2 * (B - 1) / B, tolerance = 1e-10)
  expect_equal(joint$p.value, pf(joint$statistic, 2, B - 1, lower.tail = FALSE))
  # One cosine has one direction: the restrictions lose a rank, and say so.
  expect_match(term_test(restate(fit, err_cosine(1)), "x1", "x2")$note, "rank 1")
  expect_error(restate(fit, err_cosine(80)), class = "lambdabar_error_sample")
})

test_that("groups of periods give the t statistic of group means", {
  fit <- ar_fit(T = 80)
  path <- matrix(period_premia(fit)$estimate, ncol = 3, byrow = TRUE)
  means <- apply(path, 2, function(x) colMeans(matrix(x, 10)))
  t <- sqrt(8) * colMeans(means) / apply(means, 2, sd)
  found <- generics::tidy(restate(fit, err_groups(8)))
  expect_equal(found$statistic, t, tolerance = 1e-10)
  expect_equal(found$p.value, 2 * pt(-abs(t), 7), tolerance = 1e-10)
  expect_error(restate(fit, err_groups(81)), class = "lambdabar_error_sample")
})

test_that("overlapping returns have equal weights on all lags of the overlap", {
  fit <- ar_fit()
  rows <- unname(influence_rows(fit))
  expected <- pair_sum(rows, function(s, t) as.numeric(abs(s - t) <= 2)) * 80 / 79
  expect_equal(unname(vcov(restate(fit, err_overlap(3)))), expected, tolerance = 1e-10)
  expect_identical(vcov(restate(fit, err_overlap(1))), vcov(restate(fit, err_iid())))
  # Strong negative autocorrelation makes the truncated sum negative: NA, with a warning.
  alternating <- price_traits(slope_panel(cbind(0.1, 0.2 + rep(c(-1, 1), 30) + rnorm(60, 0, 0.01))), y ~ x1)
  warned <- character()
  bad <- withCallingHandlers(restate(alternating, err_overlap(2)), lambdabar_warning_covariance = function(w) {
    warned <<- c(warned, conditionMessage(w))
    invokeRestart("muffleWarning")
  })
  expect_match(warned, "x1", all = FALSE)
  expect_true(is.na(sqrt(diag(vcov(bad)))[["x1"]]))
})

test_that("the variance of the stationary bootstrap is exact, its draws are reproducible", {
  fit <- ar_fit()
  rows <- unname(influence_rows(fit))
  length <- 6
  r <- 1 - 1 / length
  kappa <- function(s, t) {
    l <- abs(s - t)
    (1 - l / 80) * r^l + l / 80 * r^(80 - l)
  }
  kappa0 <- function(s, t) if (s == t) 1 else kappa(s, t)
  set.seed(1)
  found <- restate(fit, err_block(199, length))
  expect_equal(unname(vcov(found)), pair_sum(rows, kappa0), tolerance = 1e-10)
  set.seed(1)
  expect_identical(generics::tidy(restate(fit, err_block(199, length))), generics::tidy(found))
  # The draws themselves: variances of resampled means against the exact one.
  set.seed(2)
  index <- stationary_index(80L, 20000L, length)
  sums <- apply(index, 2, function(i) sum(rows[i + 1, 1]))
  expect_equal(var(sums), vcov(found)[1, 1], tolerance = 0.05)
  # A resampled t by hand.
  t <- cpp_resampled_t(rows, index[, 1:2], length, 1L)
  x <- rows[index[, 2] + 1, 2]
  deviations <- x - mean(x)
  by_hand <- sum(x) / sqrt(sum(outer(seq_len(80), seq_len(80), Vectorize(kappa0)) * outer(deviations, deviations)))
  expect_equal(t[2, 2], by_hand, tolerance = 1e-9)
  p <- generics::tidy(found)$p.value
  expect_equal((p * 200) %% 1, rep(0, 3), tolerance = 1e-9)
  interval <- confint(found)
  expect_equal(rowMeans(interval), coef(found), tolerance = 1e-12)
  set.seed(1)
  options_before <- options(lambdabar.threads = 1)
  on.exit(options(options_before))
  expect_identical(generics::tidy(restate(fit, err_block(199, length))), generics::tidy(found))
})

test_that("the automatic block length follows its published steps", {
  set.seed(3)
  x <- as.numeric(stats::filter(rnorm(300), 0.6, "recursive"))
  T <- 300
  R <- as.numeric(acf(x, 60, "covariance", plot = FALSE)$acf)
  K <- max(5, ceiling(sqrt(log10(T))))
  small <- abs(R[-1] / R[1]) < 2 * sqrt(log10(T) / T)
  m <- which(vapply(0:40, function(k) all(small[k + seq_len(K)]), NA))[1] - 1
  M <- min(2 * max(m, 1), ceiling(sqrt(T)) + K)
  k <- seq_len(M)
  flat <- ifelse(k / M <= 0.5, 1, 2 * (1 - k / M))
  g <- R[1] + 2 * sum(flat * R[k + 1])
  G <- 2 * sum(flat * k * R[k + 1])
  expect_equal(cpp_block_length(x), (G^2 / g^2)^(1 / 3) * T^(1 / 3), tolerance = 1e-10)
  expect_lt(cpp_block_length(rnorm(300)), cpp_block_length(x))
})

test_that("fixed-b critical values agree with an independent simulation and with tables", {
  # From memory, Kiefer and Vogelsang (2002), Econometrica 70, 2093-2095: bandwidth = sample size,
  # upper points 90, 95, 97.5, 99 %; their simulation and ours differ by up to 0.03.
  expect_equal(fixed_b_quantile(c(0.8, 0.9, 0.95, 0.98), 1), c(2.740, 3.764, 4.771, 6.090), tolerance = 0.006)
  # From memory, Kiefer and Vogelsang (2005), Table 1: the cubic in b for 97.5 %.
  cubic <- function(b) 1.9600 + 2.9694 * b + 0.4160 * b^2 - 0.5324 * b^3
  for (b in c(0.02, 0.1, 0.3, 0.5, 0.8, 1)) expect_equal(fixed_b_quantile(0.95, b), cubic(b), tolerance = 0.02)
  expect_equal(fixed_b_quantile(0.95, 0), qnorm(0.975), tolerance = 1e-9)
  # p-values and quantiles are each other's inverse, beyond the table too.
  for (level in c(0.3, 0.9, 0.95, 0.9999)) expect_equal(fixed_b_p(fixed_b_quantile(level, 0.15), 0.15), 1 - level, tolerance = 1e-8)
  expect_true(all(diff(fixed_b_p(seq(0, 20, 0.1), 0.4)) < 0))
  fit <- ar_fit(errors = err_hac(lags = "root", critical = "fixed_b"))
  expect_equal(generics::glance(fit)$lags, ceiling(1.3 * sqrt(80)) - 1)
  t <- generics::tidy(fit)
  b <- ceiling(1.3 * sqrt(80)) / 80
  expect_equal(t$p.value, fixed_b_p(t$statistic, b))
  expect_equal(t$conf.high - t$estimate, t$std.error * fixed_b_quantile(0.95, b))
  one <- term_test(fit, "x1")
  expect_equal(one$p.value, t$p.value[2], tolerance = 1e-10)
  expect_match(term_test(fit, "x1", "x2")$note, "single terms")
  expect_output(print(fit), "fixed-b critical values")
  expect_error(err_hac(kernel = "qs", critical = "fixed_b"), class = "lambdabar_error_input")
  # Where no t-statistic uses them they are refused, not ignored.
  expect_error(err_eiv("shanken", err_hac(critical = "fixed_b")), class = "lambdabar_error_input")
  factors <- price_factors(factor_panel(), ret ~ f1)
  expect_error(alpha_test(factors, series = err_hac(critical = "fixed_b")), class = "lambdabar_error_input")
  expect_output(print(restate(factors, err_misspec(err_hac(critical = "fixed_b")))), "fixed-b critical values")
})

test_that("new sums work on rows of estimated betas and in the ladder, not where they cannot", {
  fit <- price_factors(factor_panel(), ret ~ f1 + f2)
  for (series in list(err_cosine(), err_groups(6), err_block(99))) {
    for (errors in list(series, err_eiv("robust", series), err_misspec(series), err_moments(series))) {
      expect_true(all(is.finite(generics::tidy(restate(fit, errors))$p.value)))
    }
  }
  rows <- fit$rows_misspecified
  expect_equal(unname(vcov(restate(fit, err_misspec(err_cosine(9))))), cpp_time_sum(rows, "cosine", 9), tolerance = 1e-12)
  expect_true(all(is.na(generics::augment(restate(fit, err_cosine()))$std.error)))
  expect_error(err_eiv("shanken", err_cosine()), class = "lambdabar_error_input")
  expect_error(restate(pooled(small_panel(), ret ~ size), err_cosine()), class = "lambdabar_error_unsupported")
  expect_error(restate(pooled(small_panel(), ret ~ size), err_block()), class = "lambdabar_error_unsupported")
  ladder <- error_ladder(ar_fit(), err_iid(), err_hac(), err_cosine(), err_groups(8), err_overlap(2))
  expect_true(all(c("cosines", "8 groups of periods", "overlap of 2 periods") %in% ladder$errors))
  expect_error(err_block(5), class = "lambdabar_error_input")
  expect_error(err_cosine(0), class = "lambdabar_error_input")
  expect_error(restate(ar_fit(), err_block(99, 500)), class = "lambdabar_error_sample")
})
