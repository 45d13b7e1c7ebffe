library(testthat)
library(lambdabar)

test_check("lambdabar")
