#' Cross-sectional R2 of a pricing model, with its error and tests
#'
#' How much of the spread of mean returns the betas explain, how sure that is, and whether
#' another model explains more (Kan, Robotti and Shanken 2013).
#'
#' @param fit From [price_factors()] with betas of the full sample, on a complete panel without
#'   traits. Factors, assets and whether there is a constant are taken from it; both measures
#'   are computed whatever its `method`.
#' @param series `err_iid()` or `err_hac()`: the sum over periods.
#' @param rival A second fit on the same returns and periods, with a constant where `fit` has
#'   one, or `NULL`.
#' @param level Confidence level of the intervals.
#'
#' @details
#' The OLS measure weighs all assets alike, the GLS measure by the inverse covariance of returns:
#' one less the weighted sum of squared pricing errors over that of mean returns about their
#' weighted mean (about zero without a constant). The standard error holds for a model that is
#' wrong, with an R2 strictly between 0 and 1, and is poor near these ends; the two tests are for
#' the ends. `p_one`: that R2 is 1, the model prices all assets. `p_zero`: that R2 is 0, no
#' premium differs from zero. Both have weighted sums of chi-squares as their distribution. All
#' moments have divisor T. The estimate itself tends to be too high in small samples.
#'
#' With a `rival`, two rows have the difference of the R2 (`fit` less `rival`), and `p_zero` tests
#' that the two are equal:
#' * nested models: the prices of covariance risk of the additional factors are zero (a Wald test
#'   with the covariance of misspecified models); equal R2 means just that;
#' * others: first whether the factors that only one of the models has are jointly worth nothing.
#'   If that is not rejected at the 5 % level, equality is not, and its p-value is the one shown.
#'   Otherwise the difference against its standard error, which takes neither model as right.
#'
#' @return A tibble of class `lb_r2`: `measure` (`"ols"`, `"gls"`, with a rival also
#'   `"ols difference"`, `"gls difference"`), `estimate`, `std.error`, `p_one`, `p_zero`,
#'   `conf.low`, `conf.high` (between 0 and 1 for an R2), `note`. `autoplot()` draws the
#'   intervals.
#'
#' @section Errors:
#' `lambdabar_error_unsupported` for other fits; `lambdabar_error_input` when the rival has other
#' assets, periods or another constant; `lambdabar_error_sample` when no measure can be computed.
#' The GLS rows are `NA` with a note when there are not more periods than assets, and `p_one` when
#' there are as many premia as assets.
#'
#' @references Kan, Robotti and Shanken (2013), Journal of Finance 68, 2617-2649.
#'
#' @examples
#' set.seed(1)
#' f <- cbind(mkt = rnorm(240, 0.006, 0.045), smb = rnorm(240, 0.003, 0.03))
#' betas <- cbind(seq(0.6, 1.4, length.out = 12), rep(c(-0.2, 0.8, 0.3), 4))
#' returns <- f %*% t(betas) + rnorm(240 * 12, 0, 0.02)
#' panel <- asset_panel(stack_returns(returns, f), "asset", "period")
#' both <- price_factors(panel, ret ~ mkt + smb)
#' pricing_r2(both)
#' pricing_r2(both, rival = price_factors(panel, ret ~ mkt))
#' @export
pricing_r2 <- function(fit, series = err_iid(), rival = NULL, level = 0.95) {
  check_series(series)
  check_level(level)
  check_complete_fit(fit, "Cross-sectional R2s")
  if (!is.null(rival)) check_rival(fit, rival)
  measures <- c("ols", "gls")
  found <- lapply(measures, r2_of, fit = fit, series = series)
  if (all(vapply(found, function(x) is.na(x$r2), NA))) {
    abort_sample(c("No R2 can be computed on this sample.", i = found[[1L]]$note))
  }
  rows <- Map(r2_row, measures, found, level)
  if (!is.null(rival)) {
    others <- lapply(measures, r2_of, fit = rival, series = series)
    rows <- c(rows, Map(difference_row, measures, found, others, MoreArgs = list(fit, rival, series, level)))
  }
  out <- vctrs::vec_rbind(!!!rows)
  structure(
    out, series = series, level = level,
    title = paste0("Cross-sectional R2, ", count_of(length(fit$alpha), "asset"), ", ", count_of(length(fit$kept), period_noun(fit$panel))),
    formulas = c(deparse1(fit$formula), if (!is.null(rival)) paste("against", deparse1(rival$formula))),
    class = c("lb_r2", class(out))
  )
}

check_rival <- function(fit, rival, call = rlang::caller_env()) {
  check_complete_fit(rival, "Cross-sectional R2s", call = call)
  same <- identical(fit$input$returns, rival$input$returns) &&
    identical(fit$slot_estimated, rival$slot_estimated)
  if (!same || fit$intercept != rival$intercept) {
    abort_input(c(
      "{.arg rival} must be a model of the same returns, of the same assets and periods.",
      x = if (same) "Only one of the two has a constant." else "Here assets, periods or returns differ."
    ), call = call)
  }
}

r2_of <- function(measure, fit, series) {
  missing <- list(
    r2 = NA_real_, std_error = NA_real_, one = list(p = NA_real_), zero = list(p = NA_real_), note = ""
  )
  result <- cpp_pricing_r2(fit$input, measure == "gls", series_options(series), fit$slot_estimated - 1L)
  if (inherits(result, "lb_core_error")) {
    missing$note <- as_note(result$message)
    return(missing)
  }
  result$note <- if (is.null(result$one$weights) || !length(result$one$weights)) {
    "as many premia as assets: there is no pricing error"
  } else {
    ""
  }
  if (nzchar(result$note)) result$one$p <- NA_real_
  result
}

# A sentence of the core as a note: no capital (but for abbreviations), no full stop.
as_note <- function(text) sub("\\.$", "", sub("^([A-Z])([a-z ])", "\\L\\1\\E\\2", text, perl = TRUE))

r2_row <- function(measure, found, level) {
  reach <- stats::qnorm((1 + level) / 2) * found$std_error
  tibble::tibble(
    measure = measure, estimate = found$r2, std.error = found$std_error,
    p_one = found$one$p, p_zero = found$zero$p,
    conf.low = max(0, found$r2 - reach), conf.high = min(1, found$r2 + reach), note = found$note
  )
}

difference_row <- function(measure, a, b, fit, rival, series, level) {
  row <- tibble::tibble(
    measure = paste(measure, "difference"), estimate = a$r2 - b$r2, std.error = NA_real_,
    p_one = NA_real_, p_zero = NA_real_, conf.low = NA_real_, conf.high = NA_real_,
    note = if (is.na(a$r2)) a$note else b$note
  )
  if (is.na(row$estimate)) {
    return(row)
  }
  slot <- fit$slot_estimated - 1L
  factors <- list(a = colnames(fit$first$beta), b = colnames(rival$first$beta))
  only <- list(a = !factors$a %in% factors$b, b = !factors$b %in% factors$a)
  df <- sum(only$a) + sum(only$b)
  if (df == 0L) {
    row$note <- "the two models are the same"
    return(row)
  }
  wald <- core_result(cpp_joint_zero(
    c(a$b[only$a], b$b[only$b]), cbind(a$b_rows[, only$a], b$b_rows[, only$b]), series_options(series), slot
  ))
  p_worthless <- stats::pchisq(wald, df, lower.tail = FALSE)
  if (!any(only$a) || !any(only$b)) {
    row$p_zero <- p_worthless
    row$note <- paste0("nested models: is ", first_few(c(factors$a[only$a], factors$b[only$b])), " worth nothing?")
    return(row)
  }
  row$std.error <- sqrt(core_result(cpp_sum_series(
    cbind(a$rows - b$rows), slot, 1, series_options(series)
  ))$S[1L])
  reach <- stats::qnorm((1 + level) / 2) * row$std.error
  row$conf.low <- row$estimate - reach
  row$conf.high <- row$estimate + reach
  if (is.na(p_worthless)) {
    row$note <- "the covariance of the factors' prices is singular"
  } else if (p_worthless > 0.05) {
    row$p_zero <- p_worthless
    row$note <- "not rejected that factors of only one model are worth nothing"
  } else {
    row$p_zero <- 2 * stats::pnorm(-abs(row$estimate / row$std.error))
    row$note <- paste0("neither model taken as right (own factors worth nothing: p = ", format_p(p_worthless), ")")
  }
  row
}

#' @export
print.lb_r2 <- function(x, ...) {
  if (!all(c("measure", "estimate", "std.error", "p_one", "p_zero", "note") %in% names(x))) {
    return(NextMethod())
  }
  cat_lines(attr(x, "title"), strwrap(attr(x, "formulas"), line_width()), "")
  number <- function(value) ifelse(is.na(value), "NA", formatC(value, digits = 3, format = "f"))
  table <- data.frame(
    measure = x$measure, R2 = number(x$estimate), error = number(x$std.error),
    interval = ifelse(is.na(x$conf.low), "", paste(number(x$conf.low), "to", number(x$conf.high))),
    one = format_p(x$p_one), zero = format_p(x$p_zero)
  )
  names(table)[4:6] <- c(paste0(100 * attr(x, "level"), "% interval"), "p (= 1)", "p (= 0)")
  print_columns(table, right = names(table)[-1L])
  notes <- nzchar(x$note)
  cat_lines(
    "",
    label_line("Errors", paste0("valid for a wrong model, ", format(attr(x, "series")), "; moments with divisor T")),
    if (any(notes)) label_line("Notes", paste0(x$measure[notes], ": ", x$note[notes])),
    strwrap(r2_reading(x), line_width())
  )
  invisible(x)
}

r2_reading <- function(x) {
  differences <- x[grepl("difference", x$measure) & !is.na(x$p_zero), ]
  if (nrow(differences)) {
    return(paste(sprintf(
      "By the %s measure, equal R2 %s at the 5 %% level (p = %s).", toupper(sub(" .*", "", differences$measure)),
      ifelse(differences$p_zero < 0.05, "is rejected", "is not rejected"), trimws(format_p(differences$p_zero))
    ), collapse = " "))
  }
  x <- x[!is.na(x$estimate), ]
  paste(sprintf(
    "The betas explain %s %% (%s) of the spread of mean returns; that they explain all of it is %s at the 5 %% level, that they explain nothing is %s.",
    formatC(100 * x$estimate, digits = 0, format = "f"), toupper(x$measure),
    ifelse(is.na(x$p_one), "not testable", ifelse(x$p_one < 0.05, "rejected", "not rejected")),
    ifelse(is.na(x$p_zero), "not testable", ifelse(x$p_zero < 0.05, "rejected", "not rejected"))
  ), collapse = " ")
}

#' @exportS3Method ggplot2::autoplot
autoplot.lb_r2 <- function(object, ...) {
  rlang::check_installed("ggplot2")
  shown <- object[!grepl("difference", object$measure) & !is.na(object$estimate), ]
  shown$label <- toupper(shown$measure)
  ggplot2::ggplot(shown, ggplot2::aes(x = .data$estimate, y = .data$label)) +
    ggplot2::geom_linerange(
      ggplot2::aes(xmin = .data$conf.low, xmax = .data$conf.high), linewidth = 1.4, colour = figure_ink[["quiet"]]
    ) +
    ggplot2::geom_point(size = 3.2, colour = figure_ink[["main"]]) +
    ggplot2::scale_x_continuous(limits = c(min(0, shown$estimate), 1)) +
    ggplot2::labs(
      title = "How much of the spread of mean returns the betas explain",
      subtitle = attr(object, "formulas")[1L], x = "cross-sectional R2", y = NULL,
      caption = paste0(100 * attr(object, "level"), " % intervals, valid for a wrong model")
    ) +
    figure_look()
}

#' @export
plot.lb_r2 <- function(x, ...) print(ggplot2::autoplot(x, ...))
