# The F test that the intercepts on shifted factors are zero, by lm().
f_of_intercepts <- function(h, l) {
  shifted <- sweep(h$d, 2, -l)
  free <- lm(h$R ~ shifted)
  zero <- lm(h$R ~ 0 + shifted)
  anova(free, zero, test = "Wilks")[["approx F"]][2]
}

statistic_at <- function(h, l) {
  a <- h$mu - as.numeric(h$B %*% l)
  sum(a * solve(h$Sigma, a)) / (1 + sum(l * solve(h$Q, l)))
}

test_that("at the ends of a set the F test of the intercepts is exactly at its level", {
  for (intercept in c(TRUE, FALSE)) {
    fit <- price_factors(loaded_panel(K = 1), ret ~ mkt, intercept = intercept)
    h <- contrasted(fit)
    set <- premium_set(fit, "mkt", level = 0.9)
    expect_identical(set$shape, "interval")
    ends <- c(set$lower, set$upper)
    p <- vapply(ends, function(l) pf(f_of_intercepts(h, l), h$n, h$T - 1 - h$n, lower.tail = FALSE), 1)
    expect_equal(p, c(0.1, 0.1), tolerance = 1e-7)
    wide <- premium_set(fit, "mkt", form = "chisq")
    expect_equal(h$T * vapply(c(wide$lower, wide$upper), statistic_at, 1, h = h), rep(qchisq(0.95, h$n), 2), tolerance = 1e-8)
  }
})

# Sets of one premium of two by brute force: the smallest statistic over the other premium,
# infinity included through angles.
profile_in_set <- function(h, l, j, critical) {
  angles <- seq(-pi / 2, pi / 2, length.out = 2001)[-1]
  value <- function(angle) {
    point <- c(0, 0)
    point[j] <- l * cos(angle)
    point[-j] <- 10 * sin(angle)
    a <- h$mu * cos(angle) - as.numeric(h$B %*% point)
    sum(a * solve(h$Sigma, a)) / (cos(angle)^2 + sum(point * solve(h$Q, point)))
  }
  values <- vapply(angles, value, 1)
  best <- angles[which.min(values)]
  min(values, optimize(value, best + c(-0.002, 0.002))$objective) <= critical
}

test_that("sets of every shape agree with brute force", {
  shapes <- character()
  for (case in list(c(1, 0.5), c(8, 0.25), c(6, 0.12), c(2, 0.02), c(4, 0.05))) {
    fit <- price_factors(loaded_panel(T = 60, N = 6, strength = case[2], seed = case[1]), ret ~ mkt + smb)
    h <- contrasted(fit)
    set <- premium_set(fit, "smb")
    critical <- h$n / (h$T - h$K - h$n) * qf(0.95, h$n, h$T - h$K - h$n)
    shapes <- c(shapes, set$shape[1])
    probes <- tan(seq(-1.5, 1.5, length.out = 41)) * 2
    inside <- vapply(probes, function(l) set$shape[1] != "empty" && any(set$lower <= l & l <= set$upper), NA)
    expect_identical(inside, vapply(probes, profile_in_set, NA, h = h, j = 2, critical = critical))
  }
  expect_true(all(c("interval", "line") %in% shapes))
})

test_that("rays and empty sets are found with one factor, as by a grid", {
  found <- character()
  for (seed in 1:40) {
    panel <- loaded_panel(T = 60, N = 6, strength = 0.06, seed = seed, K = 1)
    fit <- price_factors(panel, ret ~ mkt)
    h <- contrasted(fit)
    level <- if (seed %% 2) 0.95 else 0.3
    set <- premium_set(fit, "mkt", level = level)
    critical <- h$n / (h$T - 1 - h$n) * qf(level, h$n, h$T - 1 - h$n)
    probes <- tan(seq(-1.55, 1.55, length.out = 61))
    inside <- vapply(probes, function(l) set$shape[1] != "empty" && any(set$lower <= l & l <= set$upper), NA)
    expect_identical(inside, vapply(probes, statistic_at, 1, h = h) <= critical)
    found <- c(found, set$shape[1])
    # Unbounded exactly when the rank test does not reject, at this critical value.
    d <- rank_test(fit, 0, "cragg_donald")$statistic / h$T
    expect_identical(set$shape[1] %in% c("rays", "line"), d <= critical && set$shape[1] != "empty")
    expect_identical(generics::glance(set)$joint, unname(c(interval = "bounded", rays = "unbounded", line = "unbounded", empty = "empty")[set$shape[1]]))
  }
  expect_setequal(unique(found), c("interval", "rays", "line", "empty"))
})

test_that("the limited-information premia minimise the statistic, whose minimum tests the model", {
  fit <- price_factors(loaded_panel(), ret ~ mkt + smb)
  h <- contrasted(fit)
  found <- generics::glance(premium_set(fit))
  best <- optim(coef(fit)[2:3], statistic_at, h = h, method = "BFGS", control = list(reltol = 1e-15))
  expect_equal(found$overid.statistic, h$T * best$value, tolerance = 1e-7)
  expect_equal(unname(found$limited[[1]]), unname(best$par), tolerance = 1e-3)
})

test_that("the scan agrees with the closed set when rows are homoskedastic by construction", {
  # Residuals and factor values that are crossed signs: squares and products are constant, so
  # that the robust covariance is the homoskedastic one at every premium.
  signs <- as.matrix(expand.grid(rep(list(c(-1, 1)), 6)))
  f <- matrix(signs[, 1] * 4, dimnames = list(NULL, "mkt"))
  betas <- c(0.4, 0.9, 1.3, 1.8)
  returns <- sweep(f %*% t(betas) + 3 * signs[, 2:5], 2, -0.5 * betas - c(0.1, -0.1, 0.05, 0))
  fit <- price_factors(asset_panel(stack_returns(returns, f), "asset", "period"), ret ~ mkt)
  closed <- premium_set(fit, form = "chisq")
  realised <- premium_set(fit, form = "chisq", series = err_iid())
  h <- contrasted(fit)
  at <- function(l) {
    rows <- h$e * (1 - as.numeric(h$d) * l / as.numeric(h$Q))
    a <- h$mu - as.numeric(h$B) * l
    64 * sum(a * solve(crossprod(rows) / 64, a))
  }
  expect_equal(vapply(c(realised$lower, realised$upper), at, 1), rep(qchisq(0.95, 3), 2), tolerance = 1e-6)
  expect_equal(c(realised$lower, realised$upper), c(closed$lower, closed$upper), tolerance = 1e-8)
  expected <- premium_set(fit, form = "chisq", target = "expected")
  rows_at <- function(l) sweep(h$R, 2, h$mu) - h$e * as.numeric(h$d) * l / as.numeric(h$Q)
  value <- vapply(c(expected$lower, expected$upper), function(l) {
    a <- h$mu - as.numeric(h$B) * l
    64 * sum(a * solve(crossprod(rows_at(l)) / 64, a))
  }, 1)
  expect_equal(value, rep(qchisq(0.95, 3), 2), tolerance = 1e-6)
  expect_lt(expected$lower, realised$lower)
})

test_that("sets scale with the premium and refuse what they cannot take", {
  panel <- loaded_panel(T = 400)
  fit <- price_factors(panel, ret ~ mkt + smb)
  data <- panel$data
  data$mkt <- data$mkt * 1000
  large <- premium_set(price_factors(asset_panel(data, "asset", "period"), ret ~ mkt + smb))
  plain <- premium_set(fit)
  expect_equal(large$lower, plain$lower * c(1000, 1), tolerance = 1e-8)
  expect_identical(names(plain)[1:3], c("lower", "upper", "shape"))
  subset <- premium_set(fit, others = "subset", form = "chisq")
  projected <- premium_set(fit, form = "chisq")
  expect_true(all(subset$lower > projected$lower & subset$upper < projected$upper))
  expect_error(premium_set(fit, "value"), class = "lambdabar_error_input")
  expect_error(premium_set(fit, target = "expected"), class = "lambdabar_error_unsupported")
  expect_error(premium_set(price_factors(loaded_panel(T = 10, N = 10), ret ~ mkt)), class = "lambdabar_error_sample")
  expect_output(print(plain), "bounded")
})

test_that("sets on daily returns contain the two-pass premium", {
  skip_if_not_installed("gmm")
  fit <- sample_fit(finance_sample(500, 20, 1))
  set <- premium_set(fit)
  expect_identical(set$shape, "interval")
  expect_true(set$lower < coef(fit)[["mkt"]] && coef(fit)[["mkt"]] < set$upper)
})
