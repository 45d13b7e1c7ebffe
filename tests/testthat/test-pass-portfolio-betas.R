market <- demo_market(firms = 90, months = 100)
market$board <- as.integer(factor(market$firm)) %% 3 != 0
month_panel <- function(data = market) suppressMessages(asset_panel(data, "firm", "month"))

test_that("cells, their returns and betas equal a plain computation", {
  panel <- month_panel()
  formation <- c(201906, 202006, 202106, 202206)
  sorted <- assign_portfolio_betas(
    panel, ret ~ mkt, sort_by = "size", groups = c(2, 3), window = window_rolling(36, 20), formation = formation, reference = "board"
  )
  own <- augment(exposures(panel, ret ~ mkt, window = window_rolling(36, 20)))$beta_mkt
  classes <- function(x, reference, n) {
    breaks <- quantile(x[reference], seq_len(n - 1) / n, type = 7)
    vapply(x, function(v) 1L + sum(breaks < v), 1L)
  }
  cell <- rep(NA_character_, nrow(market))
  for (f in seq_along(formation)) {
    rows <- which(market$month == formation[f] & !is.na(own) & !is.na(market$size))
    size <- classes(market$size[rows], market$board[rows], 2)
    beta <- integer(length(rows))
    for (g in 1:2) beta[size == g] <- classes(own[rows][size == g], market$board[rows][size == g], 3)
    until <- c(formation, 999999)[f + 1]
    held <- market$month > formation[f] & market$month <= until
    cell[held] <- paste(size, beta, sep = ".")[match(market$firm[held], market$firm[rows])]
  }
  cell[is.na(match(cell, outer(1:2, 1:3, paste, sep = ".")))] <- NA
  expect_identical(sorted$cell, cell)
  expect_gt(length(unique(paste(market$firm, cell))), length(unique(market$firm)) + 40)

  fine <- is.finite(market$ret) & !is.na(cell)
  months <- sort(unique(market$month))
  mkt <- market$mkt[match(months, market$month)]
  returns <- tapply(market$ret[fine], list(factor(market$month[fine], months), cell[fine]), mean)
  for (one in c("1.2", "2.3")) {
    fit <- lm(returns[, one] ~ mkt + c(NA, mkt[-length(mkt)]))
    expect_equal(unique(sorted$beta_mkt[which(cell == one)]), sum(coef(fit)[-1]), tolerance = 1e-10)
    row <- attr(sorted, "cells")[attr(sorted, "cells")$cell == one, ]
    expect_equal(row$std.error, sqrt(sum(vcov(fit)[-1, -1])), tolerance = 1e-10)
    expect_equal(row$n_obs, nobs(fit))
  }
})

test_that("with fixed members and no hole a cell's beta is the mean of its members'", {
  set.seed(8)
  f <- rnorm(60)
  returns <- f %*% t(seq(0.2, 2, length.out = 12)) + rnorm(720, 0, 0.1)
  panel <- asset_panel(stack_returns(returns, cbind(mkt = f)), "asset", "period")
  sorted <- assign_portfolio_betas(panel, ret ~ mkt, groups = 4, window = window_full(), formation = 1, lead_lag = 0)
  later <- panel$data[panel$data$period > 1, ]
  betas <- tidy(exposures(asset_panel(later, "asset", "period"), ret ~ mkt))
  for (cell in as.character(1:4)) {
    members <- unique(sorted$asset[which(sorted$cell == cell)])
    expect_length(members, 3)
    expect_equal(unique(sorted$beta_mkt[which(sorted$cell == cell)]), mean(betas$estimate[betas$asset %in% members]), tolerance = 1e-10)
  }
})

test_that("later returns never change who belongs to a cell", {
  later <- market
  later$ret[later$month > 202112] <- 9
  cells <- lapply(list(market, later), function(data) assign_portfolio_betas(month_panel(data), ret ~ mkt, groups = 4)$cell)
  early <- market$month <= 202212
  expect_identical(cells[[1]][early], cells[[2]][early])
  expect_gt(sum(!is.na(cells[[1]][early])), 100)
})

test_that("ties share a class, and a class without reference assets uses all its members", {
  expect_identical(cpp_refine_cells(c(1, 1, 1, 5), rep(TRUE, 4), integer(4), 1L, 2L), c(0L, 0L, 0L, 1L))
  expect_identical(
    cpp_refine_cells(c(1, 2, 3, 4), c(TRUE, TRUE, FALSE, FALSE), c(0L, 0L, 1L, 1L), 2L, 2L), c(0L, 1L, 2L, 3L)
  )
  expect_identical(cpp_refine_cells(c(4, 9), c(TRUE, TRUE), c(-1L, 0L), 1L, 5L), c(-1L, 0L))
})

test_that("requests that cannot be met name what is wrong", {
  panel <- month_panel()
  expect_error(assign_portfolio_betas(panel, ret ~ mkt, sort_by = "industry"), class = "lambdabar_error_input")
  expect_error(assign_portfolio_betas(panel, ret ~ mkt, reference = "size"), class = "lambdabar_error_input")
  expect_error(assign_portfolio_betas(panel, ret ~ mkt, formation = 190001), class = "lambdabar_error_input")
  expect_error(assign_portfolio_betas(panel, ret ~ mkt, groups = c(2, 3)), class = "lambdabar_error_input")
  expect_error(assign_portfolio_betas(panel, ret ~ mkt, formation = 201510), class = "lambdabar_error_sample")
  shown <- capture.output(print(assign_portfolio_betas(panel, ret ~ mkt, groups = 3)))
  expect_true(any(grepl("^Caution    cell betas use returns from after", shown)))
  expect_lte(max(nchar(shown)), 80)
})
