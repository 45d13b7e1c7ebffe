test_that("each rung is the fit restated, and the pooled rungs are pooled()", {
  panel <- small_panel()
  fit <- price_traits(panel, ret ~ size + value)
  ladder <- error_ladder(fit, err_hac(lags = 1))
  expect_setequal(ladder$term, c("size", "value"))
  hac <- ladder[ladder$errors == "Bartlett, 1 lag" & ladder$term == "value", ]
  expect_identical(hac$std.error, tidy(restate(fit, err_hac(lags = 1)))$std.error[3])
  two_way <- ladder[ladder$errors == "clustered by asset and period" & ladder$term == "size" & ladder$estimator == "pooled", ]
  expect_identical(two_way$std.error, tidy(pooled(panel, ret ~ size + value))$std.error[2])
  own <- ladder[ladder$errors == "clustered by asset" & ladder$term == "size" & ladder$estimator == "averaged", ]
  expect_identical(own$std.error, tidy(restate(fit, err_cluster("asset")))$std.error[2])
  plain <- ladder[ladder$errors == "independent", ]
  expect_true(all(plain$ratio == 1))
  expect_equal(hac$ratio, hac$std.error / plain$std.error[plain$term == "value" & plain$estimator == "averaged"])
})

test_that("a pooled fit gets averaged rungs, a two-pass fit a pooled regression on its betas", {
  panel <- small_panel()
  from_pooled <- error_ladder(pooled(panel, ret ~ size))
  expect_identical(from_pooled$estimate[1], coef(price_traits(panel, ret ~ size))[["size"]])
  # A term without variation inside periods has no averaged rung
  alone <- error_ladder(pooled(panel, ret ~ mkt))
  expect_identical(unique(alone$estimator), "pooled")

  factors <- factor_panel()
  fit <- price_factors(factors, ret ~ f1 + f2)
  ladder <- error_ladder(fit, terms = "f1")
  betas <- augment(fit)
  rows <- merge(factors$data, betas[c("asset", "beta_f1", "beta_f2")])
  by_hand <- pooled(asset_panel(rows, "asset", "period"), ret ~ beta_f1 + beta_f2, errors = err_cluster("period"))
  rung <- ladder[ladder$errors == "clustered by period", ]
  expect_equal(rung$std.error, tidy(by_hand)$std.error[2], tolerance = 1e-12)
  expect_equal(rung$estimate, coef(fit)[["f1"]], tolerance = 1e-12)
  expect_true("Shanken, independent" %in% ladder$errors)
})

test_that("the reading names the dimension that carries the dependence", {
  read <- function(firm, month) {
    set.seed(11)
    rows <- expand.grid(t = 1:40, a = 1:40)
    x_firm <- rnorm(40)
    x_month <- rnorm(40)
    rows$x <- firm * x_firm[rows$a] + month * x_month[rows$t] + rnorm(1600) * 0.5
    rows$y <- firm * rnorm(40)[rows$a] + month * rnorm(40)[rows$t] + rnorm(1600)
    attr(error_ladder(pooled(asset_panel(rows, "a", "t"), y ~ x)), "reading")[["x"]]
  }
  expect_match(read(0, 0), "no strong dependence")
  expect_match(read(1, 0), "over time within an asset")
  expect_match(read(0, 1), "across assets within a period")
  expect_match(read(1, 1), "both dimensions")
})

test_that("unknown terms are refused", {
  expect_error(error_ladder(price_traits(small_panel(), ret ~ size), terms = "value"), class = "lambdabar_error_input")
})
