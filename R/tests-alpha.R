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
#'     consistent covariance by `series`;
#'   * `"hj_excess"`, `"hj_gross"`: T times the squared Hansen-Jagannathan distance against its
#'     weighted sum of chi-squares (Jagannathan and Wang 1996), `num.df` the number of weights.
#'     The first takes returns as excess returns and has no constant, whatever the fit has; the
#'     second takes gross returns, such as `I(1 + ret) ~ mkt`. `note` has the distance and its
#'     standard error; see [discount_factor()];
#'   * `"efficient"`: the J statistic of betas, premia and factor means estimated together with
#'     the efficient weights (Hansen 1982). It needs more periods than the N (K + 1) + K moments.
#' @param series `err_iid()` or `err_hac()`: the sum over periods in `"averaged"`, `"moments"`,
#'   `"grs_moments"`, `"efficient"` and the distances.
#'
#' @details All moments have divisor T, whatever `series` says of T/(T-1): small-sample
#'   corrections are F forms, not multipliers. The quadratic forms use an orthonormal
#'   complement of the betas, of known rank, in place of a generalised inverse.
#'
#' @return A tibble of class `lb_test` with one row a kind: `test`, `statistic`, `num.df`,
#'   `den.df` (`Inf` for chi-square, `NA` for weighted ones), `p.value`, `note`. A test that the sample cannot carry
#'   has `NA` and its reason in `note`.
#'
#' @section Errors:
#' `lambdabar_error_unsupported` for other fits, and for two-pass fits on ragged panels or with
#' traits; `lambdabar_error_sample` when none of the tests asked for can be computed.
#'
#' @references Gibbons, Ross and Shanken (1989), Econometrica 57, 1121-1152. Shanken (1985),
#' Journal of Financial Economics 14, 327-348; (1992), Review of Financial Studies 5, 1-33.
#' Hansen (1982), Econometrica 50, 1029-1054. Hansen and Jagannathan (1997), Journal of Finance
#' 52, 557-590. Jagannathan and Wang (1996), Journal of Finance 51, 3-53. Kan and Robotti (2008),
#' Journal of Empirical Finance 15, 816-838.
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
  rows <- alpha_rows(fit, kind, series)
  if (all(is.na(rows$statistic))) {
    notes <- paste0(kind, ": ", rows$note)
    abort_sample(c("None of the tests can be computed on this sample.", stats::setNames(notes, rep("x", length(notes)))))
  }
  new_test(
    test = kind, statistic = rows$statistic, num.df = rows$num.df, den.df = rows$den.df,
    p.value = rows$p.value, note = rows$note,
    title = paste0(
      "Are all pricing errors zero? ", count_of(length(fit$alpha), "asset"), ", ",
      count_of(length(fit$kept), period_noun(fit$panel))
    ),
    subtitle = if (any(kind %in% c("averaged", "moments", "grs_moments", "efficient", "hj_excess", "hj_gross"))) paste0("Sum over periods: ", format(series)),
    reading = alpha_reading(kind, rows$p.value)
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

alpha_kinds <- function() c(quadratic_kinds(), "hj_excess", "hj_gross", "efficient")

# Those that the core computes together, from one estimate.
quadratic_kinds <- function() {
  c("averaged", "corrected", "f_approx", "grs", "moments", "grs_chisq", "grs_lr", "grs_moments")
}

alpha_rows <- function(fit, kind, series, call = rlang::caller_env()) {
  together <- intersect(kind, quadratic_kinds())
  rows <- list()
  if (length(together)) {
    result <- two_pass_result(
      cpp_alpha_tests(fit$input, together, series_options(series), fit$slot_estimated - 1L), fit$panel, fit$terms, call
    )
    chi <- is.na(result$df2)
    rows <- lapply(stats::setNames(seq_along(together), together), function(i) {
      x <- result$statistic[i]
      list(
        statistic = x, num.df = result$df1[i], den.df = if (chi[i]) Inf else result$df2[i],
        p.value = if (chi[i]) stats::pchisq(x, result$df1[i], lower.tail = FALSE) else stats::pf(x, result$df1[i], result$df2[i], lower.tail = FALSE),
        note = refusal_note(result, i)
      )
    })
  }
  for (name in setdiff(kind, together)) {
    rows[[name]] <- if (name == "efficient") efficient_row(fit, series, call) else distance_row(fit, name, series, call)
  }
  rows <- rows[kind]
  pick <- function(field, type) unname(vapply(rows, `[[`, type, field))
  list(
    statistic = pick("statistic", 1), num.df = pick("num.df", 1), den.df = pick("den.df", 1),
    p.value = pick("p.value", 1), note = pick("note", "")
  )
}

efficient_row <- function(fit, series, call) {
  result <- two_pass_result(
    cpp_efficient_moments(fit$input, series_options(series), fit$slot_estimated - 1L), fit$panel, fit$terms, call
  )
  df <- length(fit$alpha) - length(fit$terms)
  n_moments <- length(fit$alpha) * (ncol(fit$first$beta) + 1) + ncol(fit$first$beta)
  list(
    statistic = result$J, num.df = df, den.df = Inf, p.value = stats::pchisq(result$J, df, lower.tail = FALSE),
    note = switch(result$refusal + 1L,
      paste(count_of(n_moments, "moment"), "over", format_count(length(fit$kept)), "periods"),
      just_identified_note,
      paste0("too few periods: ", length(fit$kept), " for ", count_of(n_moments, "moment")),
      "the covariance of the moments is singular",
      "the covariance of the moments is not positive",
      "the estimate did not converge"
    )
  )
}

just_identified_note <- "as many premia as assets: there is no pricing error to test"

distance_row <- function(fit, kind, series, call) {
  empty <- list(statistic = NA_real_, num.df = NA_real_, den.df = NA_real_, p.value = NA_real_)
  gross <- kind == "hj_gross"
  if (gross) check_gross(fit, call)
  result <- cpp_discount_factor(fit$input, gross, series_options(series), fit$slot_estimated - 1L)
  if (inherits(result, "lb_core_error")) {
    return(c(empty, note = as_note(result$message)))
  }
  if (!length(result$right$weights)) {
    return(c(empty, note = "as many coefficients as assets: the distance is zero"))
  }
  list(
    statistic = result$right$statistic, num.df = length(result$right$weights), den.df = NA_real_,
    p.value = result$right$p,
    note = paste0(
      "distance ", formatC(sqrt(result$distance2), digits = 3, format = "f"), " (error ",
      formatC(distance_error(result, fit, series), digits = 3, format = "f"), "), weighted chi-squares"
    )
  )
}

# Standard error of the distance, for one that is not zero.
distance_error <- function(result, fit, series) {
  variance <- core_result(cpp_sum_series(
    cbind(result$distance_rows), fit$slot_estimated - 1L, 1, series_options(series)
  ))$S[1L]
  sqrt(variance) / (2 * sqrt(result$distance2))
}

check_gross <- function(fit, call) {
  middle <- stats::median(fit$mean_return)
  smallest <- min(fit$input$returns)
  if (smallest <= 0 || middle < 0.5 || middle > 2) {
    abort_input(c(
      "Gross returns are positive and about one; the left side goes down to {signif(smallest, 3)}, with means around {signif(middle, 3)}.",
      i = "Estimate with {.code I(1 + ret) ~ ...}, or {.code I(1 + ret / 100) ~ ...} for percent."
    ), call = call)
  }
}

refusal_note <- function(result, i) {
  facts <- result$facts[[i]]
  switch(result$refusal[i],
    none = if (isTRUE(result$capped[i])) "lags capped by the length of the series" else "",
    just_identified = just_identified_note,
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
