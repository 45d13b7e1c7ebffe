test_that("a factor must have one value a period, and the offender is named", {
  error <- expect_error(price_factors(small_panel(), ret ~ mkt + size), class = "lambdabar_error_input")
  expect_identical(error$column, "size")
  expect_identical(error$period, 202301L)
  expect_match(conditionMessage(error), "traits")
})

test_that("constant and collinear factors, and equal betas, are errors", {
  panel <- factor_panel()
  rows <- panel$data
  rows$flat <- 1
  rows$again <- 2 * rows$f1 - rows$f2
  rows$same <- rows$f1[rows$asset == "A1"][rows$period] * 1.5
  made <- asset_panel(rows, "asset", "period")
  expect_error(price_factors(made, ret ~ flat), class = "lambdabar_error_no_variation")
  expect_error(price_factors(made, ret ~ f1 + f2 + again), class = "lambdabar_error_rank")
  expect_error(price_factors(made, same ~ f1), class = "lambdabar_error_rank")
  expect_error(price_factors(made, ret ~ 0 + f1), class = "lambdabar_error_input")
  expect_error(price_factors(made, ret ~ 1), class = "lambdabar_error_input")
  few <- asset_panel(rows[rows$asset %in% c("A1", "A2"), ], "asset", "period")
  expect_error(price_factors(few, ret ~ f1 + f2), class = "lambdabar_error_sample")
})

test_that("GLS and Shanken need a complete panel and say so", {
  rows <- factor_panel()$data
  rows <- rows[-7, ]
  ragged <- asset_panel(rows, "asset", "period")
  expect_error(price_factors(ragged, ret ~ f1, method = "gls"), class = "lambdabar_error_unsupported")
  expect_error(price_factors(ragged, ret ~ f1, errors = err_eiv("shanken")), class = "lambdabar_error_unsupported")
  expect_message(fit <- price_factors(ragged, ret ~ f1), class = "lambdabar_message_errors")
  expect_identical(fit$errors$form, "robust")
  expect_error(alpha_test(fit), class = "lambdabar_error_unsupported")
  expect_true(all(diag(vcov(restate(fit, err_misspec()))) > 0))
  expect_true(all(is.na(augment(fit)$std.error)))
  short <- asset_panel(factor_panel(T = 9, N = 10)$data, "asset", "period")
  expect_error(price_factors(short, ret ~ f1, method = "gls"), class = "lambdabar_error_sample")
})

test_that("with no holes the ragged formulas give the balanced numbers", {
  panel <- factor_panel()
  balanced <- price_factors(panel, ret ~ f1 + f2, errors = err_eiv("robust"))
  # An asset without betas makes the panel ragged without touching the others.
  extra <- rbind(panel$data, transform(panel$data[1, ], asset = "short"))
  suppressWarnings(ragged <- price_factors(asset_panel(extra, "asset", "period"), ret ~ f1 + f2, errors = err_eiv("robust")))
  expect_false(ragged$balanced)
  expect_equal(coef(ragged), coef(balanced), tolerance = 1e-12)
  expect_equal(vcov(ragged), vcov(balanced), tolerance = 1e-10)
  expect_identical(ragged$n_left_out, 1)
})

test_that("on a ragged panel premia are those of two explicit passes", {
  rows <- factor_panel(T = 40, N = 12)$data
  set.seed(9)
  rows$ret[sample(nrow(rows), 60)] <- NA
  rows <- rows[-sample(nrow(rows), 20), ]
  suppressMessages(fit <- price_factors(asset_panel(rows, "asset", "period"), ret ~ f1 + f2))
  betas <- t(vapply(split(rows, rows$asset), function(d) coef(lm(ret ~ f1 + f2, d))[-1], numeric(2)))
  rows$b1 <- betas[rows$asset, 1]
  rows$b2 <- betas[rows$asset, 2]
  slopes <- vapply(split(rows, rows$period), function(d) coef(lm(ret ~ b1 + b2, d)), numeric(3))
  expect_equal(unname(coef(fit)), unname(rowMeans(slopes)), tolerance = 1e-11)
  expect_equal(unname(coef(restate(fit, err_iid()))), unname(coef(fit)))
  expect_equal(unname(vcov(restate(fit, err_iid()))), unname(cov(t(slopes)) / ncol(slopes)), tolerance = 1e-10)
  expect_equal(augment(fit)$beta_f1, unname(betas[, 1]), tolerance = 1e-12)
})

test_that("traits stand beside betas in the second pass", {
  panel <- factor_panel(T = 30, N = 15, K = 1)
  rows <- panel$data
  set.seed(2)
  rows$size <- rnorm(nrow(rows))
  rows$kind <- sample(c("p", "q", "r"), nrow(rows), TRUE)
  suppressMessages(fit <- price_factors(asset_panel(rows, "asset", "period"), ret ~ f1, traits = ~ size + kind))
  betas <- vapply(split(rows, rows$asset), function(d) coef(lm(ret ~ f1, d))[[2]], 1)
  rows$beta <- betas[rows$asset]
  slopes <- vapply(split(rows, rows$period), function(d) coef(lm(ret ~ beta + size + kind, d)), numeric(5))
  expect_identical(names(coef(fit)), c("(Intercept)", "f1", "size", "kindq", "kindr"))
  expect_equal(unname(coef(fit)), unname(rowMeans(slopes)), tolerance = 1e-11)
  expect_error(price_factors(panel, ret ~ f1, traits = ret ~ f2), class = "lambdabar_error_input")
})

test_that("a period without a factor is left out for all assets and counted", {
  panel <- factor_panel()
  rows <- panel$data
  rows$f1[rows$period == 12] <- NA
  fit <- price_factors(asset_panel(rows, "asset", "period"), ret ~ f1 + f2)
  used <- sample_used(fit)
  expect_identical(used$status[12], "missing_factor")
  expect_match(used$reason[12], "factor is missing")
  without <- asset_panel(rows[rows$period != 12, ], "asset", "period")
  expect_equal(coef(fit), coef(price_factors(without, ret ~ f1 + f2)), tolerance = 1e-13)
})

test_that("as many premia as assets price them exactly, and no test is left", {
  panel <- factor_panel(N = 3)
  fit <- price_factors(panel, ret ~ f1 + f2)
  expect_true(all(abs(augment(fit)$alpha) < 1e-15))
  expect_error(alpha_test(fit, "averaged"), "no pricing error", class = "lambdabar_error_sample")
  mixed <- alpha_test(fit, c("averaged", "grs"))
  expect_identical(is.na(mixed$p.value), c(TRUE, FALSE))
  expect_match(mixed$note[1], "as many premia as assets")
})

test_that("more assets than periods refuse the tests that need the inverse, with the reason", {
  fit <- price_factors(factor_panel(T = 12, N = 14), ret ~ f1)
  tests <- expect_error(alpha_test(fit), class = "lambdabar_error_sample")
  expect_match(conditionMessage(tests), "12 for 14 assets")
})

test_that("pricing errors and their covariance come with the fit's error structure", {
  fit <- price_factors(factor_panel(), ret ~ f1 + f2)
  out <- augment(fit)
  expect_named(out, c("asset", "n_obs", "mean_return", ".fitted", "alpha", "std.error", "statistic", "p.value", "beta_f1", "beta_f2"))
  expect_equal(out$alpha, out$mean_return - out$.fitted, tolerance = 1e-12)
  expect_equal(out$std.error, unname(sqrt(diag(attr(out, "vcov")))))
  # OLS residuals of the mean-return regression are orthogonal to the betas
  expect_true(all(abs(crossprod(cbind(1, out$beta_f1, out$beta_f2), out$alpha)) < 1e-13))
  known <- augment(restate(fit, err_iid()))
  expect_equal(out$std.error / known$std.error, rep(sqrt(1 + fit$correction), 8), tolerance = 1e-10)
})
