#' Which set of traded factors has the higher Sharpe ratio?
#'
#' A model of traded factors prices assets better the higher the squared Sharpe ratio that its
#' factors reach; test assets play no part in that (Barillas and Shanken 2017).
#'
#' @param panel From [asset_panel()], with factors as columns that have one value a period; excess
#'   returns or returns of zero-cost portfolios.
#' @param model One-sided formula, such as `~ mkt + smb`.
#' @param rivals One-sided formula, or a list of them.
#' @param series `err_iid()` or `err_hac()`: the sum over periods in comparisons of models that are not
#'   nested.
#' @param draws Number of draws for the weights of the joint test, from R's random numbers.
#'
#' @details
#' * Nested models: the exact F test that the factors which only the larger has have zero
#'   intercepts on the smaller (Gibbons, Ross and Shanken 1989).
#' * Others with factors in common: first the same test of all factors that are not common on
#'   those that are; if it does not reject at the 5 % level, equality is not rejected and this
#'   p-value is shown. Otherwise the difference of squared Sharpe ratios against its standard error,
#'   normal.
#' * Nothing in common: the difference at once.
#' * With two or more rivals that are not nested with the model: whether the model is as good as all
#'   of them (Barillas, Kan, Robotti and Shanken 2020), row `"best"`.
#'
#' The normal test is conservative when Sharpe ratios are small against T^-1/2.
#'
#' @return A tibble of class `lb_sharpe` and `lb_test` with a row a rival and possibly `"best"`: `test` (the rival's formula),
#'   `statistic` (F or z; likelihood ratio for `"best"`), `num.df`, `den.df`, `p.value`, `note`,
#'   `difference` (model less rival, adjusted). `glance()` has a row a model: `model`, `squared`,
#'   `adjusted` (unbiased under normality), `std.error`, `n_factors`.
#'
#' @section Errors:
#' `lambdabar_error_input` for formulas that name no factor, or twelve rivals or more;
#' `lambdabar_error_rank` for collinear factors; `lambdabar_error_sample` for too few periods with all
#' factors.
#'
#' @references Barillas and Shanken (2017), Review of Financial Studies 30, 1316-1338. Barillas, Kan,
#' Robotti and Shanken (2020), Journal of Financial and Quantitative Analysis 55, 1840-1874. Gibbons,
#' Ross and Shanken (1989), Econometrica 57, 1121-1152.
#'
#' @examples
#' set.seed(1)
#' f <- matrix(rnorm(360, 0.004, 0.04), 120, dimnames = list(NULL, c("mkt", "smb", "hml")))
#' returns <- f %*% matrix(1, 3, 4) + rnorm(480, 0, 0.03)
#' panel <- asset_panel(stack_returns(returns, f), "asset", "period")
#' sharpe_test(panel, ~ mkt + smb, list(~ mkt, ~ mkt + hml))
#' @export
sharpe_test <- function(panel, model, rivals, series = err_iid(), draws = 20000) {
  check_panel(panel)
  check_series(series)
  check_whole(draws, "draws", 1000, 1e8)
  if (inherits(rivals, "formula")) rivals <- list(rivals)
  if (!is.list(rivals) || !length(rivals)) {
    abort_input("{.arg rivals} must be a one-sided formula such as {.code ~ mkt + hml}, or a list of them.")
  }
  designs <- lapply(c(list(model), unname(rivals)), traded_design, panel = panel)
  values <- lapply(designs, function(design) factor_values(panel, design))
  kept <- which(rowSums(is.na(do.call(cbind, values))) == 0L)
  most <- length(unique(unlist(lapply(values, colnames))))
  if (length(kept) < most + 3L) {
    abort_sample("{length(kept)} periods have all factors; {most} factors need {most + 3} or more.")
  }
  values <- lapply(values, function(x) x[kept, , drop = FALSE])
  slot <- panel$slot[kept] - 1L
  names <- vapply(designs, function(design) paste(design$terms[-1L], collapse = " + "), "")
  ratios <- lapply(values, function(x) core_result(cpp_squared_sharpe(x)))
  spread <- function(rows) core_result(cpp_sum_series(rows, slot, rep(1, ncol(rows)), series_options(series)))$S
  pairs <- lapply(seq_along(rivals) + 1L, function(j) sharpe_pair(values[[1L]], values[[j]], ratios[[1L]], ratios[[j]], spread))
  out <- data.frame(test = names[-1L], do.call(rbind, lapply(pairs, as.data.frame)))
  apart <- which(!out$nested) + 1L
  best <- NULL
  if (length(apart) > 1L) {
    if (length(apart) > 12L) {
      abort_input("At most twelve rivals that are not nested can be tested at once.")
    }
    rows <- vapply(apart, function(j) ratios[[1L]]$rows - ratios[[j]]$rows, numeric(length(kept)))
    delta <- vapply(apart, function(j) ratios[[1L]]$squared - ratios[[j]]$squared, 1)
    normal <- matrix(stats::rnorm(draws * length(apart)), draws)
    joint <- core_result(cpp_best_model(delta, spread(rows), normal))
    best <- data.frame(
      test = "best", statistic = joint$statistic, num.df = NA_real_, den.df = NA_real_, p.value = joint$p,
      note = paste0("as good as all ", length(apart), " rivals that are not nested, weighted chi-squares"), difference = NA_real_
    )
  }
  out <- rbind(out[c("test", "statistic", "num.df", "den.df", "p.value", "note", "difference")], best)
  result <- new_test(!!!out,
    title = paste0("Squared Sharpe ratio of ", names[1L], " against others, ", count_of(length(kept), period_noun(panel))),
    subtitle = paste0("Sum over periods: ", format(series)), reading = sharpe_reading(out, names[1L])
  )
  attr(result, "ratios") <- tibble::tibble(
    model = names, squared = vapply(ratios, `[[`, 1, "squared"), adjusted = vapply(ratios, `[[`, 1, "adjusted"),
    std.error = vapply(ratios, function(ratio) sqrt(spread(cbind(ratio$rows))[1L]), 1), n_factors = vapply(values, ncol, 1L)
  )
  class(result) <- c("lb_sharpe", class(result))
  result
}

# A one-sided formula of factors; the left side that make_design() wants is one of them.
traded_design <- function(formula, panel, call = rlang::caller_env(2)) {
  if (!inherits(formula, "formula") || length(formula) != 2L || !length(all.vars(formula))) {
    abort_input("Models are one-sided formulas of factors, such as {.code ~ mkt + smb}.", call = call)
  }
  factor_design(panel, stats::as.formula(call("~", as.name(all.vars(formula)[1L]), formula[[2L]]), environment(formula)), call)
}

sharpe_pair <- function(a, b, ratio_a, ratio_b, spread) {
  common <- intersect(colnames(a), colnames(b))
  only <- cbind(a[, setdiff(colnames(a), common), drop = FALSE], b[, setdiff(colnames(b), common), drop = FALSE])
  nested <- length(common) == min(ncol(a), ncol(b))
  out <- list(
    statistic = NA_real_, num.df = NA_real_, den.df = NA_real_, p.value = NA_real_, note = "",
    difference = ratio_a$adjusted - ratio_b$adjusted, nested = nested
  )
  if (!ncol(only)) {
    out$note <- "the same factors"
    return(out)
  }
  exact <- function(note) {
    grs <- core_result(cpp_grs(only, a[, common, drop = FALSE]))
    out[c("statistic", "num.df", "den.df")] <<- grs[c("statistic", "df1", "df2")]
    out$p.value <<- stats::pf(grs$statistic, grs$df1, grs$df2, lower.tail = FALSE)
    out$note <<- note
  }
  if (nested) {
    exact(paste0("nested: ", first_few(colnames(only)), " on ", first_few(common), ", F"))
    return(out)
  }
  if (length(common)) {
    exact("not rejected that factors which are not shared add nothing, F")
    if (is.na(out$p.value) || out$p.value > 0.05) {
      return(out)
    }
  }
  out$num.df <- out$den.df <- NA_real_
  error <- sqrt(spread(cbind(ratio_a$rows - ratio_b$rows))[1L])
  if (!(error > 1e-12 * sqrt(spread(cbind(ratio_a$rows))[1L]))) {
    out[c("statistic", "p.value")] <- NA_real_
    out$note <- "the same portfolios under other names"
    return(out)
  }
  out$statistic <- (ratio_a$squared - ratio_b$squared) / error
  out$p.value <- 2 * stats::pnorm(-abs(out$statistic))
  out$note <- "difference over its error, z"
  out
}

sharpe_reading <- function(out, name) {
  best <- out[out$test == "best", ]
  if (nrow(best)) {
    return(paste0(
      "That ", name, " has as high a Sharpe ratio as its rivals is ", if (best$p.value < 0.05) "rejected" else "not rejected",
      " at the 5 % level (p = ", trimws(format_p(best$p.value)), ")."
    ))
  }
  differ <- out$p.value < 0.05 & !is.na(out$p.value)
  if (any(differ)) {
    paste0("Equal Sharpe ratios are rejected at the 5 % level against ", first_few(out$test[differ]), ".")
  } else {
    "Equal Sharpe ratios are not rejected at the 5 % level."
  }
}

#' @export
print.lb_sharpe <- function(x, ...) {
  NextMethod()
  ratios <- attr(x, "ratios")
  if (is.null(ratios)) {
    return(invisible(x))
  }
  number <- function(value) formatC(value, digits = 4, format = "f")
  cat_lines("")
  print_columns(data.frame(
    model = ratios$model, squared = number(ratios$squared), adjusted = number(ratios$adjusted), error = number(ratios$std.error)
  ), right = c("squared", "adjusted", "error"))
  invisible(x)
}

#' @export
tidy.lb_sharpe <- function(x, ...) {
  attr(x, "ratios") <- NULL
  class(x) <- setdiff(class(x), "lb_sharpe")
  tidy(x)
}

#' @export
glance.lb_sharpe <- function(x, ...) attr(x, "ratios")
