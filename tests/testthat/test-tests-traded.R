traded_panel <- function(T = 200, N = 4, seed = 2) {
  set.seed(seed)
  f <- matrix(rnorm(T * 4, 0.4, 3), T, dimnames = list(NULL, c("mkt", "smb", "hml", "mom")))
  returns <- f[, 1:2] %*% matrix(runif(2 * N), 2) + matrix(rnorm(T * N, 0, 2), T)
  asset_panel(stack_returns(returns, f), "asset", "period")
}

factors_of <- function(panel) as.matrix(panel$data[match(unique(panel$data$period), panel$data$period), c("mkt", "smb", "hml", "mom")])

squared <- function(f) {
  V <- cov(f) * (nrow(f) - 1) / nrow(f)
  sum(colMeans(f) * solve(V, colMeans(f)))
}

test_that("squared Sharpe ratios, their adjustment and their rows", {
  panel <- traded_panel()
  f <- factors_of(panel)
  found <- generics::glance(sharpe_test(panel, ~ mkt + smb, ~ hml + mom))
  expect_equal(found$squared, c(squared(f[, 1:2]), squared(f[, 3:4])), tolerance = 1e-10)
  expect_equal(found$adjusted, found$squared * (200 - 4) / 200 - 2 / 200, tolerance = 1e-10)
  core <- cpp_squared_sharpe(f[, 1:2])
  at <- c(4, 150)
  slope <- vapply(at, function(t) {
    weighted <- function(step) {
      p <- rep(1, 200)
      p[t] <- 1 + step
      p <- p / sum(p)
      mu <- colSums(p * f[, 1:2])
      d <- sweep(f[, 1:2], 2, mu)
      sum(mu * solve(crossprod(d, p * d), mu))
    }
    (weighted(1e-4) - weighted(-1e-4)) / 2e-4
  }, 1)
  expect_equal(core$rows[at], slope, tolerance = 1e-5)
})

test_that("models are compared by the case that they are in", {
  panel <- traded_panel()
  f <- factors_of(panel)
  nested <- sharpe_test(panel, ~ mkt, ~ mkt + smb + hml)
  model <- lm(f[, 2:3] ~ f[, 1])
  a <- coef(model)[1, ]
  Sigma <- crossprod(residuals(model)) / 200
  Q <- sum(a * solve(Sigma, a))
  expect_equal(squared(f[, 1:3]) - squared(f[, 1, drop = FALSE]), Q, tolerance = 1e-9)
  F <- Q / (1 + squared(f[, 1, drop = FALSE])) * (200 - 2 - 1) / 2
  expect_equal(nested$statistic, F, tolerance = 1e-9)
  expect_equal(nested$p.value, pf(F, 2, 197, lower.tail = FALSE), tolerance = 1e-9)
  expect_equal(sharpe_test(panel, ~ mkt + smb + hml, ~ mkt)$p.value, nested$p.value)

  apart <- sharpe_test(panel, ~ mkt + smb, ~ hml + mom)
  rows <- cpp_squared_sharpe(f[, 1:2])$rows - cpp_squared_sharpe(f[, 3:4])$rows
  expect_equal(apart$statistic, (squared(f[, 1:2]) - squared(f[, 3:4])) / sqrt(sum(rows^2)), tolerance = 1e-9)

  mixed <- sharpe_test(panel, ~ mkt + smb, ~ mkt + hml)
  only <- cpp_grs(f[, c("smb", "hml")], f[, "mkt", drop = FALSE])
  p <- pf(only$statistic, only$df1, only$df2, lower.tail = FALSE)
  if (p > 0.05) {
    expect_equal(mixed$p.value, p)
  } else {
    expect_match(mixed$note, "z")
  }
  expect_identical(sharpe_test(panel, ~ mkt + smb, ~ smb + mkt)$note, "the same factors")
})

test_that("the joint test of one model against several", {
  panel <- traded_panel()
  f <- factors_of(panel)
  each <- vapply(1:4, function(k) squared(f[, k, drop = FALSE]), 1)
  own <- which.min(each)
  formulas <- lapply(colnames(f), function(name) stats::as.formula(paste("~", name)))
  compare <- function() sharpe_test(panel, formulas[[own]], formulas[-own])
  set.seed(1)
  found <- compare()
  best <- found[found$test == "best", ]
  rows_of <- function(k) cpp_squared_sharpe(f[, k, drop = FALSE])$rows
  V <- crossprod(vapply(setdiff(1:4, own), function(k) rows_of(own) - rows_of(k), numeric(200)))
  delta <- each[own] - each[-own]
  distance <- function(log_d) sum((delta - exp(log_d)) * solve(V, delta - exp(log_d)))
  starts <- expand.grid(rep(list(c(-12, -4)), 3))
  by_hand <- min(apply(starts, 1, function(start) optim(start, distance, control = list(reltol = 1e-14, maxit = 5000))$value))
  expect_gt(best$statistic, 0)
  expect_equal(best$statistic, by_hand, tolerance = 1e-3)
  set.seed(1)
  expect_identical(compare(), found)
  # With one rival the likelihood ratio is the one-sided z.
  one <- cpp_best_model(-0.3, matrix(0.04), matrix(rnorm(40000), 40000))
  expect_equal(one$statistic, 0.3^2 / 0.04)
  expect_equal(one$p, pnorm(-1.5), tolerance = 0.02)
  expect_identical(cpp_best_model(c(0.1, 0.2), diag(2), matrix(0, 1000, 2))$p, 1)
})

test_that("comparisons refuse what is no model", {
  panel <- traded_panel()
  expect_error(sharpe_test(panel, ret ~ mkt, ~ smb), class = "lambdabar_error_input")
  expect_error(sharpe_test(panel, ~ mkt, ~ ret), class = "lambdabar_error_input")
  data <- panel$data
  data$twice <- 2 * data$mkt
  expect_error(sharpe_test(asset_panel(data, "asset", "period"), ~ mkt + twice, ~ smb), class = "lambdabar_error_rank")
  same <- sharpe_test(asset_panel(data, "asset", "period"), ~mkt, ~twice)
  expect_true(is.na(same$p.value) && !is.nan(same$p.value))
  expect_match(same$note, "same portfolios")
  expect_output(print(sharpe_test(panel, ~ mkt, ~ smb)), "adjusted")
})

test_that("spanning tests are Wilks' lambda and restricted regressions", {
  panel <- traded_panel()
  fit <- spanning_test(panel, ret ~ mkt + smb)
  R <- matrix(panel$data$ret[order(match(panel$data$asset, panel$assets), panel$data$period)], 200)
  f <- factors_of(panel)
  free <- lm(R ~ f[, 1:2])
  restricted <- lm(R - f[, 2] ~ 0 + I(f[, 1] - f[, 2]))
  no_alpha <- lm(R ~ 0 + f[, 1:2])
  log_det <- function(model) determinant(crossprod(residuals(model)))$modulus[1]
  U <- exp(log_det(free) - log_det(restricted))
  left <- 200 - 2 - 4
  expect_equal(fit$statistic[fit$test == "joint"], (U^-0.5 - 1) * left / 4, tolerance = 1e-9)
  expect_equal(fit$statistic[fit$test == "intercepts"], expm1(log_det(no_alpha) - log_det(free)) * left / 4, tolerance = 1e-9)
  expect_equal(fit$statistic[fit$test == "betas"], expm1(log_det(restricted) - log_det(no_alpha)) * (left + 1) / 4, tolerance = 1e-9)
  # The first step is the multivariate F of the intercepts, from anova().
  intercepts <- anova(free, no_alpha, test = "Wilks")
  expect_equal(fit$statistic[fit$test == "intercepts"], intercepts[["approx F"]][2], tolerance = 1e-9)
  # Wald: moments by hand.
  X <- cbind(1, f[, 1:2])
  load <- X %*% solve(crossprod(X), cbind(c(1, 0, 0), c(0, 1, 1)))
  e <- residuals(free)
  rows <- cbind(load[, 1] * e, load[, 2] * e)
  b <- coef(free)
  h <- c(b[1, ], b[2, ] + b[3, ] - 1)
  expect_equal(fit$statistic[fit$test == "wald"], sum(h * solve(crossprod(rows), h)), tolerance = 1e-8)
})

test_that("spanning of one asset is the F test of two restrictions", {
  panel <- traded_panel(N = 1)
  fit <- spanning_test(panel, ret ~ mkt + smb, "joint")
  d <- panel$data
  free <- lm(ret ~ mkt + smb, d)
  restricted <- lm(I(ret - smb) ~ 0 + I(mkt - smb), d)
  F <- (sum(resid(restricted)^2) - sum(resid(free)^2)) / 2 / (sum(resid(free)^2) / 197)
  expect_equal(fit$statistic, F, tolerance = 1e-9)
  expect_equal(c(fit$num.df, fit$den.df), c(2, 197))
  expect_error(spanning_test(traded_panel(T = 6), ret ~ mkt + smb), class = "lambdabar_error_sample")
})

test_that("frontiers hold the portfolios that they are made of", {
  panel <- traded_panel()
  found <- frontier(panel, ret ~ mkt + smb)
  weights <- attr(found, "weights")
  singles <- attr(found, "singles")
  own <- weights[weights$set == "assets", ]
  R <- matrix(panel$data$ret[order(match(panel$data$asset, panel$assets), panel$data$period)], 200)
  V <- cov(R)
  expect_equal(own$least_variance, as.numeric(solve(V, rep(1, 4)) / sum(solve(V))), tolerance = 1e-9)
  expect_equal(own$tangency, as.numeric(solve(V, colMeans(R)) / sum(solve(V, colMeans(R)))), tolerance = 1e-9)
  expect_equal(attr(found, "sharpe")[["assets"]], sqrt(sum(colMeans(R) * solve(V, colMeans(R)))), tolerance = 1e-9)
  # A point of the curve: the best portfolio of that mean, by its first-order conditions.
  point <- found[found$set == "assets", ][30, ]
  system <- rbind(cbind(2 * V, 1, colMeans(R)), c(rep(1, 4), 0, 0), c(colMeans(R), 0, 0))
  w <- solve(system, c(rep(0, 4), 1, point$mean))[1:4]
  expect_equal(point$sd, sqrt(sum(w * (V %*% w))), tolerance = 1e-9)
  expect_equal(singles$sd[1:4], apply(R, 2, sd))
  expect_output(print(found), "highest Sharpe ratio")
  expect_error(frontier(traded_panel(T = 6), ret ~ mkt + smb), class = "lambdabar_error_sample")
  data <- panel$data
  data$twice <- 2 * data$mkt
  expect_error(frontier(asset_panel(data, "asset", "period"), ret ~ mkt + twice), class = "lambdabar_error_rank")
})
