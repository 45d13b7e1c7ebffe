# R2, Hansen-Jagannathan distances, discount factors and efficient moments on gmm::Finance: against
# an independent computation kept in fixtures/misspecified-finance.R.

reference <- function() dget(test_path("fixtures", "misspecified-finance.R"))

sums <- list(nw0 = err_iid(adjust = FALSE), nw5 = err_hac(5, adjust = FALSE))

test_that("R2, its error and both its tests agree with an independent computation", {
  skip_if_not_installed("gmm")
  cases <- reference()$r2
  for (name in names(cases)) {
    parts <- strsplit(name, "_")[[1L]]
    sample <- finance_sample(500, 20, as.integer(substr(parts[1L], 2L, 2L)))
    fit <- sample_fit(sample, intercept = parts[3L] == "int")
    for (sum in names(sums)) {
      expected <- cases[[name]][[sum]]
      found <- pricing_r2(fit, sums[[sum]])
      row <- found[found$measure == parts[2L], ]
      expect_close(row$estimate, expected$r2, 1e-9)
      expect_close(row$std.error, expected$se, 1e-9)
      expect_close(row$p_one, expected$p_r2_1, 1e-7)
      expect_close(row$p_zero, expected$p_r2_0, 1e-7)
    }
  }
})

test_that("distances, their errors and p-values agree with an independent computation", {
  skip_if_not_installed("gmm")
  for (model in c("f1", "f3")) {
    expected <- reference()$hj[[model]]
    sample <- finance_sample(500, 20, as.integer(substr(model, 2L, 2L)))
    fit <- sample_fit(sample)
    for (sum in names(sums)) {
      m <- generics::glance(discount_factor(fit, series = sums[[sum]]))
      expected_sum <- expected[[paste0("excess_", sum)]]
      expect_close(m$distance, expected_sum$delta, 1e-9)
      expect_close(m$std.error, expected_sum$se_delta, 1e-9)
      expect_close(m$p.value, expected_sum$p, 1e-7)
      tested <- alpha_test(fit, "hj_excess", sums[[sum]])
      expect_close(tested$statistic, 500 * expected_sum$delta^2, 1e-9)
      expect_identical(tested$p.value, m$p.value)
    }
    stocks <- data_of("Finance", "gmm")[1:500, 1:20]
    sample$returns <- as.matrix(exp(stocks / 100))
    gross <- sample_fit(sample)
    m <- discount_factor(gross, "gross", sums$nw0)
    expect_close(generics::glance(m)$distance, expected$gross_nw0$delta, 1e-7)
    expect_close(generics::glance(m)$std.error, expected$gross_nw0$se_delta, 1e-6)
    expect_close(generics::glance(m)$p.value, expected$gross_nw0$p, 1e-6)
    expect_close(m$estimate, expected$gross_nw0$theta, 1e-6)
    expect_identical(alpha_test(gross, "hj_gross")$p.value, generics::glance(m)$p.value)
  }
})

test_that("the efficient J agrees with an independent computation", {
  skip_if_not_installed("gmm")
  cases <- reference()$efficient
  for (name in names(cases)) {
    parts <- strsplit(name, "_")[[1L]]
    fit <- sample_fit(finance_sample(500, 20, as.integer(substr(parts[1L], 2L, 2L))), intercept = parts[2L] == "int")
    found <- alpha_test(fit, "efficient")
    expect_close(found$statistic, cases[[name]]$J, 1e-7)
    expect_identical(found$num.df, as.numeric(cases[[name]]$df))
    expect_close(found$p.value, cases[[name]]$p, 1e-7)
    core <- cpp_efficient_moments(fit$input, series_options(err_iid()), fit$slot_estimated - 1L)
    expect_close(as.numeric(core$premia), cases[[name]]$gamma, 1e-6)
    expect_close(sqrt(diag(core$covariance)), cases[[name]]$se, 1e-6)
  }
})
