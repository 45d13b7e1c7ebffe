#' One coefficient under many error structures, side by side
#'
#' The same coefficient as averaged premia under each structure, and as one pooled regression
#' under none, one-way and two-way clusters. When errors move a lot from one rung to another,
#' the dependence that the lower rung ignores is real, and the table says in which dimension
#' it lies.
#'
#' @param fit From [price_traits()], [price_factors()] or [pooled()].
#' @param ... Further [error structures][error_structures]; each becomes a rung on every
#'   estimator it applies to.
#' @param terms Terms to show; all but the constant by default.
#'
#' @details
#' The averaged rungs are independent periods, the Bartlett kernel by rule of thumb and with
#' the lags of Newey and West (1994), and the quadratic spectral kernel with Andrews' (1991)
#' bandwidth; for two-pass fits also the corrections for estimated betas and the stacked
#' moments. The pooled rungs are independent rows, heteroskedasticity, clusters by asset, by
#' period and by both. For a fit on characteristics the pooled rungs use the same formula, for
#' a pooled fit the averaged rungs do; for a two-pass fit the pooled regression has the
#' estimated betas on its right side. Rungs that cannot be computed are left out.
#'
#' The reading compares clustered errors with heteroskedasticity-consistent ones: a ratio
#' above 1.2 counts as dependence in that dimension.
#'
#' @return A tibble of class `lb_ladder`: `term`, `estimator` (`"averaged"` or `"pooled"`),
#'   `errors`, `estimate`, `std.error`, `statistic`, `p.value`, and `ratio`, the error over
#'   that of the estimator's plainest rung. The attribute `reading` has a sentence a term.
#'
#' @section Errors:
#' `lambdabar_error_input` when a term is not in the fit.
#'
#' @examples
#' panel <- asset_panel(demo_market(firms = 80, months = 60), "firm", "month")
#' error_ladder(price_traits(panel, ret ~ size + value), terms = "value")
#' @export
error_ladder <- function(fit, ..., terms = NULL) {
  check_fit(fit)
  more <- lapply(list(...), check_errors)
  if (is.null(terms)) terms <- setdiff(fit$terms, "(Intercept)")
  if (!length(terms)) terms <- fit$terms
  unknown <- setdiff(terms, fit$terms)
  if (length(unknown)) {
    abort_input("There is no term {.val {unknown}}; the terms are {.val {fit$terms}}.", term = unknown)
  }
  fits <- ladder_fits(fit)
  rungs <- lapply(fits, function(one) {
    structures <- c(ladder_structures(one), more)
    climb(one, structures[!duplicated(structures)], terms)
  })
  out <- do.call(rbind, rungs)
  out <- out[order(match(out$term, terms)), ]
  reading <- vapply(terms, function(term) read_ladder(out[out$term == term, ]), "")
  structure(tibble::as_tibble(out), reading = reading, class = c("lb_ladder", class(tibble::tibble())))
}

# The fit itself and its rival on the same formula; a rival that cannot be estimated (a term
# that varies over time only, say) is left out.
ladder_fits <- function(fit) {
  quietly <- function(code) suppressWarnings(tryCatch(code, lambdabar_error = function(e) NULL))
  if (inherits(fit, "lb_pooled")) {
    averaged <- quietly(price_traits(fit$panel, fit$formula, weights = fit$weights, errors = err_iid()))
    fits <- list(averaged, fit)
  } else if (is_two_pass(fit)) {
    fits <- list(fit, quietly(fit_pooled(fit$panel, beta_design(fit))))
  } else {
    fits <- list(fit, quietly(fit_pooled(fit$panel, fit$design, fit$weights)))
  }
  Filter(Negate(is.null), fits)
}

# Returns on each asset's betas: a beta is the asset's code looked up in a table.
beta_design <- function(fit) {
  code <- fit$panel$asset + 1L
  betas <- fit$first$beta
  columns <- lapply(seq_len(ncol(betas)), function(k) list(list(x = code, column = 0L, table = betas[, k])))
  list(
    y = fit$design$y, x = c(columns, fit$traits_design$x), weight = NULL,
    intercept = fit$intercept, terms = fit$terms,
    variables = c(fit$design$variables[1L], colnames(betas), fit$traits_design$variables[-1L]),
    formula = fit$formula
  )
}

ladder_structures <- function(fit) {
  if (inherits(fit, "lb_pooled")) {
    return(list(
      err_iid(), err_hetero(), err_cluster("asset"), err_cluster("period"), err_cluster("asset", "period"), err_common()
    ))
  }
  if (!is.null(fit$asset_rows)) {
    return(list(err_assets(realised = TRUE), err_assets(), err_assets(series = err_hac())))
  }
  series <- list(err_iid(), err_hac(), err_hac("newey_west"), err_hac("andrews", "qs"))
  if (fit$kind == "traits") {
    return(c(series, if (fit$average != "precision") list(err_cluster("asset"), err_cluster("asset", "period"))))
  }
  if (!is_two_pass(fit)) {
    return(series)
  }
  c(series, list(
    err_eiv("shanken"), err_eiv("shanken", err_hac()), err_eiv("robust"), err_moments(err_hac())
  ))
}

climb <- function(fit, structures, terms) {
  rungs <- list()
  for (errors in structures) {
    restated <- suppressWarnings(tryCatch(
      restate(fit, errors),
      lambdabar_error_unsupported = function(e) NULL, lambdabar_error_sample = function(e) NULL
    ))
    if (is.null(restated)) next
    tidied <- tidy(restated)
    rungs[[length(rungs) + 1L]] <- data.frame(
      term = tidied$term, estimator = if (inherits(fit, "lb_pooled")) "pooled" else "averaged",
      errors = format(errors),
      tidied[c("estimate", "std.error", "statistic", "p.value")]
    )
  }
  plain <- rungs[[1L]]$std.error
  out <- do.call(rbind, lapply(rungs, function(rung) cbind(rung, ratio = rung$std.error / plain)))
  out[out$term %in% terms, ]
}

read_ladder <- function(rungs) {
  error_of <- function(estimator, errors) {
    value <- rungs$std.error[rungs$estimator == estimator & rungs$errors == errors]
    if (length(value)) value[1L] else NA_real_
  }
  base <- error_of("pooled", format(err_hetero()))
  by_asset <- error_of("pooled", format(err_cluster("asset"))) / base
  by_period <- error_of("pooled", format(err_cluster("period"))) / base
  term <- rungs$term[1L]
  if (anyNA(c(by_asset, by_period))) {
    return(paste0(term, ": no pooled rungs to tell the dimension of the dependence."))
  }
  times <- function(ratio) paste0(formatC(ratio, digits = 1, format = "f"), " times")
  threshold <- 1.2
  if (by_asset <= threshold && by_period <= threshold) {
    text <- "clusters by asset or by period change little: the rows carry no strong dependence in either dimension."
  } else if (by_asset <= threshold) {
    text <- paste0(
      "dependence runs across assets within a period (clusters by period: ", times(by_period),
      " the row-by-row error). Averaged premia and clusters by period allow for it."
    )
  } else if (by_period <= threshold) {
    text <- paste0(
      "dependence runs over time within an asset (clusters by asset: ", times(by_asset),
      " the row-by-row error). The usual errors of averaged premia cannot see it: report errors clustered by asset, or by both."
    )
  } else {
    text <- paste0(
      "dependence runs in both dimensions (clusters by asset ", times(by_asset), ", by period ", times(by_period),
      " the row-by-row error): report errors clustered by both."
    )
  }
  paste0(term, ": ", text)
}

#' @export
print.lb_ladder <- function(x, ...) {
  if (!all(c("term", "estimator", "errors", "estimate", "std.error", "ratio") %in% names(x))) {
    return(NextMethod())
  }
  cat_lines("One coefficient under many error structures")
  for (term in unique(x$term)) {
    cat_lines("", term)
    rungs <- x[x$term == term, ]
    shown <- data.frame(
      errors = rungs$errors, error = format_figures(rungs$std.error),
      t = formatC(rungs$statistic, digits = 2, format = "f"), p = format_p(rungs$p.value),
      ratio = formatC(rungs$ratio, digits = 2, format = "f")
    )
    shown$errors <- formatC(shown$errors, width = -max(nchar(x$errors)))
    for (estimator in unique(rungs$estimator)) {
      own <- rungs$estimator == estimator
      estimate <- format_figures(rungs$estimate[own][1L], rungs$std.error[own])
      cat_lines(paste0("  ", estimator, ", estimate ", estimate))
      print_columns(shown[own, ], right = c("error", "t", "p", "ratio"), indent = 4L)
    }
  }
  reading <- attr(x, "reading")
  reading <- reading[names(reading) %in% x$term]
  if (length(reading)) cat_lines("", unlist(lapply(reading, strwrap, width = line_width(), exdent = 2L)))
  invisible(x)
}
