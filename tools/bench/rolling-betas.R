# Betas over rolling windows; see README.md.
#   Rscript tools/bench/rolling-betas.R [rows]

bench_file <- sub("^--file=", "", grep("^--file=", commandArgs(), value = TRUE))

# Our results must lie on fresh pages in every round, as the limit does: the allocator is told,
# at its start, to return large blocks to the system. (glibc; elsewhere it has no effect.)
if (!nzchar(Sys.getenv("MALLOC_MMAP_THRESHOLD_"))) {
  Sys.setenv(MALLOC_MMAP_THRESHOLD_ = 2^20)
  rscript <- file.path(R.home("bin"), "Rscript")
  quit(status = system2(rscript, shQuote(c(bench_file, commandArgs(trailingOnly = TRUE)))))
}
source(file.path(dirname(bench_file), "common.R"))

windows_of_lm <- 20000L

# Rows in asset order, 3 in a hundred pairs missing at random.
simulate_returns <- function(n_rows, n_periods, n_factors, seed = 20261201L) {
  set.seed(seed)
  n_assets <- as.integer(n_rows / 0.97 / n_periods)
  pair <- sort(sample.int(n_assets * n_periods, min(n_rows, n_assets * n_periods))) - 1L
  period <- pair %% n_periods + 1L
  factors <- matrix(rnorm(n_periods * n_factors, 0, 0.04), n_periods)
  data <- list(asset = pair %/% n_periods + 1L, period = period, ret = rnorm(length(pair), 0, 0.1))
  for (k in seq_len(n_factors)) {
    data[[paste0("f", k)]] <- factors[period, k]
    data$ret <- data$ret + 0.5 * data[[paste0("f", k)]]
  }
  list2DF(data)
}

factor_formula <- function(n_factors) reformulate(paste0("f", seq_len(n_factors)), "ret")

# Betas and errors, intercept, residual variance, R2 (doubles), count, status (integers): what
# any such answer must write.
write_result <- function(n_rows, n_factors) {
  function() write_fresh(n_rows * (8 * (2 * n_factors + 3) + 4 * 2))
}

# What a general library does for the same: rolling sums of all columns and products, asset by
# asset, left unsolved and without regard to gaps.
rolling_sums <- function(data, length, n_factors) {
  columns <- c(data["ret"], data[paste0("f", seq_len(n_factors))])
  pairs <- which(upper.tri(diag(n_factors + 1L), diag = TRUE), arr.ind = TRUE)
  names <- c(names(columns), paste0("p", seq_len(nrow(pairs))))
  function() {
    products <- Map(function(i, j) columns[[i]] * columns[[j]], pairs[, 1L], pairs[, 2L])
    table <- data.table::setDT(stats::setNames(c(columns, products, list(data$asset)), c(names, "asset")))
    table[, data.table::frollsum(.SD, length), by = "asset", .SDcols = names]
  }
}

bench_windows <- function(n_rows, n_periods, length, n_factors) {
  data <- simulate_returns(n_rows, n_periods, n_factors)
  panel <- asset_panel(data, "asset", "period")
  min_obs <- max(10L, length %/% 2L)
  fit <- function(window = length) {
    exposures(panel, factor_formula(n_factors), window = window_rolling(window, min_obs))
  }
  long <- min(1000L, n_periods)
  data.table::setDTthreads(1L)
  tasks <- list(
    sums = rolling_sums(data, length, n_factors),
    write = write_result(nrow(data), n_factors),
    one = with_threads(1L, function() fit()), two = with_threads(2L, function() fit()),
    long = with_threads(1L, function() fit(long))
  )
  spent <- interleave(tasks, as.list(data), rounds = 3L)
  limit <- spent["cpu", "read", ] + spent["cpu", "write", ]
  print_title(format(nrow(data), big.mark = ","), " rows, ", n_periods, " periods, window ", length, ", K = ", n_factors)
  print_heads()
  print_row("the read alone", spent, "read")
  print_row("the result written to fresh pages", spent, "write")
  for (task in c("one", "two")) {
    share <- times(median(spent["cpu", task, ] / limit), "x read+write")
    print_row(paste0("exposures(), ", threads_label(if (task == "one") 1L else 2L)), spent, task, share, if (task == "one") "4.5" else "")
  }
  print_row(paste0("window ", long, ", 1 thread"), spent, "long", times(ratio(spent, "long", "one"), "x ours"), "1.3")
  print_row("frollsum() of products, by asset", spent, "sums", times(ratio(spent, "sums", "one"), "x ours"), "3")
  bench_lm(data, fit(), length, min_obs, n_factors, median_seconds(spent, "one", "cpu") / nrow(data))
  if (!same_bits_of(tasks)) stop("one and two threads differ in their bits")
  print_row("  1 and 2 threads", value = "same bits")
}

same_bits_of <- function(tasks) identical(tasks$one()$answer, tasks$two()$answer)

# A fresh .lm.fit() for each of some windows; agreement and cost a window.
bench_lm <- function(data, found, length, min_obs, n_factors, seconds_a_row) {
  last <- which(found$answer$status == 0L)
  last <- last[last <= windows_of_lm * 2L]
  last <- utils::head(last, windows_of_lm)
  X <- cbind(1, as.matrix(data[paste0("f", seq_len(n_factors))])[seq_len(max(last)), , drop = FALSE])
  betas <- matrix(NA_real_, base::length(last), n_factors)
  spent <- clock(function() {
    for (i in seq_along(last)) {
      end <- last[i]
      rows <- max(1L, end - length + 1L):end
      rows <- rows[data$asset[rows] == data$asset[end] & data$period[rows] > data$period[end] - length]
      betas[i, ] <<- .lm.fit(X[rows, , drop = FALSE], data$ret[rows])$coefficients[-1L]
    }
  })
  check_close(found$answer$beta[last, ], betas, 1e-10, "betas")
  each <- spent[["cpu"]] / base::length(last)
  print_cells(".lm.fit() a window, microseconds", formatC(1e6 * each, digits = 1, format = "f"), "", times(each / seconds_a_row, "x ours"), "150")
}

n_rows <- size_argument(4000000L, 100000L)
load_stream(dirname(bench_file))
for (n_factors in c(1L, 3L, 5L)) bench_windows(n_rows, 720L, 60L, n_factors)
# Days: a longer calendar, as many rows for each asset as there are days.
for (n_factors in c(1L, 3L)) bench_windows(as.integer(6.25 * n_rows), 10000L, 252L, n_factors)
