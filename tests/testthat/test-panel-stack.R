test_that("wide returns become rows, asset by asset", {
  wide <- matrix(1:6 / 100, 3, dimnames = list(NULL, c("oak", "elm")))
  rows <- stack_returns(wide, cbind(mkt = c(0.1, 0.2, 0.3)), period = 202301:202303)
  expect_identical(names(rows), c("asset", "period", "ret", "mkt"))
  expect_identical(rows$asset, rep(c("oak", "elm"), each = 3))
  expect_identical(rows$period, rep(202301:202303, 2))
  expect_identical(rows$ret, 1:6 / 100)
  expect_identical(rows$mkt, rep(c(0.1, 0.2, 0.3), 2))
})

test_that("names and keys have defaults", {
  rows <- stack_returns(matrix(0, 2, 2), c(0.1, 0.2))
  expect_identical(unique(rows$asset), c("A1", "A2"))
  expect_identical(rows$period[1:2], 1:2)
  expect_identical(rows$factor1[1:2], c(0.1, 0.2))
  dated <- matrix(0, 2, 1, dimnames = list(c("2024-01-31", "2024-02-29"), "x"))
  expect_identical(stack_returns(dated)$period, rownames(dated))
  expect_identical(stack_returns(data.frame(x = 1:2))$period, 1:2)
})

test_that("missing returns stay as rows", {
  expect_identical(nrow(stack_returns(matrix(c(0.1, NA, NA, 0.2), 2))), 4L)
})

test_that("misfits are refused", {
  wide <- matrix(0, 3, 2, dimnames = list(NULL, c("a", "b")))
  expect_error(stack_returns(wide, matrix(0, 2, 1)), class = "lambdabar_error_input")
  expect_error(stack_returns(wide, period = 1:2), class = "lambdabar_error_input")
  expect_error(stack_returns(wide, cbind(ret = 1:3)), class = "lambdabar_error_input")
  expect_error(stack_returns(cbind(a = 1:3, a = 1:3)), class = "lambdabar_error_input")
  error <- expect_error(stack_returns(data.frame(day = letters[1:3], a = 1)), class = "lambdabar_error_input")
  expect_identical(error$column, "day")
})
