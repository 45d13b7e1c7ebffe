# NIST Statistical Reference Datasets, linear least squares: data, certified values and their
# exact continuation in fixtures/strd. attainable.csv there has the correct digits of base R's QR
# on the same data, against the exact values: the package may not have fewer.

certified_sets <- function() dget(test_path("fixtures", "strd", "certified.R"))

# Digits of base R's QR, but no more than exact arithmetic on the data as doubles would have and
# than doubles can show.
attainable <- function(set, what) {
  table <- read.csv(test_path("fixtures", "strd", "attainable.csv"))
  row <- table[table$set == set, ]
  min(15, row[[paste0("LRE_", what, "_R_qr")]], row[[paste0("LRE_", what, "_exact_on_doubles")]])
}

# The data with the columns of the model: x1 .. x6, or the powers of x up to `degree`.
certified_rows <- function(set) {
  rows <- read.csv(test_path("fixtures", "strd", paste0(set, ".csv")))
  degree <- switch(set, Filip = 10, Wampler1 = , Wampler3 = , Wampler5 = 5, 1)
  for (power in seq_len(degree)[-1L]) rows[[paste0("x", power)]] <- rows$x^power
  rows$asset <- seq_len(nrow(rows))
  rows
}

certified_model <- function(rows, intercept) {
  stats::reformulate(setdiff(names(rows), c("y", "asset", "period")), "y", intercept = intercept)
}

# One period for each of `rows`, the left side multiplied by its `times`.
certified_panel <- function(rows, times = 1) {
  periods <- Map(function(one, by, k) cbind(one[names(one) != "y"], y = by * one$y, period = k), rows, times, seq_along(rows))
  asset_panel(do.call(rbind, periods), "asset", "period")
}

expect_digits <- function(object, reference, digits) {
  label <- rlang::as_label(rlang::enquo(object))
  found <- min(correct_digits(unname(object), as.numeric(reference)))
  expect(
    length(object) == length(reference) && isTRUE(found >= digits),
    paste0(label, " has ", format(found, digits = 4), " correct digits, required are ", digits, ".")
  )
}

test_that("pooled regressions have the certified digits", {
  for (set in names(certified_sets())) {
    certified <- certified_sets()[[set]]
    rows <- certified_rows(set)
    fit <- pooled(certified_panel(list(rows)), certified_model(rows, certified$intercept), errors = err_iid())
    digits <- attainable(set, "beta")
    expect_digits(coef(fit), certified$exact_estimate, digits)
    # Certified values are rounded to 15 digits: against them 13 are asked for.
    expect_digits(coef(fit), certified$estimate, min(13, digits))
    # R2 of a model without constant is certified uncentred.
    if (certified$intercept) expect_digits(glance(fit)$r.squared, certified$r_squared, min(13, digits))
    if (set == "Wampler1") {
      # An exact fit: the certified deviations are zero, beside responses up to 3e6.
      expect_lt(max(std_errors(fit)), 1e-8)
    } else {
      digits <- attainable(set, "sd")
      expect_digits(std_errors(fit), certified$exact_sd, digits)
      expect_digits(std_errors(fit), certified$sd, min(13, digits))
    }
  }
})

test_that("one set as several periods gives certified premia and errors", {
  # Multiples whose products with the data are exact.
  times <- c(1, 2, 4, 8)
  for (set in setdiff(names(certified_sets()), "Wampler1")) {
    certified <- certified_sets()[[set]]
    rows <- certified_rows(set)
    estimate <- as.numeric(certified$exact_estimate)
    fit <- price_traits(
      certified_panel(rep(list(rows), 4), times), certified_model(rows, certified$intercept), errors = err_iid()
    )
    digits <- attainable(set, "beta")
    expect_digits(coef(fit), mean(times) * estimate, digits)
    expect_digits(std_errors(fit), stats::sd(times) / 2 * abs(estimate), digits)
    series <- period_premia(fit)
    expect_digits(series$estimate, as.vector(outer(estimate, times)), digits)
    expect_digits(
      series$std.error, as.vector(outer(as.numeric(certified$exact_sd), times)), attainable(set, "sd")
    )
  }
})

test_that("three sets of one shape as periods have averages 2 and errors 1/sqrt(3)", {
  # All coefficients of Wampler1, 3 and 5 are certified as 1, so that multiplied by 1, 2 and 3
  # they are 1, 2, 3; the noise of Wampler5 is what limits the digits.
  sets <- lapply(c("Wampler1", "Wampler3", "Wampler5"), certified_rows)
  fit <- price_traits(certified_panel(sets, 1:3), certified_model(sets[[1]], TRUE), errors = err_iid())
  digits <- attainable("Wampler5", "beta")
  expect_digits(coef(fit), rep(2, 6), digits)
  expect_digits(std_errors(fit), rep(1 / sqrt(3), 6), digits)
  expect_digits(tidy(fit)$statistic, rep(2 * sqrt(3), 6), digits)
})

test_that("with one asset GRS is the squared certified t of the constant", {
  # One factor, one asset: F(1, T - 2) = (B0 / sd)^2.
  certified <- certified_sets()$Norris
  rows <- certified_rows("Norris")
  panel <- asset_panel(stack_returns(rows$y, cbind(x = rows$x)), "asset", "period")
  row <- alpha_test(price_factors(panel, ret ~ x, intercept = FALSE), "grs")
  expect_identical(c(row$num.df, row$den.df), c(1, 34))
  squared_t <- (as.numeric(certified$exact_estimate[1]) / as.numeric(certified$exact_sd[1]))^2
  expect_digits(row$statistic, squared_t, 12)
})
