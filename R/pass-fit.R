# Methods that all fits share. A fit holds the estimate, its influence rows or what they are
# made from, the panel (its columns are shared, not copied), the error structure in use and
# the covariance that it gave.

#' Methods of the fits
#'
#' @param x,object From [price_traits()], [price_factors()] or [pooled()].
#' @param conf.level,level Confidence level of the intervals.
#' @param parm Names or positions of coefficients; all by default.
#' @param ... Not used.
#'
#' @return
#' * `tidy()`: a tibble with one row a term and the columns `term`, `estimate`, `std.error`,
#'   `statistic`, `p.value`, `conf.low`, `conf.high`. Premia are in units of the left side a
#'   period, for one unit of the characteristic or of beta. p-values and intervals use t with
#'   the degrees of freedom in `glance()`, or the distribution that the error structure names.
#' * `glance()`: one row: `nobs` (rows used), `n_terms`, `n_periods`, `n_assets`,
#'   `r.squared` (of averaged premia: the mean over periods), `df`, `errors`, `lags`,
#'   `bandwidth`, `adjust` (whether T/(T-1) was applied; `NA` for pooled fits) and `method`.
#' * `coef()`, `vcov()`, `confint()`, `nobs()`: as usual; terms name the entries.
#'
#' @examples
#' panel <- asset_panel(demo_market(firms = 60, months = 48), "firm", "month")
#' fit <- price_traits(panel, ret ~ size + value)
#' generics::tidy(fit)
#' generics::glance(fit)
#' confint(fit, "size")
#' @name fit_methods
NULL

#' @rdname fit_methods
#' @export
tidy.lb_fit <- function(x, conf.level = 0.95, ...) {
  check_level(conf.level)
  std_error <- sqrt(diag(x$covariance$vcov))
  statistic <- x$estimate / std_error
  interval <- reference_interval(x$covariance, x$estimate, std_error, conf.level)
  tibble::tibble(
    term = x$terms, estimate = unname(x$estimate), std.error = unname(std_error),
    statistic = unname(statistic), p.value = unname(reference_p(x$covariance, statistic)),
    conf.low = unname(interval$low), conf.high = unname(interval$high)
  )
}

check_level <- function(level, call = rlang::caller_env()) {
  if (!is.numeric(level) || length(level) != 1L || is.na(level) || level <= 0 || level >= 1) {
    abort_input("The confidence level must be one number between 0 and 1.", call = call)
  }
}

#' @rdname fit_methods
#' @export
glance.lb_fit <- function(x, ...) {
  covariance <- x$covariance
  usage <- fit_usage(x)
  or_missing <- function(value, missing) if (is.null(value)) missing else value
  tibble::tibble(
    nobs = nobs(x), n_terms = length(x$terms), n_periods = usage$n_periods, n_assets = usage$n_assets,
    r.squared = x$r_squared, df = min(covariance$df, na.rm = TRUE), errors = format(x$errors),
    lags = or_missing(covariance$lags, NA_real_),
    bandwidth = or_missing(covariance$bandwidth, NA_real_),
    adjust = or_missing(covariance$adjust, NA), method = fit_method(x)
  )
}

fit_method <- function(fit) {
  if (!is.null(fit$method)) fit$method else if (is.null(fit$weights)) "ols" else "wls"
}

#' @rdname fit_methods
#' @export
coef.lb_fit <- function(object, ...) object$estimate

#' @rdname fit_methods
#' @export
vcov.lb_fit <- function(object, ...) {
  vcov <- object$covariance$vcov
  dimnames(vcov) <- list(object$terms, object$terms)
  vcov
}

#' @rdname fit_methods
#' @export
confint.lb_fit <- function(object, parm = object$terms, level = 0.95, ...) {
  if (is.numeric(parm)) parm <- object$terms[parm]
  unknown <- setdiff(parm, object$terms)
  if (length(unknown)) {
    abort_input("There is no term {.val {unknown}}; the terms are {.val {object$terms}}.", term = unknown)
  }
  tidied <- tidy(object, conf.level = level)
  out <- as.matrix(tidied[c("conf.low", "conf.high")])
  tails <- 100 * c((1 - level) / 2, (1 + level) / 2)
  dimnames(out) <- list(object$terms, paste(format(tails, trim = TRUE, digits = 3), "%"))
  out[parm, , drop = FALSE]
}

#' @rdname fit_methods
#' @export
nobs.lb_fit <- function(object, ...) object$nobs

#' Rows with fitted values and residuals
#'
#' For [price_traits()], [pooled()] and betas that move: every row of the panel with what the
#' coefficients predict for it. For [price_factors()] with one set of betas: one row an asset
#' with its average pricing error.
#'
#' @param x,object The fit.
#' @param ... Not used.
#'
#' @return
#' * Characteristics and pooled fits: the panel's data as a tibble with `.fitted`, `.resid`
#'   (at the averaged or pooled coefficients; `NA` where a variable is missing) and `.used`
#'   (whether the row entered the estimate). `fitted()` and `residuals()` give the columns.
#' * Two-pass fits with betas that move or are corrected: the same, with `beta_<factor>`, the
#'   beta that was in use for the row (with instruments, the mean of the two halves').
#' * Two-pass fits: a tibble with one row an asset: `asset`, `n_obs`, `mean_return`,
#'   `.fitted` (what its betas, and its traits, predict), `alpha` (the average pricing error),
#'   `std.error`, `statistic`, `p.value` under the fit's error structure, and a column
#'   `beta_<factor>` for each factor. The attribute `vcov` has the N × N covariance of the
#'   pricing errors. Errors are `NA`, and the attribute absent, on ragged panels and with
#'   `traits`, where no covariance of pricing errors is available.
#'
#' @examples
#' panel <- asset_panel(demo_market(firms = 40, months = 48), "firm", "month")
#' fit <- pooled(panel, ret ~ size + value)
#' generics::augment(fit)
#' @name fit_rows
NULL

#' @rdname fit_rows
#' @export
augment.lb_fit <- function(x, ...) {
  out <- tibble::as_tibble(as.list(x$panel$data))
  out$.fitted <- fitted(x)
  out$.resid <- residuals(x)
  out$.used <- rows_used(x)
  if (is_moving(x)) out[paste0("beta_", colnames(x$betas))] <- as.data.frame(x$betas)
  out
}

#' @rdname fit_rows
#' @export
fitted.lb_fit <- function(object, ...) {
  if (!is.null(object$effects)) {
    return(cpp_response(object$design, object$panel$period, length(object$panel$periods)) - residuals(object))
  }
  design <- if (is_two_pass(object)) beta_design(object) else object$design
  cpp_linear_predictor(design, object$panel$period, length(object$panel$periods), object$estimate)
}

# Pooled residuals come from centred columns, which keeps their digits when a regressor's mean
# is far from zero.
#' @rdname fit_rows
#' @export
residuals.lb_fit <- function(object, ...) {
  if (inherits(object, "lb_pooled")) {
    return(cpp_pooled_residuals(estimation_design(object), object$panel$period, length(object$panel$periods), object$core))
  }
  cpp_response(object$design, object$panel$period, length(object$panel$periods)) - fitted(object)
}

# Complete rows of estimated periods.
rows_used <- function(fit) {
  complete <- is.finite(residuals(fit))
  if (!is.null(fit$design$weight)) complete <- complete & is_positive(fit$design$weight[[1L]]$x)
  if (inherits(fit, "lb_premia")) {
    complete <- complete & (fit$sections$status %in% c("estimated", "pooled"))[fit$panel$period + 1L]
  }
  complete
}

is_positive <- function(x) is.finite(x) & x > 0

#' The series of premia, period by period
#'
#' @param fit From [price_traits()] or [price_factors()].
#' @return A tibble with T P rows: `period`, `term`, `estimate`, `std.error` (of that period's
#'   least squares alone), `n_assets`, `r.squared`, `status`. Estimates are `NA` where the
#'   status is not `"estimated"`. With `correct = "bias"` also `reliability` (of the worst
#'   direction of the betas) and `kappa` (share of their error covariance that was subtracted;
#'   below 1 where the guard acted); with `"instruments"` also `strength` (smallest canonical
#'   correlation of the two halves' betas).
#' @section Errors: `lambdabar_error_unsupported` for a pooled fit and for bias-corrected betas of
#'   the whole sample, which have no such series.
#' @examples
#' panel <- asset_panel(demo_market(firms = 60, months = 24), "firm", "month")
#' period_premia(price_traits(panel, ret ~ size + value))
#' @export
period_premia <- function(fit) {
  check_fit(fit)
  if (!inherits(fit, "lb_premia")) {
    abort_unsupported("A pooled regression has no series of premia; {.fn price_traits} has.")
  }
  if (!is.null(fit$asset_rows)) {
    abort_unsupported(c(
      "Bias-corrected betas of the whole sample have no series of premia: single periods would be amplified.",
      i = "Use a moving window, such as {.code window_rolling(60)}."
    ))
  }
  s <- fit$sections
  T <- length(s$status)
  P <- length(fit$terms)
  out <- tibble::tibble(
    period = rep(user_periods(fit$panel$periods), each = P), term = rep(fit$terms, times = T),
    estimate = as.vector(s$coef), std.error = as.vector(s$std_error),
    n_assets = rep(s$n_used, each = P), r.squared = rep(s$r_squared, each = P),
    status = rep(s$status, each = P)
  )
  if (!is.null(s$kappa)) {
    out$reliability <- rep(pmax(0, 1 - 1 / s$smallest_root), each = P)
    out$kappa <- rep(s$kappa, each = P)
  }
  if (!is.null(s$strength)) out$strength <- rep(s$strength, each = P)
  out
}

#' What was used, what was dropped, and why
#'
#' @param fit From [price_traits()], [price_factors()] or [pooled()].
#' @return A tibble with one row a period: `period`, `n_rows` (rows in the panel), `n_used`
#'   (complete rows in the estimate), `status` and `reason`: rows left out by the variable
#'   that was missing or not finite (the first one, if several), then why the period itself
#'   did not enter. For a pooled fit `status` is `"pooled"` where rows entered and
#'   `"empty"` elsewhere.
#' @examples
#' panel <- asset_panel(demo_market(firms = 60, months = 24), "firm", "month")
#' sample_used(price_traits(panel, ret ~ size + value))
#' @export
sample_used <- function(fit) {
  check_fit(fit)
  usage <- fit_usage(fit)
  tibble::tibble(
    period = user_periods(fit$panel$periods), n_rows = usage$n_rows,
    n_used = ifelse(usage$status %in% c("estimated", "pooled"), usage$n_used, 0),
    status = usage$status,
    reason = vapply(seq_along(usage$status), function(t) reason_of(fit, usage, t), "")
  )
}

# Rows and assets in the estimate, counted when someone asks: a pass over the columns.
fit_usage <- function(fit) {
  T <- length(fit$panel$periods)
  status <- fit$sections$status
  counts <- cpp_usage(
    fit$design, fit$panel$period, T, fit$panel$asset, length(fit$panel$assets),
    if (is.null(status)) rep(TRUE, T) else status %in% c("estimated", "pooled")
  )
  counts$status <- if (is.null(status)) ifelse(counts$n_used > 0, "pooled", "empty") else status
  if (is_two_pass(fit)) counts <- two_pass_usage(fit, counts)
  if (!is.null(fit$effects)) counts <- absorbed_usage(fit, counts)
  counts$n_periods <- sum(counts$status %in% c("estimated", "pooled"))
  counts
}

reason_of <- function(fit, usage, t) {
  term <- fit$terms[fit$sections$culprit[t]]
  period <- switch(usage$status[t],
    too_few_assets = paste(count_of(usage$n_used[t], "complete row"), "are too few"),
    no_variation = paste(term, "does not vary in the period"),
    rank_deficient = paste(term, "is a combination of earlier terms in the period"),
    missing_factor = "a factor is missing in the period",
    weak_instruments = paste0("instruments are too weak (strength ", format(fit$sections$strength[t], digits = 2), ")"),
    empty = "no complete row"
  )
  paste(c(missing_phrases(fit$design$variables, usage$missing[, t]), period), collapse = "; ")
}

# "ret missing in 3, size missing in 2", by variable.
missing_phrases <- function(variables, counts) {
  total <- tapply(counts, factor(variables, unique(variables)), sum)
  total <- total[total > 0]
  if (!length(total)) {
    return(NULL)
  }
  paste0(names(total), " missing in ", format_count(total), collapse = ", ")
}

#' The influence rows behind the errors
#'
#' @param fit From [price_traits()] or [price_factors()].
#' @return A matrix with one row a period (an asset, for bias-corrected betas of the whole
#'   sample) and one column a term. Rows sum to zero; under
#'   independent periods and without small-sample factor the covariance is the sum of their
#'   outer products. With [err_eiv()] in its robust form, [err_moments()] and [err_misspec()]
#'   the rows carry the betas' own error (and that of a wrong model); for all other structures they are \eqn{\omega_t (b_t - \bar b)}{w_t (b_t - b)}.
#' @section Errors: `lambdabar_error_unsupported` for a pooled fit, whose rows are not kept.
#' @examples
#' panel <- asset_panel(demo_market(firms = 60, months = 24), "firm", "month")
#' fit <- price_traits(panel, ret ~ size + value, errors = err_iid(adjust = FALSE))
#' all.equal(crossprod(influence_rows(fit)), vcov(fit))
#' @export
influence_rows <- function(fit) {
  check_fit(fit)
  if (!inherits(fit, "lb_premia")) {
    abort_unsupported("A pooled fit does not keep its {nobs(fit)} influence rows.")
  }
  errors <- fit$errors
  if (!is.null(fit$asset_rows)) {
    return(`dimnames<-`(fit$asset_rows, list(format_key(fit$panel$assets), fit$terms)))
  }
  if (inherits(errors, "lb_err_misspec")) {
    rows <- fit$rows_misspecified
  } else if (inherits(errors, "lb_err_moments") || inherits(errors, "lb_err_eiv") && errors$form == "robust") {
    rows <- fit$rows_estimated
  } else {
    rows <- fit$rows
  }
  slots <- if (identical(rows, fit$rows)) fit$slot else fit$slot_estimated
  rownames(rows) <- format_key(fit$panel$slot_labels[slots])
  rows
}
