#' The same estimate under other errors
#'
#' @param fit From [price_traits()], [price_factors()] or [pooled()].
#' @param errors An [error structure][error_structures].
#'
#' @return The fit with its covariance, and all that prints from it, under `errors`. The
#'   numbers are those that the estimator itself would have given with these errors, to the
#'   bit.
#'
#' @section Errors:
#' `lambdabar_error_unsupported` when the structure does not apply to this kind of estimate.
#'
#' @examples
#' panel <- asset_panel(demo_market(firms = 60, months = 60), "firm", "month")
#' fit <- price_traits(panel, ret ~ size + value)
#' cbind(
#'   hac = sqrt(diag(vcov(fit))),
#'   independent = sqrt(diag(vcov(restate(fit, err_iid()))))
#' )
#' @export
restate <- function(fit, errors) {
  check_fit(fit)
  check_errors(errors)
  fit$errors <- errors
  fit$covariance <- error_covariance(errors, fit)
  fit
}

check_fit <- function(fit, call = rlang::caller_env()) {
  if (!inherits(fit, "lb_fit")) {
    abort_input(
      "{.arg fit} must come from {.fn price_traits}, {.fn price_factors} or {.fn pooled}, not {.obj_type_friendly {fit}}.",
      call = call
    )
  }
  invisible(fit)
}

# error_covariance(errors, fit) gives list(vcov, df, phrase, ...): one method a structure.
# A new structure is a constructor, a method here and a line in format.lb_errors().
error_covariance <- function(errors, fit, call = rlang::caller_env()) UseMethod("error_covariance")

refuse_errors <- function(errors, fit, advice, call) {
  kind <- fit_kind(fit)
  abort_unsupported(
    c("Errors of the kind {.val {format(errors)}} do not apply to {kind}.", i = advice),
    call = call
  )
}

fit_kind <- function(fit) {
  if (inherits(fit, "lb_pooled")) {
    "a pooled regression"
  } else if (is_two_pass(fit)) {
    "premia on estimated betas"
  } else {
    "averaged premia on observed characteristics"
  }
}

is_two_pass <- function(fit) inherits(fit, "lb_premia") && fit$kind == "factors"

#' @exportS3Method
error_covariance.lb_err_iid <- function(errors, fit, call = rlang::caller_env()) {
  if (inherits(fit, "lb_pooled")) {
    return(list(
      vcov = fit$sigma2 * fit$bread, df = fit$n_used - fit$rank,
      phrase = "independent rows of equal variance"
    ))
  }
  series_covariance(errors, fit$rows, fit$slot, fit)
}

#' @exportS3Method
error_covariance.lb_err_hac <- function(errors, fit, call = rlang::caller_env()) {
  if (inherits(fit, "lb_pooled")) {
    refuse_errors(errors, fit, "Rows of a panel are no time series: use {.code err_cluster(\"asset\", \"period\")}.", call)
  }
  series_covariance(errors, fit$rows, fit$slot, fit)
}

#' @exportS3Method
error_covariance.lb_err_eiv <- function(errors, fit, call = rlang::caller_env()) {
  if (!is_two_pass(fit)) {
    refuse_errors(errors, fit, "Only {.fn price_factors} estimates betas; use {.fn err_hac} here.", call)
  }
  if (errors$form == "robust") {
    out <- first_pass_covariance(errors$series, fit$rows_estimated, fit)
    out$phrase <- paste0("with the estimation error of the betas (Jagannathan-Wang 1998); ", out$phrase)
    return(out)
  }
  shanken_covariance(errors, fit, call)
}

#' @exportS3Method
error_covariance.lb_err_moments <- function(errors, fit, call = rlang::caller_env()) {
  if (!is_two_pass(fit)) {
    refuse_errors(errors, fit, "Only {.fn price_factors} has two passes to stack; use {.fn err_hac} here.", call)
  }
  out <- first_pass_covariance(errors$series, fit$rows_estimated, fit)
  out$phrase <- paste0("both passes stacked as moments (Hansen 1982); ", out$phrase)
  out
}

#' @exportS3Method
error_covariance.lb_err_hetero <- function(errors, fit, call = rlang::caller_env()) {
  if (!inherits(fit, "lb_pooled")) {
    refuse_errors(errors, fit, "Variation over periods already carries heteroskedasticity: use {.fn err_iid} or {.fn err_hac}.", call)
  }
  type <- as.integer(substr(errors$type, 3L, 3L))
  vcov <- row_result(
    cpp_heteroskedastic(fit$design, fit$panel$period, length(fit$panel$periods), fit$core, type, thread_count()),
    fit$panel, call = call
  )
  list(
    vcov = expand_aliased(vcov, fit$core$aliased), df = fit$n_used - fit$rank,
    phrase = paste0("heteroskedasticity-consistent (", errors$type, ")")
  )
}

#' @exportS3Method
error_covariance.lb_err_misspec <- function(errors, fit, call = rlang::caller_env()) {
  if (!is_two_pass(fit)) {
    refuse_errors(errors, fit, "Only {.fn price_factors} prices assets by a model; use {.fn err_hac} here.", call)
  }
  out <- first_pass_covariance(errors$series, fit$rows_misspecified, fit)
  out$phrase <- paste0("valid under a wrong model too (Kan, Robotti and Shanken 2013); ", out$phrase)
  out
}

# Rows that carry the first pass's error run over all periods with factors.
first_pass_covariance <- function(series, rows, fit) {
  T <- nrow(rows)
  series_covariance(series, rows, fit$slot_estimated, fit, rep(T / (T - 1), ncol(rows)))
}

# Averaged premia: rows over periods, summed by a kernel.
series_covariance <- function(series, rows, slot, fit, small_sample = fit$small_sample) {
  sum <- core_result(cpp_sum_series(rows, slot - 1L, fit$bandwidth_weights, series_options(series)))
  vcov <- sum$S
  if (series$adjust) {
    factor <- sqrt(small_sample)
    vcov <- vcov * outer(factor, factor)
  }
  if (is.finite(sum$min_eigen_relative) && sum$min_eigen_relative < -1e-12) {
    warn_class("covariance", c(
      "The covariance under {.val {format(series)}} is not positive semidefinite (smallest eigenvalue {signif(sum$min_eigen_relative, 2)} of the largest).",
      i = "The truncated kernel can do that; the Bartlett kernel cannot."
    ), min_eigen_relative = sum$min_eigen_relative)
  }
  vcov <- blank_nonpositive(vcov, fit$terms)
  list(
    vcov = vcov, df = length(fit$slot) - 1, lags = sum$lags, bandwidth = sum$bandwidth,
    adjust = series$adjust, phrase = series_phrase(series, sum)
  )
}

# Settings of sum_series() in the core, for err_iid() and err_hac() alike.
series_options <- function(series) {
  if (inherits(series, "lb_err_iid")) {
    return(list(kernel = "bartlett", rule = "fixed", lags = 0, prewhiten = FALSE))
  }
  fixed <- is.numeric(series$lags)
  list(
    kernel = series$kernel, rule = if (fixed) "fixed" else series$lags,
    lags = if (fixed) series$lags else 0, prewhiten = series$prewhiten
  )
}

series_phrase <- function(series, sum) {
  what <- "variation of the premia over time"
  if (inherits(series, "lb_err_iid")) {
    what <- paste0(what, ", periods independent")
  } else {
    size <- if (series$kernel == "qs" || sum$lags != floor(sum$lags)) {
      paste0("bandwidth ", format(sum$bandwidth, digits = 3))
    } else {
      count_of(sum$lags, "lag")
    }
    what <- paste0(
      what, ", ", kernel_name(series$kernel), " kernel, ", size,
      if (!is.numeric(series$lags)) paste0(" (", lag_rule_name(series$lags), ")"),
      if (series$prewhiten) ", prewhitened"
    )
  }
  paste0(
    what, if (series$adjust) ", times T/(T-1)",
    if (sum$capped) "; lags capped by the length of the series",
    if (sum$closed_gaps) "; gaps in the calendar closed for bandwidth or prewhitening"
  )
}

# A variance that is not positive gets NA: a tiny error would be a lie.
blank_nonpositive <- function(vcov, terms, bad = diag(vcov) < 0) {
  if (any(bad)) {
    warn_class("covariance", c(
      "The variance of {.val {terms[bad]}} is not positive under these errors; its error is {.code NA}.",
      i = "Use another error structure for {.val {terms[bad]}}."
    ), term = terms[bad])
    vcov[bad, ] <- NA_real_
    vcov[, bad] <- NA_real_
  }
  vcov
}
