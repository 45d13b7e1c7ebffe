#' Premia of observed factors when other factors are missing from the model
#'
#' Three passes (Giglio and Xiu 2021): principal components of the returns stand for all that is
#' priced, cross-sections on their loadings give the components' premia, and a regression of the
#' observed factors on the components hands these on. The premium of a factor is then right even if
#' other priced factors are left out of the formula, and if the factor is measured with noise.
#'
#' @param panel From [asset_panel()], complete: every asset has a return in every period that has
#'   the factors. Many portfolios are what the method is for.
#' @param formula Returns on the observed factors, such as `ret ~ growth`; excess returns.
#' @param n_latent Number of components, or how to choose it: `"penalised"` (Giglio and Xiu 2021),
#'   `"eigen_ratio"`, `"growth_ratio"` (Ahn and Horenstein 2013) or `"ic_p2"` (Bai and Ng 2002). Too
#'   few bias the premium, too many cost little: see [latent_range()].
#' @param intercept Whether the cross-section has a constant, a zero-beta rate of its own.
#' @param max_latent Most components that a rule may choose; by default a third of the smaller of N
#'   and T, at most 20.
#' @param errors `err_iid()`, `err_hac()` or another sum over periods.
#'
#' @details
#' Errors are those of the premium itself: they carry the sampling error of the components' means
#' and of the factor's regression on them, not that of a small number of assets. A factor that
#' the components hardly explain has a premium near zero with a small error *by construction*: the
#' strength test, a robust Wald test of its regression on the components, says so. Identification
#' rests on the components being the priced factors; the estimate has a small bias of either
#' sign in finite samples.
#'
#' @return An object of class `lb_latent`. `tidy()`: `term`, `estimate`, `std.error`, `statistic`,
#'   `p.value`, `conf.low`, `conf.high`, `strength` (Wald statistic), `strength.p.value`,
#'   `r.squared` (of the factor on the components). `glance()`: `n_latent`, `rule`, `n_found`
#'   (what the rule gave, when 0 one component is used), `explained` (share of the returns' variance),
#'   `n_assets`, `n_periods`, `errors`. `coef()`, `vcov()`, `confint()` and [restate()] work as for
#'   other fits. `autoplot()` draws the eigenvalues.
#'
#' @section Errors:
#' `lambdabar_error_sample` when returns have holes (the assets are named), or for too few assets or
#' periods; `lambdabar_error_no_variation` for a constant factor; `lambdabar_error_input` for other
#' arguments.
#'
#' @references Giglio and Xiu (2021), Journal of Political Economy 129, 1947-1990. Ahn and Horenstein
#' (2013), Econometrica 81, 1203-1227. Bai and Ng (2002), Econometrica 70, 191-221.
#'
#' @examples
#' set.seed(1)
#' hidden <- matrix(rnorm(240 * 2, 0.4, 3), 240)
#' f <- cbind(growth = hidden[, 1] + 0.5 * hidden[, 2] + rnorm(240, 0, 2))
#' returns <- hidden %*% matrix(rnorm(80, 0.8), 2) + rnorm(240 * 40, 0, 2)
#' panel <- asset_panel(stack_returns(returns, f), "asset", "period")
#' fit <- price_latent(panel, ret ~ growth)
#' fit
#' latent_range(fit, 1:5)
#' @export
price_latent <- function(panel, formula, n_latent = "penalised", intercept = FALSE,
                         max_latent = NULL, errors = err_hac()) {
  check_panel(panel)
  check_errors(errors)
  check_flag(intercept, "intercept")
  design <- factor_design(panel, formula)
  data <- complete_returns(panel, design, "Three passes")
  N <- ncol(data$returns)
  T <- nrow(data$returns)
  flat <- apply(data$factors, 2L, function(x) diff(range(x)) == 0)
  if (any(flat)) {
    abort_no_variation("{.val {colnames(data$factors)[flat]}} {cli::qty(sum(flat))}{?is/are} constant over time.", term = colnames(data$factors)[flat])
  }
  if (min(N, T) < 4L) {
    abort_sample("Components need four assets and periods or more; here are {count_of(N, 'asset')} and {count_of(T, period_noun(panel))}.")
  }
  most <- min(20L, max(2L, floor(min(N, T) / 3)), min(N, T) - 2L)
  if (!is.null(max_latent)) {
    check_whole(max_latent, "max_latent", 1, min(N, T) - 2L)
    most <- as.integer(max_latent)
  }
  fixed <- is.numeric(n_latent)
  if (fixed) {
    check_whole(n_latent, "n_latent", 1, min(N, T) - 2L)
  } else {
    check_choice(n_latent, c("penalised", "eigen_ratio", "growth_ratio", "ic_p2"), "n_latent")
  }
  fit <- structure(
    list(
      terms = colnames(data$factors), panel = panel, formula = formula, intercept = intercept,
      data = data, most = most, rule = if (fixed) "given" else n_latent, slot = panel$slot[data$kept],
      small_sample = rep(T / (T - 1), ncol(data$factors)), bandwidth_weights = rep(1, ncol(data$factors))
    ),
    class = c("lb_latent", "lb_fit")
  )
  found <- latent_core(fit, if (fixed) as.integer(n_latent) else integer())
  fit$eigenvalues <- as.numeric(found$eigenvalues)
  fit$n_found <- found$found
  fit <- with_pieces(fit, found$fits[[1L]])
  fit$call <- match.call()
  restate(fit, errors)
}

latent_core <- function(fit, counts, call = rlang::caller_env()) {
  core_result(cpp_latent(
    fit$data$returns, fit$data$factors, counts, if (fit$rule == "given") "penalised" else fit$rule,
    fit$most, fit$intercept
  ), call)
}

# The fit with the estimates of one number of components.
with_pieces <- function(fit, core) {
  fit$n_latent <- core$p
  fit$estimate <- stats::setNames(as.numeric(core$premium), fit$terms)
  fit$rows <- `colnames<-`(core$rows, fit$terms)
  fit$strength <- as.numeric(core$strength)
  fit$r_squared <- as.numeric(core$r_squared)
  fit$explained <- core$mean_r2
  fit
}

# Returns and factors in the periods that have every factor; refuses holes in the returns.
complete_returns <- function(panel, design, what, call = rlang::caller_env()) {
  factors <- factor_values(panel, design, call)
  kept <- which(rowSums(is.na(factors)) == 0L)
  if (length(kept) < 3L) {
    abort_sample("Fewer than three periods have a value of every factor.", call = call)
  }
  returns <- widen_column(panel, design$y)[kept, , drop = FALSE]
  holes <- colSums(!is.finite(returns))
  if (any(holes > 0)) {
    worst <- order(-holes)[seq_len(min(3L, sum(holes > 0)))]
    abort_sample(c(
      "{what} need{?s} a return of each asset in each period; {sum(holes > 0)} of {length(holes)} assets have holes.",
      x = "Most are missing for {first_few(paste0(format_key(panel$assets[worst]), ' (', holes[worst], ')'))}.",
      i = "Keep the assets that have all {length(kept)} periods, or a shorter stretch of periods."
    ), asset = panel$assets[worst], call = call)
  }
  list(returns = returns, factors = factors[kept, , drop = FALSE], kept = kept)
}

#' @rdname price_latent
#' @param fit From `price_latent()`.
#' @param n_latent_range Numbers of components to compare.
#' @return `latent_range()`: a tibble of class `lb_latent_range` with `n_latent`, `term`, `estimate`, `std.error`,
#'   `conf.low`, `conf.high`, under the errors of the fit; `autoplot()` draws it.
#' @export
latent_range <- function(fit, n_latent_range = seq_len(fit$most)) {
  if (!inherits(fit, "lb_latent")) {
    abort_input("{.arg fit} must come from {.fn price_latent}.")
  }
  largest <- min(dim(fit$data$returns)) - 2L
  if (!is.numeric(n_latent_range) || !length(n_latent_range) || anyNA(n_latent_range) ||
    any(n_latent_range < 1 | n_latent_range > largest | n_latent_range != floor(n_latent_range))) {
    abort_input("{.arg n_latent_range} must be whole numbers from 1 to {largest}.")
  }
  found <- latent_core(fit, as.integer(n_latent_range))
  rows <- lapply(found$fits, function(core) {
    one <- restate(with_pieces(fit, core), fit$errors)
    tibble::tibble(n_latent = core$p, tidy(one)[c("term", "estimate", "std.error", "conf.low", "conf.high")])
  })
  out <- vctrs::vec_rbind(!!!rows)
  structure(out, chosen = fit$n_latent, class = c("lb_latent_range", class(out)))
}

#' @export
tidy.lb_latent <- function(x, conf.level = 0.95, ...) {
  out <- NextMethod()
  out$strength <- x$strength
  out$strength.p.value <- stats::pchisq(x$strength, x$n_latent, lower.tail = FALSE)
  out$r.squared <- x$r_squared
  out
}

#' @export
glance.lb_latent <- function(x, ...) {
  tibble::tibble(
    n_latent = x$n_latent, rule = x$rule, n_found = if (x$rule == "given") NA_integer_ else x$n_found,
    explained = x$explained, n_assets = ncol(x$data$returns), n_periods = nrow(x$data$returns), errors = format(x$errors)
  )
}

#' @export
nobs.lb_latent <- function(object, ...) length(object$data$returns)

#' @export
print.lb_latent <- function(x, ...) {
  unit <- period_noun(x$panel)
  cat_lines("Premia of observed factors beside latent ones, three passes", strwrap(deparse1(x$formula), line_width()), "")
  tidied <- tidy(x)
  table <- coefficient_table(tidied)
  table$strength <- paste0("p ", trimws(format_p(tidied$strength.p.value)))
  table$R2 <- formatC(tidied$r.squared, digits = 2, format = "f")
  print_columns(table, right = names(table)[-1L])
  weak <- !(tidied$strength.p.value < 0.05)
  cat_lines(
    "",
    label_line("Premium", paste0("decimal a ", unit, ", for one unit of beta", if (x$intercept) "; cross-section with a constant")),
    label_line("Latent", paste0(
      count_of(x$n_latent, "component"), " (", latent_rule_name(x$rule), "), ", format(100 * x$explained, digits = 3), " % of the returns' variance",
      if (x$rule != "given" && x$n_found == 0L) "; the rule found none"
    )),
    label_line("Errors", paste0(x$covariance$phrase, "; ", reference_phrase(x$covariance))),
    label_line("Sample", paste0(count_of(ncol(x$data$returns), "asset"), ", ", count_of(nrow(x$data$returns), unit), " of ", format_count(length(x$panel$periods)))),
    if (any(weak)) {
      strwrap(paste0(
        first_few(tidied$term[weak]), if (sum(weak) > 1L) " are" else " is",
        " not related to the components (strength not significant at 5 %): a premium near zero with a small error is then automatic, no finding."
      ), line_width())
    }
  )
  invisible(x)
}

latent_rule_name <- function(rule) {
  c(given = "given", penalised = "penalised eigenvalues", eigen_ratio = "eigenvalue ratio", growth_ratio = "growth ratio", ic_p2 = "Bai-Ng ICp2")[[rule]]
}

#' @exportS3Method ggplot2::autoplot
autoplot.lb_latent <- function(object, n = 20L, ...) {
  rlang::check_installed("ggplot2")
  shown <- object$eigenvalues[seq_len(min(n, length(object$eigenvalues)))]
  data <- data.frame(j = seq_along(shown), value = shown / sum(object$eigenvalues))
  data$kept <- ifelse(data$j <= object$n_latent, "used", "left to the residual")
  ggplot2::ggplot(data, ggplot2::aes(x = .data$j, y = .data$value)) +
    ggplot2::geom_line(colour = figure_ink[["quiet"]], linewidth = 0.4) +
    ggplot2::geom_point(ggplot2::aes(shape = .data$kept, colour = .data$kept), size = 2.6) +
    ggplot2::scale_shape_manual(values = c(used = 16, `left to the residual` = 1)) +
    ggplot2::scale_colour_manual(values = unname(c(figure_ink["quiet"], figure_ink["main"]))) +
    ggplot2::scale_y_log10() +
    ggplot2::labs(
      title = "How many components the returns have", x = "component", y = "share of variance, log scale",
      caption = paste0(object$n_latent, " used: ", latent_rule_name(object$rule))
    ) +
    figure_look()
}

#' @export
plot.lb_latent <- function(x, ...) print(ggplot2::autoplot(x, ...))

#' @exportS3Method ggplot2::autoplot
autoplot.lb_latent_range <- function(object, ...) {
  rlang::check_installed("ggplot2")
  ggplot2::ggplot(object, ggplot2::aes(x = .data$n_latent, y = .data$estimate)) +
    ggplot2::geom_hline(yintercept = 0, linewidth = 0.3, colour = figure_ink[["quiet"]]) +
    ggplot2::geom_vline(xintercept = attr(object, "chosen"), linetype = "dashed", colour = figure_ink[["rival"]]) +
    ggplot2::geom_linerange(ggplot2::aes(ymin = .data$conf.low, ymax = .data$conf.high), colour = figure_ink[["quiet"]], linewidth = 1.1) +
    ggplot2::geom_point(colour = figure_ink[["main"]], size = 2.4) +
    ggplot2::facet_wrap(ggplot2::vars(.data$term), scales = "free_y") +
    ggplot2::labs(title = "Premium by number of components", x = "components", y = "premium, decimal a period", caption = "95 % intervals; dashed: the number in use") +
    figure_look()
}

#' @export
plot.lb_latent_range <- function(x, ...) print(ggplot2::autoplot(x, ...))
