test_that("restrictions are read as equations", {
  fit <- price_traits(small_panel(), ret ~ size + value + log(size), errors = err_iid())
  b <- coef(fit)
  V <- vcov(fit)
  wald <- function(L, r) drop(crossprod(L %*% b - r, solve(L %*% V %*% t(L), L %*% b - r))) / nrow(L)
  expect_equal(term_test(fit, "size = 0")$statistic, tidy(fit)$statistic[2]^2, tolerance = 1e-10)
  expect_equal(term_test(fit, "size")$p.value, tidy(fit)$p.value[2], tolerance = 1e-10)
  expect_equal(term_test(fit, "2 * size - value/4 = 0.01", "log(size) = 0.1")$statistic,
    wald(rbind(c(0, 2, -0.25, 0), c(0, 0, 0, 1)), c(0.01, 0.1)), tolerance = 1e-8)
  expect_equal(term_test(fit, "`log(size)` + size = value + 1")$statistic, wald(rbind(c(0, 1, -1, 1)), 1), tolerance = 1e-8)
  expect_equal(term_test(fit, "(Intercept) = 0.01")$statistic, wald(rbind(c(1, 0, 0, 0)), 0.01), tolerance = 1e-8)
  all <- term_test(fit)
  expect_identical(c(all$num.df, all$den.df), c(3, 9))
})

test_that("a repeated restriction is tested on its rank", {
  fit <- price_traits(small_panel(), ret ~ size + value)
  once <- term_test(fit, "size = 0")
  twice <- term_test(fit, "size = 0", "3 * size = 0")
  expect_identical(twice$num.df, 1)
  expect_equal(twice$statistic, once$statistic, tolerance = 1e-8)
  expect_match(twice$note, "rank 1")
})

test_that("what is no linear equation on the terms is refused", {
  fit <- price_traits(small_panel(), ret ~ size + value)
  for (bad in c("size * value = 1", "size == 0", "mkt = 0", "size = ", "size = value = 0", "1 = 1", "system('x')", "size^2")) {
    expect_error(term_test(fit, bad), class = "lambdabar_error_input", info = bad)
  }
  expect_error(term_test(fit, 1), class = "lambdabar_error_input")
})
