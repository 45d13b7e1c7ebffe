#' Are the betas strong enough to identify the premia?
#'
#' Premia are identified only when the betas (with a free constant in the second pass: their
#' differences between assets) have full column rank. A factor that has nothing to do with the
#' returns, or betas that are the same for all assets, break that; the usual t-statistics then
#' reject far too often.
#'
#' @param fit From [price_factors()] with betas of the full sample, on a complete panel without
#'   traits.
#' @param rank Hypothesised ranks, below the number K of factors; by default K - 1, so that a
#'   rejection says that all premia are identified.
#' @param kind One or more of
#'   * `"cragg_donald"`: for homoskedastic, serially uncorrelated errors (Cragg and Donald 1997);
#'   * `"bartlett"`: its likelihood-ratio form with Bartlett's factor, which holds its size with
#'     many assets;
#'   * `"kleibergen_paap"`: for heteroskedastic errors, and autocorrelated ones by `series`
#'     (Kleibergen and Paap 2006). It rejects too often unless T is large against its degrees of
#'     freedom: use `reps`.
#' @param series `err_iid()` or `err_hac()`: the sum over periods of `"kleibergen_paap"`.
#' @param reps Draws of a wild bootstrap that imposes the rank, with one sign for each period
#'   from R's random numbers; 0 for none. Its p-value takes the place of the chi-square one.
#'
#' @return A tibble of class `lb_test` with a row for each rank and kind: `test`, `statistic`,
#'   `num.df` ((n - rank)(K - rank), n the number of assets less one with a constant), `den.df`
#'   (`Inf`), `p.value`, `rank`, `note`.
#'
#' @section Errors:
#' `lambdabar_error_unsupported` for other fits; `lambdabar_error_input` for a rank that is not
#' 0 to K - 1; `lambdabar_error_sample` for too few assets or periods. A statistic that the sample
#' cannot carry is `NA` with its reason in `note`.
#'
#' @references Cragg and Donald (1997), Journal of Econometrics 76, 223-250. Kleibergen and Paap
#' (2006), Journal of Econometrics 133, 97-126.
#'
#' @seealso [premium_set()] for what can be said about a premium whatever the answer.
#'
#' @examples
#' set.seed(1)
#' f <- cbind(mkt = rnorm(240, 0.006, 0.045), useless = rnorm(240))
#' returns <- f[, "mkt"] %o% seq(0.6, 1.4, length.out = 10) + rnorm(2400, 0, 0.02)
#' panel <- asset_panel(stack_returns(returns, f), "asset", "period")
#' rank_test(price_factors(panel, ret ~ mkt + useless))
#' @export
rank_test <- function(fit, rank = NULL, kind = c("cragg_donald", "kleibergen_paap"),
                      series = err_iid(), reps = 0) {
  check_series(series)
  check_complete_fit(fit, "Rank tests")
  known <- c("cragg_donald", "bartlett", "kleibergen_paap")
  if (!is.character(kind) || !length(kind) || length(setdiff(kind, known))) {
    abort_input("{.arg kind} must be some of {.val {known}}.")
  }
  check_whole(reps, "reps", 0, 1e6)
  K <- ncol(fit$first$beta)
  if (is.null(rank)) rank <- K - 1
  if (!is.numeric(rank) || !length(rank) || anyNA(rank) || any(rank < 0 | rank >= K | rank != floor(rank))) {
    abort_input("{.arg rank} must be whole numbers from 0 to {K - 1}, one less than the number of factors.")
  }
  T <- length(fit$kept)
  signs <- matrix(sample(c(-1, 1), T * reps, replace = TRUE), T, reps)
  cases <- expand.grid(kind = kind, rank = rank, stringsAsFactors = FALSE)
  rows <- Map(function(kind, rank) rank_row(fit, kind, rank, series, signs), cases$kind, cases$rank)
  pick <- function(field, type) unname(vapply(rows, `[[`, type, field))
  p <- pick("p.value", 1)
  new_test(
    test = cases$kind, statistic = pick("statistic", 1), num.df = pick("df", 1), den.df = Inf,
    p.value = p, rank = as.numeric(cases$rank), note = pick("note", ""),
    title = paste0("Rank of the betas, ", count_of(length(fit$alpha), "asset"), ", ", count_of(T, period_noun(fit$panel)), ", ", count_of(K, "factor")),
    subtitle = if ("kleibergen_paap" %in% kind) paste0("Sum over periods: ", format(series)),
    reading = rank_reading(p[cases$rank == K - 1], fit)
  )
}

rank_row <- function(fit, kind, rank, series, signs, call = rlang::caller_env(2)) {
  found <- two_pass_result(
    cpp_rank_test(fit$input, as.integer(rank), kind, series_options(series), fit$slot_estimated - 1L, signs),
    fit$panel, colnames(fit$first$beta), call
  )
  T <- nrow(signs)
  booted <- is.finite(found$p_bootstrap)
  found$p.value <- if (booted) found$p_bootstrap else stats::pchisq(found$statistic, found$df, lower.tail = FALSE)
  found$note <- paste(c(
    paste("rank", rank),
    if (found$refusal == 2L) "too few periods for its degrees of freedom",
    if (found$refusal > 2L) "the covariance is singular",
    if (booted) paste(count_of(ncol(signs), "wild draw")),
    if (kind == "kleibergen_paap" && !booted && found$refusal == 0L && T < 30 * found$df) {
      "rejects too often at this length: use reps"
    }
  ), collapse = ", ")
  found
}

rank_reading <- function(p, fit) {
  p <- p[!is.na(p)]
  if (!length(p)) {
    return(NULL)
  }
  differ <- if (fit$intercept) "differences between the betas" else "betas"
  if (all(p < 0.05)) {
    return(paste0("The ", differ, " identify all premia: a smaller rank is rejected at the 5 % level."))
  }
  paste0(
    if (any(p < 0.05)) "The tests disagree whether" else "It is not rejected at the 5 % level that",
    " a factor, or a combination of factors, is useless: t-statistics of the premia may mean nothing. See premium_set()."
  )
}

# A line for print(): can a useless factor be ruled out? Silent where the sample cannot say.
weak_factor_line <- function(fit) {
  if (!is_two_pass(fit) || !fit$balanced) {
    return(NULL)
  }
  K <- ncol(fit$first$beta)
  found <- cpp_rank_test(
    fit$input, K - 1L, "bartlett", series_options(err_iid()), fit$slot_estimated - 1L, matrix(0, length(fit$kept), 0L)
  )
  if (inherits(found, "lb_core_error")) {
    return(NULL)
  }
  p <- stats::pchisq(found$statistic, found$df, lower.tail = FALSE)
  if (is.na(p) || p < 0.05) {
    return(NULL)
  }
  label_line("Weak", paste0(
    "a useless ", if (K > 1L) "factor (or combination) is" else "factor is", " not ruled out (rank test p = ", format_p(p),
    "): errors and t may mean nothing; see rank_test(), premium_set()"
  ))
}
