# Sums over periods that are no kernel of lags.

resummed_covariance <- function(series, rows, slot) {
  T <- nrow(rows)
  closed <- if (max(slot) - min(slot) + 1 > T) "; gaps in the calendar closed"
  sum_of <- function(kind, size) core_result(cpp_time_sum(rows, kind, size))
  if (inherits(series, "lb_err_cosine")) {
    B <- if (identical(series$terms, "rule")) max(1, floor(0.4 * T^(2 / 3))) else series$terms
    return(list(
      vcov = sum_of("cosine", B), df = B, cosines = B,
      phrase = paste0("projections of the premia over time on ", count_of(B, "cosine"), " (Lazarus and others 2018)", closed)
    ))
  }
  if (inherits(series, "lb_err_groups")) {
    return(list(
      vcov = sum_of("blocks", series$groups), df = series$groups - 1,
      phrase = paste0("variation between ", series$groups, " groups of consecutive periods (Ibragimov-Mueller 2010); p above 0.083 is not exact", closed)
    ))
  }
  length <- if (identical(series$block, "auto")) {
    max(1, vapply(seq_len(ncol(rows)), function(j) cpp_block_length(rows[, j]), 1))
  } else {
    series$block
  }
  if (length > T) {
    abort_sample("Blocks of {format(length)} periods are longer than the series of {T}.")
  }
  index <- stationary_index(T, series$reps, length)
  list(
    vcov = sum_of("geometric", length), df = T - 1,
    reference = list(kind = "resampled", t = abs(core_result(cpp_resampled_t(rows, index, length, thread_count())))),
    phrase = paste0(
      "stationary bootstrap of the premia over time, blocks of ", format(length, digits = 3), " periods on average",
      if (identical(series$block, "auto")) " (Politis-White)", closed
    )
  )
}

# T x reps positions, 0-based: a block goes on with probability 1 - 1/length, around the end.
stationary_index <- function(T, reps, length) {
  fresh <- matrix(stats::runif(T * reps) < 1 / length, T)
  fresh[1L, ] <- TRUE
  start <- matrix(sample.int(T, T * reps, replace = TRUE) - 1L, T)
  first <- row(fresh)
  first[!fresh] <- 0L
  first <- matrix(apply(first, 2L, cummax), T)
  at <- start[cbind(as.vector(first), as.vector(col(fresh)))] + as.vector(row(fresh) - first)
  matrix(as.integer(at %% T), T)
}
