# Weak and useless factors: what t-statistics, rank tests and premium sets do.
#   Rscript tools/bench/weak-factors.R [runs] [file.csv]
# strength: one factor of premium 2 % (large, so that attenuation shows) and standard deviation 4.5 % a
# month, 25 assets, 240 months, betas of mean 1 and a given spread; how often 95 % intervals hold the premium realised in the
# sample. useless: the model has only noise, 25 assets are priced by a factor that is left out;
# how often each test takes the noise for a priced factor.

bench_file <- sub("^--file=", "", grep("^--file=", commandArgs(), value = TRUE))
source(file.path(dirname(bench_file), "simulate.R"))
settings <- simulation_arguments(500L)

covered <- function(set, value) {
  set$shape[1L] != "empty" && any(set$lower <= value & value <= set$upper)
}

strength <- function(spread) {
  function() {
    f <- matrix(rnorm(240L, 0.02, 0.045), dimnames = list(NULL, "mkt"))
    betas <- 1 + spread * seq(-1.6, 1.6, length.out = 25L)
    panel <- bench_panel(f %*% t(betas) + matrix(rnorm(6000L, 0, 0.04), 240L), f)
    fit <- price_factors(panel, ret ~ mkt)
    # Given the factors: the error of Shanken less the sampling error of the factor's mean.
    realised <- mean(f)
    vcov <- vcov(fit)["mkt", "mkt"] - var(f[, 1L]) / 240
    t <- abs(coef(fit)[["mkt"]] - realised) / sqrt(max(vcov, 0))
    set <- premium_set(fit)
    c(
      `t interval` = t < qt(0.975, 239), `premium set` = covered(set, realised),
      `set unbounded` = set$shape[1L] %in% c("rays", "line"), `rank test rejects` = rank_test(fit, kind = "bartlett")$p.value < 0.05
    )
  }
}

useless <- function(months) {
  function() {
    hidden <- rnorm(months, 0.005, 0.045)
    f <- matrix(rnorm(months, 0, 0.045), dimnames = list(NULL, "noise"))
    returns <- hidden %o% seq(0.4, 1.6, length.out = 25L) + matrix(rnorm(months * 25L, 0, 0.04), months)
    fit <- price_factors(bench_panel(returns, f), ret ~ noise)
    set <- premium_set(fit)
    c(
      `t rejects zero` = generics::tidy(fit)$p.value[2L] < 0.05,
      `t under misspecification rejects zero` = generics::tidy(restate(fit, err_misspec()))$p.value[2L] < 0.05,
      `set bounded without zero` = set$shape[1L] == "interval" && !covered(set, 0),
      `set unbounded or empty` = set$shape[1L] != "interval",
      `rank test rejects` = rank_test(fit, kind = "bartlett")$p.value < 0.05
    )
  }
}

result <- rbind(
  do.call(rbind, lapply(c(0.6, 0.15, 0.05, 0), function(spread) {
    cbind(design = "strength", at = spread, row_shares(repeat_runs(settings$runs, strength(spread))))
  })),
  do.call(rbind, lapply(c(240L, 600L, 2400L), function(months) {
    cbind(design = "useless", at = months, row_shares(repeat_runs(settings$runs, useless(months))))
  }))
)
write_result(result, settings$file)
