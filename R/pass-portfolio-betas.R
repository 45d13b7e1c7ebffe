#' Betas of sorted portfolios, assigned to their members
#'
#' Sorts assets at formation dates by characteristics and, last, by their own beta; estimates
#' one beta for each cell of the sort from the cell's returns over the whole sample; and gives
#' every member its cell's beta while it belongs to the cell (Fama and French 1992). Cell
#' betas are far less noisy than single ones, and change for an asset only when it moves.
#'
#' @param panel From [asset_panel()], n rows.
#' @param formula Returns on factors, as in [exposures()]. The sort is by the beta on the
#'   first factor; cells get betas on all.
#' @param sort_by Names of numeric columns to sort by before the beta, each inside the classes
#'   of the ones before, such as `"size"`; `NULL` for none.
#' @param groups Number of classes of each sort, the beta's last: one number for all, or
#'   one each.
#' @param window Window of the betas that are sorted on, with data up to the formation date.
#' @param formation Periods at which cells are formed, as they stand in the period column;
#'   by default the last period of each calendar year, or every twelfth period where periods
#'   are not dates. Membership starts with the period after and ends with the next formation.
#' @param reference Name of a logical column: breakpoints come from the assets where it is
#'   `TRUE` (one board of the exchange), or `NULL` for all.
#' @param lead_lag Leads and lags in the betas of the cells, see [exposures()].
#'
#' @details Breakpoints are quantiles by linear interpolation; the class of a value is one
#'   more than the number of breakpoints strictly below it, so ties stay together. A class
#'   without reference assets takes the breakpoints of all its members. A cell's return is the
#'   equal-weighted mean of its members' returns.
#'
#' @return A tibble of class `lb_portfolio_betas` in the order of the panel's rows: the two key
#'   columns, `cell` (such as `"3.7"`; `NA` without one) and `beta_<factor>`. The attribute
#'   `cells` has a row a cell and factor: `cell`, `term`, `estimate`, `std.error`, `n_obs`,
#'   `mean_members`; `formations` has `period`, `n_assets`, `n_without` (assets present that
#'   lack a value to sort by).
#'
#' @section Assumptions: Betas of a cell are constant over the sample. They use returns from
#'   after the periods that they price: they describe, they do not predict.
#' @section Errors: `lambdabar_error_input` for columns, periods or arguments;
#'   `lambdabar_error_sample` when no asset can be sorted at any formation.
#' @references Fama and French (1992), Journal of Finance 47, 427-465. Dimson (1979), Journal of
#'   Financial Economics 7, 197-226.
#' @examples
#' market <- demo_market(firms = 120, months = 96)
#' panel <- asset_panel(market, "firm", "month")
#' sorted <- assign_portfolio_betas(panel, ret ~ mkt, sort_by = "size", groups = c(2, 3))
#' sorted
#' market$beta_mkt <- sorted$beta_mkt
#' price_traits(asset_panel(market, "firm", "month"), ret ~ beta_mkt + size)
#' @export
assign_portfolio_betas <- function(panel, formula, sort_by = NULL, groups = 10,
                                   window = window_rolling(60, min_obs = 24), formation = NULL,
                                   reference = NULL, lead_lag = c(0, 1)) {
  check_panel(panel)
  check_window(window, "window")
  values <- lapply(sort_by, function(name) {
    check_column(panel$data, name, "sort_by")
    if (!is_plain_number(panel$data[[name]])) {
      abort_input("The column {.val {name}} in {.arg sort_by} must be numeric.", column = name)
    }
    as.double(panel$data[[name]])
  })
  groups <- check_groups(groups, length(values) + 1L)
  is_reference <- reference_rows(panel, reference)
  formed <- formation_periods(panel, formation)
  betas <- exposures(panel, formula, window = window)
  own <- betas$answer$beta[, 1L]
  if (window$kind == "full") own <- own[panel$asset + 1L]
  values <- c(values, list(own))

  cells <- form_cells(panel, values, groups, is_reference, formed)
  n_cells <- prod(groups)
  means <- cpp_cell_means(betas$first_pass$y, panel$period, length(panel$periods), cells$of_row, n_cells)
  names <- cell_names(groups)
  full <- cell_betas(panel, means, names, betas$first_pass, lead_lag)
  out <- panel$data[panel$key]
  out$cell <- names[ifelse(cells$of_row < 0L, NA, cells$of_row + 1L)]
  for (k in seq_along(betas$terms)) {
    out[[paste0("beta_", betas$terms[k])]] <- full$beta[, k][match(out$cell, names)]
  }
  structure(
    tibble::as_tibble(as.list(out)), cells = full$table, formations = cells$formations, lead_lag = lead_lag,
    class = c("lb_portfolio_betas", class(tibble::tibble()))
  )
}

check_groups <- function(groups, n_sorts, call = rlang::caller_env()) {
  fine <- is.numeric(groups) && length(groups) %in% c(1L, n_sorts) && all(is.finite(groups)) &&
    all(groups >= 1 & groups <= 1000 & groups == floor(groups))
  if (!fine) {
    abort_input("{.arg groups} must be one whole number, or {n_sorts}: one for each sort, the beta's last.", call = call)
  }
  rep_len(as.integer(groups), n_sorts)
}

reference_rows <- function(panel, reference, call = rlang::caller_env()) {
  if (is.null(reference)) {
    return(rep(TRUE, nrow(panel$data)))
  }
  check_column(panel$data, reference, "reference", call)
  value <- panel$data[[reference]]
  if (!is.logical(value)) {
    abort_input("The column {.val {reference}} in {.arg reference} must be {.code TRUE} or {.code FALSE}.", column = reference, call = call)
  }
  value & !is.na(value)
}

# Positions of the formation periods.
formation_periods <- function(panel, formation, call = rlang::caller_env()) {
  labels <- panel$periods
  T <- length(labels)
  if (is.null(formation)) {
    if (!inherits(labels, c("Date", "POSIXct", "lb_month"))) {
      return(seq_len(T)[seq_len(T) %% 12L == 0L])
    }
    year <- calendar_units(panel, "year")
    return(which(!duplicated(year, fromLast = TRUE)))
  }
  at <- match(formation, user_periods(labels))
  if (anyNA(at)) {
    lost <- format_key(formation[is.na(at)])
    abort_input("{cli::qty(lost)}Formation period{?s} {.val {lost}} {?is/are} not in the panel.", period = lost, call = call)
  }
  sort(unique(at))
}

# The cell of each row, 0-based, -1 for none, and what each formation sorted.
form_cells <- function(panel, values, groups, is_reference, formed, call = rlang::caller_env()) {
  T <- length(panel$periods)
  N <- length(panel$assets)
  # The formation whose cells hold in a period: the last one before it.
  holds <- findInterval(seq_len(T) - 0.5, formed)
  by_formation <- matrix(-1L, N, length(formed))
  n_assets <- n_without <- numeric(length(formed))
  complete <- Reduce(`&`, lapply(values, is.finite))
  rows_of <- split(seq_along(panel$period), factor(panel$period + 1L, levels = formed))
  for (f in seq_along(formed)) {
    present <- rows_of[[f]]
    rows <- present[complete[present]]
    cell <- integer(length(rows))
    n_cells <- 1L
    for (s in seq_along(values)) {
      cell <- cpp_refine_cells(values[[s]][rows], is_reference[rows], cell, n_cells, groups[s])
      n_cells <- n_cells * groups[s]
    }
    by_formation[panel$asset[rows] + 1L, f] <- cell
    n_assets[f] <- length(rows)
    n_without[f] <- length(present) - length(rows)
  }
  if (!any(n_assets > 0)) {
    abort_sample(c(
      "At none of {length(formed)} formation{?s} has an asset all that it is sorted by.",
      i = "The window of the betas may be longer than the sample before the formations."
    ), call = call)
  }
  formation <- holds[panel$period + 1L]
  of_row <- rep(-1L, length(formation))
  formed_yet <- formation > 0L
  of_row[formed_yet] <- by_formation[cbind(panel$asset[formed_yet] + 1L, formation[formed_yet])]
  list(
    of_row = of_row,
    formations = tibble::tibble(period = user_periods(panel$periods[formed]), n_assets = n_assets, n_without = n_without)
  )
}

# "3.7": class 3 of the first sort, class 7 of the second; the last sort varies fastest.
cell_names <- function(groups) {
  Reduce(function(left, n) as.vector(t(outer(left, seq_len(n), paste, sep = "."))), groups[-1L], as.character(seq_len(groups[1L])))
}

# Whole-sample betas of the cells' own returns.
cell_betas <- function(panel, means, names, first_pass, lead_lag, call = rlang::caller_env()) {
  T <- nrow(means$mean)
  factors <- first_pass$factors[panel$slot, , drop = FALSE]
  colnames(factors) <- paste0("f", seq_len(ncol(factors)))
  rows <- stack_returns(`colnames<-`(means$mean, names), factors, period = panel$periods)
  cells <- suppressMessages(asset_panel(rows, "asset", "period", frequency = "observed"))
  cells$slot <- panel$slot
  cells$slot_labels <- panel$slot_labels
  betas <- exposures(cells, stats::reformulate(colnames(factors), "ret"), lead_lag = lead_lag)
  at <- match(names, cells$assets)
  K <- ncol(factors)
  mean_members <- colSums(means$count) / pmax(1, colSums(means$count > 0))
  list(
    beta = betas$answer$beta[at, , drop = FALSE],
    table = tibble::tibble(
      cell = rep(names, each = K), term = rep(first_pass$terms, length(names)),
      estimate = as.vector(t(betas$answer$beta[at, , drop = FALSE])),
      std.error = as.vector(t(betas$answer$std_error[at, , drop = FALSE])),
      n_obs = rep(betas$answer$n_obs[at], each = K), mean_members = rep(mean_members, each = K)
    )
  )
}

#' @export
print.lb_portfolio_betas <- function(x, ...) {
  cells <- attr(x, "cells")
  if (is.null(cells) || !"cell" %in% names(x)) {
    return(NextMethod())
  }
  formations <- attr(x, "formations")
  cat_lines("Betas of sorted portfolios, assigned to their members", "")
  shares <- do.call(rbind, lapply(split(cells, factor(cells$term, unique(cells$term))), function(own) {
    figures <- function(v) formatC(v, digits = 3, format = "f")
    data.frame(
      factor = own$term[1L], lowest = figures(min(own$estimate, na.rm = TRUE)), median = figures(stats::median(own$estimate, na.rm = TRUE)),
      highest = figures(max(own$estimate, na.rm = TRUE)), `median error` = figures(stats::median(own$std.error, na.rm = TRUE)), check.names = FALSE
    )
  }))
  print_columns(shares, right = names(shares)[-1L])
  cat_lines(
    "",
    label_line("Cells", paste0(
      format_count(length(unique(cells$cell))), ", ", format(mean(cells$mean_members), digits = 3), " members on average"
    )),
    label_line("Formed", paste0(
      count_of(sum(formations$n_assets > 0), "time"), "; ", format_count(sum(formations$n_without)),
      " times an asset lacked a value to sort by"
    )),
    label_line("Assigned", paste0(format_count(sum(!is.na(x$cell))), " of ", format_count(nrow(x)), " rows")),
    label_line("Caution", "cell betas use returns from after the period: they describe, they do not predict")
  )
  invisible(x)
}
