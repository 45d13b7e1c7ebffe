#' Do some assets add anything to a set of benchmarks?
#'
#' Tests that benchmark returns span the test assets: that nobody who holds the benchmarks on the
#' mean-variance frontier gains by adding the others (Huberman and Kandel 1987).
#'
#' @param panel From [asset_panel()], complete in the periods that have all benchmarks.
#' @param formula The test assets' returns on the benchmarks, such as `ret ~ bench1 + bench2`, where
#'   benchmarks are columns with one value a period. Returns are raw (or gross) returns: with excess
#'   returns only zero intercepts mean anything, and `alpha_test(kind = "grs")` tests them.
#' @param kind One or more of
#'   * `"joint"`: zero intercepts and betas that add up to one, exact F under normal errors;
#'   * `"step_down"`: two rows, `"intercepts"` and then `"betas"` (that they add up to one given zero
#'     intercepts), which are independent (Kan and Zhou 2012). The first concerns the tangency
#'     portfolio, the second the portfolio of least variance;
#'   * `"wald"`: a Wald test with rows summed by `series`, chi-square; allows for heteroskedasticity
#'     and autocorrelation, and rejects too often in small samples.
#' @param series `err_iid()` or `err_hac()`: the sum over periods in `"wald"`.
#'
#' @return A tibble of class `lb_test`: `test`, `statistic`, `num.df`, `den.df`, `p.value`, `note`.
#'
#' @section Errors:
#' `lambdabar_error_sample` when returns have holes, or with too few periods (T > K + N is needed);
#' `lambdabar_error_rank` for collinear benchmarks or test assets (a benchmark among them).
#'
#' @references Huberman and Kandel (1987), Journal of Finance 42, 873-888. Kan and Zhou (2012), Annals
#' of Economics and Finance 13, 139-187.
#'
#' @examples
#' set.seed(1)
#' bench <- matrix(rnorm(240, 0.006, 0.04), 120, dimnames = list(NULL, c("north", "south")))
#' returns <- bench %*% matrix(c(0.3, 0.7, 0.6, 0.4, 0.9, 0.2), 2) + rnorm(360, 0.001, 0.02)
#' spanning_test(asset_panel(stack_returns(returns, bench), "asset", "period"), ret ~ north + south)
#' @export
spanning_test <- function(panel, formula, kind = c("joint", "step_down", "wald"), series = err_iid()) {
  check_panel(panel)
  check_series(series)
  known <- c("joint", "step_down", "wald")
  if (!is.character(kind) || !length(kind) || length(setdiff(kind, known))) {
    abort_input("{.arg kind} must be some of {.val {known}}.")
  }
  data <- complete_returns(panel, factor_design(panel, formula), "Spanning tests")
  core <- two_pass_result(
    cpp_spanning(data$returns, data$factors, series_options(series), panel$slot[data$kept] - 1L), panel, colnames(data$factors)
  )
  N <- ncol(data$returns)
  T <- nrow(data$returns)
  left <- T - ncol(data$factors) - N
  rows <- vctrs::vec_rbind(!!!lapply(kind, function(name) {
    switch(name,
      joint = f_row("joint", core$joint, if (N == 1L) 2 else 2 * N, if (N == 1L) left else 2 * left, "intercepts zero, betas add up to one"),
      step_down = rbind(
        f_row("intercepts", core$first, N, left, "first step: intercepts zero"),
        f_row("betas", core$second, N, left + 1, "second step: betas add up to one, given the first")
      ),
      wald = data.frame(
        test = "wald", statistic = core$wald, num.df = 2 * N, den.df = Inf, p.value = stats::pchisq(core$wald, 2 * N, lower.tail = FALSE),
        note = c("periods by series", "", "too few periods", "the covariance is singular", "the covariance is not positive")[core$refusal + 1L]
      )
    )
  }))
  p <- rows$p.value[1L]
  new_test(!!!rows,
    title = paste0("Do ", paste(colnames(data$factors), collapse = ", "), " span ", count_of(N, "asset"), "? ", count_of(T, period_noun(panel))),
    subtitle = if ("wald" %in% kind) paste0("Sum over periods: ", format(series)),
    reading = if (!is.na(p)) {
      paste0("By ", rows$test[1L], ", spanning is ", if (p < 0.05) "rejected" else "not rejected", " at the 5 % level (p = ", trimws(format_p(p)), ").")
    }
  )
}

f_row <- function(test, statistic, df1, df2, note) {
  data.frame(
    test = test, statistic = statistic, num.df = df1, den.df = df2,
    p.value = stats::pf(statistic, df1, df2, lower.tail = FALSE), note = note
  )
}
