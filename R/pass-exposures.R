#' First pass: betas of every asset, over windows that move
#'
#' Regresses each asset's returns on the factors over the window that ends at each date, and
#' gives betas with their errors. The row of period t uses data up to and including t:
#' to price returns of t with it would be a look-ahead. [price_factors()] lags by itself.
#'
#' @param panel From [asset_panel()], n rows. Factors are columns with one value inside each
#'   period.
#' @param formula Two-sided: returns on factors, such as `ret ~ mkt + smb`. The regression
#'   always has a constant.
#' @param window Which dates a beta sees: [window_full()], [window_rolling()],
#'   [window_expanding()] or [window_decay()].
#' @param lead_lag Leads and lags of the factors that enter beside their present value, for
#'   assets that trade thinly or in other hours: one number for as many leads as lags, or
#'   `c(leads, lags)`. Beta is then a sum over one regression, its error that of the sum.
#'   With leads a row is complete only after the last lead: the window ending at t stops
#'   at t less the leads, and loses leads + lags rows in all.
#' @param lead_lag_form `"sum"` (Dimson 1979) or `"fowler_rorke"`, which weighs the slopes by
#'   the factors' autocorrelations in the window (Fowler and Rorke 1983; as many leads as
#'   lags). Too few leads and lags leave a bias in either; the second is then the worse one.
#' @param shrink Towards the mean beta of the assets at the same date:
#'   * `"none"`;
#'   * `"vasicek"`: with weight tau2 / (tau2 + se^2) on the asset's own beta (Vasicek 1973),
#'     tau2 the variance of betas across assets less the mean of their squared errors;
#'   * `"paule_mandel"`: tau2 by Paule and Mandel (1982), better when errors differ much;
#'   * `"raw"`: tau2 the variance across assets, noise included, which shrinks too little.
#'
#'   Each factor on its own. Errors become those of the posterior.
#' @param weights Name of a column of analytic weights for the rows (variance of the error
#'   proportional to one over the weight), or `NULL`.
#' @param every `NULL` for a beta at each row of the panel, or `"month"`, `"quarter"`, `"year"`:
#'   one at the last period of each, for assets with a row in it. Windows go on counting the
#'   panel's own periods, so 250 are 250 days of a daily panel.
#'
#' @return An object of class `lb_exposures`.
#'   * `tidy()`: one row a row of the panel (or asset and month, with `every`; or asset, with
#'     `window_full()`, whose period is the panel's last) and factor: `asset`, `period`, the
#'     column `every` names (yyyymm, yyyyq or yyyy), `term`, `estimate`, `std.error`, `n_obs`
#'     (returns in the window) and `reason`, `NA` or why there is no estimate.
#'   * `augment()`: one row an asset and period: `alpha`, `beta_<factor>`, `se_<factor>`,
#'     `resid.var` (unbiased), `r.squared`, `n_obs`, `reason`.
#'   * `vcov()`: an array K × K × rows, the covariance of the betas in the order of `augment()`.
#'   * `glance()`: one row on the whole.
#'
#' @section Assumptions:
#' Standard errors are classical: errors of an asset homoskedastic and serially uncorrelated
#' within the window. Absence is unrelated to returns.
#'
#' @section Numbers:
#' Windows are built from cross-products that are merged and never subtracted, each about a
#' return of its own window, so that neither a large mean nor an outlier that has left costs
#' digits, and cost does not grow with the window's length. A window that is close to singular is solved
#' from its rows by QR with column pivoting.
#'
#' @section Errors:
#' * `lambdabar_error_input`: formula or arguments; a factor with two values inside a period
#'   (fields `column`, `asset`, `period`); a window shorter than `min_obs`; a negative weight.
#' * `lambdabar_error_no_variation`: a factor is constant over time.
#' * `lambdabar_error_unsupported`: `"fowler_rorke"` with unequal leads and lags or decay;
#'   `vcov()` of shrunken betas.
#'
#' @references Dimson (1979), Journal of Financial Economics 7, 197-226. Fowler and Rorke
#' (1983), Journal of Financial Economics 12, 279-283. Paule and Mandel (1982), Journal of
#' Research of the National Bureau of Standards 87, 377-385. Vasicek (1973), Journal of Finance
#' 28, 1233-1239. Chan, Golub and LeVeque (1983), American Statistician 37, 242-247.
#'
#' @examples
#' panel <- asset_panel(demo_market(firms = 30, months = 72), "firm", "month")
#' betas <- exposures(panel, ret ~ mkt + smb, window = window_rolling(36, min_obs = 24))
#' betas
#' generics::tidy(betas)
#' exposures(panel, ret ~ mkt, window = window_expanding(24), lead_lag = c(0, 1), shrink = "vasicek")
#' @export
exposures <- function(panel, formula, window = window_full(), lead_lag = 0, lead_lag_form = "sum",
                      shrink = "none", weights = NULL, every = NULL) {
  check_panel(panel)
  check_window(window, "window")
  lead_lag <- check_lead_lag(lead_lag)
  lead_lag_form <- check_choice(lead_lag_form, c("sum", "fowler_rorke"), "lead_lag_form")
  shrink <- check_choice(shrink, c("none", "vasicek", "paule_mandel", "raw"), "shrink")
  if (!is.null(every)) check_choice(every, c("month", "quarter", "year"), "every")
  design <- factor_design(panel, formula)
  if (!is.null(weights)) design$weight <- list(weight_part(panel, weights, rlang::current_env()))
  first_pass <- new_first_pass(panel, design, window, lead_lag, lead_lag_form, shrink, weights)
  asked <- exposure_dates(panel, window, every)
  answer <- answer_exposures(
    first_pass, asked, c("beta", "std_error", "alpha", "resid_var", "r_squared")
  )
  structure(
    list(
      first_pass = first_pass, formula = formula, every = every, asked = asked, terms = first_pass$terms,
      answer = answer[setdiff(names(answer), "prior")], prior = answer$prior
    ),
    class = "lb_exposures"
  )
}

check_lead_lag <- function(lead_lag, call = rlang::caller_env()) {
  fine <- is.numeric(lead_lag) && length(lead_lag) %in% 1:2 && all(is.finite(lead_lag)) &&
    all(lead_lag >= 0 & lead_lag <= 50 & lead_lag == floor(lead_lag))
  if (!fine) {
    abort_input(
      "{.arg lead_lag} must be one whole number from 0 to 50, or two: {.code c(leads, lags)}.",
      call = call
    )
  }
  rep_len(as.integer(lead_lag), 2L)
}

# All that the core needs to answer for any asset at any date: what the returns and factors
# are and which window looks at them. price_factors() asks the same object at other dates.
new_first_pass <- function(panel, design, window, lead_lag = c(0L, 0L), lead_lag_form = "sum",
                           shrink = "none", weights = NULL, call = rlang::caller_env()) {
  by_period <- factor_values(panel, design, call)
  refuse_constant_factors(by_period, call)
  factors <- matrix(NA_real_, length(panel$slot_labels), ncol(by_period))
  factors[panel$slot, ] <- by_period
  list(
    panel = panel, y = design$y, weight = design$weight, weights = weights, factors = factors,
    terms = colnames(by_period), window = window, lead_lag = lead_lag, lead_lag_form = lead_lag_form, shrink = shrink,
    n_regressors = ncol(by_period) * (sum(lead_lag) + 1L)
  )
}

refuse_constant_factors <- function(factors, call) {
  if (!any(stats::complete.cases(factors))) {
    abort_sample("No period has a value of every factor.", call = call)
  }
  constant <- apply(factors, 2L, function(f) {
    f <- f[!is.na(f)]
    all(f == f[1L])
  })
  if (any(constant)) {
    stuck <- colnames(factors)[constant]
    abort_no_variation("{cli::qty(stuck)}The factor{?s} {.val {stuck}} {?does/do} not vary over time.", term = stuck, call = call)
  }
}

# Which assets and dates: codes from 0 and, for each date, the last slot that it may see.
exposure_dates <- function(panel, window, every = NULL) {
  N <- length(panel$assets)
  own <- seq_len(N) - 1L
  if (window$kind == "full") {
    return(list(
      asset = own, time = integer(N), data_asset = own, last_slot = max(panel$slot) - 1L,
      period = length(panel$periods)
    ))
  }
  if (is.null(every)) {
    return(list(
      asset = panel$asset, time = panel$period, data_asset = own, last_slot = panel$slot - 1L,
      period = seq_along(panel$periods)
    ))
  }
  unit <- calendar_units(panel, every)
  label <- unique(unit)
  time <- match(unit, label)[panel$period + 1L] - 1L
  rows <- vctrs::vec_unique_loc(panel$asset * as.numeric(length(label)) + time)
  rows <- rows[order(panel$asset[rows], time[rows])]
  last <- which(!duplicated(unit, fromLast = TRUE))
  list(
    asset = panel$asset[rows], time = time[rows], data_asset = own, last_slot = panel$slot[last] - 1L,
    period = last, unit = label
  )
}

# yyyymm, yyyyq or yyyy of each period.
calendar_units <- function(panel, every, call = rlang::caller_env()) {
  labels <- panel$periods
  if (!inherits(labels, c("Date", "POSIXct", "lb_month"))) {
    abort_input("{.arg every} needs a panel whose periods are dates or months.", call = call)
  }
  months <- calendar_position(labels, "month")
  year <- as.integer(months %/% 12)
  month <- as.integer(months %% 12)
  switch(every,
    month = year * 100L + month + 1L,
    quarter = year * 10L + month %/% 3L + 1L,
    year = year
  )
}

# `half`: 0 or 1 for the betas of one of two disjoint subsamples (alternate periods).
answer_exposures <- function(first_pass, asked, wanted, half = NULL, call = rlang::caller_env()) {
  window <- first_pass$window
  panel <- first_pass$panel
  min_obs <- if (is.null(half)) window$min_obs else ceiling(window$min_obs / 2)
  answer <- cpp_exposures(
    list(
      y = first_pass$y, weight = first_pass$weight, asset = panel$asset, period = panel$period,
      n_assets = length(panel$assets), slot = panel$slot - 1L, factors = first_pass$factors
    ),
    asked[c("asset", "time", "data_asset", "last_slot")],
    list(
      window = window$kind, length = window$length, half_life = window$half_life, min_obs = min_obs,
      leads = first_pass$lead_lag[1L], lags = first_pass$lead_lag[2L], lead_lag_form = first_pass$lead_lag_form,
      half_of_slot = if (!is.null(half)) halves(panel), half = half, threads = thread_count()
    ),
    wanted
  )
  answer <- row_result(answer, panel, first_pass$weights, call)
  if (first_pass$shrink == "none") {
    return(answer)
  }
  shrink_answer(answer, first_pass, asked)
}

shrink_answer <- function(answer, first_pass, asked) {
  rule <- if (first_pass$shrink == "vasicek") "net" else first_pass$shrink
  shrunk <- cpp_shrink_betas(answer$beta, answer$std_error, asked$time, length(asked$last_slot), rule)
  lonely <- is.na(shrunk$beta[, 1L]) & answer$status == 0L
  answer$status[lonely] <- 4L
  answer$beta <- shrunk$beta
  answer$std_error <- shrunk$std_error
  answer$prior <- list(mean = shrunk$mean, variance = shrunk$variance)
  flat <- colSums(shrunk$variance == 0 & !is.na(shrunk$variance))
  if (any(flat > 0)) {
    terms <- first_pass$terms[flat > 0]
    warn_class("sample", c(
      "At {max(flat)} of {nrow(shrunk$variance)} dates the betas of {.val {terms}} differ no more than their errors explain: all are shrunk to one value there.",
      i = "A cross-section on such betas has nothing to learn from."
    ), count = max(flat))
  }
  answer
}

# Two disjoint subsamples by the calendar: alternate periods, or alternate months of a panel
# in days or weeks, so that neighbouring days stay in one half.
halves <- function(panel) {
  labels <- panel$slot_labels
  dated <- inherits(labels, c("Date", "POSIXct"))
  if (dated && panel$frequency %in% c("day", "week", "observed")) {
    return(as.integer(calendar_position(labels, "month") %% 2))
  }
  (seq_along(labels) - 1L) %% 2L
}

exposure_reason <- function(answer, first_pass) {
  reason <- rep(NA_character_, length(answer$status))
  needed <- max(first_pass$window$min_obs, first_pass$n_regressors + 2L)
  few <- answer$status == 1L
  held <- answer$n_obs[few]
  reason[few] <- paste0(held, ifelse(held == 1L, " return", " returns"), " in the window, ", needed, " needed")
  reason[answer$status == 2L] <- "factors constant or collinear in the window"
  reason[answer$status == 3L] <- "autocorrelation of a factor leaves no weights for leads and lags"
  reason[answer$status == 4L] <- "no other beta at this date to shrink towards"
  reason
}

# Asset, period and (with `every`) the unit of each answer.
exposure_keys <- function(x) {
  panel <- x$first_pass$panel
  period <- x$asked$period[x$asked$time + 1L]
  keys <- list(
    asset = panel$assets[x$asked$asset + 1L], period = user_periods(panel$periods[period])
  )
  if (!is.null(x$every)) keys[[x$every]] <- x$asked$unit[x$asked$time + 1L]
  keys
}

#' Methods of the first pass
#'
#' @param x,object From [exposures()].
#' @param ... Not used.
#' @return See [exposures()].
#' @examples
#' panel <- asset_panel(demo_market(firms = 20, months = 60), "firm", "month")
#' betas <- exposures(panel, ret ~ mkt + smb, window = window_rolling(36))
#' generics::augment(betas)
#' vcov(betas)[, , 40]
#' @name exposure_methods
NULL

#' @rdname exposure_methods
#' @export
tidy.lb_exposures <- function(x, ...) {
  K <- length(x$terms)
  n <- length(x$answer$n_obs)
  keys <- lapply(exposure_keys(x), function(key) key[rep(seq_len(n), each = K)])
  tibble::as_tibble(c(keys, list(
    term = rep(x$terms, n), estimate = as.vector(t(x$answer$beta)), std.error = as.vector(t(x$answer$std_error)),
    n_obs = rep(x$answer$n_obs, each = K), reason = rep(exposure_reason(x$answer, x$first_pass), each = K)
  )))
}

#' @rdname exposure_methods
#' @export
augment.lb_exposures <- function(x, ...) {
  columns <- function(values, prefix) {
    stats::setNames(lapply(seq_along(x$terms), function(k) values[, k]), paste0(prefix, x$terms))
  }
  tibble::as_tibble(c(
    exposure_keys(x), list(alpha = x$answer$alpha), columns(x$answer$beta, "beta_"), columns(x$answer$std_error, "se_"),
    list(
      resid.var = x$answer$resid_var, r.squared = x$answer$r_squared, n_obs = x$answer$n_obs,
      reason = exposure_reason(x$answer, x$first_pass)
    )
  ))
}

#' @rdname exposure_methods
#' @export
vcov.lb_exposures <- function(object, ...) {
  if (object$first_pass$shrink != "none") {
    abort_unsupported(c(
      "Shrunken betas have errors factor by factor, not a covariance.",
      i = "Use {.code shrink = \"none\"}."
    ))
  }
  # Asked again rather than kept: K(K+1)/2 numbers a row that few need.
  packed <- answer_exposures(object$first_pass, object$asked, "covariance")$covariance
  K <- length(object$terms)
  at <- matrix(0L, K, K)
  at[lower.tri(at, diag = TRUE)] <- seq_len(ncol(packed))
  at[upper.tri(at)] <- t(at)[upper.tri(at)]
  array(t(packed[, as.vector(at), drop = FALSE]), c(K, K, nrow(packed)), list(object$terms, object$terms, NULL))
}

#' @rdname exposure_methods
#' @export
glance.lb_exposures <- function(x, ...) {
  fine <- x$answer$status == 0L
  tibble::tibble(
    n_rows = length(fine), n_estimated = sum(fine), n_assets = length(unique(x$asked$asset[fine])),
    window = format(x$first_pass$window, noun = period_noun(x$first_pass$panel)), leads = x$first_pass$lead_lag[1L],
    lags = x$first_pass$lead_lag[2L], shrink = x$first_pass$shrink,
    median_n_obs = if (any(fine)) stats::median(x$answer$n_obs[fine]) else NA_real_,
    mean_r.squared = mean(x$answer$r_squared[fine], na.rm = TRUE)
  )
}

#' @rdname exposure_methods
#' @export
nobs.lb_exposures <- function(object, ...) sum(object$answer$status == 0L)

#' @export
print.lb_exposures <- function(x, ...) {
  first_pass <- x$first_pass
  noun <- period_noun(first_pass$panel)
  fine <- x$answer$status == 0L
  cat_lines(
    "Betas of assets, one time-series regression a window",
    paste0(deparse1(x$formula), ", from ", format(first_pass$window, noun = noun)), ""
  )
  if (any(fine)) {
    beta <- x$answer$beta[fine, , drop = FALSE]
    shares <- apply(beta, 2L, stats::quantile, c(0.05, 0.5, 0.95), names = FALSE)
    figures <- function(v) formatC(v, digits = 3, format = "f")
    print_columns(data.frame(
      factor = x$terms, mean = figures(colMeans(beta)), sd = figures(apply(beta, 2L, stats::sd)), `5 %` = figures(shares[1L, ]),
      median = figures(shares[2L, ]), `95 %` = figures(shares[3L, ]),
      `median error` = figures(apply(x$answer$std_error[fine, , drop = FALSE], 2L, stats::median)), check.names = FALSE
    ), right = c("mean", "sd", "5 %", "median", "95 %", "median error"))
    cat_lines("")
  }
  what <- if (is.null(x$every)) if (first_pass$window$kind == "full") "assets" else "rows" else paste0("assets and ", x$every, "s")
  reasons <- table(sub("^[0-9]+ returns? in the window, ([0-9]+) needed$", "fewer than \\1 returns in the window", exposure_reason(x$answer, first_pass)[!fine]))
  cat_lines(
    label_line("Estimated", paste0(
      format_count(sum(fine)), " of ", format_count(length(fine)), " ", what, ", ",
      count_of(length(unique(x$asked$asset[fine])), "asset")
    )),
    if (length(reasons)) label_line("Without", paste0(names(reasons), " (", format_count(as.vector(reasons)), ")", collapse = "; ")),
    if (sum(first_pass$lead_lag)) label_line("Beta", lead_lag_phrase(first_pass)),
    if (first_pass$shrink != "none") label_line("Shrunk", paste0("towards the mean beta of each date (", shrink_phrase(first_pass$shrink), ")")),
    label_line("Timing", if (first_pass$window$kind == "full") {
      "one beta an asset from the whole sample: it describes, it does not predict"
    } else {
      paste0("a row uses data up to and including its own ", noun, "; lag it before it prices")
    })
  )
  invisible(x)
}

lead_lag_phrase <- function(first_pass) {
  paste0(
    "sum over ", count_of(first_pass$lead_lag[1L], "lead"), ", the present and ", count_of(first_pass$lead_lag[2L], "lag"),
    if (first_pass$lead_lag_form == "sum") " (Dimson 1979)" else ", weighed by autocorrelations (Fowler and Rorke 1983)"
  )
}

shrink_phrase <- function(shrink) {
  c(
    vasicek = "Vasicek 1973, noise taken out of the prior variance", paule_mandel = "prior variance by Paule and Mandel 1982",
    raw = "Vasicek 1973, noise left in the prior variance"
  )[[shrink]]
}
