#' Are the premia stable over time?
#'
#' `subperiod_premia()` averages the premia inside parts of the sample and tests whether the parts
#' agree; `rolling_premia()` gives the mean over a moving window with its interval; `break_test()` looks
#' for a change at an unknown date (Andrews 1993).
#'
#' @param fit From [price_traits()] or [price_factors()], with a series of premia averaged with equal
#'   weights. Betas stay those of the fit: with betas of the full sample only the slopes are looked at.
#' @param parts Number of parts of equal length, up to half the number of periods, or the first period
#'   of each part but the first.
#' @param n Length of the window in estimated periods.
#' @param term Terms; all by default.
#' @param trim Share of the sample at each end where no break is looked for.
#' @param series `err_iid()` or `err_hac()`: the sum over periods, inside each part or window.
#' @param level Confidence level.
#'
#' @details
#' The statistic of equal parts is the Wald statistic of parts taken as independent, against
#' chi-square. The break statistic is the largest Wald statistic of two different means; its p-value
#' is DeLong's (1981) expansion of the limit for large values, as in Estrella (2003): right to
#' simulation error at 5 % and below, a tenth of itself too small near 15 %; none is above 0.6. A break that a reader has pointed out beforehand needs no such test, and a
#' p-value below 0.05 is no proof of *one* break: a slow drift is found as well.
#'
#' @return
#' * `subperiod_premia()`: a tibble of class `lb_subperiods`, one row a part and term: `part`, `from`, `to`,
#'   `term`, `estimate`, `std.error`, `statistic`, `p.value` (t), `n_periods`; the attribute `equality`, shown in
#'   print, has the test for each term (`term`, `statistic`, `num.df`, `p.value`).
#' * `rolling_premia()`: a tibble of class `lb_rolling`: `period` (the last of the window), `term`, `estimate`,
#'   `std.error`, `conf.low`, `conf.high`, `n_periods`. `autoplot()` draws it.
#' * `break_test()`: an `lb_test` with one row a term: `test`, `statistic`, `num.df` (1), `den.df` (`Inf`),
#'   `p.value`, `note` with the first period after the likeliest break.
#'
#' @section Errors: `lambdabar_error_unsupported` for fits without a series of premia;
#' `lambdabar_error_input` for parts or terms that do not exist; `lambdabar_error_sample` for too few
#' periods.
#'
#' @references Andrews (1993), Econometrica 61, 821-856; (2003), Econometrica 71, 395-397. DeLong (1981),
#' Communications in Statistics A10, 2197-2213. Estrella (2003), Econometric Theory 19, 1128-1143.
#'
#' @examples
#' panel <- asset_panel(demo_market(firms = 60, months = 120), "firm", "month")
#' fit <- price_traits(panel, ret ~ size + value)
#' subperiod_premia(fit, parts = 2)
#' break_test(fit)
#' rolling_premia(fit, n = 36)
#' @name stability
NULL

# Estimated periods: their positions in the panel, their slots, and the slopes, periods x terms.
premium_path <- function(fit, term = NULL, call = rlang::caller_env()) {
  check_fit(fit, call)
  if (!inherits(fit, "lb_premia") || !is.null(fit$asset_rows)) {
    abort_unsupported("Stability over time needs a series of premia: averaged cross-sections have one.", call = call)
  }
  if (is.null(term)) term <- fit$terms
  unknown <- setdiff(term, fit$terms)
  if (!is.character(term) || !length(term) || length(unknown)) {
    abort_input("There is no term {.val {unknown}}; the terms are {.val {fit$terms}}.", term = unknown, call = call)
  }
  used <- which(fit$sections$status == "estimated")
  slopes <- t(fit$sections$coef[match(term, fit$terms), used, drop = FALSE])
  colnames(slopes) <- term
  list(used = used, slot = fit$slot, slopes = slopes, periods = user_periods(fit$panel$periods))
}

# Mean and error of each column on some rows.
mean_of_rows <- function(path, rows, series) {
  x <- path$slopes[rows, , drop = FALSE]
  T <- nrow(x)
  errors <- vapply(seq_len(ncol(x)), function(j) {
    sum <- core_result(cpp_sum_series(cbind(x[, j] - mean(x[, j])) / T, path$slot[rows] - 1L, 1, series_options(series)))
    sqrt(sum$S[1L] * if (series$adjust) T / (T - 1) else 1)
  }, 1)
  list(mean = colMeans(x), error = errors)
}

#' @rdname stability
#' @export
subperiod_premia <- function(fit, parts = 2, series = err_hac()) {
  check_series(series)
  path <- premium_path(fit)
  T <- length(path$used)
  starts <- part_starts(parts, path)
  ends <- c(starts[-1L] - 1L, T)
  if (any(ends - starts < 1L)) {
    abort_sample("Each part needs two estimated periods or more; {T} in {length(starts)} parts leave one with {min(ends - starts) + 1}.")
  }
  rows <- lapply(seq_along(starts), function(part) {
    at <- starts[part]:ends[part]
    found <- mean_of_rows(path, at, series)
    t <- found$mean / found$error
    tibble::tibble(
      part = part, from = path$periods[path$used[at[1L]]], to = path$periods[path$used[at[length(at)]]],
      term = colnames(path$slopes), estimate = unname(found$mean), std.error = found$error,
      statistic = unname(t), p.value = unname(2 * stats::pt(-abs(t), length(at) - 1)), n_periods = length(at)
    )
  })
  out <- vctrs::vec_rbind(!!!rows)
  equality <- lapply(colnames(path$slopes), function(term) {
    own <- out[out$term == term, ]
    weight <- 1 / own$std.error^2
    statistic <- sum(weight * (own$estimate - sum(weight * own$estimate) / sum(weight))^2)
    tibble::tibble(
      term = term, statistic = statistic, num.df = nrow(own) - 1,
      p.value = stats::pchisq(statistic, nrow(own) - 1, lower.tail = FALSE)
    )
  })
  structure(out,
    equality = vctrs::vec_rbind(!!!equality), title = deparse1(fit$formula), series = series,
    class = c("lb_subperiods", class(out))
  )
}

part_starts <- function(parts, path, call = rlang::caller_env()) {
  T <- length(path$used)
  if (is.numeric(parts) && length(parts) == 1L && !is.na(parts) && parts == floor(parts) && parts >= 2 && parts <= T / 2) {
    return(as.integer(floor((seq_len(parts) - 1) * T / parts)) + 1L)
  }
  used <- path$periods[path$used]
  starts <- tryCatch(vapply(parts, function(from) sum(used < from) + 1L, 1L), error = function(e) NA_integer_)
  if (anyNA(starts) || any(starts <= 1L | starts > T) || is.unsorted(starts, strictly = TRUE)) {
    abort_input(c(
      "{.arg parts} must be a number of parts from 2 to half the number of periods ({T}), or first periods inside the sample, in order.",
      i = "The sample goes from {format_key(used[1L])} to {format_key(used[T])}."
    ), call = call)
  }
  c(1L, starts)
}

#' @export
print.lb_subperiods <- function(x, ...) {
  equality <- attr(x, "equality")
  if (is.null(equality)) {
    return(NextMethod())
  }
  cat_lines("Premia in parts of the sample", strwrap(attr(x, "title"), line_width()), "")
  figures <- function(value) mapply(format_figures, value, x$std.error, USE.NAMES = FALSE)
  table <- data.frame(
    term = x$term, part = paste(format_key(x$from), "to", format_key(x$to)), premium = figures(x$estimate),
    error = figures(x$std.error), t = formatC(x$statistic, digits = 2, format = "f"), p = format_p(x$p.value)
  )
  print_columns(table[order(match(x$term, unique(x$term)), x$part), ], right = c("premium", "error", "t", "p"))
  cat_lines(
    "", label_line("Equal?", paste0(equality$term, " p = ", trimws(format_p(equality$p.value)), collapse = ", ")),
    label_line("Errors", paste0("inside each part, ", format(attr(x, "series"))))
  )
  invisible(x)
}

#' @rdname stability
#' @export
rolling_premia <- function(fit, n = 60, term = NULL, series = err_iid(), level = 0.95) {
  check_series(series)
  check_level(level)
  path <- premium_path(fit, term)
  T <- length(path$used)
  check_whole(n, "n", 3, 1e9)
  if (n > T) {
    abort_sample("A window of {n} periods is longer than the {T} estimated ones.")
  }
  reach <- stats::qt((1 + level) / 2, n - 1)
  rows <- lapply(n:T, function(last) {
    found <- mean_of_rows(path, (last - n + 1):last, series)
    list(mean = found$mean, error = found$error)
  })
  P <- ncol(path$slopes)
  estimate <- unlist(lapply(rows, `[[`, "mean"), use.names = FALSE)
  error <- unlist(lapply(rows, `[[`, "error"), use.names = FALSE)
  out <- tibble::tibble(
    period = rep(path$periods[path$used[n:T]], each = P), term = rep(colnames(path$slopes), T - n + 1),
    estimate = estimate, std.error = error, conf.low = estimate - reach * error, conf.high = estimate + reach * error,
    n_periods = n
  )
  structure(out, n = n, level = level, overall = colMeans(path$slopes), unit = period_noun(fit$panel), class = c("lb_rolling", class(out)))
}

#' @exportS3Method ggplot2::autoplot
autoplot.lb_rolling <- function(object, ...) {
  rlang::check_installed("ggplot2")
  shown <- tibble::as_tibble(object)
  # Periods that are no dates or numbers are drawn by their order.
  if (!is.numeric(unclass(shown$period)) || inherits(shown$period, "lb_month")) {
    shown$period <- match(shown$period, unique(shown$period))
  } else if (is.numeric(shown$period) && all(shown$period > 1e5 & shown$period %% 100 <= 12)) {
    shown$period <- shown$period %/% 100 + (shown$period %% 100 - 1) / 12
  }
  overall <- attr(object, "overall")
  level <- data.frame(term = names(overall), overall = overall)
  ggplot2::ggplot(shown, ggplot2::aes(x = .data$period)) +
    ggplot2::geom_ribbon(ggplot2::aes(ymin = .data$conf.low, ymax = .data$conf.high), fill = figure_ink[["quiet"]], alpha = 0.3) +
    ggplot2::geom_hline(yintercept = 0, linewidth = 0.3, colour = figure_ink[["quiet"]]) +
    ggplot2::geom_hline(data = level, ggplot2::aes(yintercept = .data$overall), linetype = "dashed", colour = figure_ink[["rival"]]) +
    ggplot2::geom_line(ggplot2::aes(y = .data$estimate), colour = figure_ink[["main"]], linewidth = 0.7) +
    ggplot2::facet_wrap(ggplot2::vars(.data$term), scales = "free_y", ncol = 1L) +
    ggplot2::labs(
      title = paste0("Premia over windows of ", attr(object, "n"), " periods"), x = "last period of the window", y = "mean premium, decimal a period",
      caption = paste0(format(100 * attr(object, "level")), " % intervals; dashed: whole sample")
    ) +
    figure_look()
}

#' @export
plot.lb_rolling <- function(x, ...) print(ggplot2::autoplot(x, ...))

#' @rdname stability
#' @export
break_test <- function(fit, term = NULL, trim = 0.15, series = err_hac()) {
  check_series(series)
  if (!is.numeric(trim) || length(trim) != 1L || is.na(trim) || trim < 0.01 || trim >= 0.5) {
    abort_input("{.arg trim} must be one number from 0.01 to below 0.5.")
  }
  path <- premium_path(fit, term)
  scans <- lapply(colnames(path$slopes), function(name) {
    scan <- core_result(cpp_scan_breaks(path$slopes[, name], trim, series_options(series), path$slot - 1L))
    best <- which.max(scan$wald)
    list(
      statistic = if (length(best)) scan$wald[best] else NA_real_,
      from = if (length(best)) format_key(path$periods[path$used[scan$first + best]]) else ""
    )
  })
  statistic <- vapply(scans, `[[`, 1, "statistic")
  p <- sup_wald_p(statistic, trim)
  breaks <- p < 0.05 & !is.na(p)
  new_test(
    test = colnames(path$slopes), statistic = statistic, num.df = 1, den.df = Inf, p.value = p,
    note = paste("largest at a change from", vapply(scans, `[[`, "", "from")),
    title = paste0("Did a premium change at an unknown date? ", count_of(length(path$used), period_noun(fit$panel))),
    subtitle = paste0("Largest Wald statistic, ", format(100 * trim), " % of the sample left out at each end; ", format(series)),
    reading = if (any(breaks)) {
      paste0("A constant premium is rejected at the 5 % level for ", first_few(colnames(path$slopes)[breaks]), ".")
    } else {
      "A constant premium is not rejected at the 5 % level."
    }
  )
}

# P(sup of the squared standardised bridge of one mean > c) for large c. The expansion turns
# back below 2, where its value, some 0.57, stands for all larger ones.
sup_wald_p <- function(c, trim) {
  odds <- ((1 - trim) / trim)^2
  c <- pmax(c, 2)
  pmin(1, sqrt(c / 2) * exp(-c / 2) / gamma(0.5) * ((1 - 1 / c) * log(odds) + 2 / c))
}
