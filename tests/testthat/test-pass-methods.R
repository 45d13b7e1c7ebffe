methods_rows <- function() {
  rows <- small_rows()
  rows$w <- exp(rows$value / 3)
  rows$w[5] <- 0
  rows$size[9] <- NA
  rows
}

test_that("general covariance packages give on a pooled fit what they give on lm", {
  skip_if_not_installed("sandwich")
  rows <- methods_rows()
  for (weights in list(NULL, "w")) {
    rows$use <- if (is.null(weights)) 1 else rows$w
    good <- rows[complete.cases(rows) & rows$use > 0, ]
    model <- lm(ret ~ size * value + industry, good, weights = use)
    fit <- pooled(small_panel(rows), ret ~ size * value + industry, weights = weights, errors = err_hetero())
    expect_equal(unname(model.matrix(fit)), unname(model.matrix(model)), ignore_attr = TRUE)
    expect_equal(unname(hatvalues(fit)), unname(hatvalues(model)), tolerance = 1e-9)
    expect_identical(df.residual(fit), as.numeric(df.residual(model)))
    expect_equal(unname(sandwich::bread(fit)), unname(sandwich::bread(model)), tolerance = 1e-9)
    expect_equal(unname(sandwich::estfun(fit)), unname(sandwich::estfun(model)), tolerance = 1e-9, ignore_attr = TRUE)
    for (type in c("HC0", "HC1", "HC2", "HC3", "HC4")) {
      expect_equal(unname(sandwich::vcovHC(fit, type)), unname(sandwich::vcovHC(model, type)), tolerance = 1e-8)
    }
    ids <- good[c("firm", "month")]
    expect_equal(unname(sandwich::vcovCL(fit, ids, type = "HC1")), unname(sandwich::vcovCL(model, ids, type = "HC1")), tolerance = 1e-8)
  }
})

test_that("new rows are predicted as lm() predicts them", {
  rows <- small_rows()
  model <- lm(ret ~ size + log(size) + industry, rows)
  new <- data.frame(size = c(4, 5, NA), industry = c("nets", "salt", "glass"))
  fit <- pooled(small_panel(rows), ret ~ size + log(size) + industry, errors = err_hetero())
  expect_equal(predict(fit, new), unname(predict(model, new)), tolerance = 1e-8)
  expect_equal(predict(fit), unname(fitted(model)), tolerance = 1e-9)
  averaged <- price_traits(small_panel(rows), ret ~ size + value)
  expect_equal(predict(averaged, data.frame(size = 5, value = 1)), sum(coef(averaged) * c(1, 5, 1)))
  expect_error(predict(fit, data.frame(size = 1)), class = "lambdabar_error_input")
  expect_error(predict(price_factors(factor_panel(), ret ~ f1), data.frame(f1 = 1)), class = "lambdabar_error_unsupported")
})

test_that("with absorbed effects only what is exact is offered", {
  skip_if_not_installed("sandwich")
  rows <- small_rows()
  rows <- rows[complete.cases(rows), ]
  model <- lm(ret ~ size + value + factor(firm), rows)
  fit <- pooled(small_panel(rows), ret ~ size + value, absorb = "firm", singletons = "keep", errors = err_hetero())
  slopes <- c("size", "value")
  expect_equal(sandwich::vcovHC(fit, "HC0"), sandwich::vcovHC(model, "HC0")[slopes, slopes], tolerance = 1e-8)
  expect_identical(df.residual(fit), as.numeric(df.residual(model)))
  expect_equal(predict(fit), unname(fitted(model)), tolerance = 1e-9)
  expect_error(hatvalues(fit), class = "lambdabar_error_unsupported")
  expect_error(predict(fit, rows), class = "lambdabar_error_unsupported")
})
