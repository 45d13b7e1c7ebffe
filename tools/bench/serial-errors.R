# Premia that are autocorrelated: coverage of 95 % intervals of their mean.
#   Rscript tools/bench/serial-errors.R [runs] [file.csv]
# The premium of one characteristic follows a first-order autoregression about 0.3; ten assets a
# period, with little noise, so that the series is what is estimated.

bench_file <- sub("^--file=", "", grep("^--file=", commandArgs(), value = TRUE))
source(file.path(dirname(bench_file), "simulate.R"))
settings <- simulation_arguments(500L)

structures <- list(
  independent = err_iid(), `Bartlett, rule` = err_hac(), `Bartlett, Andrews, prewhitened` = err_hac("andrews", prewhiten = TRUE),
  `fixed-b, root rule` = err_hac("root", critical = "fixed_b"), cosines = err_cosine(), `8 groups` = err_groups(8),
  `resampled blocks` = err_block(199)
)

draw <- function(periods, rho) {
  function() {
    x <- as.numeric(filter(c(rnorm(1L, 0, 1 / sqrt(1 - rho^2)), rnorm(periods - 1L)), rho, "recursive"))
    traits <- matrix(rnorm(periods * 10L), periods)
    data <- data.frame(
      asset = rep(1:10, each = periods), period = rep(seq_len(periods), 10L), trait = as.vector(traits),
      ret = as.vector((0.3 + x) * traits) + rnorm(periods * 10L, 0, 0.01)
    )
    fit <- price_traits(asset_panel(data, "asset", "period"), ret ~ trait, errors = err_iid())
    vapply(structures, function(errors) {
      interval <- confint(restate(fit, errors), "trait")
      interval[1L] <= 0.3 && 0.3 <= interval[2L]
    }, NA)
  }
}

designs <- expand.grid(rho = c(0, 0.3, 0.6, 0.9), periods = c(60L, 240L))
result <- do.call(rbind, lapply(seq_len(nrow(designs)), function(i) {
  cbind(designs[i, ], row_shares(repeat_runs(settings$runs, draw(designs$periods[i], designs$rho[i]))), row.names = NULL)
}))
write_result(result, settings$file)
