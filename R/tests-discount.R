#' A factor model as a stochastic discount factor
#'
#' The same model seen from the other side: the discount factor that is linear in the factors
#' and comes closest to pricing the assets, by the Hansen-Jagannathan distance. Its coefficients
#' say whether a factor helps to price the assets given the others; premia say what exposure to
#' it earns.
#'
#' @param fit From [price_factors()] with betas of the full sample, on a complete panel without
#'   traits. Its returns and factors are used; its method and constant play no part.
#' @param returns `"excess"`: m = 1 - b'(f - mean f), weighted by the inverse covariance of
#'   returns. `"gross"`: m = b'(1, f), weighted by their inverse second moment; the left side must
#'   then be gross returns, such as `I(1 + ret) ~ mkt`.
#' @param series `err_iid()` or `err_hac()`: the sum over periods.
#'
#' @details
#' With excess returns b = Vf^-1 lambda, where lambda are the GLS premia without a constant and Vf
#' the factors' covariance (divisor T), exactly. A premium can be zero while the coefficient is
#' not, and the reverse, when factors are correlated: b_j = 0 means that factor j does not lower
#' the distance given the other factors, not that its premium is zero.
#'
#' `std.error` holds for a model that is wrong too (Gospodinov, Kan and Robotti 2014);
#' `usual.std.error` only for one that prices all assets, and rejects far too often for a factor
#' that has nothing to do with the returns. p-values are of the normal distribution.
#'
#' @return A tibble of class `lb_discount` with one row a coefficient: `term`, `estimate`,
#'   `std.error`, `statistic`, `p.value`, `usual.std.error`, and `premium` (lambda; `NA` for gross
#'   returns). `glance()` gives the `distance`, its `std.error` (for a distance that is not zero),
#'   and the test that it is zero: `statistic` (T times its square) and `p.value` from a weighted
#'   sum of `num.df` chi-squares.
#'
#' @section Errors:
#' `lambdabar_error_unsupported` for other fits, `lambdabar_error_input` for gross returns that
#' are none, `lambdabar_error_sample` when there are not more periods than assets or fewer assets
#' than coefficients, `lambdabar_error_rank` when covariances with the factors are collinear.
#'
#' @references Hansen and Jagannathan (1997), Journal of Finance 52, 557-590. Jagannathan and Wang
#' (1996), Journal of Finance 51, 3-53. Hansen, Heaton and Luttmer (1995), Review of Financial
#' Studies 8, 237-274. Kan and Robotti (2008), Journal of Empirical Finance 15, 816-838.
#' Gospodinov, Kan and Robotti (2014), Review of Financial Studies 27, 2139-2170.
#'
#' @examples
#' set.seed(1)
#' f <- cbind(mkt = rnorm(240, 0.006, 0.045), smb = rnorm(240, 0.003, 0.03))
#' betas <- cbind(seq(0.6, 1.4, length.out = 12), rep(c(-0.2, 0.8, 0.3), 4))
#' returns <- f %*% t(betas) + rnorm(240 * 12, 0, 0.02)
#' panel <- asset_panel(stack_returns(returns, f), "asset", "period")
#' m <- discount_factor(price_factors(panel, ret ~ mkt + smb))
#' m
#' generics::glance(m)
#' @export
discount_factor <- function(fit, returns = "excess", series = err_iid()) {
  check_series(series)
  returns <- check_choice(returns, c("excess", "gross"), "returns")
  check_complete_fit(fit, "Discount factors")
  gross <- returns == "gross"
  if (gross) check_gross(fit, rlang::current_env())
  factors <- colnames(fit$first$beta)
  result <- two_pass_result(
    cpp_discount_factor(fit$input, gross, series_options(series), fit$slot_estimated - 1L), fit$panel, factors
  )
  error_of <- function(rows) {
    sqrt(diag(core_result(cpp_sum_series(rows, fit$slot_estimated - 1L, rep(1, ncol(rows)), series_options(series)))$S))
  }
  b <- as.numeric(result$b)
  std_error <- error_of(result$rows)
  out <- tibble::tibble(
    term = c(if (gross) "(Intercept)", factors), estimate = b, std.error = std_error,
    statistic = b / std_error, p.value = 2 * stats::pnorm(-abs(b / std_error)),
    usual.std.error = error_of(result$usual_rows),
    premium = if (gross) NA_real_ else as.numeric(result$premium)
  )
  right <- result$right
  attr(out, "distance") <- tibble::tibble(
    distance = sqrt(result$distance2), std.error = distance_error(result, fit, series),
    statistic = if (length(right$weights)) right$statistic else NA_real_,
    num.df = length(right$weights), p.value = right$p, returns = returns
  )
  attr(out, "title") <- paste0("Discount factor, ", returns, " returns: ", deparse1(fit$formula))
  attr(out, "series") <- series
  structure(out, class = c("lb_discount", class(out)))
}

#' @export
print.lb_discount <- function(x, ...) {
  distance <- attr(x, "distance")
  if (is.null(distance)) {
    return(NextMethod())
  }
  figure <- function(value) formatC(value, digits = 4, format = "g")
  table <- data.frame(
    term = x$term, b = figure(x$estimate), error = figure(x$std.error), t = formatC(x$statistic, digits = 2, format = "f"),
    p = format_p(x$p.value), `usual error` = figure(x$usual.std.error), check.names = FALSE
  )
  if (distance$returns == "excess") table$premium <- figure(x$premium)
  cat_lines(attr(x, "title"), "")
  print_columns(table, right = names(table)[-1L])
  cat_lines(
    "",
    label_line("Errors", paste0("valid for a wrong model, ", format(attr(x, "series")), "; the usual ones only for a right one")),
    label_line("Distance", paste0(
      figure(distance$distance), " (error ", figure(distance$std.error), "); zero: p = ",
      format_p(distance$p.value), ", weighted chi-squares"
    )),
    strwrap("A coefficient of zero means that the factor does not lower the distance given the others, not that its premium is zero.", line_width())
  )
  invisible(x)
}

#' @export
tidy.lb_discount <- function(x, ...) {
  class(x) <- setdiff(class(x), "lb_discount")
  for (name in c("distance", "title", "series")) attr(x, name) <- NULL
  x
}

#' @export
glance.lb_discount <- function(x, ...) attr(x, "distance")
