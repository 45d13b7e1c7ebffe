test_that("the page of error classes and the code agree", {
  page <- system.file("help", package = "lambdabar")
  documented <- c("keys", "input", "no_variation", "rank", "sample", "unsupported")
  code <- ls(asNamespace("lambdabar"), pattern = "^abort_")
  expect_setequal(sub("^abort_", "", setdiff(code, "abort_class")), documented)
  rd <- tryCatch(utils::capture.output(print(tools::Rd_db("lambdabar")[["lambdabar_conditions.Rd"]])), error = function(e) NULL)
  skip_if(is.null(rd) || !nzchar(page), "help pages are not installed")
  found <- regmatches(paste(rd, collapse = " "), gregexpr("lambdabar_error_[a-z]+(_[a-z]+)?", paste(rd, collapse = " ")))[[1]]
  expect_setequal(unique(found), paste0("lambdabar_error_", documented))
})

test_that("every error is a lambdabar_error and names the user's call", {
  error <- expect_error(price_traits(small_panel(), ret ~ mkt), class = "lambdabar_error")
  expect_match(deparse1(conditionCall(error)), "price_traits")
})
