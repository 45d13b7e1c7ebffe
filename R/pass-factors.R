#' Premia on factor exposures: betas first, then one cross-section a period
#'
#' Estimates each asset's betas by a time-series regression on the factors, then regresses the
#' returns of each period on these betas and averages the slopes over the periods (Fama and
#' MacBeth 1973, with full-sample betas as in Black, Jensen and Scholes 1972).
#'
#' @param panel From [asset_panel()]. Factors are columns that have one value inside each
#'   period, as [stack_returns()] makes them.
#' @param formula Two-sided: returns on factors, such as `ret ~ mkt + smb` or
#'   `I(ret - rf) ~ mkt`. The first pass always has a constant.
#' @param exposure Which dates a beta sees: [window_full()], or a window that moves, such as
#'   [window_rolling()]; or the result of [exposures()], on this panel or on one of days, with
#'   its leads and lags or shrinkage.
#' @param method Weights of the second pass:
#'   * `"ols"`: none;
#'   * `"wls"`: one over each asset's residual variance;
#'   * `"gls"`: the inverse covariance of the returns, which gives the same premia as that of
#'     the residuals and also allows a factor among the assets. Complete panels with more
#'     periods than assets only.
#' @param intercept Whether the second pass has a constant (the return that a zero-beta asset
#'   earns beyond what `ret` is in excess of). Without it the constant is held at zero.
#' @param traits One-sided formula of characteristics that stand beside the betas in the
#'   second pass, such as `~ size + value`, or `NULL`. Methods `"ols"` and `"wls"`.
#' @param min_obs Fewest returns that an asset needs for its betas, at least K + 2 (the
#'   default). Assets with fewer are left out and counted.
#' @param min_assets Fewest assets that a period needs.
#' @param correct What is done about the error of the betas themselves, which attenuates
#'   premia with individual assets:
#'   * `"none"`;
#'   * `"bias"`: each cross-section less the sum of the betas' estimated error covariances
#'     (Litzenberger and Ramaswamy 1979). Where that leaves a matrix that is not safely
#'     positive definite, only a share is subtracted, so that a tenth of the worst
#'     direction's spread remains; the periods concerned are counted in the printout. With
#'     `window_full()` one regression over all periods takes the place of the average (single
#'     periods would be amplified), with errors by [err_assets()];
#'   * `"instruments"`: betas from alternate periods (alternate months of daily data) are
#'     instruments for those of the others (Jegadeesh and others 2019). Each half needs half of
#'     the window's `min_obs`. A period whose instruments are weaker than
#'     \eqn{2/\sqrt{n}}{2/sqrt(n)}, in the smallest canonical correlation, is trimmed and
#'     counted; slopes play no part in that.
#' @param beta_lag How many periods before the one that is priced a moving beta must be known:
#'   1 (default), so that returns of t or later never touch the betas used at t. 0 is a
#'   look-ahead and is printed as such.
#' @param errors An [error structure][error_structures] for premia. The default corrects for
#'   the estimation of the betas in the closed form of Shanken (1992); where that form does
#'   not exist (ragged panels, `traits`) and `errors` is not given, the robust rows
#'   `err_eiv("robust")` are used and a message says so.
#'
#' @return An object of class `lb_premia`; see [price_traits()] for its methods. `augment()`
#'   gives the assets with betas and average pricing errors; [alpha_test()] tests the latter
#'   jointly.
#'
#' @section Ragged panels:
#' Each asset's betas come from its own periods, each cross-section uses the assets present in
#' it. The rows that carry the betas' error are derived for this case (each asset's own means
#' and factor moments); they assume that absence is unrelated to returns. A period in which a
#' factor is missing is left out for all assets and counted.
#'
#' @section What the errors do not cover:
#' No error structure removes the attenuation that estimated betas cause; `correct` does. It
#' shrinks as the sample grows longer, not as assets are added: small for portfolios over long
#' samples, large for single stocks over short ones.
#' Full-sample betas use data from after each period; they describe, they do not predict.
#'
#' With betas that move, errors come from the variation of the premia over time
#' ([err_hac()] by default, since windows overlap): they hold the noise that the betas' error
#' adds to each period, but not the part that overlapping windows have in common, which is of
#' the order of one over the number of assets.
#'
#' @section Errors:
#' * `lambdabar_error_input`: a factor has two values inside one period (fields `column`,
#'   `asset`, `period`); formula or arguments.
#' * `lambdabar_error_no_variation`: a factor is constant over time.
#' * `lambdabar_error_rank`: factors, or betas, are collinear (betas that are all equal are
#'   collinear with the constant).
#' * `lambdabar_error_sample`: fewer assets than premia; too few periods for GLS.
#' * `lambdabar_error_unsupported`: GLS on a ragged panel or with `traits`; Shanken's closed
#'   form there.
#'
#' @references Black, Jensen and Scholes (1972), in Jensen (ed.), Studies in the Theory of
#' Capital Markets. Fama and MacBeth (1973), Journal of Political Economy 81, 607-636. Shanken
#' (1992), Review of Financial Studies 5, 1-33. Jagannathan and Wang (1998), Journal of Finance
#' 53, 1285-1309.
#'
#' @examples
#' set.seed(1)
#' f <- cbind(mkt = rnorm(120, 0.006, 0.045), smb = rnorm(120, 0.002, 0.03))
#' betas <- cbind(seq(0.6, 1.4, length.out = 10), rep(c(-0.2, 0.8), 5))
#' returns <- f %*% t(betas) + rnorm(1200, 0, 0.02)
#' panel <- asset_panel(stack_returns(returns, f), "asset", "period")
#' fit <- price_factors(panel, ret ~ mkt + smb)
#' fit
#' generics::augment(fit)
#' alpha_test(fit)
#'
#' # Individual firms: betas of the 36 months before, corrected for their error
#' firms <- asset_panel(demo_market(firms = 80, months = 84), "firm", "month")
#' price_factors(firms, ret ~ mkt, exposure = window_rolling(36, min_obs = 24), correct = "bias")
#' @export
price_factors <- function(panel, formula, exposure = window_full(), method = "ols",
                          intercept = TRUE, traits = NULL, min_obs = NULL, min_assets = NULL,
                          correct = "none", beta_lag = 1, errors = err_eiv()) {
  check_panel(panel)
  check_errors(errors)
  if (!inherits(exposure, "lb_exposures")) check_window(exposure, "exposure")
  correct <- check_choice(correct, c("none", "bias", "instruments"), "correct")
  check_whole(beta_lag, "beta_lag", 0, 1e6)
  method <- check_choice(method, c("ols", "wls", "gls"), "method")
  check_flag(intercept, "intercept")
  if (!is.null(min_obs)) check_whole(min_obs, "min_obs", 1, 1e9)
  if (!is.null(min_assets)) check_whole(min_assets, "min_assets", 1, 1e9)
  moves <- inherits(exposure, "lb_exposures") || exposure$kind != "full" || correct != "none"
  if (moves) {
    if (!is.null(min_obs)) {
      abort_input("{.arg min_obs} belongs to the window here, as in {.code window_rolling(60, min_obs = 24)}.")
    }
    fit <- price_moving(panel, formula, exposure, method, intercept, traits, min_assets, correct, beta_lag)
    fit$call <- match.call()
    return(restate(fit, if (missing(errors)) moving_errors(fit) else errors))
  }

  design <- factor_design(panel, formula)
  factors <- factor_values(panel, design)
  traits_design <- trait_design(panel, formula, traits)
  kept <- which(rowSums(is.na(factors)) == 0L)
  if (!length(kept)) {
    abort_sample("No period has a value of every factor.")
  }
  terms <- c(if (intercept) "(Intercept)", colnames(factors), traits_design$terms)
  refuse_repeats(terms, "the second pass")
  input <- list(
    returns = widen_column(panel, design$y)[kept, , drop = FALSE],
    factors = unname(factors[kept, , drop = FALSE]),
    traits = lapply(traits_design$x, function(column) widen_column(panel, column)[kept, , drop = FALSE]),
    options = list(
      weighting = method, intercept = intercept,
      min_obs = if (is.null(min_obs)) 0 else min_obs,
      min_assets = if (is.null(min_assets)) 0 else min_assets, threads = thread_count()
    )
  )
  core <- two_pass_result(cpp_two_pass(input), panel, terms)
  fit <- build_two_pass(core, input, kept, terms, panel, design, traits_design)
  fit$call <- match.call()
  fit$method <- method
  fit$intercept <- intercept
  fit$formula <- formula
  fit$exposure_phrase <- paste0("the full sample (", count_of(length(kept), period_noun(panel)), ")")
  warn_lost_periods(fit)
  if (missing(errors) && !fit$balanced) {
    errors <- err_eiv("robust")
    cli::cli_inform(
      "The panel {if (length(traits_design$terms)) 'has traits beside the betas' else 'is ragged'}: errors use {.code err_eiv(\"robust\")}, since Shanken's closed form does not exist here.",
      class = "lambdabar_message_errors"
    )
  }
  restate(fit, errors)
}

factor_design <- function(panel, formula, call = rlang::caller_env()) {
  design <- make_design(panel, formula, call = call)
  if (!design$intercept) {
    abort_input(c(
      "The first pass always has a constant: take {.code 0 +} out of the formula.",
      i = "For a second pass without one use {.code intercept = FALSE}."
    ), call = call)
  }
  if (!length(design$x)) {
    abort_input("The formula names no factor.", call = call)
  }
  design
}

# T x K: the value of each factor in each period, NA where it is missing.
factor_values <- function(panel, design, call = rlang::caller_env()) {
  T <- length(panel$periods)
  names <- design$terms[-1L]
  values <- lapply(seq_along(names), function(k) {
    found <- cpp_period_values(design$x[[k]], panel$period, T)
    row <- found$conflict_row
    if (row > 0) {
      asset <- panel$assets[panel$asset[row] + 1L]
      period <- user_periods(panel$periods)[panel$period[row] + 1L]
      abort_input(
        c(
          "{.val {names[k]}} is no factor: it has more than one value inside {found$n_conflicts} of {T} periods.",
          x = "The first is {format_key(period)}, at {format_key(asset)} (row {row}).",
          i = "A characteristic belongs in {.arg traits}, or in {.fn price_traits}."
        ),
        column = names[k], asset = asset, period = period, row = row, call = call
      )
    }
    found$value
  })
  values <- do.call(cbind, values)
  values[!is.finite(values)] <- NA_real_
  colnames(values) <- names
  values
}

trait_design <- function(panel, formula, traits, call = rlang::caller_env()) {
  if (is.null(traits)) {
    return(list(x = list(), terms = character(), variables = NULL))
  }
  if (!inherits(traits, "formula") || length(traits) != 2L) {
    abort_input("{.arg traits} must be a one-sided formula such as {.code ~ size + value}.", call = call)
  }
  both <- stats::as.formula(call("~", formula[[2L]], traits[[2L]]), environment(traits))
  design <- make_design(panel, both, call = call)
  design$terms <- setdiff(design$terms, "(Intercept)")
  design
}

widen_column <- function(panel, column) {
  cpp_widen(column, panel$asset, panel$period, length(panel$assets), length(panel$periods))
}

two_pass_result <- function(result, panel, terms, call = rlang::caller_env()) {
  if (!inherits(result, "lb_core_error")) {
    return(result)
  }
  facts <- result$facts
  factors <- setdiff(terms, "(Intercept)")
  explain <- list(
    constant_factor = if (!is.null(facts$factor)) paste0("The factor is {.val ", factors[facts$factor], "}."),
    no_variation = if (!is.null(facts$term)) paste0("The term is {.val ", terms[facts$term], "}."),
    rank = if (!is.null(facts$term)) {
      paste0("The term at fault is {.val ", terms[facts$term], "}.")
    } else if (!is.null(facts$factor)) {
      paste0("The factor at fault is {.val ", factors[facts$factor], "}.")
    },
    zero_residual = "Leave that asset out, or use {.code method = \"gls\"}, which allows a factor among the assets.",
    unsupported = "Use {.code method = \"ols\"} or {.val wls} on a ragged panel or with {.arg traits}.",
    too_few = "Use fewer assets or factors, or more periods."
  )
  if (!is.null(facts$asset)) {
    result$facts$asset <- as.character(format_key(panel$assets[facts$asset]))
    result$message <- paste0(sub("\\.$", "", result$message), " (", result$facts$asset, ").")
  }
  core_result(result, call, explain)
}

build_two_pass <- function(core, input, kept, terms, panel, design, traits_design) {
  T <- length(panel$periods)
  P <- length(terms)
  spread <- function(values, empty) {
    out <- if (is.matrix(values)) matrix(empty, P, T) else rep(empty, T)
    if (is.matrix(values)) out[, kept] <- values else out[kept] <- values
    out
  }
  sections <- list(
    coef = spread(t(core$period_premia), NA_real_), std_error = spread(t(core$period_se), NA_real_),
    r_squared = spread(core$r_squared, NA_real_), n_used = spread(core$n_assets, 0),
    status = spread(core$status, "missing_factor"), culprit = spread(core$culprit, NA_integer_),
    from_rows = rep(FALSE, T)
  )
  used <- which(sections$status == "estimated")
  if (length(used) < 2L) {
    abort_sample("An average needs two estimated periods or more; here {length(used)} could be estimated.", call = rlang::caller_env())
  }
  rows_of <- function(rows) `colnames<-`(rows, terms)
  assets <- format_key(panel$assets)
  first <- core$first
  dimnames(first$beta) <- dimnames(first$beta_se) <- list(assets, terms_of_factors(terms, ncol(first$beta)))
  fit <- new_premia(
    kind = "factors", terms = terms,
    averaged = list(estimate = core$premia, rows = core$rows_series, small_sample = rep(length(used) / (length(used) - 1), P)),
    sections = sections, used = used, panel = panel,
    design = list(
      y = design$y, x = c(design$x, traits_design$x), weight = NULL, intercept = FALSE,
      variables = c(design$variables, traits_design$variables[-1L])
    ),
    traits_design = traits_design, input = input, kept = kept, first = first, balanced = core$balanced,
    rows_estimated = rows_of(core$rows_estimated), rows_misspecified = rows_of(core$rows_misspecified),
    slot_estimated = panel$slot[kept], slot = panel$slot[used],
    mean_return = core$mean_return, fitted_return = core$fitted, alpha = core$alpha,
    correction = core$c, condition = core$condition,
    nobs = sum(sections$n_used[used]), r_squared = mean(sections$r_squared[used])
  )
  fit$n_left_out <- core$n_left_out
  fit
}

terms_of_factors <- function(terms, K) setdiff(terms, "(Intercept)")[seq_len(K)]

two_pass_usage <- function(fit, counts) {
  counts$n_used <- fit$sections$n_used
  counts$n_assets <- sum(is.finite(fit$alpha))
  if (fit$n_left_out > 0) {
    counts$left_out <- paste0(count_of(fit$n_left_out, "asset"), " without betas (fewer than ", fit$first$min_obs, " returns, or none)")
  }
  counts
}

shanken_covariance <- function(errors, fit, call) {
  if (!fit$balanced) {
    abort_unsupported(
      c(
        "Shanken's closed form needs a complete panel without traits.",
        i = "Use {.code err_eiv(\"robust\")}."
      ),
      call = call
    )
  }
  vcov <- two_pass_result(
    cpp_shanken(fit$input, series_options(errors$series), fit$slot_estimated - 1L), fit$panel, fit$terms, call
  )
  T <- length(fit$kept)
  adjust <- errors$series$adjust
  list(
    vcov = if (adjust) vcov * (T / (T - 1)) else vcov, df = T - 1, adjust = adjust,
    phrase = paste0(
      "with the estimation error of the betas (Shanken 1992, 1 + c = ",
      format(1 + fit$correction, digits = 4), ")",
      if (inherits(errors$series, "lb_err_hac")) paste0(", factors' long-run covariance by ", format(errors$series)),
      if (adjust) ", times T/(T-1)"
    )
  )
}

#' @rdname fit_rows
#' @export
augment.lb_premia <- function(x, ...) {
  if (!is_two_pass(x)) {
    return(NextMethod())
  }
  covariance <- alpha_covariance(x)
  std_error <- if (is.null(covariance)) rep(NA_real_, length(x$alpha)) else unname(sqrt(diag(covariance)))
  statistic <- ifelse(is.na(std_error) | std_error > 0, x$alpha / std_error, NA_real_)
  betas <- x$first$beta
  colnames(betas) <- paste0("beta_", colnames(betas))
  out <- tibble::tibble(
    asset = x$panel$assets, n_obs = x$first$n_obs, mean_return = x$mean_return, .fitted = x$fitted_return,
    alpha = x$alpha, std.error = std_error, statistic = statistic,
    p.value = 2 * stats::pt(-abs(statistic), x$covariance$df)
  )
  out[colnames(betas)] <- as.data.frame(betas)
  attr(out, "vcov") <- covariance
  out
}

# N x N covariance of the averaged pricing errors under the fit's error structure.
alpha_covariance <- function(fit) {
  if (!fit$balanced) {
    return(NULL)
  }
  errors <- fit$errors
  series <- if (is.null(errors$series)) errors else errors$series
  if (is_resummed(series)) {
    return(NULL)
  }
  kind <- switch(class(errors)[1L],
    lb_err_iid = "series", lb_err_hac = "series", lb_err_overlap = "series", lb_err_moments = "estimated", lb_err_misspec = "misspecified",
    lb_err_eiv = if (errors$form == "shanken") "shanken" else "estimated"
  )
  covariance <- two_pass_result(
    cpp_alpha_covariance(fit$input, kind, series_options(series), fit$slot_estimated - 1L), fit$panel, fit$terms
  )
  T <- length(fit$kept)
  if (series$adjust) covariance <- covariance * (T / (T - 1))
  dimnames(covariance) <- rep(list(format_key(fit$panel$assets)), 2L)
  covariance
}
