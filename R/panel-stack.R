#' Stack a wide matrix of returns into panel rows
#'
#' @param returns A T × N numeric matrix or data frame: one row a period, one column an asset,
#'   decimals a period. Missing values stay as rows with a missing return, so that they are
#'   counted and not lost.
#' @param factors A T × K matrix, data frame or vector of factors in the same row order, or
#'   `NULL`. Each value is repeated for every asset of its period.
#' @param period T period keys. By default the row names of `returns` where they are not just
#'   row numbers, else 1 to T.
#'
#' @return A data frame with N T rows, asset by asset, and the columns `asset` (column names
#'   of `returns`, or `A1`, `A2`, ...), `period`, `ret` and the factors' names (`factor1`, ...
#'   where they have none).
#'
#' @section Errors:
#' `lambdabar_error_input` when row counts differ, a column is not numeric, a name occurs
#' twice, or a factor is called `asset`, `period` or `ret`.
#'
#' @examples
#' wide <- matrix(rnorm(12, 0.01, 0.05), 4, 3, dimnames = list(NULL, c("oak", "elm", "fir")))
#' stack_returns(wide, factors = cbind(mkt = rowMeans(wide)), period = 202301:202304)
#' @export
stack_returns <- function(returns, factors = NULL, period = NULL) {
  wide <- numeric_matrix(returns, "returns")
  T <- nrow(wide)
  if (is.null(period)) {
    period <- row_keys(returns, T)
  }
  if (length(period) != T) {
    abort_input("{.arg period} has {length(period)} values, but {.arg returns} has {T} rows.")
  }
  assets <- colnames(wide)
  if (is.null(assets)) assets <- paste0("A", seq_len(ncol(wide)))
  refuse_repeats(assets, "returns")
  out <- list(
    asset = rep(assets, each = T),
    period = rep(period, times = ncol(wide)),
    ret = as.vector(wide)
  )
  if (!is.null(factors)) {
    f <- numeric_matrix(factors, "factors")
    if (nrow(f) != T) {
      abort_input("{.arg factors} has {nrow(f)} rows, but {.arg returns} has {T}.")
    }
    if (is.null(colnames(f))) colnames(f) <- paste0("factor", seq_len(ncol(f)))
    refuse_repeats(colnames(f), "factors")
    taken <- intersect(colnames(f), names(out))
    if (length(taken)) {
      abort_input("A factor may not be called {.val {taken}}: rename it first.", column = taken)
    }
    for (name in colnames(f)) out[[name]] <- rep(f[, name], times = ncol(wide))
  }
  vctrs::new_data_frame(out, n = length(out$ret))
}

numeric_matrix <- function(x, arg, call = rlang::caller_env()) {
  if (is.data.frame(x)) {
    usable <- vapply(x, is.numeric, NA)
    if (!all(usable)) {
      abort_input(
        c(
          "{.arg {arg}} must be numeric, but {cli::qty(sum(!usable))}column{?s} {.val {names(x)[!usable]}} {?is/are} not.",
          i = "Pass dates through {.arg period} and leave them out of {.arg {arg}}."
        ),
        column = names(x)[!usable], call = call
      )
    }
    x <- as.matrix(x)
  }
  if (is.numeric(x) && is.null(dim(x))) x <- matrix(x, ncol = 1L)
  if (!is.numeric(x) || length(dim(x)) != 2L || nrow(x) == 0L || ncol(x) == 0L) {
    abort_input(
      "{.arg {arg}} must be a numeric matrix or data frame with at least one row and column.",
      call = call
    )
  }
  storage.mode(x) <- "double"
  x
}

row_keys <- function(returns, T) {
  names <- rownames(returns)
  if (is.data.frame(returns) && .row_names_info(returns) < 0L) names <- NULL
  if (is.null(names)) seq_len(T) else names
}

refuse_repeats <- function(names, arg, call = rlang::caller_env()) {
  twice <- unique(names[duplicated(names)])
  if (length(twice)) {
    abort_input("{cli::qty(twice)}Column name{?s} {.val {twice}} {cli::qty(twice)}occur{?s/} twice in {.arg {arg}}.", column = twice, call = call)
  }
}
