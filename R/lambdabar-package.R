#' lambdabar: premia from panels of asset returns, with honest errors
#'
#' An estimate is a vector and its influence rows; an error structure is a way of summing
#' those rows. Every verb that estimates ([price_traits()], [price_factors()], [pooled()])
#' returns both, so that any fit can be restated under another error structure
#' ([restate()]) or compared over many of them ([error_ladder()]) without estimating again.
#'
#' The order of work is [asset_panel()], [panel_health()], then one of the three estimators,
#' then the errors and the joint tests ([alpha_test()], [term_test()]).
#'
#' @section Conventions:
#' * Returns are decimals a period (0.01 is one percent). Whether they are in excess of a
#'   riskless return is the user's choice and is never changed by the package.
#' * Letters in the documentation: N assets, T periods, K factors, P terms of a
#'   cross-sectional regression (constant included), n rows.
#' * Influence rows sum: the covariance is the sum of their products, with 1/T (or
#'   \eqn{(X'X)^{-1}}) already inside the rows.
#' * The small-sample factor T/(T-1) multiplies every error of averaged premia by default, so
#'   that zero lags equal independent periods to the last bit.
#' * p-values use t with T - 1 degrees of freedom for averages over T periods, and the
#'   smallest number of clusters less one for clustered errors.
#' * Nothing is dropped silently: [sample_used()] counts each row and period that did not
#'   enter, with its reason.
#' * Results do not depend on the number of threads, to the bit:
#'   `options(lambdabar.threads = 2)` is the default.
#'
#' @section Caution:
#' The results are statistical evidence about past data under stated assumptions. They are
#' not investment advice. Licences of the data are the user's to respect.
#'
#' @useDynLib lambdabar, .registration = TRUE
#' @importFrom Rcpp evalCpp
#' @importFrom generics tidy glance augment
#' @importFrom rlang .data
#' @importFrom stats coef vcov confint nobs residuals fitted
#' @keywords internal
"_PACKAGE"

#' @export
generics::tidy

#' @export
generics::glance

#' @export
generics::augment

thread_count <- function() {
  threads <- getOption("lambdabar.threads", 2L)
  if (!is.numeric(threads) || length(threads) != 1L || is.na(threads) || threads < 1) {
    abort_input("{.code options(lambdabar.threads = )} must be one whole number, 1 or more.")
  }
  as.integer(threads)
}
