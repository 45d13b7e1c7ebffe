prints <- function(x) {
  lines <- utils::capture.output(print(x))
  expect_true(all(nchar(lines) <= 80), info = paste(lines[nchar(lines) > 80], collapse = "\n"))
  lines
}

test_that("printouts fit 80 columns and say what was used and dropped", {
  rows <- small_rows()
  rows$ret[c(1, 2)] <- NA
  panel <- small_panel(rows)
  traits <- price_traits(panel, ret ~ size + value + industry)
  expect_match(paste(prints(traits), collapse = " "), "116 of 118 rows.*ret missing in 2")
  prints(panel)
  prints(panel_health(panel))
  prints(summary(traits))
  prints(error_ladder(traits))
  expect_match(paste(prints(pooled(panel, ret ~ size)), collapse = " "), "clusters of asset \\(12\\) and of period \\(10\\)")
  fit <- price_factors(factor_panel(), ret ~ f1 + f2)
  expect_match(paste(prints(fit), collapse = " "), "Shanken 1992")
  prints(alpha_test(fit, c("averaged", "corrected", "f_approx", "grs", "moments", "grs_chisq", "grs_lr", "grs_moments")))
  prints(error_ladder(fit))
  prints(term_test(fit))
  prints(window_full())
  prints(err_misspec())
})

test_that("figures keep digits for the error shown beside them", {
  expect_identical(format_figures(0.0123456, 0.00123), "0.01235")
  expect_identical(format_figures(-12.3456, 1.5), "-12.35")
  expect_identical(format_p(c(0.0001, 0.0423, NA)), c("<0.001", "0.042", "NA"))
})

test_that("a summary describes the slopes over time", {
  fit <- price_traits(small_panel(), ret ~ size)
  slopes <- period_premia(fit)
  slopes <- slopes$estimate[slopes$term == "size"]
  described <- summary(fit)$series[2, ]
  expect_equal(described$sd, sd(slopes))
  expect_equal(described$positive, mean(slopes > 0))
  expect_equal(described$min, min(slopes))
})
