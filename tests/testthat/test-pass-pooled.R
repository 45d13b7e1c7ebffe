test_that("coefficients, errors and residuals are those of lm()", {
  rows <- small_rows()
  rows$ret[5] <- NA
  rows$w <- runif(nrow(rows))
  rows$w[7] <- 0
  for (weights in list(NULL, "w")) {
    fit <- pooled(small_panel(rows), ret ~ size + value + industry + mkt, weights = weights, errors = err_iid())
    used <- rows[is.finite(rows$ret) & (is.null(weights) | rows$w > 0), ]
    used$one <- if (is.null(weights)) 1 else used$w
    plain <- lm(ret ~ size + value + industry + mkt, used, weights = one)
    expect_equal(coef(fit), coef(plain), tolerance = 1e-12)
    expect_equal(vcov(fit), vcov(plain), tolerance = 1e-12)
    expect_identical(nobs(fit), as.double(nobs(plain)))
    expect_equal(glance(fit)$r.squared, summary(plain)$r.squared, tolerance = 1e-12)
    expect_equal(augment(fit)$.resid[augment(fit)$.used], unname(residuals(plain)), tolerance = 1e-12)
    expect_equal(tidy(fit)$p.value, unname(summary(plain)$coefficients[, 4]), tolerance = 1e-10)
    expect_equal(unname(confint(fit)), unname(confint(plain)), tolerance = 1e-12)
  }
})

test_that("collinear terms become NA with a warning, later ones stay", {
  rows <- small_rows()
  rows$twice <- 2 * rows$size + 1
  expect_warning(fit <- pooled(small_panel(rows), ret ~ size + twice + value), class = "lambdabar_warning_sample")
  expect_identical(unname(is.na(coef(fit))), c(FALSE, FALSE, TRUE, FALSE))
  plain <- pooled(small_panel(rows), ret ~ size + value)
  expect_equal(coef(fit)[-3], coef(plain), tolerance = 1e-12)
  expect_equal(vcov(fit)[-3, -3], vcov(plain), tolerance = 1e-12)
  for (errors in list(err_iid(), err_hetero("HC2"))) {
    expect_equal(vcov(restate(fit, errors))[-3, -3], vcov(restate(plain, errors)), tolerance = 1e-12)
  }
  expect_equal(augment(fit)$.fitted, augment(plain)$.fitted, tolerance = 1e-12)
  expect_identical(term_test(fit)$num.df, 2)
  expect_output(print(fit), "NA")
})

test_that("clusters are columns or keys, and a missing id is an error that names the row", {
  rows <- small_rows()
  rows$desk <- rep(c("x", "y", "z", "u"), length.out = nrow(rows))
  panel <- small_panel(rows)
  by_key <- pooled(panel, ret ~ size, errors = err_cluster("asset", "period"))
  by_name <- restate(by_key, err_cluster("firm", "month"))
  expect_identical(vcov(by_key), vcov(by_name))
  expect_identical(glance(by_key)$df, 9)
  rows$desk[c(30, 41)] <- NA
  rows$ret[41] <- NA
  error <- expect_error(pooled(small_panel(rows), ret ~ size, errors = err_cluster("desk")), class = "lambdabar_error_input")
  expect_identical(error$row, 30)
  expect_identical(error$count, 1)
  expect_identical(error$asset, rows$firm[30])
  expect_error(restate(by_key, err_cluster("nowhere")), class = "lambdabar_error_input")
  rows$all <- 1
  expect_error(pooled(small_panel(rows), ret ~ size, errors = err_cluster("all")), class = "lambdabar_error_sample")
})

test_that("a row of leverage one has no HC3 error, and is named", {
  rows <- small_rows()
  rows$alone <- as.numeric(seq_len(nrow(rows)) == 33)
  fit <- pooled(small_panel(rows), ret ~ size + alone, errors = err_hetero("HC1"))
  error <- expect_error(restate(fit, err_hetero("HC3")), "HC1", class = "lambdabar_error_input")
  expect_identical(error$row, 33)
})

test_that("nested clusters are seen", {
  rows <- small_rows()
  rows$sector <- as.integer(factor(rows$firm)) %/% 4
  fit <- pooled(small_panel(rows), ret ~ size, errors = err_cluster("sector"))
  expect_warning(both <- restate(fit, err_cluster("firm", "sector")), class = "lambdabar_warning_covariance")
  expect_equal(vcov(both), vcov(fit), tolerance = 1e-12)
})

test_that("too few rows and period series are refused", {
  rows <- small_rows()[1:3, ]
  expect_error(pooled(small_panel(rows), ret ~ size + value), class = "lambdabar_error_sample")
  fit <- pooled(small_panel(), ret ~ size)
  expect_error(period_premia(fit), class = "lambdabar_error_unsupported")
  expect_error(influence_rows(fit), class = "lambdabar_error_unsupported")
  expect_error(restate(fit, err_hac()), class = "lambdabar_error_unsupported")
  expect_error(alpha_test(fit), class = "lambdabar_error_unsupported")
  expect_identical(unique(sample_used(fit)$status), "pooled")
})
