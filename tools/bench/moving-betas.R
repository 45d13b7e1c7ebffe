# Premia on betas that move, and what each correction costs; see README.md.
#   Rscript tools/bench/moving-betas.R [rows]

bench_file <- sub("^--file=", "", grep("^--file=", commandArgs(), value = TRUE))
source(file.path(dirname(bench_file), "common.R"))

n_periods <- 720L
n_factors <- 3L
window <- 60L

# Rows in asset order, no gaps: a lag by row is then a lag by period, and the loop is right.
simulate_stocks <- function(n_rows, seed = 20261201L) {
  set.seed(seed)
  n_assets <- n_rows %/% n_periods
  asset <- rep(seq_len(n_assets), each = n_periods)
  period <- rep(seq_len(n_periods), n_assets)
  factors <- matrix(rnorm(n_periods * n_factors, 0.004, 0.04), n_periods)
  data <- list(asset = asset, period = period, ret = rnorm(length(asset), 0, 0.1))
  for (k in seq_len(n_factors)) {
    data[[paste0("f", k)]] <- factors[period, k]
    data$ret <- data$ret + rnorm(n_assets, 0.8, 0.4)[asset] * data[[paste0("f", k)]]
  }
  list2DF(data)
}

# The same cross-sections by hand, from betas that are there already: a lag within assets, a
# split by period, one .lm.fit() a period.
loop_of_lm <- function(data, exposed) {
  betas <- exposed$answer$beta
  function() {
    before <- c(NA_integer_, seq_len(nrow(data) - 1L))
    follows <- data$asset == data$asset[before] & data$period == data$period[before] + 1L
    X <- cbind(1, betas[before, ])
    X[!follows, ] <- NA
    rows <- split(which(stats::complete.cases(X)), data$period[stats::complete.cases(X)])
    slopes <- vapply(rows, function(r) .lm.fit(X[r, , drop = FALSE], data$ret[r])$coefficients, numeric(n_factors + 1L))
    rowMeans(slopes)
  }
}

n_rows <- size_argument(4000000L, 100000L)
load_stream(dirname(bench_file))
data <- simulate_stocks(n_rows)
panel <- asset_panel(data, "asset", "period")
formula <- ret ~ f1 + f2 + f3
rolling <- window_rolling(window, 30)
price <- function(correct) {
  with_threads(1L, function() price_factors(panel, formula, exposure = rolling, correct = correct))
}
expose <- with_threads(1L, function() exposures(panel, formula, window = rolling))
exposed <- expose()
tasks <- list(
  exposures = expose, none = price("none"), bias = price("bias"),
  instruments = price("instruments"), loop = loop_of_lm(data, exposed)
)
invisible(check_close(unname(coef(price("none")())), unname(tasks$loop()), 1e-8, "premia"))
spent <- interleave(tasks, as.list(data), rounds = 3L)
print_title(format(nrow(data), big.mark = ","), " rows, ", n_periods, " periods, window ", window, ", K = ", n_factors, ", 1 thread")
print_heads()
print_row("the read alone", spent, "read")
print_row("exposures()", spent, "exposures", times(ratio(spent, "exposures", "read"), "x read"))
for (task in c("none", "bias", "instruments")) {
  print_row(paste0("price_factors(), ", task), spent, task, times(ratio(spent, task, "exposures"), "x betas"))
}
print_row(".lm.fit() loop, betas given", spent, "loop", times(ratio(spent, "loop", "exposures"), "x betas"))
