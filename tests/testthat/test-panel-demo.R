test_that("the invented market is the same every time and leaves the generator alone", {
  set.seed(4)
  before <- .Random.seed
  one <- demo_market(firms = 20, months = 24)
  expect_identical(.Random.seed, before)
  RNGkind("Wichmann-Hill")
  two <- demo_market(firms = 20, months = 24)
  RNGkind("Mersenne-Twister")
  expect_identical(one, two)
  expect_false(identical(one$ret, demo_market(firms = 20, months = 24, seed = 2)$ret))
})

test_that("it is ragged, has holes and its true premia", {
  market <- demo_market(firms = 100, months = 120)
  expect_named(attr(market, "true_premia"), c("mkt", "smb", "growth", "size", "value", "turnover"))
  expect_true(anyNA(market$ret) && anyNA(market$value) && anyNA(market$turnover))
  life <- table(market$firm)
  expect_true(min(life) < 60 && max(life) > 100)
  health <- panel_health(quiet_panel(market, "firm", "month"))
  expect_gt(health$count[health$check == "gaps"], 0)
  growth <- tapply(market$growth, market$month, mean)
  expect_gt(cor(growth[-1], growth[-120]), 0.2)
})

test_that("premia on characteristics are near the truth", {
  market <- demo_market()
  truth <- attr(market, "true_premia")[c("size", "value", "turnover")]
  fit <- price_traits(quiet_panel(market, "firm", "month"), ret ~ size + value + turnover)
  z <- (coef(fit)[names(truth)] - truth) / sqrt(diag(vcov(fit)))[names(truth)]
  expect_true(all(abs(z) < 3))
})

test_that("arguments are checked", {
  expect_error(demo_market(firms = 1), class = "lambdabar_error_input")
  expect_error(demo_market(months = 2.5), class = "lambdabar_error_input")
})
