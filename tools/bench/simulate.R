# What the simulations share: runs with a seed each, shares with their error, results to a file.

suppressPackageStartupMessages(library(lambdabar))

simulation_arguments <- function(default_runs) {
  given <- commandArgs(trailingOnly = TRUE)
  list(
    runs = if (length(given)) as.integer(given[1L]) else default_runs,
    file = if (length(given) > 1L) given[2L] else NULL
  )
}

# One column a run; `draw` gives a named vector.
repeat_runs <- function(runs, draw) {
  found <- lapply(seq_len(runs), function(run) {
    set.seed(20261201L + run)
    suppressWarnings(suppressMessages(draw()))
  })
  do.call(cbind, found)
}

# Mean of each row and its simulation error, runs that could not be computed left out.
row_shares <- function(found) {
  counted <- rowSums(!is.na(found))
  data.frame(
    what = rownames(found), value = rowMeans(found, na.rm = TRUE),
    mc_error = apply(found, 1L, sd, na.rm = TRUE) / sqrt(counted), runs = counted, row.names = NULL
  )
}

# A temporary file first, so that no table is left half-written.
write_result <- function(result, file) {
  print(result, digits = 3, row.names = FALSE)
  if (is.null(file)) return(invisible())
  draft <- paste0(file, ".part")
  write.csv(result, draft, row.names = FALSE)
  invisible(file.rename(draft, file))
}

bench_panel <- function(returns, factors) asset_panel(stack_returns(returns, factors), "asset", "period")
