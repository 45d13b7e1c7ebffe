test_that("a panel keeps the user's data and codes its keys in value order", {
  rows <- small_rows()
  panel <- small_panel(rows)
  expect_s3_class(panel, "lb_panel")
  expect_identical(panel$data, rows)
  expect_identical(panel$assets, sort(unique(rows$firm)))
  expect_identical(panel$assets[panel$asset + 1L], rows$firm)
  expect_identical(as.integer(panel$periods)[panel$period + 1L], rows$month)
  expect_identical(nobs(panel), nrow(rows))
})

test_that("columns are shared with the data, not copied", {
  skip_if_not(capabilities("profmem"))
  n <- 2e5
  rows <- data.frame(a = rep(1:2000, each = 100), t = rep(1:100, 2000), x = rnorm(n))
  log <- tempfile()
  Rprofmem(log, threshold = 4 * n + 1000)
  panel <- asset_panel(rows, "a", "t")
  Rprofmem(NULL)
  # Two integer code vectors of 4 n bytes are what a panel adds; nothing of 8 n may appear.
  big <- grep("^[0-9]+ :", readLines(log), value = TRUE)
  sizes <- as.numeric(sub(" :.*", "", big))
  expect_true(all(sizes < 6 * n))
})

test_that("every useful key type gives the same fit", {
  rows <- small_rows()
  reference <- coef(price_traits(small_panel(rows), ret ~ size + value))
  day <- as.Date(paste0(rows$month, "01"), "%Y%m%d")
  periods <- list(
    date = day, posix = as.POSIXct(day, tz = "UTC"), integer = rows$month - 202300L,
    numeric = (rows$month - 202300) / 4, yyyymm = as.numeric(rows$month),
    yyyymmdd = as.integer(format(day, "%Y%m%d")), iso = as.character(day),
    text_month = format(day, "%Y-%m"), factor = factor(rows$month)
  )
  for (name in names(periods)) {
    rows$p <- periods[[name]]
    fit <- price_traits(quiet_panel(rows, "firm", "p"), ret ~ size + value)
    expect_identical(coef(fit), reference, info = name)
  }
  assets <- list(
    integer = as.integer(factor(rows$firm)), numeric = as.numeric(factor(rows$firm)) * 1e12 + 0.5,
    factor = factor(rows$firm, levels = rev(unique(rows$firm)))
  )
  for (name in names(assets)) {
    rows$a <- assets[[name]]
    fit <- price_traits(quiet_panel(rows, "a", "month"), ret ~ size + value)
    expect_equal(coef(fit), reference, tolerance = 1e-14, info = name)
  }
})

test_that("tibbles and data.tables are read as they are", {
  rows <- small_rows()
  reference <- coef(price_traits(small_panel(rows), ret ~ size))
  expect_identical(coef(price_traits(small_panel(tibble::as_tibble(rows)), ret ~ size)), reference)
  skip_if_not_installed("data.table")
  expect_identical(coef(price_traits(small_panel(data.table::as.data.table(rows)), ret ~ size)), reference)
})

test_that("whole numbers that read as months or dates are recognised and said", {
  rows <- small_rows()
  expect_message(asset_panel(rows, "firm", "month"), "yyyymm", class = "lambdabar_message_keys")
  rows$day <- as.integer(rows$month) * 100L + 15L
  expect_message(panel <- asset_panel(rows, "firm", "day"), "yyyymmdd", class = "lambdabar_message_keys")
  expect_s3_class(panel$periods, "Date")
  expect_identical(panel$frequency, "month")
  # 13 is no month: plain numbers
  rows$month[1] <- 202313L
  expect_silent(asset_panel(rows, "firm", "month"))
})

test_that("the calendar knows its gaps", {
  slots <- function(periods, frequency = "auto") {
    panel <- quiet_panel(data.frame(a = 1, t = periods), "a", "t", frequency)
    list(panel$frequency, panel$slot)
  }
  expect_identical(slots(c(202311L, 202312L, 202402L)), list("month", c(1L, 2L, 4L)))
  expect_identical(slots(as.Date(c("2024-01-31", "2024-02-29", "2024-05-31"))), list("month", c(1L, 2L, 5L)))
  expect_identical(slots(as.Date(c("2023-12-29", "2024-01-31", "2024-02-27"))), list("month", 1:3))
  expect_identical(slots(as.Date(c("2020-03-31", "2020-06-30", "2020-12-31"))), list("quarter", c(1L, 2L, 4L)))
  expect_identical(slots(as.Date(c("2020-01-03", "2020-01-10", "2020-01-16", "2020-01-31"))), list("week", c(1L, 2L, 3L, 5L)))
  expect_identical(slots(as.Date("2024-01-05") + c(0, 3, 4, 5)), list("observed", 1:4))
  expect_identical(slots(as.Date("2024-01-05") + c(0, 3, 4), "day"), list("day", c(1L, 4L, 5L)))
  expect_identical(slots(c(1990L, 1991L, 1994L)), list("step", c(1L, 2L, 5L)))
  expect_identical(slots(c(0.5, 1, 2), "step"), list("step", c(1L, 2L, 4L)))
  expect_identical(slots(c(202012L, 202112L, 202312L)), list("year", c(1L, 2L, 4L)))
  expect_error(slots(as.Date(c("2024-01-05", "2024-01-20", "2024-02-05")), "month"), class = "lambdabar_error_keys")
  expect_error(slots(1:3, "month"), class = "lambdabar_error_keys")
})

test_that("numbers in text are ordered as numbers, and other text is refused", {
  rows <- data.frame(a = 1, t = as.character(c(10, 9, 100)))
  panel <- quiet_panel(rows, "a", "t")
  expect_identical(panel$periods, c(9, 10, 100))
  rows$t <- c("spring", "summer", "autumn")
  expect_error(asset_panel(rows, "a", "t"), "order in time", class = "lambdabar_error_keys")
})

test_that("duplicates, missing keys and unusable types name the offenders", {
  rows <- small_rows()
  twice <- rbind(rows, rows[c(3, 40), ])
  error <- expect_error(small_panel(twice), class = "lambdabar_error_keys")
  expect_identical(error$rows, c(119, 120))
  expect_identical(error$asset, rows$firm[c(3, 40)])
  expect_match(conditionMessage(error), "f01 in 202303 \\(rows 3 and 119\\)")
  expect_identical(error$count, 2)

  lost <- rows
  lost$firm[c(5, 9)] <- NA
  error <- expect_error(small_panel(lost), class = "lambdabar_error_keys")
  expect_identical(error$rows, c(5, 9))
  expect_identical(error$column, "firm")
  lost <- rows
  lost$month[7] <- NA
  expect_error(small_panel(lost), "row 7", class = "lambdabar_error_keys")

  for (bad in list(as.list(rows$firm), complex(118), rep(TRUE, 118), as.POSIXlt(Sys.time()))) {
    odd <- rows
    odd$firm <- NULL
    odd$key <- if (inherits(bad, "POSIXlt")) I(rep(list(bad), 118)) else bad
    expect_error(quiet_panel(odd, "key", "month"), class = "lambdabar_error_keys")
  }
  big <- structure(rows$size, class = "integer64")
  odd <- rows
  odd$key <- big
  expect_error(quiet_panel(odd, "key", "month"), "as.numeric", class = "lambdabar_error_keys")
  rows$month <- c(Inf, rows$month[-1])
  expect_error(small_panel(rows), "infinite", class = "lambdabar_error_keys")
})

test_that("duplicates are found by the sort as by the bitmap", {
  # Few rows over many assets and periods: pairs outnumber the bitmap's limit.
  n <- 3000
  rows <- data.frame(a = seq_len(n), t = seq_len(n))
  rows <- rbind(rows, rows[c(10, 2500, 10), ])
  error <- expect_error(asset_panel(rows, "a", "t"), class = "lambdabar_error_keys")
  expect_identical(error$count, 3)
  expect_identical(error$rows, c(3001, 3002, 3003))
  expect_identical(error$asset, c(10L, 2500L, 10L))
})

test_that("unused factor levels are no assets, and text keys survive their encoding", {
  rows <- small_rows()
  rows$firm <- factor(rows$firm, levels = c("ghost", unique(rows$firm)))
  expect_length(small_panel(rows)$assets, 12)
  latin <- "\xe4ra"
  Encoding(latin) <- "latin1"
  rows <- data.frame(a = c(latin, enc2utf8(latin), "b"), t = c(1, 2, 1))
  panel <- asset_panel(rows, "a", "t")
  expect_length(panel$assets, 2)
  expect_identical(panel$assets[panel$asset + 1L], enc2utf8(rows$a))
})

test_that("arguments are checked", {
  rows <- small_rows()
  expect_error(asset_panel(as.matrix(rows), "firm", "month"), class = "lambdabar_error_input")
  error <- expect_error(asset_panel(rows, "frim", "month"), class = "lambdabar_error_input")
  expect_match(conditionMessage(error), "firm")
  expect_error(asset_panel(rows, "firm", "firm"), class = "lambdabar_error_input")
  expect_error(asset_panel(rows[0, ], "firm", "month"), class = "lambdabar_error_input")
  expect_error(asset_panel(rows, "firm", "month", "monthly"), class = "lambdabar_error_input")
})
