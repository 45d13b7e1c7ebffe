found <- function(health, check, column = NA) {
  health[health$check == check & (if (is.na(column)) is.na(health$column) else health$column %in% column), ]
}

test_that("gaps, absent periods and thin periods are counted", {
  rows <- small_rows()
  rows <- rows[rows$month != 202305, ]
  health <- panel_health(small_panel(rows))
  expect_identical(found(health, "absent periods")$count, 1)
  expect_match(found(health, "absent periods")$detail, "202305")
  # Every asset lives on both sides of the absent month; f02 has two more holes.
  expect_identical(found(health, "gaps")$count, 12)
  expect_match(found(health, "gaps")$detail, "^13 missing rows.*f02")
  expect_identical(found(health, "thin periods")$count, 0)
  expect_identical(found(health, "duplicates")$count, 0)
})

test_that("missing, infinite and constant values are counted", {
  rows <- small_rows()
  rows$size[c(1, 2, 30)] <- NA
  rows$value[4] <- -Inf
  health <- panel_health(small_panel(rows))
  expect_identical(found(health, "missing", "size")$count, 3)
  expect_identical(found(health, "infinite", "value")$count, 1)
  expect_identical(found(health, "constant", "mkt")$count, 10)
  expect_identical(found(health, "constant", "mkt")$verdict, "note")
  expect_identical(nrow(found(health, "constant", "size")), 0L)
})

test_that("units that slip and percents are seen", {
  rows <- small_rows()
  slipped <- rows
  slipped$ret[slipped$month == 202304] <- 100 * slipped$ret[slipped$month == 202304]
  expect_match(found(panel_health(small_panel(slipped)), "unit slip", "ret")$detail, "202304")
  percent <- rows
  percent$ret <- 100 * percent$ret
  expect_identical(found(panel_health(small_panel(percent)), "percent", "ret")$verdict, "look")
  expect_identical(nrow(found(panel_health(small_panel(rows)), "percent", "ret")), 0L)
})

test_that("columns can be chosen and are checked", {
  panel <- small_panel()
  expect_setequal(na.omit(unique(panel_health(panel, "size")$column)), "size")
  expect_error(panel_health(panel, "nothing"), class = "lambdabar_error_input")
  expect_error(panel_health(panel, "industry"), class = "lambdabar_error_input")
  expect_error(panel_health(small_rows()), class = "lambdabar_error_input")
})
