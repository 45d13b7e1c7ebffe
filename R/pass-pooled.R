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
  core <- row_result(
    cpp_pooled(design, panel$period, length(panel$periods), thread_count()), panel, weights, call
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
