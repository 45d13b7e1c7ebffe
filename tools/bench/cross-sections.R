# Declaring a panel and estimating one cross-section a period; see README.md.
#   Rscript tools/bench/cross-sections.R [rows]

bench_file <- sub("^--file=", "", grep("^--file=", commandArgs(), value = TRUE))
source(file.path(dirname(bench_file), "common.R"))
suppressPackageStartupMessages(library(data.table))
setDTthreads(1L)

n_periods <- 720L
trait_counts <- c(5L, 10L, 20L)
share_missing <- 0.02

# Three pairs in a hundred are absent: no period has all assets, no asset all periods.
ragged_panel <- function(n_rows, n_traits) {
  n_assets <- as.integer(ceiling(n_rows / (0.97 * n_periods)))
  simulate_panel(n_rows, n_assets, n_periods, n_traits)
}

in_order <- function(data, order) {
  switch(
    order,
    period = data,
    asset = reorder_rows(data, order(data$asset, data$period)),
    shuffled = reorder_rows(data, sample.int(nrow(data)))
  )
}

with_keys <- function(data, type) {
  month <- seq(as.Date("1960-01-31") + 1, by = "month", length.out = n_periods) - 1
  if (type == "date") data$period <- month[data$period]
  if (type == "text") {
    data$period <- format(month, "%Y-%m")[data$period]
    data$asset <- sprintf("A%06d", seq_len(max(data$asset)))[data$asset]
  }
  data
}

with_holes <- function(data) {
  for (name in setdiff(names(data), c("asset", "period"))) {
    data[[name]][runif(nrow(data)) < share_missing] <- NA
  }
  data
}

# Without the message that says how text periods are read.
declare <- function(data) suppressMessages(asset_panel(data, "asset", "period"))

# The same codes and the same check from a general library, on one thread.
declare_by_table <- function(table) {
  table[, asset_code := .GRP, by = asset]
  table[, period_code := .GRP, by = period]
  anyDuplicated(table, by = c("asset", "period"))
}

# The plain loop, from a data frame, as ours is, and from a matrix that is there already.
regressor_matrix <- function(data, n_traits) cbind(1, as.matrix(data[trait_names(n_traits)]))

loop_slopes <- function(X, y, period) {
  rows <- split(seq_along(y), period)
  vapply(rows, function(i) .lm.fit(X[i, , drop = FALSE], y[i])$coefficients, X[1L, ])
}

bench_keys <- function(data, order) {
  for (type in c("integer", "date", "text")) {
    keyed <- with_keys(data, type)
    table <- as.data.table(keyed[c("asset", "period")])
    tasks <- list(ours = function() declare(keyed), table = function() declare_by_table(table))
    spent <- interleave(tasks, list(keyed$ret))
    label <- paste0("asset_panel(), ", type, " keys")
    print_row(label, spent, "ours", times(ratio(spent, "ours", "table"), "x table"), "1.3")
  }
}

bench_traits <- function(data, order, n_traits, goal) {
  panel <- declare(data)
  X <- regressor_matrix(data, n_traits)
  estimate <- function() price_traits(panel, trait_formula(n_traits))
  tasks <- list(
    one = with_threads(1L, estimate), two = with_threads(2L, estimate),
    loop = function() loop_slopes(regressor_matrix(data, n_traits), data$ret, data$period),
    bare = function() loop_slopes(X, data$ret, data$period)
  )
  spent <- interleave(tasks, columns_read(data, n_traits))
  limit <- function(task) times(ratio(spent, task, "read"), "x read")
  print_row(paste0("K = ", n_traits, ": the read alone"), spent, "read")
  print_row("  price_traits(), 1 thread", spent, "one", limit("one"), goal)
  print_row("  price_traits(), 2 threads", spent, "two", limit("two"))
  against <- function(task) times(ratio(spent, task, "one"), "x ours")
  print_row("  loop of .lm.fit", spent, "loop", against("loop"), "20")
  print_row("  the same, matrix made before", spent, "bare", against("bare"))
  check_bits(tasks)
  check_slopes(tasks$one(), tasks$loop())
}

check_bits <- function(tasks) {
  if (!same_bits(tasks$one(), tasks$two())) stop("one and two threads differ in their bits")
  print_row("  1 and 2 threads", value = "same bits")
}

check_slopes <- function(fit, slopes) {
  difference <- check_close(period_premia(fit)$estimate, as.vector(slopes), 1e-10, "slopes")
  print_row("  greatest difference of slopes", value = sprintf("<= %.0e", difference))
}

bench_holes <- function(data, n_traits) {
  holed <- with_holes(data)
  panel <- declare(holed)
  estimate <- function() price_traits(panel, trait_formula(n_traits))
  spent <- interleave(list(one = with_threads(1L, estimate)), columns_read(holed, n_traits))
  label <- sprintf("K = %d, %.0f %% missing, 1 thread", n_traits, 100 * share_missing)
  print_row(label, spent, "one", times(ratio(spent, "one", "read"), "x read"))
}

# Peak memory of a step beyond what was there before, in bytes; NA where the system does not
# tell. The peak is reset by hand, because making the data took more than the step may.
memory_line <- function(field) {
  status <- tryCatch(readLines("/proc/self/status"), error = function(e) character(),
    warning = function(w) character())
  line <- grep(paste0("^", field, ":"), status, value = TRUE)
  if (length(line)) 1024 * as.numeric(gsub("[^0-9]", "", line)) else NA_real_
}

peak_beyond <- function(task) {
  invisible(gc())
  reset <- tryCatch({
    writeLines("5", "/proc/self/clear_refs")
    TRUE
  }, error = function(e) FALSE, warning = function(w) FALSE)
  if (!reset) {
    return(NA_real_)
  }
  before <- memory_line("VmRSS")
  task()
  memory_line("VmHWM") - before
}

# Runs in a process of its own and prints the two peaks. A small panel first: loading code is
# not a cost of the data.
report_memory <- function(n_rows, order, n_traits, threads) {
  options(lambdabar.threads = threads)
  price_traits(declare(ragged_panel(50L * n_periods, 1L)), ret ~ x1)
  data <- in_order(ragged_panel(n_rows, n_traits), order)
  panel <- NULL
  keys <- peak_beyond(function() panel <<- declare(data))
  fit <- peak_beyond(function() price_traits(panel, trait_formula(n_traits)))
  cat(sprintf("%.0f\n", c(sum(vapply(data, object.size, 0)), keys, fit)))
}

# A fixed threshold makes the allocator hand every large block back to the system, so that
# what was freed before a step cannot hide what the step takes.
bench_memory <- function(n_rows, order, n_traits, threads) {
  answer <- system2(
    file.path(R.home("bin"), "Rscript"),
    c(shQuote(bench_file), "memory", n_rows, order, n_traits, threads),
    stdout = TRUE, env = "MALLOC_MMAP_THRESHOLD_=131072"
  )
  bytes <- suppressWarnings(as.numeric(answer))
  if (length(bytes) != 3L) stop("the process that measures memory failed")
  share <- function(step) sprintf("%.1f MB %4.1f %%", step / 1e6, 100 * step / bytes[1L])
  goal <- if (order == "period") "" else "16 MB"
  label <- sprintf("K = %d, %s: asset_panel()", n_traits, threads_label(threads))
  print_row(label, value = share(bytes[2L]))
  print_row("  price_traits()", value = share(bytes[3L]), goal = goal)
}

bench_order <- function(data, order, goals) {
  print_title("Rows in ", if (order == "shuffled") "random order" else paste(order, "order"))
  print_heads()
  bench_keys(data, order)
  for (i in seq_along(goals)) {
    n_traits <- as.integer(names(goals)[i])
    bench_traits(data, order, n_traits, goals[[i]])
  }
  bench_holes(data, 10L)
  for (threads in 1:2) bench_memory(nrow(data), order, 10L, threads)
}

run_all <- function(n_rows) {
  load_stream(dirname(bench_file))
  data <- ragged_panel(n_rows, max(trait_counts))
  print_title(
    "Cross-sections: ", format(n_rows, big.mark = ","), " rows, ", n_periods, " periods, ",
    format(max(data$asset), big.mark = ","), " assets, K characteristics"
  )
  cat(strwrap(paste(
    "Medians of", n_rounds, "interleaved rounds; ratios are of CPU seconds, round by round.",
    "CPU seconds add up all threads. read: the returns, the characteristics and one code",
    "read once, one thread, best of three. table: the keys coded and checked by data.table.",
    "goal: at most this against the read, the table or in memory; at least this for the",
    "loop against ours on one thread."
  ), 80), sep = "\n")
  bench_order(data, "period", c("5" = "3", "10" = "3", "20" = "4"))
  bench_order(in_order(data, "asset"), "asset", c("5" = "4.5", "10" = "6.5", "20" = "9"))
  bench_order(in_order(data, "shuffled"), "shuffled", c("10" = ""))
}

arguments <- commandArgs(trailingOnly = TRUE)
if (identical(arguments[1L], "memory")) {
  sizes <- as.integer(arguments[c(2L, 4L, 5L)])
  report_memory(sizes[1L], arguments[3L], sizes[2L], sizes[3L])
} else {
  run_all(size_argument(4e6L, 40L * n_periods))
}
