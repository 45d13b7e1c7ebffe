#' Mean-variance frontiers of test assets and factors
#'
#' @param panel From [asset_panel()], complete in the periods that have all factors.
#' @param formula The assets' returns on traded factors, such as `ret ~ mkt + smb`; all of one kind
#'   (all excess returns, or all raw).
#' @param points Number of points of each curve.
#' @param adjust Whether variances have divisor T - 1 (`TRUE`) or T.
#'
#' @details Curves are those of the sample: in-sample frontiers are too good, the more so the more
#' assets there are for the periods at hand.
#'
#' @return A tibble of class `lb_frontier`: `set` (`"assets"`, `"factors"`, `"both"`), `mean`, `sd`, `efficient`
#'   (on the upper branch). Attributes: `weights`, a tibble with the weights (`set`, `name`,
#'   `least_variance`, `tangency`: the portfolio of the highest Sharpe ratio, which adds up to one);
#'   `singles`, means and standard deviations of the assets and factors themselves. `autoplot()` draws
#'   them.
#'
#' @section Errors: `lambdabar_error_sample` when returns have holes or when there are not more periods
#' than assets and factors; `lambdabar_error_rank` for collinear returns.
#'
#' @references Merton (1972), Journal of Financial and Quantitative Analysis 7, 1851-1872.
#'
#' @examples
#' set.seed(1)
#' f <- matrix(rnorm(240, 0.006, 0.04), 120, dimnames = list(NULL, c("mkt", "smb")))
#' returns <- f %*% matrix(runif(12), 2) + rnorm(720, 0, 0.03)
#' frontier(asset_panel(stack_returns(returns, f), "asset", "period"), ret ~ mkt + smb)
#' @export
frontier <- function(panel, formula, points = 101, adjust = TRUE) {
  check_panel(panel)
  check_whole(points, "points", 3, 1e5)
  check_flag(adjust, "adjust")
  data <- complete_returns(panel, factor_design(panel, formula), "Frontiers")
  assets <- data$returns
  colnames(assets) <- format_key(panel$assets)
  sets <- list(assets = assets, factors = data$factors, both = cbind(assets, data$factors))
  T <- nrow(assets)
  if (T <= ncol(sets$both) + 1L) {
    abort_sample("A frontier of {ncol(sets$both)} assets and factors needs more than {ncol(sets$both) + 1} periods; here are {T}.")
  }
  sets <- sets[vapply(sets, ncol, 1L) > 1L]
  call <- rlang::current_env()
  found <- lapply(names(sets), function(name) {
    core <- cpp_frontier(sets[[name]], adjust)
    if (inherits(core, "lb_core_error")) {
      column <- colnames(sets[[name]])[core$facts$asset]
      abort_rank("The returns are collinear: {.val {column}} is spanned by others.", column = column, call = call)
    }
    core$name <- name
    core
  })
  means <- range(colMeans(sets$both))
  reach <- means + c(-0.25, 0.25) * max(diff(means), 1e-12)
  curves <- lapply(found, function(core) {
    mean <- seq(reach[1L], reach[2L], length.out = points)
    variance <- core$least_variance + (mean - core$least_mean)^2 * core$curvature
    tibble::tibble(set = core$name, mean = mean, sd = sqrt(variance), efficient = mean >= core$least_mean)
  })
  weights <- lapply(found, function(core) {
    tibble::tibble(
      set = core$name, name = colnames(sets[[core$name]]), least_variance = as.numeric(core$least), tangency = as.numeric(core$tangency)
    )
  })
  singles <- sets[["both"]]
  factor <- if (adjust) T - 1 else T
  out <- vctrs::vec_rbind(!!!curves)
  structure(out,
    weights = vctrs::vec_rbind(!!!weights),
    singles = tibble::tibble(
      name = colnames(singles), kind = rep(c("asset", "factor"), c(ncol(assets), ncol(data$factors))),
      mean = unname(colMeans(singles)), sd = unname(sqrt(colSums(sweep(singles, 2L, colMeans(singles))^2) / factor))
    ),
    sharpe = stats::setNames(vapply(found, `[[`, 1, "sharpe"), names(sets)), unit = period_noun(panel), n_periods = T, title = deparse1(formula),
    class = c("lb_frontier", class(out))
  )
}

#' @export
print.lb_frontier <- function(x, ...) {
  weights <- attr(x, "weights")
  if (is.null(weights)) {
    return(NextMethod())
  }
  cat_lines(paste0("Mean-variance frontiers, ", count_of(attr(x, "n_periods"), attr(x, "unit"))), strwrap(attr(x, "title"), line_width()), "")
  least <- vapply(split(x$sd, factor(x$set, unique(x$set))), min, 1)
  print_columns(data.frame(
    set = names(least), columns = as.character(table(factor(weights$set, unique(x$set)))), `least sd` = formatC(least, digits = 4, format = "g"),
    `highest Sharpe ratio` = formatC(attr(x, "sharpe")[names(least)], digits = 3, format = "f"), check.names = FALSE
  ), right = c("columns", "least sd", "highest Sharpe ratio"))
  cat_lines("", strwrap("Frontiers of the sample: they are too good, the more so the more assets there are. Weights are in attr(, \"weights\").", line_width()))
  invisible(x)
}

#' @exportS3Method ggplot2::autoplot
autoplot.lb_frontier <- function(object, ...) {
  rlang::check_installed("ggplot2")
  singles <- attr(object, "singles")
  kinds <- c(assets = "solid", factors = "dashed", both = "dotted")
  inks <- c(assets = figure_ink[["main"]], factors = figure_ink[["rival"]], both = figure_ink[["third"]])
  ggplot2::ggplot(object, ggplot2::aes(x = .data$sd, y = .data$mean)) +
    ggplot2::geom_path(ggplot2::aes(colour = .data$set, linetype = .data$set), linewidth = 0.8) +
    ggplot2::geom_point(data = singles, ggplot2::aes(shape = .data$kind), colour = "#3c4247", size = 2) +
    ggplot2::scale_linetype_manual(values = kinds) +
    ggplot2::scale_colour_manual(values = inks) +
    ggplot2::scale_shape_manual(values = c(asset = 1, factor = 17)) +
    ggplot2::coord_cartesian(xlim = c(0, 1.15 * max(singles$sd))) +
    ggplot2::labs(
      title = "Mean-variance frontiers", subtitle = attr(object, "title"), x = "standard deviation", y = "mean, decimal a period",
      caption = "frontiers of the sample: too good, the more so the more assets there are"
    ) +
    figure_look()
}

#' @export
plot.lb_frontier <- function(x, ...) print(ggplot2::autoplot(x, ...))
