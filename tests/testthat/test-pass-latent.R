latent_panel <- function(T = 120, N = 30, seed = 5) {
  set.seed(seed)
  hidden <- matrix(rnorm(T * 3, rep(c(0.5, 0.3, 0.2), each = T), rep(c(4, 3, 2), each = T)), T)
  f <- cbind(growth = hidden[, 1] + 0.5 * hidden[, 2] + rnorm(T), noise = rnorm(T))
  returns <- hidden %*% matrix(rnorm(3 * N, 0.7), 3) + matrix(rnorm(T * N, 0, 2), T)
  asset_panel(stack_returns(returns, f), "asset", "period")
}

# Three passes in base R.
three_passes <- function(R, g, p, intercept) {
  T <- nrow(R)
  deviations <- sweep(R, 2, colMeans(R))
  V <- sqrt(T) * svd(deviations)$u[, seq_len(p), drop = FALSE]
  beta <- crossprod(deviations, V) / T
  X <- if (intercept) cbind(1, beta) else beta
  gamma <- solve(crossprod(X), crossprod(X, colMeans(R)))
  if (intercept) gamma <- gamma[-1]
  G <- g - mean(g)
  eta <- crossprod(V, G) / T
  z <- G - V %*% eta
  rows <- (z * as.numeric(V %*% gamma) + as.numeric(V %*% eta)) / T
  S <- crossprod(V * as.numeric(z)) / T^2
  list(premium = sum(eta * gamma), rows = as.numeric(rows), strength = sum(eta * solve(S, eta)), V = V)
}

test_that("three passes agree with their definition, N below and above T", {
  for (shape in list(c(120, 30), c(40, 60))) {
    panel <- latent_panel(shape[1], shape[2])
    for (intercept in c(FALSE, TRUE)) {
      fit <- price_latent(panel, ret ~ growth + noise, n_latent = 3, intercept = intercept, errors = err_iid(adjust = FALSE))
      for (k in 1:2) {
        h <- three_passes(fit$data$returns, fit$data$factors[, k], 3, intercept)
        tidied <- generics::tidy(fit)[k, ]
        expect_equal(tidied$estimate, h$premium, tolerance = 1e-9)
        expect_equal(tidied$std.error, sqrt(sum(h$rows^2)), tolerance = 1e-9)
        expect_equal(tidied$strength, h$strength, tolerance = 1e-8)
        expect_equal(tidied$r.squared, summary(lm(fit$data$factors[, k] ~ h$V))$r.squared, tolerance = 1e-9)
      }
    }
  }
})

test_that("the premium is the mean of the factor's mimicking portfolio of the components", {
  fit <- price_latent(latent_panel(), ret ~ growth, n_latent = 4)
  R <- fit$data$returns
  deviations <- sweep(R, 2, colMeans(R))
  portfolios <- R %*% svd(deviations)$v[, 1:4]
  mimicking <- portfolios %*% coef(lm(fit$data$factors[, 1] ~ portfolios))[-1]
  expect_equal(coef(fit)[["growth"]], mean(mimicking), tolerance = 1e-9)
  # With as many components as assets: of all assets.
  all <- price_latent(latent_panel(N = 8), ret ~ growth, n_latent = 6)
  expect_equal(generics::glance(all)$n_latent, 6)
})

test_that("the strength test is the robust Wald test of the factor's regression", {
  skip_if_not_installed("sandwich")
  fit <- price_latent(latent_panel(), ret ~ growth, n_latent = 3)
  h <- three_passes(fit$data$returns, fit$data$factors[, 1], 3, FALSE)
  model <- lm(fit$data$factors[, 1] ~ h$V)
  b <- coef(model)[-1]
  wald <- sum(b * solve(sandwich::vcovHC(model, "HC0")[-1, -1], b))
  expect_equal(generics::tidy(fit)$strength, wald, tolerance = 1e-8)
})

test_that("numbers of components follow their published rules", {
  fit <- price_latent(latent_panel(), ret ~ growth)
  R <- fit$data$returns
  e <- svd(sweep(R, 2, colMeans(R)))$d^2 / length(R)
  expect_equal(fit$eigenvalues, e, tolerance = 1e-10)
  N <- 30
  T <- 120
  most <- fit$most
  penalty <- 0.5 * median(e[1:most]) * (log(N) + log(T)) * (N^-0.5 + T^-0.5)
  expect_identical(as.integer(fit$n_found), which.min(e[1:most] + seq_len(most) * penalty) - 1L)
  rest <- function(j) sum(e[-seq_len(j)])
  S <- c(sum(e), vapply(seq_len(most + 1), rest, 1))
  found <- function(rule) price_latent(latent_panel(), ret ~ growth, n_latent = rule)$n_latent
  expect_equal(found("eigen_ratio"), which.max(e[1:most] / e[2:(most + 1)]))
  expect_equal(found("growth_ratio"), which.max(log(S[1:most] / S[2:(most + 1)]) / log(S[2:(most + 1)] / S[3:(most + 2)])))
  expect_equal(found("ic_p2"), which.min(log(S[1:(most + 1)]) + 0:most * (N + T) / (N * T) * log(min(N, T))) - 1)
  expect_equal(c(found("eigen_ratio"), found("growth_ratio"), found("ic_p2"), fit$n_latent), c(3, 3, 3, 3))
})

test_that("errors can be restated, the range holds the fit, and weakness is said", {
  fit <- price_latent(latent_panel(), ret ~ growth + noise)
  rows <- fit$rows
  expect_equal(vcov(restate(fit, err_iid()))[1, 1], sum(rows[, 1]^2) * 120 / 119, tolerance = 1e-12)
  S <- crossprod(rows) + 0.5 * (crossprod(rows[-1, ], rows[-120, ]) + crossprod(rows[-120, ], rows[-1, ]))
  expect_equal(unname(vcov(restate(fit, err_hac(1, adjust = FALSE)))), unname(S), tolerance = 1e-10)
  expect_error(restate(fit, err_eiv()), class = "lambdabar_error_unsupported")
  expect_error(restate(fit, err_cluster("asset")), class = "lambdabar_error_unsupported")
  range <- latent_range(fit, 1:5)
  own <- range[range$n_latent == fit$n_latent, ]
  expect_equal(own$estimate, unname(coef(fit)))
  expect_equal(own$std.error, generics::tidy(fit)$std.error)
  expect_output(print(fit), "noise is not related to the components")
  expect_equal(dim(confint(fit)), c(2L, 2L))
})

test_that("premia do not depend on the order of assets, and scale with the factor", {
  panel <- latent_panel()
  data <- panel$data[sample(nrow(panel$data)), ]
  data$growth <- 100 * data$growth + 3
  shuffled <- price_latent(asset_panel(data, "asset", "period"), ret ~ growth)
  fit <- price_latent(panel, ret ~ growth)
  expect_equal(coef(shuffled), 100 * coef(fit), tolerance = 1e-9)
  expect_equal(generics::tidy(shuffled)$statistic, generics::tidy(fit)$statistic, tolerance = 1e-9)
})

test_that("samples that three passes cannot take are refused with names", {
  panel <- latent_panel()
  data <- panel$data
  data$ret[c(3, 500)] <- NA
  caught <- tryCatch(price_latent(asset_panel(data, "asset", "period"), ret ~ growth), error = identity)
  expect_s3_class(caught, "lambdabar_error_sample")
  expect_match(conditionMessage(caught), "holes")
  data <- panel$data
  data$growth <- 1
  expect_error(price_latent(asset_panel(data, "asset", "period"), ret ~ growth), class = "lambdabar_error_no_variation")
  expect_error(price_latent(panel, ret ~ growth, n_latent = 29), class = "lambdabar_error_input")
  one <- panel$data[panel$data$asset == panel$data$asset[1], ]
  expect_error(price_latent(asset_panel(one, "asset", "period"), ret ~ growth), class = "lambdabar_error_sample")
})

test_that("three passes run on daily returns", {
  skip_if_not_installed("gmm")
  fit <- price_latent(sample_panel(finance_sample(1000, 20, 3)), ret ~ mkt + smb + hml, n_latent = 10)
  tidied <- generics::tidy(fit)
  expect_true(all(tidied$strength.p.value[1] < 0.001))
  expect_gt(tidied$r.squared[1], 0.5)
})
