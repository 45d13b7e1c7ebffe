# Runs the R tests on the installed package and writes three counts of tests to the file
# in the first argument: passed, failed, skipped.
counts_file <- commandArgs(trailingOnly = TRUE)[1]
Sys.setenv(NOT_CRAN = "true")

results <- testthat::test_dir(
  "tests/testthat",
  package = "lambdabar",
  load_package = "installed",
  reporter = "summary",
  stop_on_failure = FALSE
)
cases <- as.data.frame(results)
failed <- cases$failed > 0 | cases$error
skipped <- cases$skipped & !failed
cat(sum(!failed & !skipped), sum(failed), sum(skipped), "\n", file = counts_file)
