#' How much the number of lags matters
#'
#' @param fit From [price_traits()], [price_factors()] with a series of premia.
#' @param lags Numbers of lags; by default 0 to twice the root rule
#'   (\eqn{2 \lceil 1.3 \sqrt T \rceil}{2 ceiling(1.3 sqrt(T))}).
#' @param kernel `"bartlett"`, `"parzen"` or `"truncated"`.
#' @param level Level of the band that `autoplot()` draws.
#'
#' @details A fit whose errors carry that of the betas (`err_eiv("robust")`, `err_misspec()`,
#' `err_moments()`) keeps them: only the sum over periods changes.
#'
#' @return A tibble of class `lb_bandwidth`, one row a number of lags and term: `lags`, `term`,
#'   `estimate`, `std.error`, `statistic`, `p.value` (t distribution) and, with the Bartlett kernel,
#'   `fixed_b.p.value`. `autoplot()` draws t against lags, with the band inside which a premium is
#'   not significant, its fixed-b form, and where the automatic rules fall.
#'
#' @section Errors: `lambdabar_error_unsupported` for fits without a series of premia.
#' @references Kiefer and Vogelsang (2005), Econometric Theory 21, 1130-1164. Newey and West (1987),
#' Econometrica 55, 703-708.
#'
#' @examples
#' panel <- asset_panel(demo_market(firms = 60, months = 120), "firm", "month")
#' fit <- price_traits(panel, ret ~ size + value)
#' bandwidth_path(fit, lags = c(0, 4, 12))
#' @export
bandwidth_path <- function(fit, lags = NULL, kernel = "bartlett", level = 0.95) {
  check_fit(fit)
  check_level(level)
  kernel <- check_choice(kernel, c("bartlett", "parzen", "truncated"), "kernel")
  if (!inherits(fit, "lb_premia") || !is.null(fit$asset_rows)) {
    abort_unsupported("Only averaged premia with a series over periods have lags.")
  }
  T <- length(fit$slot)
  if (is.null(lags)) lags <- seq(0, min(T - 2, 2 * ceiling(1.3 * sqrt(T))))
  if (!is.numeric(lags) || !length(lags) || anyNA(lags) || any(lags < 0 | lags != floor(lags) | lags >= T)) {
    abort_input("{.arg lags} must be whole numbers from 0 to {T - 1}, below the number of periods.")
  }
  under <- function(...) suppressWarnings(restate(fit, with_series(fit$errors, err_hac(kernel = kernel, ...))))
  rows <- lapply(sort(unique(lags)), function(lag) {
    restated <- under(lags = lag)
    out <- tidy(restated)[c("term", "estimate", "std.error", "statistic", "p.value")]
    if (kernel == "bartlett") out$fixed_b.p.value <- fixed_b_p(out$statistic, (lag + 1) / T)
    tibble::tibble(lags = lag, out)
  })
  rules <- if (kernel == "truncated") c("rule", "andrews") else c("rule", "newey_west", "andrews", "root")
  chosen <- vapply(rules, function(rule) under(lags = rule)$covariance$lags, 1)
  out <- vctrs::vec_rbind(!!!rows)
  structure(
    out, chosen = chosen, level = level, df = T - 1, n_periods = T, kernel = kernel,
    title = deparse1(fit$formula), class = c("lb_bandwidth", class(out))
  )
}

# The same structure with another sum over periods.
with_series <- function(errors, series) {
  if (inherits(errors, c("lb_err_misspec", "lb_err_moments")) || inherits(errors, "lb_err_eiv") && errors$form == "robust") {
    errors$series <- series
    return(errors)
  }
  series
}

#' @export
print.lb_bandwidth <- function(x, ...) {
  chosen <- attr(x, "chosen")
  if (is.null(chosen)) {
    return(NextMethod())
  }
  cat_lines(
    paste0("t-statistics by number of lags, ", kernel_name(attr(x, "kernel")), " kernel"), strwrap(attr(x, "title"), line_width()), ""
  )
  terms <- unique(x$term)
  lags <- unique(x$lags)
  shown <- if (length(lags) > 9L) lags[unique(round(seq(1, length(lags), length.out = 9L)))] else lags
  table <- data.frame(lags = shown)
  for (term in terms) {
    own <- x[x$term == term, ]
    table[[term]] <- formatC(own$statistic[match(shown, own$lags)], digits = 2, format = "f")
  }
  print_columns(table, right = names(table))
  cat_lines(
    "", label_line("Rules", paste0(vapply(names(chosen), lag_rule_name, ""), " ", format(chosen, digits = 3, trim = TRUE), collapse = ", ")),
    strwrap(bandwidth_reading(x), line_width())
  )
  invisible(x)
}

bandwidth_reading <- function(x) {
  bound <- stats::qt((1 + attr(x, "level")) / 2, attr(x, "df"))
  turns <- vapply(split(abs(x$statistic) > bound, x$term), function(significant) {
    length(unique(significant[!is.na(significant)])) > 1L
  }, NA)
  if (!any(turns)) {
    return("No premium changes between significant and not with the number of lags.")
  }
  paste0("Whether ", first_few(names(turns)[turns]), if (sum(turns) > 1L) " are" else " is", " significant depends on the number of lags: say which, and why.")
}

#' @exportS3Method ggplot2::autoplot
autoplot.lb_bandwidth <- function(object, ...) {
  rlang::check_installed("ggplot2")
  lags <- unique(object$lags)
  level <- attr(object, "level")
  band <- data.frame(lags = lags, plain = stats::qt((1 + level) / 2, attr(object, "df")))
  band$fixed <- vapply((lags + 1) / attr(object, "n_periods"), fixed_b_quantile, 1, level = level)
  marks <- data.frame(lags = attr(object, "chosen"), rule = vapply(names(attr(object, "chosen")), lag_rule_name, ""))
  marks <- marks[marks$lags <= max(lags), ]
  bartlett <- attr(object, "kernel") == "bartlett"
  ggplot2::ggplot(object, ggplot2::aes(x = .data$lags)) +
    ggplot2::geom_ribbon(data = band, ggplot2::aes(ymin = -.data$plain, ymax = .data$plain), fill = figure_ink[["quiet"]], alpha = 0.22) +
    (if (bartlett) list(
      ggplot2::geom_line(data = band, ggplot2::aes(y = .data$fixed), linetype = "dotted", colour = figure_ink[["rival"]], linewidth = 0.7),
      ggplot2::geom_line(data = band, ggplot2::aes(y = -.data$fixed), linetype = "dotted", colour = figure_ink[["rival"]], linewidth = 0.7)
    )) +
    ggplot2::geom_vline(data = marks, ggplot2::aes(xintercept = .data$lags), linetype = "dashed", linewidth = 0.3, colour = figure_ink[["quiet"]]) +
    ggplot2::geom_line(ggplot2::aes(y = .data$statistic), colour = figure_ink[["main"]], linewidth = 0.8) +
    ggplot2::facet_wrap(ggplot2::vars(.data$term)) +
    ggplot2::labs(
      title = "t-statistics by number of lags", x = "lags", y = "t",
      subtitle = paste0("grey: not significant at ", format(100 * (1 - level)), " %", if (bartlett) "; dotted: by fixed-b critical values"),
      caption = paste0("dashed: ", paste0(marks$rule, " (", format(marks$lags, digits = 3, trim = TRUE), ")", collapse = ", "))
    ) +
    figure_look()
}

#' @export
plot.lb_bandwidth <- function(x, ...) print(ggplot2::autoplot(x, ...))
