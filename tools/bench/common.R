# What the benchmarks share: the invented panel, the clocks, the streaming limit, the table.

suppressPackageStartupMessages(library(lambdabar))

n_rounds <- 5L

# Rows in period order: `asset` and `period` are integer codes, `ret` the return, x1, x2, ..
# the characteristics. Asset effects in returns and characteristics, and period shocks in
# returns, give clusters something to find.
simulate_panel <- function(n_rows, n_assets, n_periods, n_traits, seed = 20261201L) {
  set.seed(seed)
  pair <- sort(sample.int(n_assets * n_periods, n_rows)) - 1L
  asset <- pair %% n_assets + 1L
  period <- pair %/% n_assets + 1L
  columns <- list(asset = asset, period = period, ret = NULL)
  ret <- (0.01 * rnorm(n_assets))[asset] + (0.04 * rnorm(n_periods))[period]
  for (j in seq_len(n_traits)) {
    x <- (0.7 * rnorm(n_assets))[asset] + rnorm(n_rows)
    ret <- ret + 0.001 * j * x
    columns[[paste0("x", j)]] <- x
  }
  columns$ret <- ret + 0.1 * rnorm(n_rows)
  list2DF(columns)
}

trait_names <- function(n_traits) paste0("x", seq_len(n_traits))

trait_formula <- function(n_traits) reformulate(trait_names(n_traits), "ret")

# One row after the other, so that only one column's copy is alive at a time.
reorder_rows <- function(data, order) list2DF(lapply(data, function(column) column[order]))

# What an estimator has to read: returns, characteristics, one code a row.
columns_read <- function(data, n_traits, codes = "period") {
  as.list(data[c("ret", trait_names(n_traits), codes)])
}

# Compiles the streaming read. A read that skips values would make every ratio a lie, so its
# sum is held against R's.
load_stream <- function(dir) {
  Rcpp::sourceCpp(file.path(dir, "stream.cpp"), env = globalenv())
  probe <- list(as.double(1:1003), 1:1001)
  stopifnot(read_columns(probe, 1L)[["sum"]] == sum(probe[[1]]) + sum(probe[[2]]))
}

clock <- function(task) {
  invisible(gc(FALSE))
  before <- proc.time()
  task()
  spent <- proc.time() - before
  c(cpu = spent[["user.self"]] + spent[["sys.self"]], wall = spent[["elapsed"]])
}

# Rounds in which every task and the read of `columns` (as "read", the best of three) have
# their turn, so that a busy spell of the machine meets them all. An array: cpu and wall,
# tasks, rounds.
interleave <- function(tasks, columns, rounds = n_rounds) {
  one_round <- function(round) {
    read <- read_columns(columns, 3L)[c("cpu", "wall")]
    cbind(read = read, vapply(tasks, clock, c(cpu = 0, wall = 0)))
  }
  shape <- matrix(0, 2L, length(tasks) + 1L)
  dimnames(shape) <- list(c("cpu", "wall"), c("read", names(tasks)))
  vapply(seq_len(rounds), one_round, shape)
}

median_seconds <- function(spent, task, kind) median(spent[kind, task, ])

# CPU seconds of one task in those of another, round by round.
ratio <- function(spent, task, to) median(spent["cpu", task, ] / spent["cpu", to, ])

print_title <- function(...) cat("", strwrap(paste0(...), 80), sep = "\n")

print_heads <- function() {
  print_cells("", "CPU s", "wall s", "ratio", "goal")
  cat(strrep("-", 80), "\n", sep = "")
}

print_cells <- function(...) {
  cat(trimws(sprintf("%-36s%9s%9s%18s%8s", ...), "right"), "\n", sep = "")
}

threads_label <- function(n) if (n == 1L) "1 thread" else paste(n, "threads")

print_row <- function(label, spent = NULL, task = NULL, value = "", goal = "") {
  seconds <- c("", "")
  if (!is.null(spent)) {
    seconds <- vapply(c("cpu", "wall"), function(kind) {
      formatC(median_seconds(spent, task, kind), format = "f", digits = 3)
    }, "")
  }
  print_cells(label, seconds[[1]], seconds[[2]], value, goal)
}

times <- function(x, what) paste(formatC(x, format = "fg", digits = 3), what)

with_threads <- function(threads, task) {
  function() {
    before <- options(lambdabar.threads = threads)
    on.exit(options(before))
    task()
  }
}

# Estimate, influence rows or moments, and covariance: all that a fit computes from data.
same_bits <- function(a, b) {
  computed <- c("estimate", "rows", "sections", "core", "covariance")
  identical(unclass(a)[computed], unclass(b)[computed])
}

check_close <- function(ours, theirs, tolerance, what) {
  difference <- max(abs(ours - theirs)) / max(abs(theirs))
  if (!(difference <= tolerance)) {
    stop(what, " differ by ", signif(difference, 3), ", more than ", tolerance)
  }
  difference
}

size_argument <- function(default, smallest) {
  given <- commandArgs(trailingOnly = TRUE)
  if (!length(given)) {
    return(default)
  }
  size <- suppressWarnings(as.numeric(given[1L]))
  if (is.na(size) || size < smallest || size > .Machine$integer.max) {
    stop("the number of rows must be a number from ", smallest, " to ", .Machine$integer.max)
  }
  as.integer(size)
}
