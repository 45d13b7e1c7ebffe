# Bias and coverage of premia with individual assets: naive, bias-corrected, instruments.
#   Rscript tools/bench/attenuation.R [runs] [file.csv]
# Each run draws a market with one factor of premium 0.6 % a month and 300 firms whose betas
# have mean 1 and standard deviation 0.4; idiosyncratic standard deviation 9 % a month, returns
# missing at random in 3 % of the months. The table has, for each design and remedy, the bias in
# shares of the true premium with its Monte Carlo error, and how often the 95 % interval holds
# the true premium. Bias is taken against the factor's mean over the months that were priced,
# which has the premium as its expectation and takes the largest part of the noise out.

suppressPackageStartupMessages(library(lambdabar))

arguments <- commandArgs(trailingOnly = TRUE)
runs <- if (length(arguments)) as.integer(arguments[1L]) else 200L
file <- if (length(arguments) > 1L) arguments[2L] else NULL
premium <- 0.006
n_firms <- 300L
designs <- list(
  list(label = "whole sample", months = 60L, window = window_full()),
  list(label = "whole sample", months = 120L, window = window_full()),
  list(label = "whole sample", months = 360L, window = window_full()),
  list(label = "60 months before", months = 180L, window = window_rolling(60, 24))
)
remedies <- c("none", "bias", "instruments")

draw_market <- function(months) {
  factor <- matrix(rnorm(months, premium, 0.045), dimnames = list(NULL, "mkt"))
  beta <- rnorm(n_firms, 1, 0.4)
  returns <- factor %*% t(beta) + matrix(rnorm(months * n_firms, 0, 0.09), months)
  returns[sample.int(length(returns), 0.03 * length(returns))] <- NA
  asset_panel(stack_returns(returns, factor), "asset", "period")
}

# Estimate less the factor's mean, and whether the interval holds the truth.
judge <- function(panel, window, remedy) {
  fit <- suppressWarnings(suppressMessages(price_factors(panel, ret ~ mkt, exposure = window, correct = remedy)))
  interval <- confint(fit, "mkt")
  priced <- sample_used(fit)$status %in% c("estimated", "pooled")
  realised <- mean(panel$data$mkt[match(which(priced), panel$data$period)])
  c(coef(fit)[["mkt"]] - realised, interval[1L] <= premium && premium <= interval[2L])
}

simulate_design <- function(design) {
  found <- vapply(seq_len(runs), function(run) {
    set.seed(20261201L + run)
    panel <- draw_market(design$months)
    vapply(remedies, function(remedy) judge(panel, design$window, remedy), numeric(2L))
  }, matrix(0, 2L, length(remedies)))
  shares <- found[1L, , ] / premium
  data.frame(
    betas = design$label, months = design$months, remedy = remedies, bias = rowMeans(shares),
    mc_error = apply(shares, 1L, sd) / sqrt(runs), coverage = rowMeans(found[2L, , ]), runs = runs
  )
}

result <- do.call(rbind, lapply(designs, simulate_design))
print(result, digits = 3, row.names = FALSE)
if (!is.null(file)) {
  draft <- paste0(file, ".part")
  write.csv(result, draft, row.names = FALSE)
  invisible(file.rename(draft, file))
}
