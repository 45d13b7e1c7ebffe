#' Joint tests that all pricing errors are zero
#'
#' @param fit From [price_factors()] on a complete panel without `traits`.
#' @param kind One or more of
#'   * `"averaged"`: the averaged pricing errors, betas taken as known; chi-square with N - q
#'     degrees of freedom, q premia;
#'   * `"corrected"`: the same over 1 + c, for estimated betas (Shanken 1985, 1992);
#'   * `"f_approx"`: the corrected statistic in its F form, with N - q and T - K - N + q degrees
#'     of freedom (Shanken 1985), an approximation that holds its size in small samples;
#'   * `"grs"`: the intercepts of the first pass, exact F with N and T - N - K degrees of
#'     freedom under normal errors (Gibbons, Ross and Shanken 1989). It takes factors and
#'     returns as excess returns and the factors as traded: whether they are is the user's
#'     word;
#'   * `"moments"`: the averaged pricing errors with the rows of estimated betas, summed by
#'     `series`: the J statistic of both passes' moments at the two-pass estimates;
#'   * `"grs_chisq"`, `"grs_lr"`: the chi-square and likelihood-ratio forms of `"grs"`, which
#'     reject too often in samples of a few years;
#'   * `"grs_moments"`: the intercepts with heteroskedasticity- (and autocorrelation-)
#'     consistent covariance by `series`.
#' @param series `err_iid()` or `err_hac()`: the sum over periods in `"averaged"`, `"moments"`
#'   and `"grs_moments"`.
#'
#' @details All moments have divisor T, whatever `series` says of T/(T-1): small-sample
#'   corrections are F forms, not multipliers. The quadratic forms use an orthonormal
#'   complement of the betas, of known rank, in place of a generalised inverse.
#'
#' @return A tibble of class `lb_test` with one row a kind: `test`, `statistic`, `num.df`,
#'   `den.df` (`Inf` for chi-square), `p.value`, `note`. A test that the sample cannot carry
#'   has `NA` and its reason in `note`.
#'
#' @section Errors:
#' `lambdabar_error_unsupported` for other fits, and for two-pass fits on ragged panels or with
#' traits; `lambdabar_error_sample` when none of the tests asked for can be computed.
#'
#' @references Gibbons, Ross and Shanken (1989), Econometrica 57, 1121-1152. Shanken (1985),
#' Journal of Financial Economics 14, 327-348; (1992), Review of Financial Studies 5, 1-33.
#' Hansen (1982), Econometrica 50, 1029-1054.
#'
#' @examples
#' set.seed(1)
#' f <- cbind(mkt = rnorm(120, 0.006, 0.045))
#' returns <- f %*% seq(0.6, 1.4, length.out = 8) + rnorm(960, 0, 0.02)
#' panel <- asset_panel(stack_returns(returns, f), "asset", "period")
#' alpha_test(price_factors(panel, ret ~ mkt))
#' @export
alpha_test <- function(fit, kind = c("averaged", "corrected", "f_approx", "grs", "moments"),
                       series = err_iid()) {
  check_series(series)
  check_complete_fit(fit, "Joint tests of pricing errors", "For restrictions on premia use {.fn term_test}.")
  unknown <- setdiff(kind, alpha_kinds())
  if (!is.character(kind) || !length(kind) || length(unknown)) {
    abort_input("{.arg kind} must be some of {.val {alpha_kinds()}}.")
  }
  result <- two_pass_result(
    cpp_alpha_tests(fit$input, kind, series_options(series), fit$slot_estimated - 1L), fit$panel, fit$terms
  )
  if (all(is.na(result$statistic))) {
    notes <- vapply(seq_along(kind), function(i) paste0(kind[i], ": ", refusal_note(result, i)), "")
    abort_sample(c("None of the tests can be computed on this sample.", stats::setNames(notes, rep("x", length(notes)))))
  }
  chi <- is.na(result$df2)
  p <- ifelse(
    chi, stats::pchisq(result$statistic, result$df1, lower.tail = FALSE),
    stats::pf(result$statistic, result$df1, result$df2, lower.tail = FALSE)
  )
  new_test(
    test = kind, statistic = result$statistic, num.df = result$df1, den.df = ifelse(chi, Inf, result$df2),
    p.value = p, note = vapply(seq_along(kind), function(i) refusal_note(result, i), ""),
    title = paste0(
      "Are all pricing errors zero? ", count_of(length(fit$alpha), "asset"), ", ",
      count_of(length(fit$kept), period_noun(fit$panel))
    ),
    subtitle = if (any(kind %in% c("averaged", "moments", "grs_moments"))) paste0("Sum over periods: ", format(series)),
    reading = alpha_reading(kind, p)
  )
}

# For what needs all assets in all periods, with one set of betas: `what` (a plural) opens the
# sentence.
check_complete_fit <- function(fit, what, advice = NULL, call = rlang::caller_env()) {
  check_fit(fit, call)
  if (is_two_pass(fit) && fit$balanced) {
    return(invisible(fit))
  }
  reason <- if (is_two_pass(fit)) {
    paste0(
      "Here ", if (length(fit$traits_design$terms)) "traits stand beside the betas" else "some returns are missing",
      "; a subset of assets and periods without holes can be tested."
    )
  } else {
    advice
  }
  abort_unsupported(
    c(paste(what, "need a fit of {.fn price_factors} with betas of the full sample, on a complete panel without traits."), i = reason),
    call = call
  )
}

alpha_kinds <- function() {
  c("averaged", "corrected", "f_approx", "grs", "moments", "grs_chisq", "grs_lr", "grs_moments")
}

refusal_note <- function(result, i) {
  facts <- result$facts[[i]]
  switch(result$refusal[i],
    none = if (isTRUE(result$capped[i])) "lags capped by the length of the series" else "",
    just_identified = "as many premia as assets: there is no pricing error to test",
    too_few_periods = paste0(
      "too few periods: ", facts$n_periods, " for ", facts$n_assets, " assets and ", count_of(facts$n_factors, "factor")
    ),
    singular = "the covariance of the pricing errors is singular",
    not_positive = "the truncated kernel gave a covariance that is not positive: use the Bartlett kernel"
  )
}

# One sentence on what the small-sample form, or else the first test, says.
alpha_reading <- function(kind, p) {
  preferred <- match(c("f_approx", "grs", "moments", "corrected", kind[1L]), kind)
  preferred <- preferred[!is.na(preferred) & !is.na(p[preferred])]
  if (!length(preferred)) preferred <- which(!is.na(p))
  i <- preferred[1L]
  paste0(
    "By ", kind[i], ", zero pricing errors are ", if (p[i] < 0.05) "rejected" else "not rejected",
    " at the 5 % level (p = ", format_p(p[i]), "). Not rejecting is no proof that the model prices the assets."
  )
}
