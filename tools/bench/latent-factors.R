# Factors that are missing from the model, and comparisons of traded ones.
#   Rscript tools/bench/latent-factors.R [runs] [file.csv]
# latent: 50 assets, 240 months, three priced hidden factors; the observed one is a noisy mixture of
# the first two with premium 0.35. Errors of the estimates by number of components, and coverage.
# size: how often tests reject what is true.

bench_file <- sub("^--file=", "", grep("^--file=", commandArgs(), value = TRUE))
source(file.path(dirname(bench_file), "simulate.R"))
settings <- simulation_arguments(500L)

months <- 240L
n_assets <- 50L
set.seed(20261201L)
loadings <- matrix(rnorm(3L * n_assets, 0.6, 0.6), 3L)

draw_latent <- function() {
  hidden <- sweep(matrix(rnorm(months * 3L), months), 2L, c(0.25, 0.2, 0.2), "+")
  g <- cbind(observed = hidden[, 1L] + 0.5 * hidden[, 2L] + rnorm(months, 0, 0.8), noise = rnorm(months))
  returns <- hidden %*% loadings + matrix(rnorm(months * n_assets), months)
  panel <- bench_panel(returns, g)
  alone <- price_factors(panel, ret ~ observed, intercept = FALSE)
  fit <- price_latent(panel, ret ~ observed + noise, errors = err_iid())
  counts <- c(1L, 2L, 3L, 5L, 8L)
  range <- latent_range(fit, counts)
  own <- range[range$term == "observed", ]
  tidied <- generics::tidy(fit)
  c(
    `error, two passes on the observed factor` = coef(alone)[["observed"]] - 0.35,
    stats::setNames(own$estimate - 0.35, paste0("error, ", counts, " components")),
    stats::setNames(own$conf.low <= 0.35 & 0.35 <= own$conf.high, paste0("covers, ", counts, " components")),
    `three components found` = fit$n_latent == 3L,
    `strength of noise rejects` = tidied$strength.p.value[2L] < 0.05,
    `premium of noise rejects` = tidied$p.value[2L] < 0.05
  )
}

# Equal Sharpe ratios; benchmarks that span; a premium without a break.
draw_traded <- function() {
  f <- matrix(rnorm(months * 3L, 0.012, 0.045), months, dimnames = list(NULL, c("a", "b", "c")))
  weights <- matrix(c(0.5, 0.5, 0.2, 0.8, 0.9, 0.1), 2L)
  spanned <- bench_panel(f[, 1:2] %*% weights + matrix(rnorm(months * 3L, 0, 0.02), months), f)
  spanning <- spanning_test(spanned, ret ~ a + b)
  c(
    `Sharpe ratios, nothing in common` = sharpe_test(spanned, ~a, ~b)$p.value < 0.05,
    stats::setNames(spanning$p.value < 0.05, paste("spanning,", spanning$test)),
    `break in a premium that has none` = break_test(price_factors(spanned, ret ~ a), "a", series = err_iid())$p.value < 0.05
  )
}

result <- rbind(
  cbind(design = "latent", row_shares(repeat_runs(settings$runs, draw_latent))),
  cbind(design = "size", row_shares(repeat_runs(settings$runs, draw_traded)))
)
write_result(result, settings$file)
