#' Which dates a beta sees
#'
#' @param n Length of the window in calendar periods: gaps count. 60 months hold 60 months of
#'   the calendar, whether or not the asset traded in each.
#' @param min_obs Fewest returns that a beta needs; never fewer than two more than the
#'   regressors. An asset with fewer has no beta at that date, with the reason. The default
#'   of a rolling window is 40 % of its length (24 of 60).
#' @param half_life Periods after which a return counts half. Age is counted on the calendar,
#'   so a gap ages the returns before it. Standard errors allow for the weights (errors
#'   homoskedastic and serially uncorrelated); `min_obs` counts returns, whatever their weight.
#'
#' @details
#' * `window_full()`: all periods of the sample. Such betas describe the sample; they use data
#'   from after the periods that they price.
#' * `window_rolling()`: the last `n` calendar periods.
#' * `window_expanding()`: everything so far.
#' * `window_decay()`: everything so far, with weights \eqn{2^{-age/half\_life}}{2^(-age/half_life)}.
#'
#' @return An object of class `lb_window`, for [exposures()] and [price_factors()].
#' @section Errors: `lambdabar_error_input` for values that an argument cannot take.
#' @examples
#' window_rolling(60, min_obs = 24)
#' window_decay(half_life = 36)
#' @name windows
NULL

#' @rdname windows
#' @export
window_full <- function() new_window("full")

#' @rdname windows
#' @export
window_rolling <- function(n, min_obs = ceiling(0.4 * n)) {
  check_whole(n, "n", 3, 1e6)
  check_whole(min_obs, "min_obs", 1, 1e6)
  if (min_obs > n) {
    abort_input("{.arg min_obs} ({min_obs}) is more than the {n} periods of the window.")
  }
  new_window("rolling", length = n, min_obs = min_obs)
}

#' @rdname windows
#' @export
window_expanding <- function(min_obs = 24) {
  check_whole(min_obs, "min_obs", 1, 1e6)
  new_window("expanding", min_obs = min_obs)
}

#' @rdname windows
#' @export
window_decay <- function(half_life, min_obs = 24) {
  if (!is.numeric(half_life) || length(half_life) != 1L || !is.finite(half_life) || half_life <= 0) {
    abort_input("{.arg half_life} must be one positive number of periods.")
  }
  check_whole(min_obs, "min_obs", 1, 1e6)
  new_window("decay", half_life = half_life, min_obs = min_obs)
}

new_window <- function(kind, length = 0, half_life = 1, min_obs = 0) {
  structure(list(kind = kind, length = length, half_life = half_life, min_obs = min_obs), class = "lb_window")
}

check_window <- function(window, arg, call = rlang::caller_env()) {
  if (!inherits(window, "lb_window")) {
    abort_input("{.arg {arg}} must be a window such as {.code window_rolling(60)}, not {.obj_type_friendly {window}}.", call = call)
  }
  invisible(window)
}

#' @export
format.lb_window <- function(x, noun = "period", ...) {
  at_least <- if (x$min_obs > 0) paste0(", ", count_of(x$min_obs, "return"), " at least")
  paste0(switch(x$kind,
    full = paste0("all ", noun, "s of the sample"),
    rolling = paste0("the last ", count_of(x$length, noun)),
    expanding = paste0("all ", noun, "s so far"),
    decay = paste0("all ", noun, "s so far with half-life ", format(x$half_life), " ", noun, "s")
  ), at_least)
}

#' @export
print.lb_window <- function(x, ...) {
  cat_lines(paste0("Betas from ", format(x)))
  invisible(x)
}
