# From the distinct period values to an ordered calendar: labels, their slots (positions,
# from 1) in a calendar without holes, and the labels of all slots.
make_calendar <- function(values, frequency, column, call = rlang::caller_env()) {
  read <- read_periods(values, column, call)
  rank <- order(read$values)
  labels <- read$values[rank]
  slots <- place_in_calendar(labels, frequency, column, call)
  list(
    order = rank, labels = labels, slot = slots$slot, slot_labels = slots$labels,
    frequency = slots$frequency, read_as = read$as
  )
}

# Turns the key into something with an order in time, and says how when that was a guess.
read_periods <- function(values, column, call) {
  if (is.character(values)) {
    return(read_text(values, column, call))
  }
  if (inherits(values, "POSIXct")) {
    times <- as.POSIXlt(values)
    zone <- attr(values, "tzone")
    zone <- if (is.null(zone)) "" else zone[1L]
    one_time <- length(unique(paste(times$hour, times$min, times$sec))) == 1L
    dates <- as.Date(format(values, "%Y-%m-%d", tz = zone))
    # Daylight saving moves midnight when a clock was kept in another zone: only dates that
    # stay distinct may stand for the instants.
    if (one_time && !anyDuplicated(dates)) {
      return(list(values = dates, as = NULL))
    }
    return(list(values = values, as = NULL))
  }
  if (is.numeric(values) && !inherits(values, "Date")) {
    return(read_number(values))
  }
  list(values = values, as = NULL)
}

read_number <- function(values) {
  whole <- all(values == floor(values))
  if (whole && all(values >= 10000101 & values <= 99991231)) {
    dates <- as.Date(sprintf("%08.0f", values), "%Y%m%d")
    if (!anyNA(dates)) {
      return(list(values = dates, as = "dates (yyyymmdd)"))
    }
  }
  if (whole && all(values >= 100001 & values <= 999912)) {
    month <- values %% 100
    if (all(month >= 1 & month <= 12)) {
      return(list(values = new_month(values), as = "months (yyyymm)"))
    }
  }
  list(values = values, as = NULL)
}

read_text <- function(values, column, call) {
  if (all(grepl("^[0-9]{4}-[0-9]{2}-[0-9]{2}$", values))) {
    dates <- as.Date(values, "%Y-%m-%d")
    if (!anyNA(dates)) {
      return(list(values = dates, as = "dates (yyyy-mm-dd)"))
    }
  }
  if (all(grepl("^[0-9]{4}-(0[1-9]|1[0-2])$", values))) {
    return(list(values = new_month(as.numeric(sub("-", "", values))), as = "months (yyyy-mm)"))
  }
  numbers <- suppressWarnings(as.numeric(values))
  if (!anyNA(numbers) && !anyDuplicated(numbers)) {
    read <- read_number(numbers)
    return(list(values = read$values, as = if (is.null(read$as)) "numbers" else read$as))
  }
  abort_keys(
    c(
      "The text in the period key {.val {column}} has no known order in time.",
      x = "It reads, for example, {.val {values[seq_len(min(3L, length(values)))]}}.",
      i = "Use dates, numbers, text like {.val 2024-03} or {.val 2024-03-31}, or a factor whose levels are in order."
    ),
    column = column, call = call
  )
}

# Months as numbers yyyymm, so that labels read as the user wrote them.
new_month <- function(yyyymm) structure(as.integer(yyyymm), class = "lb_month")

#' @export
format.lb_month <- function(x, ...) format(unclass(x), ...)

#' @export
print.lb_month <- function(x, ...) print(unclass(x), ...)

#' @export
`[.lb_month` <- function(x, i) new_month(unclass(x)[i])

#' @export
as.character.lb_month <- function(x, ...) as.character(unclass(x))

#' @export
xtfrm.lb_month <- function(x) unclass(x)

# What a user gets to see of period labels: their own kind of value.
user_periods <- function(labels) if (inherits(labels, "lb_month")) as.integer(labels) else labels

place_in_calendar <- function(labels, frequency, column, call) {
  if (frequency == "auto") {
    frequency <- guess_frequency(labels)
  }
  if (frequency == "observed" || length(labels) == 1L && frequency == "step") {
    return(list(slot = seq_along(labels), labels = labels, frequency = "observed"))
  }
  dated <- inherits(labels, c("Date", "POSIXct", "lb_month"))
  if (dated == (frequency == "step") || is.factor(labels)) {
    abort_keys(
      c(
        "Frequency {.val {frequency}} does not fit the period key {.val {column}} of class {.cls {class(labels)[1L]}}.",
        i = "Use {.val step} for numbers, {.val month} and the like for dates, or {.val observed}."
      ),
      column = column, call = call
    )
  }
  position <- calendar_position(labels, frequency)
  clash <- anyDuplicated(position)
  if (clash) {
    pair <- format_key(labels[c(clash - 1L, clash)])
    abort_keys(
      c(
        "Two periods of {.val {column}} fall into one {frequency}: {pair[1L]} and {pair[2L]}.",
        i = "Choose a finer {.arg frequency}, or {.val observed}."
      ),
      column = column, period = pair, call = call
    )
  }
  slot <- as.integer(position - position[1L] + 1)
  if (slot[length(slot)] > 50 * length(slot) + 1000) {
    return(list(slot = seq_along(labels), labels = labels, frequency = "observed"))
  }
  all_labels <- slot_labels(labels, slot, frequency)
  list(slot = slot, labels = all_labels, frequency = frequency)
}

guess_frequency <- function(labels) {
  if (is.factor(labels)) {
    return("observed")
  }
  if (inherits(labels, "lb_month")) {
    months <- calendar_position(labels, "month")
    return(coarsest(months, c(year = 12, quarter = 3, month = 1)))
  }
  if (inherits(labels, "POSIXct")) {
    return("observed")
  }
  if (inherits(labels, "Date")) {
    if (length(labels) < 3L) {
      return("observed")
    }
    typical <- stats::median(diff(as.numeric(labels)))
    candidates <- c(
      if (typical >= 330) "year", if (typical >= 80) "quarter",
      if (typical >= 25) "month", if (typical >= 5) "week"
    )
    for (unit in candidates) {
      if (!anyDuplicated(calendar_position(labels, unit))) {
        return(unit)
      }
    }
    return("observed")
  }
  if (all(labels == floor(labels))) "step" else "observed"
}

# The coarsest unit in which months that repeat every 3 or 12 still have distinct slots and a
# constant place, so that "yyyymm" of Decembers only is a yearly calendar.
coarsest <- function(months, units) {
  steps <- diff(months)
  for (unit in names(units)) {
    if (length(steps) && all(steps %% units[[unit]] == 0)) {
      return(unit)
    }
  }
  "month"
}

# Whole numbers that grow by one from a calendar slot to the next.
calendar_position <- function(labels, frequency) {
  if (frequency == "step") {
    step <- common_step(diff(as.numeric(labels)))
    return(round((as.numeric(labels) - as.numeric(labels[1L])) / step))
  }
  if (inherits(labels, "lb_month")) {
    year <- unclass(labels) %/% 100
    month <- unclass(labels) %% 100
  } else {
    date <- as.POSIXlt(labels)
    year <- date$year + 1900
    month <- date$mon + 1
  }
  switch(frequency,
    year = year,
    quarter = year * 4 + (month - 1) %/% 3,
    month = year * 12 + month - 1,
    # 1970-01-05 was a Monday
    week = floor((as.numeric(as.Date(labels)) - 4) / 7),
    day = as.numeric(as.Date(labels))
  )
}

common_step <- function(steps) {
  gcd <- function(a, b) {
    while (b > 1e-9 * a) {
      rest <- a %% b
      a <- b
      b <- rest
    }
    a
  }
  Reduce(gcd, unique(steps))
}

# Labels of every slot; those without rows get a label of the same kind.
slot_labels <- function(labels, slot, frequency) {
  n <- slot[length(slot)]
  if (n == length(labels)) {
    return(labels)
  }
  if (frequency == "step") {
    all <- as.numeric(labels[1L]) + common_step(diff(as.numeric(labels))) * (seq_len(n) - 1)
    if (is.integer(labels)) all <- as.integer(round(all))
  } else if (inherits(labels, "lb_month")) {
    by <- c(year = 12, quarter = 3, month = 1)[[frequency]]
    first <- calendar_position(labels[1L], "month")
    month <- first + by * (seq_len(n) - 1)
    all <- new_month(month %/% 12 * 100 + month %% 12 + 1)
  } else if (frequency %in% c("day", "week")) {
    first <- as.Date(labels[1L])
    all <- first + (seq_len(n) - 1) * c(day = 1, week = 7)[[frequency]]
  } else {
    start <- as.Date(format(labels[1L], "%Y-%m-01"))
    all <- seq(start, by = frequency, length.out = n)
  }
  if (inherits(labels, "POSIXct") && inherits(all, "Date")) all <- as.POSIXct(all)
  all[slot] <- labels
  all
}

frequency_phrase <- function(frequency) {
  c(
    month = "monthly", quarter = "quarterly", year = "yearly", week = "weekly",
    day = "every day", step = "numbered periods", observed = "periods as observed"
  )[[frequency]]
}

# "month", for "180 months": what one period is called.
period_noun <- function(panel) {
  switch(panel$frequency,
    month = "month", quarter = "quarter", year = "year", week = "week", day = "day", "period"
  )
}
