# The pooled regression with clustered errors; see README.md.
#   Rscript tools/bench/pooled.R [rows]

bench_file <- sub("^--file=", "", grep("^--file=", commandArgs(), value = TRUE))
source(file.path(dirname(bench_file), "common.R"))

n_periods <- 200L
n_traits <- 10L
n_rows_general <- 400000L

cluster_sets <- list(
  list(name = "asset", errors = err_cluster("asset"), ways = "asset"),
  list(name = "period", errors = err_cluster("period"), ways = "period"),
  list(name = "both", errors = err_cluster("asset", "period"), ways = c("asset", "period"))
)

# All pairs are there: n_rows / n_periods assets in every period.
full_panel <- function(n_rows) {
  n_assets <- as.integer(n_rows %/% n_periods)
  simulate_panel(n_assets * n_periods, n_assets, n_periods, n_traits)
}

fit_ours <- function(panel, set) pooled(panel, trait_formula(n_traits), errors = set$errors)

# The estimate reads the columns once, its errors once more: the limit is two reads.
bench_limit <- function(data, order) {
  print_title("Rows in ", order, " order, estimate and errors")
  print_heads()
  panel <- asset_panel(data, "asset", "period")
  tasks <- list()
  for (set in cluster_sets) tasks <- c(tasks, tasks_of(panel, set))
  spent <- interleave(tasks, columns_read(data, n_traits, c("asset", "period")))
  print_row("the read alone, once", spent, "read")
  for (set in cluster_sets) print_limit(spent, set, tasks)
}

tasks_of <- function(panel, set) {
  task <- function() fit_ours(panel, set)
  tasks <- list(with_threads(1L, task), with_threads(2L, task))
  names(tasks) <- paste(set$name, 1:2)
  tasks
}

print_limit <- function(spent, set, tasks) {
  for (threads in 1:2) {
    task <- paste(set$name, threads)
    label <- sprintf("clusters %s, %s", set$name, threads_label(threads))
    limit <- times(ratio(spent, task, "read") / 2, "x 2 reads")
    print_row(label, spent, task, limit, if (threads == 1L) "4.5" else "")
  }
  fits <- lapply(paste(set$name, 1:2), function(task) tasks[[task]]())
  if (!same_bits(fits[[1L]], fits[[2L]])) stop("one and two threads differ in their bits")
  print_row("  1 and 2 threads", value = "same bits")
}

# The same covariance from a general library, on the rows that it can hold: lm() keeps a
# model matrix, its QR and the scores.
bench_general <- function(n_rows) {
  data <- full_panel(n_rows)
  panel <- asset_panel(data, "asset", "period")
  options(lambdabar.threads = 1L)
  print_title(
    "Against lm() and sandwich::vcovCL(), ", format(nrow(data), big.mark = ","),
    " rows in period order, 1 thread"
  )
  print_heads()
  for (set in cluster_sets) compare_general(data, panel, set)
}

compare_general <- function(data, panel, set) {
  general <- lm(trait_formula(n_traits), data)
  ours <- pooled(panel, trait_formula(n_traits), errors = err_iid())
  clusters <- data[set$ways]
  tasks <- list(
    estimate = function() pooled(panel, trait_formula(n_traits), errors = err_iid()),
    lm = function() lm(trait_formula(n_traits), data),
    errors = function() restate(ours, set$errors),
    vcovCL = function() sandwich::vcovCL(general, clusters, type = "HC1", cadjust = TRUE)
  )
  spent <- interleave(tasks, columns_read(data, n_traits, c("asset", "period")), 3L)
  name <- paste("clusters", set$name)
  print_row("pooled(), errors independent", spent, "estimate")
  print_row("  lm()", spent, "lm", times(ratio(spent, "lm", "estimate"), "x ours"))
  print_row(paste("restate(),", name), spent, "errors")
  print_row("  vcovCL()", spent, "vcovCL", times(ratio(spent, "vcovCL", "errors"), "x ours"), "30")
  both <- (spent["cpu", "lm", ] + spent["cpu", "vcovCL", ]) /
    (spent["cpu", "estimate", ] + spent["cpu", "errors", ])
  print_row("  lm() and vcovCL()", value = times(median(both), "x ours"))
  difference <- check_close(vcov(tasks$errors()), tasks$vcovCL(), 1e-10, "covariances")
  print_row("  greatest difference", value = sprintf("<= %.0e", difference))
}

run_all <- function(n_rows) {
  load_stream(dirname(bench_file))
  data <- full_panel(n_rows)
  print_title(
    "Pooled: ", format(nrow(data), big.mark = ","), " rows, ",
    format(max(data$asset), big.mark = ","), " assets, ", n_periods, " periods, K = ", n_traits
  )
  cat(strwrap(paste(
    "Medians of interleaved rounds; ratios are of CPU seconds, round by round. CPU seconds",
    "add up all threads. read: the returns, the characteristics and two codes read once,",
    "one thread, best of three. goal: at most this against two reads, at least this for",
    "vcovCL() against ours."
  ), 80), sep = "\n")
  bench_limit(data, "period")
  bench_limit(reorder_rows(data, order(data$asset, data$period)), "asset")
  bench_general(min(n_rows, n_rows_general))
}

run_all(size_argument(4e6L, 100L * n_periods))
