# A model that is wrong, and one that is right: coverage of premia and sizes of tests.
#   Rscript tools/bench/misspecified.R [runs] [file.csv]
# 10 assets, one factor (mean 0.5 %, standard deviation 4.5 %), betas from 0.8 to 1.2, normal errors of
# unequal variance with a common part. In the wrong model expected returns miss the betas' line by
# fixed errors of 1 % a month (large, so that what they do shows). Coverage is of the premium that
# fits best under the weights of the second pass, with population betas and weights.

bench_file <- sub("^--file=", "", grep("^--file=", commandArgs(), value = TRUE))
source(file.path(dirname(bench_file), "simulate.R"))
settings <- simulation_arguments(500L)

n_assets <- 10L
betas <- seq(0.8, 1.2, length.out = n_assets)
missed <- 0.01 * as.numeric(scale(cos(3 * seq_len(n_assets))))
loadings <- 0.015 * sin(seq_len(n_assets))
spreads <- seq(0.01, 0.03, length.out = n_assets)
Sigma <- tcrossprod(loadings) + diag(spreads^2)
factor_sd <- 0.045
premium <- 0.005

# Premia of the population regression under each weighting.
population <- function(means, method) {
  V <- factor_sd^2 * tcrossprod(betas) + Sigma
  W <- switch(method, ols = diag(n_assets), wls = diag(1 / diag(Sigma)), gls = solve(V))
  X <- cbind(1, betas)
  solve(t(X) %*% W %*% X, t(X) %*% W %*% means)[2L]
}

structures <- list(
  `betas known` = err_iid(), Shanken = err_eiv(), `estimated betas` = err_eiv("robust"), misspecified = err_misspec()
)

draw <- function(wrong, months) {
  errors <- wrong * missed
  means <- 0.001 + premium * betas + errors
  truth <- vapply(c("ols", "wls", "gls"), population, 1, means = means)
  function() {
    f <- matrix(rnorm(months, premium, factor_sd), dimnames = list(NULL, "mkt"))
    e <- outer(rnorm(months), loadings) + matrix(rnorm(months * n_assets), months) %*% diag(spreads)
    panel <- bench_panel(sweep((f - premium) %*% t(betas) + e, 2L, means, "+"), f)
    fits <- lapply(names(truth), function(method) price_factors(panel, ret ~ mkt, method = method))
    hit <- unlist(lapply(seq_along(fits), function(k) {
      vapply(structures, function(errors) {
        interval <- confint(restate(fits[[k]], errors), "mkt")
        interval[1L] <= truth[k] && truth[k] <= interval[2L]
      }, NA)
    }))
    names(hit) <- paste(rep(c("OLS", "WLS", "GLS"), each = length(structures)), names(structures), sep = ", ")
    r2 <- pricing_r2(fits[[1L]])
    tests <- alpha_test(fits[[1L]], c("f_approx", "efficient"))
    c(
      hit,
      `R2 = 1 rejected, OLS` = r2$p_one[1L] < 0.05, `R2 = 1 rejected, GLS` = r2$p_one[2L] < 0.05,
      `F of pricing errors rejects` = tests$p.value[1L] < 0.05, `efficient J rejects` = tests$p.value[2L] < 0.05
    )
  }
}

# Size of R2 = 0 (no premium, but pricing errors) and of the distance (excess returns, no constant).
draw_zero <- function(months) {
  function() {
    f <- matrix(rnorm(months, premium, factor_sd), dimnames = list(NULL, "mkt"))
    e <- outer(rnorm(months), loadings) + matrix(rnorm(months * n_assets), months) %*% diag(spreads)
    X <- cbind(1, betas)
    unrelated <- missed - X %*% solve(crossprod(X), crossprod(X, missed))
    fit <- price_factors(bench_panel(sweep((f - premium) %*% t(betas) + e, 2L, unrelated, "+"), f), ret ~ mkt)
    right <- price_factors(bench_panel(f %*% t(betas) + e, f), ret ~ mkt)
    c(
      `R2 = 0 rejected, OLS` = pricing_r2(fit)$p_zero[1L] < 0.05,
      `distance of a right model rejected` = alpha_test(right, "hj_excess")$p.value < 0.05
    )
  }
}

result <- rbind(
  cbind(model = "wrong", months = 1000L, row_shares(repeat_runs(settings$runs, draw(1, 1000L)))),
  cbind(model = "right", months = 1000L, row_shares(repeat_runs(settings$runs, draw(0, 1000L)))),
  cbind(model = "boundary", months = 600L, row_shares(repeat_runs(settings$runs, draw_zero(600L))))
)
write_result(result, settings$file)
