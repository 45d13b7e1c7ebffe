#' Declare a panel: one row for an asset in a period
#'
#' Checks the keys once and gives each asset and each period a code. The columns of `data`
#' are kept as they are and read in place by every later step: nothing is copied or sorted,
#' and the rows may come in any order.
#'
#' @param data A data frame, tibble or data.table with n rows, one for an asset in a period.
#' @param asset,period Names of the two key columns, as strings.
#'   * `asset` may be character, factor, integer or numeric.
#'   * `period` may be Date, POSIXct (its date in its own time zone is used when every time
#'     of day is the same, the exact instant otherwise), integer, numeric, factor (ordered by
#'     its levels) or character (ISO dates, `"yyyy-mm"` or numbers; other text has no order
#'     in time and is refused). Whole numbers that all read as `yyyymm` become months and
#'     those that all read as `yyyymmdd` become dates; a message says so.
#' @param frequency The calendar, so that gaps are known and lags count calendar periods:
#'   * `"auto"` (default): months, quarters, years or weeks when the dates fit one of them (no
#'     two in the same month, say), whole-number steps for numbers, else `"observed"`;
#'   * `"month"`, `"quarter"`, `"year"`, `"week"` (weeks start on Monday), `"day"` (every
#'     calendar day): dates only; two periods in one calendar slot are an error;
#'   * `"step"`: numbers; the step is the greatest common one;
#'   * `"observed"`: the periods that occur, in order, are the calendar. Right for trading
#'     days, whose holidays nobody declared.
#'
#' @return An object of class `lb_panel`. It holds `data` itself, the codes, and the calendar.
#'   `nobs()` gives n.
#'
#' @section Errors:
#' * `lambdabar_error_keys`: a missing key, a pair of keys that occurs twice (fields `rows`,
#'   `asset`, `period`, `count`), a key column of a type that cannot be one, or two periods in
#'   one calendar slot.
#' * `lambdabar_error_input`: `data` is not a data frame or has no rows, a column is not there.
#'
#' @examples
#' market <- demo_market(firms = 40, months = 60)
#' asset_panel(market, asset = "firm", period = "month")
#'
#' # Rows of the first firm, with its last year missing: gaps are known, not guessed
#' some <- market[!(market$firm == market$firm[1] & market$month > 202301), ]
#' panel_health(asset_panel(some, "firm", "month"))
#' @export
asset_panel <- function(data, asset, period, frequency = "auto") {
  if (!is.data.frame(data)) {
    abort_input(c(
      "{.arg data} must be a data frame, not {.obj_type_friendly {data}}.",
      i = "For a matrix with one column an asset, use {.fn stack_returns} first."
    ))
  }
  check_column(data, asset, "asset")
  check_column(data, period, "period")
  if (identical(asset, period)) {
    abort_input("{.arg asset} and {.arg period} name the same column, {.val {asset}}.")
  }
  if (nrow(data) == 0L) {
    abort_input("{.arg data} has no rows.")
  }
  frequency <- check_choice(frequency, frequency_names(), "frequency")

  assets <- encode_key(data[[asset]], asset, "asset")
  periods <- encode_key(data[[period]], period, "period")
  refuse_missing_keys(data, assets, periods, asset, period)
  calendar <- make_calendar(periods$values, frequency, period)

  panel <- structure(
    list(
      data = data, key = c(asset = asset, period = period),
      asset = assets$code, assets = assets$values,
      period = relabel(periods$code, calendar$order), periods = calendar$labels,
      slot = calendar$slot, slot_labels = calendar$slot_labels,
      frequency = calendar$frequency, read_as = calendar$read_as
    ),
    class = "lb_panel"
  )
  refuse_duplicates(panel)
  if (!is.null(calendar$read_as)) {
    cli::cli_inform(
      "Period key {.field {period}} is read as {calendar$read_as}.",
      class = "lambdabar_message_keys"
    )
  }
  panel
}

frequency_names <- function() {
  c("auto", "month", "quarter", "year", "week", "day", "step", "observed")
}

check_choice <- function(value, choices, arg, call = rlang::caller_env()) {
  if (!is.character(value) || length(value) != 1L || !value %in% choices) {
    abort_input("{.arg {arg}} must be one of {.or {.val {choices}}}.", call = call)
  }
  value
}

check_column <- function(data, name, arg, call = rlang::caller_env()) {
  if (!is.character(name) || length(name) != 1L || is.na(name)) {
    abort_input("{.arg {arg}} must be the name of one column, as a string.", call = call)
  }
  if (!name %in% names(data)) {
    near <- agrep(name, names(data), max.distance = 0.3, value = TRUE)
    abort_input(
      c(
        "There is no column {.val {name}} in the data ({.arg {arg}}).",
        i = if (length(near)) "Did you mean {.or {.val {near}}}?",
        i = "The columns are {.val {names(data)}}."
      ),
      column = name, call = call
    )
  }
  invisible(name)
}

check_panel <- function(panel, call = rlang::caller_env()) {
  if (!inherits(panel, "lb_panel")) {
    abort_input(
      "{.arg panel} must come from {.fn asset_panel}, not {.obj_type_friendly {panel}}.",
      call = call
    )
  }
  invisible(panel)
}

# Codes 0 .. G-1 in the order of the sorted values, and those values.
encode_key <- function(x, name, role, call = rlang::caller_env()) {
  if (inherits(x, "POSIXlt") || is.list(x) || is.complex(x) || is.raw(x) ||
        is.logical(x) || !is.null(dim(x)) || inherits(x, "integer64")) {
    what <- class(x)[1L]
    abort_keys(
      c(
        "Column {.val {name}} of type {.cls {what}} cannot be the {role} key.",
        i = if (what == "integer64") {
          "Convert it first, with {.code as.numeric()} or {.code as.character()}."
        } else {
          "Use a Date, date-time, number, factor or text column."
        }
      ),
      column = name, call = call
    )
  }
  encoded <- cpp_encode(x)
  values <- x[encoded$first]
  if (is.factor(x)) {
    values <- droplevels(values)
    rank <- order(as.integer(values))
  } else if (is.character(x)) {
    # One text in two encodings has two addresses: translate, then look again.
    values <- enc2utf8(values)
    same <- match(values, values)
    if (any(same != seq_along(values))) {
      keep <- unique(same)
      encoded$code <- relabel(encoded$code, keep, from = same)
      values <- values[keep]
    }
    rank <- order(values, method = "radix")
  } else {
    if (any(is.infinite(unclass(values)))) {
      abort_keys("The {role} key {.val {name}} has infinite values.", column = name, call = call)
    }
    rank <- order(values)
  }
  list(code = relabel(encoded$code, rank), values = values[rank])
}

# New codes after the values were put in the order `keep` (positions of old codes). `from`
# maps an old code to the position that stands for it.
relabel <- function(code, keep, from = NULL) {
  if (is.null(from) && !is.unsorted(keep) && length(keep) == keep[length(keep)]) {
    return(code)
  }
  new <- integer(max(keep, from))
  new[keep] <- seq_along(keep) - 1L
  if (!is.null(from)) new <- new[from]
  cpp_relabel(code, new)
}

refuse_missing_keys <- function(data, assets, periods, asset, period,
                                call = rlang::caller_env()) {
  for (role in c("asset", "period")) {
    code <- if (role == "asset") assets$code else periods$code
    lost <- cpp_missing_codes(code, 5L)
    if (lost$count == 0) next
    column <- if (role == "asset") asset else period
    other <- if (role == "asset") period else asset
    where <- paste0("row ", lost$rows, " (", other, " ", format_key(data[[other]][lost$rows]), ")")
    abort_keys(
      c(
        "The {role} key {.val {column}} is missing in {lost$count} row{?s}.",
        x = "{first_few(where)}.",
        i = "Fill the keys or remove those rows before {.fn asset_panel}."
      ),
      column = column, rows = lost$rows, count = lost$count, call = call
    )
  }
}

refuse_duplicates <- function(panel, call = rlang::caller_env()) {
  found <- cpp_duplicates(panel$asset, panel$period, length(panel$assets), length(panel$periods), 5L)
  if (found$count == 0) {
    return(invisible())
  }
  rows <- found$rows
  assets <- panel$assets[panel$asset[rows] + 1L]
  periods <- panel$periods[panel$period[rows] + 1L]
  pairs <- paste0(format_key(assets), " in ", format_key(periods), " (rows ", found$earlier, " and ", rows, ")")
  abort_keys(
    c(
      "{found$count} row{?s} repeat{?s/} an asset and period that already occurred.",
      x = "{first_few(pairs)}.",
      i = "An asset may have one row a period: remove, average or re-key the repeats."
    ),
    rows = rows, asset = assets, period = periods, count = found$count, call = call
  )
}

format_key <- function(x) {
  if (inherits(x, "lb_month")) x <- format(x)
  if (is.numeric(x) && !inherits(x, c("Date", "POSIXct"))) format(x, trim = TRUE, scientific = FALSE) else as.character(x)
}

#' @export
print.lb_panel <- function(x, ...) {
  n <- nrow(x$data)
  filled <- n / (length(x$assets) * length(x$periods))
  ends <- format_key(x$periods[c(1L, length(x$periods))])
  absent <- length(x$slot_labels) - length(x$periods)
  cat_lines(
    paste0("Panel of ", count_of(length(x$assets), "asset"), " by ", count_of(length(x$periods), "period")),
    label_line("Rows", paste0(format_count(n), " (", format(100 * filled, digits = 3), " % of all pairs)")),
    label_line("Keys", paste0(x$key[["asset"]], ", ", x$key[["period"]])),
    label_line("Calendar", paste0(
      frequency_phrase(x$frequency), ", ", ends[1L], " to ", ends[2L],
      if (absent > 0L) paste0("; ", count_of(absent, "calendar period"), " without any row")
    )),
    label_line("Columns", setdiff(names(x$data), x$key), wrap = TRUE)
  )
  invisible(x)
}

#' @export
nobs.lb_panel <- function(object, ...) nrow(object$data)
