#' What is wrong, or odd, with a panel
#'
#' Looks at the calendar and at each numeric column before anything is estimated.
#'
#' @param panel From [asset_panel()].
#' @param columns Names of the columns to look at; all numeric columns but the keys by default.
#'
#' @return A tibble of class `lb_health` with one row a check and column:
#'   `check`, `column` (`NA` for the panel as a whole), `count` (how many rows, assets or
#'   periods), `of` (out of how many), `verdict` (`"fine"`, `"note"` or `"look"`) and `detail`.
#'   The checks are
#'   * `duplicates`: pairs of keys that occur twice (always 0: [asset_panel()] refuses them);
#'   * `absent periods`: calendar periods without any row;
#'   * `gaps`: assets that vanish and come back, with the missing rows in `detail`;
#'   * `thin periods`: periods with fewer than ten assets;
#'   * `missing`, `infinite`: rows without a usable value;
#'   * `constant`: periods (with two assets or more) inside which the column has one value.
#'     When that is every period, no cross-section can learn from it: it can be a factor for
#'     [price_factors()], not a term of [price_traits()];
#'   * `unit slip`: periods whose mean size is more than 30 times, or less than a thirtieth
#'     of, the median period's;
#'   * `percent`: the column looks like returns in percent. It applies to columns that take
#'     both signs and whose name contains `ret`, or that are constant inside every period
#'     (factors): a return below -1, or a typical size above 0.3, cannot well be a decimal.
#'
#' @section Errors:
#' `lambdabar_error_input` when a column does not exist or is not numeric.
#'
#' @examples
#' panel_health(asset_panel(demo_market(firms = 60, months = 48), "firm", "month"))
#' @export
panel_health <- function(panel, columns = NULL) {
  check_panel(panel)
  data <- panel$data
  candidates <- setdiff(names(data), panel$key)
  if (is.null(columns)) {
    columns <- candidates[vapply(candidates, function(name) is_plain_number(data[[name]]), NA)]
  }
  for (name in columns) {
    check_column(data, name, "columns")
    if (!is_plain_number(data[[name]])) {
      abort_input("Column {.val {name}} is not numeric.", column = name)
    }
  }
  rows <- c(list(panel_findings(panel)), lapply(columns, column_findings, panel = panel))
  out <- do.call(rbind, rows)
  structure(tibble::as_tibble(out), class = c("lb_health", "tbl_df", "tbl", "data.frame"))
}

is_plain_number <- function(x) is.numeric(x) && is.null(dim(x)) && !inherits(x, "integer64")

finding <- function(check, column, count, of, verdict, detail) {
  data.frame(
    check = check, column = column, count = as.numeric(count), of = as.numeric(of),
    verdict = verdict, detail = detail
  )
}

panel_findings <- function(panel) {
  spans <- cpp_asset_spans(panel$asset, panel$period, length(panel$assets), panel$slot)
  holes <- spans$last_slot - spans$first_slot + 1 - spans$n_rows
  gappy <- which(holes > 0)
  worst <- gappy[order(-holes[gappy])]
  n_slots <- length(panel$slot_labels)
  absent <- format_key(panel$slot_labels[setdiff(seq_len(n_slots), panel$slot)])
  thin <- which(spans$n_assets < 10)
  rbind(
    finding("duplicates", NA, 0, nrow(panel$data), "fine", "each asset has one row a period"),
    finding(
      "absent periods", NA, length(absent), n_slots, if (length(absent)) "look" else "fine",
      if (length(absent)) first_few(absent) else "the calendar has no hole"
    ),
    finding(
      "gaps", NA, length(gappy), length(panel$assets), if (length(gappy)) "note" else "fine",
      if (length(gappy)) {
        paste0(
          format_count(sum(holes)), " missing rows inside asset lives; most in ",
          first_few(format_key(panel$assets[worst]), 3L)
        )
      } else {
        "no asset vanishes and comes back"
      }
    ),
    finding(
      "thin periods", NA, length(thin), length(panel$periods), if (length(thin)) "look" else "fine",
      if (length(thin)) {
        first_few(paste0(format_key(panel$periods[thin]), " (", spans$n_assets[thin], ")"), 3L)
      } else {
        paste0(min(spans$n_assets), " to ", max(spans$n_assets), " assets a period")
      }
    )
  )
}

column_findings <- function(name, panel) {
  health <- cpp_column_health(panel$data[[name]], panel$period, length(panel$periods))
  n <- nrow(panel$data)
  range <- if (is.finite(health$minimum)) {
    paste0("range ", format(health$minimum, digits = 3), " to ", format(health$maximum, digits = 3))
  } else {
    "no finite value"
  }
  out <- rbind(
    finding(
      "missing", name, health$n_missing, n,
      if (health$n_missing == n) "look" else if (health$n_missing > 0) "note" else "fine", range
    ),
    if (health$n_infinite > 0) {
      finding("infinite", name, health$n_infinite, n, "look", "such rows never enter an estimate")
    },
    constant_finding(name, health),
    slip_finding(name, health, panel),
    percent_finding(name, health)
  )
  out
}

always_constant <- function(health) {
  health$n_periods_compared > 0 && health$n_periods_constant == health$n_periods_compared
}

constant_finding <- function(name, health) {
  if (health$n_periods_constant == 0) {
    return(NULL)
  }
  all <- always_constant(health)
  finding(
    "constant", name, health$n_periods_constant, health$n_periods_compared,
    if (all) "note" else "look",
    if (all) {
      "one value a period, as a factor has"
    } else {
      "those cross-sections cannot learn from it"
    }
  )
}

slip_finding <- function(name, health, panel) {
  typical <- stats::median(health$mean_size, na.rm = TRUE)
  # A factor's size differs a lot from period to period without any slip.
  if (always_constant(health) || !is.finite(typical) || typical == 0) {
    return(NULL)
  }
  ratio <- health$mean_size / typical
  odd <- which(ratio > 30 | ratio < 1 / 30)
  if (!length(odd)) {
    return(NULL)
  }
  where <- paste0(format_key(panel$periods[odd]), " (", format(ratio[odd], digits = 2, trim = TRUE), " times)")
  finding("unit slip", name, length(odd), length(health$mean_size), "look", first_few(where, 3L))
}

percent_finding <- function(name, health) {
  both_signs <- isTRUE(health$minimum < 0 && health$maximum > 0)
  like_return <- both_signs && (grepl("ret", name, ignore.case = TRUE) || always_constant(health))
  typical <- stats::median(health$mean_size, na.rm = TRUE)
  if (!like_return || !(health$minimum < -1 || typical > 0.3)) {
    return(NULL)
  }
  finding(
    "percent", name, sum(health$mean_size > 0.3, na.rm = TRUE), length(health$mean_size), "look",
    paste0("typical size ", format(typical, digits = 2), ": percent? The package takes decimals")
  )
}

#' @export
print.lb_health <- function(x, ...) {
  looks <- sum(x$verdict == "look")
  shown <- data.frame(
    check = x$check,
    column = ifelse(is.na(x$column), "", x$column),
    found = vapply(x$count, format_count, ""),
    verdict = x$verdict,
    detail = ifelse(x$count > 0, paste0("of ", vapply(x$of, format_count, ""), ": ", x$detail), x$detail)
  )
  cat_lines(paste0("Panel health: ", if (looks) count_of(looks, "finding") else "nothing", " to look at"), "")
  print_columns(shown, right = "found", wrap = "detail")
  invisible(x)
}
