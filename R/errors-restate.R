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
  } else if (inherits(fit, "lb_latent")) {
    "premia beside latent factors"
  } else if (is_two_pass(fit)) {
    "premia on estimated betas"
  } else if (!is.null(fit$asset_rows)) {
    "bias-corrected betas of the whole sample"
  } else if (is_moving(fit)) {
    "premia on betas that move"
  } else {
    "averaged premia on observed characteristics"
  }
}

is_two_pass <- function(fit) inherits(fit, "lb_premia") && fit$kind == "factors"

#' @exportS3Method
error_covariance.lb_err_iid <- function(errors, fit, call = rlang::caller_env()) {
  if (inherits(fit, "lb_pooled")) {
    return(list(
      vcov = fit$sigma2 * fit$bread, df = df.residual(fit),
      phrase = "independent rows of equal variance"
    ))
  }
  refuse_amplified(errors, fit, call)
  series_covariance(errors, fit$rows, fit$slot, fit)
}

# Sums over periods other than the plain one: for averaged premia alone.
sum_over_periods <- function(errors, fit, call = rlang::caller_env()) {
  if (inherits(fit, "lb_pooled")) {
    refuse_errors(errors, fit, "Rows of a panel are no time series: use {.code err_cluster(\"asset\", \"period\")} or {.fn err_common}.", call)
  }
  refuse_amplified(errors, fit, call)
  series_covariance(errors, fit$rows, fit$slot, fit)
}

#' @exportS3Method
error_covariance.lb_err_hac <- sum_over_periods
#' @exportS3Method
error_covariance.lb_err_cosine <- sum_over_periods
#' @exportS3Method
error_covariance.lb_err_groups <- sum_over_periods
#' @exportS3Method
error_covariance.lb_err_block <- sum_over_periods

#' @exportS3Method
error_covariance.lb_err_eiv <- function(errors, fit, call = rlang::caller_env()) {
  if (!is_two_pass(fit)) {
    refuse_errors(errors, fit, advice_without_rows(fit), call)
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
    refuse_errors(errors, fit, advice_without_rows(fit), call)
  }
  out <- first_pass_covariance(errors$series, fit$rows_estimated, fit)
  out$phrase <- paste0("both passes stacked as moments (Hansen 1982); ", out$phrase)
  out
}

# Rows with the first pass's error exist for one set of betas from the whole sample.
advice_without_rows <- function(fit) {
  if (!is.null(fit$asset_rows)) {
    "Use {.fn err_assets}."
  } else if (is_moving(fit)) {
    "When betas move, the variation of the premia over time holds the noise of each window: use {.fn err_hac}."
  } else {
    "Only {.fn price_factors} with one set of betas has the first pass's error in its rows; use {.fn err_hac} here."
  }
}

refuse_amplified <- function(errors, fit, call) {
  if (!is.null(fit$asset_rows)) {
    refuse_errors(errors, fit, "Its single periods are amplified, so their variation over time says nothing: use {.fn err_assets}.", call)
  }
}

#' @exportS3Method
error_covariance.lb_err_assets <- function(errors, fit, call = rlang::caller_env()) {
  if (is.null(fit$asset_rows)) {
    refuse_errors(errors, fit, "They are for bias-corrected betas of the whole sample; use {.fn err_hac} here.", call)
  }
  group <- asset_groups(errors$by, fit, call)
  summed <- rowsum(fit$asset_rows, group, na.rm = FALSE)
  G <- nrow(summed)
  if (G < 2L) {
    abort_sample("Errors over assets need two clusters of {.val {errors$by}} or more.", call = call)
  }
  vcov <- crossprod(summed) * (G / (G - 1))
  df <- G - 1
  if (!errors$realised) {
    sampling <- factor_sampling(errors, fit)
    at <- match(rownames(sampling), fit$terms)
    vcov[at, at] <- vcov[at, at] + sampling
    df <- min(df, length(fit$slot) - 1)
  }
  what <- if (is.null(errors$by)) "assets" else paste0("clusters of assets by ", errors$by)
  list(
    vcov = unname(vcov), df = df,
    phrase = paste0(
      "summed over ", format_count(G), " ", what, ", periods independent",
      if (errors$realised) "; for the premia realised in this sample" else "; plus the sampling error of the factors' means"
    )
  )
}

# The cluster of each asset, numbered; assets without rows in the estimate count as none.
asset_groups <- function(by, fit, call) {
  in_use <- rowSums(fit$asset_rows != 0) > 0
  if (is.null(by)) {
    return(ifelse(in_use, seq_along(in_use), which(in_use)[1L]))
  }
  check_column(fit$panel$data, by, "by", call)
  value <- fit$panel$data[[by]]
  first <- match(seq_along(in_use), fit$panel$asset + 1L)
  of_asset <- value[first]
  differs <- which(rows_used(fit) & (is.na(value) | value != of_asset[fit$panel$asset + 1L]))
  if (length(differs)) {
    row <- differs[1L]
    asset <- fit$panel$assets[fit$panel$asset[row] + 1L]
    period <- user_periods(fit$panel$periods)[fit$panel$period[row] + 1L]
    abort_input(
      c(
        "{.val {by}} must have one value for each asset.",
        x = "It is missing or changes for {format_key(asset)} in {format_key(period)} (row {row})."
      ),
      column = by, asset = asset, period = period, row = row, call = call
    )
  }
  group <- match(of_asset, unique(of_asset[in_use]))
  ifelse(in_use, group, group[in_use][1L])
}

# Long-run covariance of the factors' means over the periods in use.
factor_sampling <- function(errors, fit) {
  factors <- fit$factors[fit$panel$slot %in% fit$slot, , drop = FALSE]
  kept <- stats::complete.cases(factors)
  factors <- factors[kept, , drop = FALSE]
  T <- nrow(factors)
  rows <- sweep(factors, 2L, colMeans(factors)) / T
  S <- core_result(cpp_sum_series(rows, fit$slot[kept] - 1L, rep(1, ncol(rows)), series_options(errors$series)))$S
  if (errors$series$adjust) S <- S * (T / (T - 1))
  dimnames(S) <- rep(list(colnames(factors)), 2L)
  S
}

#' @exportS3Method
error_covariance.lb_err_hetero <- function(errors, fit, call = rlang::caller_env()) {
  if (!inherits(fit, "lb_pooled")) {
    refuse_errors(errors, fit, "Variation over periods already carries heteroskedasticity: use {.fn err_iid} or {.fn err_hac}.", call)
  }
  type <- as.integer(substr(errors$type, 3L, 3L))
  if (type >= 2L && !is.null(fit$effects)) {
    refuse_errors(errors, fit, "HC2 and HC3 need the leverage of the absorbed effects: use {.val HC1} or clusters.", call)
  }
  vcov <- row_result(
    cpp_heteroskedastic(estimation_design(fit), fit$panel$period, length(fit$panel$periods), fit$core, type, thread_count()),
    fit$panel, call = call
  )
  df <- df.residual(fit)
  if (type == 1L) vcov <- vcov * (fit$n_used - fit$rank) / df
  list(
    vcov = expand_aliased(vcov, fit$core$aliased), df = df,
    phrase = paste0("heteroskedasticity-consistent (", errors$type, ")")
  )
}

#' @exportS3Method
error_covariance.lb_err_misspec <- function(errors, fit, call = rlang::caller_env()) {
  if (!is_two_pass(fit)) {
    refuse_errors(errors, fit, advice_without_rows(fit), call)
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
  if (is_resummed(series)) {
    return(resummed_covariance(series, rows, slot))
  }
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
    adjust = series$adjust, phrase = series_phrase(series, sum),
    reference = if (identical(series$critical, "fixed_b") && sum$bandwidth > 0) {
      list(kind = "fixed_b", b = min(1, sum$bandwidth / nrow(rows)))
    }
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
  } else if (inherits(series, "lb_err_overlap")) {
    what <- paste0(what, ", full weight on ", count_of(series$lags, "lag"), " of overlap (Hansen-Hodrick 1980)")
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
