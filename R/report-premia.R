#' @export
print.lb_premia <- function(x, ...) {
  unit <- period_noun(x$panel)
  n_used <- sum(x$sections$status %in% c("estimated", "pooled"))
  on_betas <- is_two_pass(x) || is_moving(x)
  title <- if (on_betas) {
    paste0("Premia on factor exposures, ", toupper(x$method), " second pass")
  } else {
    "Premia on characteristics, one cross-section a period"
  }
  cat_lines(
    title,
    strwrap(paste0(deparse1(x$formula), if (on_betas) paste0(", betas from ", x$exposure_phrase)), line_width()),
    ""
  )
  print_columns(coefficient_table(tidy(x)), right = c("premium", "error", "t", "p", "95% interval"))
  cat_lines(
    "",
    label_line("Premium", paste0("decimal a ", unit, ", for one unit", if (on_betas) " of beta", average_phrase(x))),
    label_line("Errors", paste0(x$covariance$phrase, "; ", reference_phrase(x$covariance))),
    if (is_moving(x)) beta_error_lines(x),
    weak_factor_line(x),
    sample_lines(x, n_used, unit),
    if (!is.na(x$r_squared)) label_line("Fit", paste0("mean R2 of a cross-section ", format(x$r_squared, digits = 3)))
  )
  invisible(x)
}

average_phrase <- function(fit) {
  switch(if (is.null(fit$average)) "equal" else fit$average,
    equal = "",
    assets = "; periods weighed by their assets",
    precision = "; slopes weighed by their precision"
  )
}

sample_lines <- function(fit, n_used, unit) {
  usage <- fit_usage(fit)
  T <- length(usage$status)
  lost <- table(usage$status[!usage$status %in% c("estimated", "pooled")])
  lost_periods <- if (length(lost)) {
    paste0(count_of(sum(lost), unit), " (", paste0(gsub("_", " ", names(lost)), " ", lost, collapse = ", "), ")")
  }
  dropped <- missing_phrases(fit$design$variables, rowSums(usage$missing))
  c(
    label_line("Sample", paste0(
      format_count(nobs(fit)), " of ", format_count(sum(usage$n_rows)), " rows, ",
      count_of(usage$n_assets, "asset"), ", ", format_count(n_used), " of ", count_of(T, unit)
    )),
    label_line("Left out", paste(c(dropped, lost_periods, usage$left_out), collapse = "; ")) |>
      Filter(f = function(line) !identical(trimws(line), "Left out"))
  )
}

#' @export
print.lb_pooled <- function(x, ...) {
  unit <- period_noun(x$panel)
  cat_lines(
    "One pooled regression", deparse1(x$formula), ""
  )
  print_columns(coefficient_table(tidy(x), "estimate"), right = c("estimate", "error", "t", "p", "95% interval"))
  usage <- fit_usage(x)
  cat_lines(
    "",
    label_line("Errors", paste0(x$covariance$phrase, "; ", reference_phrase(x$covariance))),
    absorbed_line(x),
    sample_lines(x, usage$n_periods, unit),
    label_line("Fit", paste0("R2 ", if (!is.null(x$effects)) "within the effects ", format(x$r_squared, digits = 3)))
  )
  invisible(x)
}

#' A longer printout of a fit
#'
#' @param object From [price_traits()], [price_factors()] or [pooled()].
#' @param ... Not used.
#' @return An object of class `lb_summary`: the fit, with the series of premia (or, for pooled
#'   fits, nothing more) described: for each term the standard deviation over periods, the
#'   share of positive slopes, the first autocorrelation, and the smallest and largest slope.
#' @examples
#' panel <- asset_panel(demo_market(firms = 60, months = 48), "firm", "month")
#' summary(price_traits(panel, ret ~ size + value))
#' @export
summary.lb_fit <- function(object, ...) {
  structure(list(fit = object, series = if (inherits(object, "lb_premia") && is.null(object$asset_rows)) series_summary(object)), class = "lb_summary")
}

series_summary <- function(fit) {
  used <- fit$sections$status == "estimated"
  slopes <- fit$sections$coef[, used, drop = FALSE]
  lag_one <- function(b) if (length(b) > 2L) stats::acf(b, 1L, plot = FALSE)$acf[2L] else NA_real_
  tibble::tibble(
    term = fit$terms, sd = apply(slopes, 1L, stats::sd), positive = rowMeans(slopes > 0),
    autocorrelation = apply(slopes, 1L, lag_one), min = apply(slopes, 1L, min), max = apply(slopes, 1L, max)
  )
}

#' @export
print.lb_summary <- function(x, ...) {
  print(x$fit)
  s <- x$series
  if (!is.null(s)) {
    shown <- data.frame(
      term = s$term, sd = signif_text(s$sd), positive = paste0(round(100 * s$positive), " %"),
      `first lag` = formatC(s$autocorrelation, digits = 2, format = "f"),
      lowest = signif_text(s$min), highest = signif_text(s$max), check.names = FALSE
    )
    cat_lines("", "Slopes over time", "")
    print_columns(shown, right = names(shown)[-1L])
  }
  invisible(x)
}

signif_text <- function(x) vapply(x, function(value) format(signif(value, 3L)), "")
