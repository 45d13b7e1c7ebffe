#' One regression on the whole panel, the rival of averaged premia
#'
#' Ordinary or weighted least squares on all complete rows, with errors that allow for
#' dependence inside clusters.
#'
#' @inheritParams price_traits
#' @param formula Two-sided; see [price_traits()]. Terms may vary over time only, here.
#' @param weights Name of a numeric column of analytic weights, or `NULL`. Only their ratios
#'   matter; rows of weight zero do not enter and do not count.
#' @param errors An [error structure][error_structures] for pooled fits: [err_cluster()],
#'   [err_hetero()] or [err_iid()]. `"asset"` and `"period"` mean the panel's keys.
#'
#' @return An object of class `lb_pooled`; see [fit_methods] and [fit_rows]. A term that is a
#'   combination of earlier ones has an estimate of `NA`, and a warning names it.
#'
#' @section Numbers:
#' One pass gives centred cross-products; a design close to singular goes back to the rows and
#' a QR with column pivoting. Errors take a second pass, which recomputes residuals and adds up
#' scores inside clusters; no matrix of scores is kept. Statistics use t with the smallest
#' number of clusters less one for clustered errors, and n - P degrees of freedom otherwise.
#'
#' @section Errors:
#' * `lambdabar_error_input`: formula, weights, cluster columns; a missing cluster id.
#' * `lambdabar_error_sample`: no more complete rows than terms; fewer than two clusters.
#' * `lambdabar_error_rank`: no term could be estimated.
#' * `lambdabar_error_unsupported`: the error structure is for another kind of estimate.
#'
#' @references Petersen (2009), Review of Financial Studies 22, 435-480.
#'
#' @examples
#' panel <- asset_panel(demo_market(firms = 80, months = 60), "firm", "month")
#' pooled(panel, ret ~ size + value + turnover)
#' pooled(panel, ret ~ size + value + industry, errors = err_cluster("industry", "period"))
#' @export
pooled <- function(panel, formula, weights = NULL, errors = err_cluster("asset", "period")) {
  check_panel(panel)
  check_errors(errors)
  design <- make_design(panel, formula, weights)
  fit <- fit_pooled(panel, design, weights)
  fit$call <- match.call()
  if (any(fit$core$aliased)) {
    lost <- fit$terms[fit$core$aliased]
    warn_class("sample", c(
      "{.val {lost}} {?is a combination/are combinations} of earlier terms: estimated as {.code NA}.",
      i = "{cli::qty(lost)}Remove {?it/them} from the formula, or reorder the terms to keep {?it/them} instead."
    ), term = lost)
  }
  restate(fit, errors)
}

fit_pooled <- function(panel, design, weights = NULL, call = rlang::caller_env()) {
  core <- core_result(
    cpp_pooled(design, panel$period, length(panel$periods), thread_count()), call,
    list(
      input = "Weights must be zero or positive.",
      too_few_rows = "{.fn panel_health} shows which column is missing where."
    )
  )
  structure(
    list(
      kind = "pooled", terms = design$terms, estimate = stats::setNames(core$coef, design$terms),
      core = core, bread = expand_aliased(core$bread, core$aliased), sigma2 = core$sigma2,
      rank = core$rank, n_used = core$n_used, nobs = core$n_used, r_squared = core$r_squared,
      weights = weights, panel = panel, design = design, formula = design$formula
    ),
    class = c("lb_pooled", "lb_fit")
  )
}

# An r x r matrix of the kept terms as P x P, NA for the others.
expand_aliased <- function(kept, aliased) {
  if (!any(aliased)) {
    return(kept)
  }
  out <- matrix(NA_real_, length(aliased), length(aliased))
  out[!aliased, !aliased] <- kept
  out
}

#' @exportS3Method
error_covariance.lb_err_cluster <- function(errors, fit, call = rlang::caller_env()) {
  if (!inherits(fit, "lb_pooled")) {
    refuse_errors(errors, fit, "Fit the same formula with {.fn pooled}; {.fn error_ladder} shows both side by side.", call)
  }
  codes <- lapply(errors$ways, cluster_codes, panel = fit$panel, call = call)
  result <- cpp_clustered(
    fit$design, fit$panel$period, length(fit$panel$periods), fit$core,
    lapply(codes, `[[`, "code"), vapply(codes, `[[`, 1, "n"), errors$small, thread_count()
  )
  refuse_missing_cluster(result, errors, fit, call)
  result <- core_result(result, call)
  warn_cluster_trouble(result, errors, fit)
  vcov <- expand_aliased(result$vcov, fit$core$aliased)
  bad <- rep(FALSE, length(fit$terms))
  bad[!fit$core$aliased] <- result$not_positive
  list(
    vcov = blank_nonpositive(vcov, fit$terms, bad), df = min(result$n_groups) - 1,
    n_groups = stats::setNames(result$n_groups, errors$ways),
    phrase = paste0(
      "any correlation inside clusters of ",
      paste0(errors$ways, " (", format_count(result$n_groups), ")", collapse = " and of "),
      if (result$n_clipped > 0) "; repaired to be positive semidefinite"
    )
  )
}

cluster_codes <- function(way, panel, call) {
  key <- names(panel$key)[match(way, panel$key)]
  if (is.na(key) && !way %in% names(panel$data) && way %in% c("asset", "period")) key <- way
  if (!is.na(key)) {
    codes <- if (key == "asset") panel$asset else panel$period
    return(list(code = codes, n = length(if (key == "asset") panel$assets else panel$periods)))
  }
  check_column(panel$data, way, "err_cluster", call)
  value <- panel$data[[way]]
  if (is.logical(value)) value <- as.integer(value)
  encoded <- encode_key(value, way, "cluster", call)
  list(code = encoded$code, n = length(encoded$values))
}

refuse_missing_cluster <- function(result, errors, fit, call) {
  if (!inherits(result, "lb_core_error")) {
    return(invisible())
  }
  facts <- result$facts
  if (result$tag == "cluster_id") {
    way <- errors$ways[facts$dimension]
    row <- facts$row
    asset <- fit$panel$assets[fit$panel$asset[row] + 1L]
    period <- user_periods(fit$panel$periods)[fit$panel$period[row] + 1L]
    abort_input(
      c(
        "The cluster id {.val {way}} is missing in {facts$count} row{?s} that entered the estimate.",
        x = "The first is row {row}: {format_key(asset)} in {format_key(period)}.",
        i = "Fill the ids, or take those rows out of the panel before estimating."
      ),
      column = way, row = row, asset = asset, period = period, count = facts$count, call = call
    )
  }
  if (result$tag == "clusters") {
    way <- errors$ways[facts$dimension]
    abort_sample(
      c("All rows are in one cluster of {.val {way}}: there is no variation between clusters.", i = "Use another way."),
      column = way, call = call
    )
  }
}

warn_cluster_trouble <- function(result, errors, fit) {
  nested <- which(result$nested_in > 0)
  if (length(nested)) {
    inner <- errors$ways[nested]
    outer <- errors$ways[result$nested_in[nested]]
    warn_class("covariance", c(
      "Clusters {.val {inner}} lie inside clusters {.val {outer}}: the result is that of {.val {unique(outer)}} alone.",
      i = "Name only the coarser one."
    ), column = inner)
  }
  if (result$n_clipped > 0) {
    warn_class("covariance", c(
      "The clustered covariance was not positive semidefinite (smallest eigenvalue {signif(result$min_eigen_relative, 2)} of the largest); {result$n_clipped} negative eigenvalue{?s} set to zero.",
      i = "Few clusters in one way do that: look at one-way errors too."
    ), min_eigen_relative = result$min_eigen_relative)
  }
}
