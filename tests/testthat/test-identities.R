# Identities that hold in every sample, to rounding or to the bit.

# A ragged panel with a factor: 60 assets, 48 months, some rows missing.
identity_rows <- function() {
  set.seed(101)
  rows <- expand.grid(month = 202001:202012 + rep(100 * 0:3, each = 12), firm = sprintf("f%02d", 1:60), stringsAsFactors = FALSE)
  rows$size <- rnorm(nrow(rows), 5)
  rows$value <- rnorm(nrow(rows)) + rnorm(60)[match(rows$firm, unique(rows$firm))]
  rows$industry <- rep(c("salt", "glass", "nets"), each = 48, length.out = nrow(rows))
  rows$mkt <- rep(rnorm(48, 0.01, 0.05), 60)
  rows$cap <- rexp(nrow(rows)) + 0.2
  rows$ret <- 0.01 + 0.8 * rows$mkt + 0.002 * rows$size - 0.003 * rows$value + rnorm(nrow(rows), 0, 0.05)
  rows[-sample(nrow(rows), 300), ]
}

identity_panel <- function(rows = identity_rows()) quiet_panel(rows, "firm", "month")

# The three estimators, with weights, traits and coded terms.
identity_fits <- function(panel) {
  list(
    traits = price_traits(panel, ret ~ size + value + industry, errors = err_hac(3)),
    weighted = price_traits(panel, ret ~ size + value, weights = "cap", average = "assets", errors = err_iid()),
    factors = suppressMessages(price_factors(panel, ret ~ mkt)),
    both = suppressMessages(price_factors(panel, ret ~ mkt, traits = ~ size)),
    pooled = pooled(panel, ret ~ size + value + industry, weights = "cap")
  )
}

expect_same_fit <- function(fit, other, tolerance) {
  expect_close(coef(fit), coef(other), tolerance, scale = pmax(abs(coef(other)), std_errors(other)))
  expect_close(vcov(fit), vcov(other), tolerance)
}

test_that("premia averaged over periods are one regression on mean returns when betas are constant", {
  for (seed in 3:5) {
    panel <- factor_panel(T = 90, N = 12, K = 3, seed = seed)
    for (intercept in c(TRUE, FALSE)) {
      for (method in c("ols", "wls")) {
        fit <- price_factors(panel, ret ~ f1 + f2 + f3, method = method, intercept = intercept)
        assets <- augment(fit)
        weights <- if (method == "ols") rep(1, 12) else {
          residual <- vapply(split(panel$data, panel$data$asset), function(d) sum(residuals(lm(ret ~ f1 + f2 + f3, d))^2), 1)
          1 / residual[assets$asset]
        }
        model <- if (intercept) mean_return ~ beta_f1 + beta_f2 + beta_f3 else mean_return ~ 0 + beta_f1 + beta_f2 + beta_f3
        one <- lm(model, transform(assets, weights = weights), weights = weights)
        expect_close(coef(fit), coef(one), 1e-12, scale = std_errors(fit))
        expect_close(colMeans(premium_series(fit)), coef(one), 1e-12, scale = std_errors(fit))
        expect_close(assets$alpha, residuals(one), 1e-12, scale = max(abs(residuals(one))))
      }
    }
  }
})

test_that("characteristics that never change give one regression on mean returns", {
  rows <- factor_panel(T = 40, N = 15)$data
  rows$size <- rep(seq(-1, 1, length.out = 15)^3, each = 40)
  fit <- price_traits(asset_panel(rows, "asset", "period"), ret ~ size)
  means <- stats::aggregate(cbind(ret, size) ~ asset, rows, mean)
  expect_close(coef(fit), coef(lm(ret ~ size, means)), 1e-12, scale = std_errors(fit))
})

test_that("errors restated are those at the estimation, to the bit", {
  ragged <- identity_panel()
  complete <- factor_panel()
  same <- function(estimate, structures) {
    first <- suppressMessages(estimate(structures[[1]]))
    for (errors in structures) {
      direct <- estimate(errors)
      again <- restate(first, errors)
      expect_identical(vcov(again), vcov(direct))
      expect_identical(tidy(again), tidy(direct))
      expect_identical(vcov(restate(again, structures[[1]])), vcov(first))
    }
  }
  series <- list(err_iid(), err_iid(adjust = FALSE), err_hac(4), err_hac("newey_west", "parzen"), err_hac("andrews", "qs", prewhiten = TRUE))
  same(function(errors) price_traits(ragged, ret ~ size + value, errors = errors), series)
  corrected <- c(lapply(series, function(s) err_eiv("shanken", s)), lapply(series, function(s) err_eiv("robust", s)))
  same(
    function(errors) price_factors(complete, ret ~ f1 + f2, errors = errors),
    c(series, corrected, lapply(series, err_moments), lapply(series, err_misspec))
  )
  same(function(errors) price_factors(ragged, ret ~ mkt, errors = errors), lapply(series, function(s) err_eiv("robust", s)))
  same(
    function(errors) pooled(ragged, ret ~ size + value, errors = errors),
    list(err_iid(), err_hetero("HC0"), err_hetero("HC3"), err_cluster("firm"), err_cluster("firm", "month", small = "min"),
         err_cluster("month", small = "none"))
  )
})

test_that("the order of rows does not matter", {
  rows <- identity_rows()
  reference <- identity_fits(identity_panel(rows))
  set.seed(7)
  for (order in list(sample(nrow(rows)), rev(seq_len(nrow(rows))), order(rows$month, rows$firm))) {
    shuffled <- identity_fits(identity_panel(rows[order, ]))
    for (name in names(reference)) expect_same_fit(shuffled[[name]], reference[[name]], 1e-12)
  }
})

test_that("assets twice with half the weight give the same result", {
  rows <- identity_rows()
  twins <- rows
  twins$firm <- paste0(twins$firm, "b")
  twice <- rbind(rows, twins)
  twice$cap <- twice$cap / 2
  twice$origin <- substr(twice$firm, 1, 3)
  one <- identity_panel(rows)
  two <- identity_panel(twice)
  expect_same_fit(
    price_traits(two, ret ~ size + value, weights = "cap"), price_traits(one, ret ~ size + value, weights = "cap"), 1e-12
  )
  # Half of one firm's weight each in two of them, the rest whole.
  partly <- rbind(rows, twins[rows$firm %in% c("f03", "f40"), ])
  halved <- substr(partly$firm, 1, 3) %in% c("f03", "f40")
  partly$cap[halved] <- partly$cap[halved] / 2
  expect_same_fit(
    price_traits(identity_panel(partly), ret ~ size + value, weights = "cap"),
    price_traits(one, ret ~ size + value, weights = "cap"), 1e-12
  )
  # Pooled errors see the pairs as one cluster of the firm they came from.
  expect_same_fit(
    pooled(two, ret ~ size + value, weights = "cap", errors = err_cluster("origin", "month", small = "none")),
    pooled(one, ret ~ size + value, weights = "cap", errors = err_cluster("firm", "month", small = "none")), 1e-12
  )
  # Betas of twins are the same, so that the second pass has each asset twice.
  expect_same_fit(
    suppressMessages(price_factors(two, ret ~ mkt)), suppressMessages(price_factors(one, ret ~ mkt)), 1e-12
  )
})

test_that("premia follow the units of returns and characteristics", {
  rows <- identity_rows()
  percent <- transform(rows, ret = 100 * ret, mkt = 100 * mkt, size = size / 1000)
  reference <- identity_fits(identity_panel(rows))
  rescaled <- identity_fits(identity_panel(percent))
  for (name in names(reference)) {
    units <- ifelse(names(coef(reference[[name]])) == "size", 1e5, 100)
    expect_close(coef(rescaled[[name]]), units * coef(reference[[name]]), 1e-11)
    expect_close(vcov(rescaled[[name]]), outer(units, units) * vcov(reference[[name]]), 1e-11)
  }
})

test_that("a constant added to every return of a period moves the constant alone", {
  rows <- identity_rows()
  shifted <- transform(rows, ret = ret + 0.25)
  model <- ret ~ size + value
  fit <- price_traits(identity_panel(rows), model)
  moved <- price_traits(identity_panel(shifted), model)
  expect_close(coef(moved), coef(fit) + c(0.25, 0, 0), 1e-11)
  expect_close(vcov(moved), vcov(fit), 1e-11)
})

test_that("no lags equal independent periods to the bit", {
  for (kernel in c("bartlett", "parzen", "truncated", "qs")) {
    for (adjust in c(TRUE, FALSE)) {
      none <- err_hac(0, kernel, adjust = adjust)
      fit <- price_traits(identity_panel(), ret ~ size + value, errors = none)
      expect_identical(vcov(fit), vcov(restate(fit, err_iid(adjust))))
      two_pass <- price_factors(factor_panel(), ret ~ f1 + f2, errors = none)
      plain <- err_iid(adjust)
      expect_identical(vcov(two_pass), vcov(restate(two_pass, plain)))
      for (structure in list(err_moments, err_misspec, function(s) err_eiv("robust", s), function(s) err_eiv("shanken", s))) {
        expect_identical(vcov(restate(two_pass, structure(none))), vcov(restate(two_pass, structure(plain))))
      }
    }
  }
})

test_that("1, 2 and 8 threads give the same bits", {
  # Enough rows for several pieces of work (see kChunkRows in passes/moments.hpp), in two orders.
  rows <- factor_panel(T = 200, N = 1000)$data
  set.seed(8)
  rows$size <- rnorm(nrow(rows))
  rows$ret[sample(nrow(rows), 2000)] <- NA
  by_asset <- asset_panel(rows, "asset", "period")
  by_period <- asset_panel(rows[order(rows$period), ], "asset", "period")
  complete <- factor_panel(T = 200, N = 30)
  on_threads <- function(threads) {
    old <- options(lambdabar.threads = threads)
    on.exit(options(old))
    gls <- price_factors(complete, ret ~ f1 + f2, method = "gls")
    fits <- unlist(lapply(list(by_asset, by_period), function(panel) {
      list(
        price_traits(panel, ret ~ size), price_factors(panel, ret ~ f1 + f2, traits = ~size, errors = err_eiv("robust")),
        price_factors(panel, ret ~ f1 + f2, method = "wls", errors = err_eiv("robust")), pooled(panel, ret ~ size + f1),
        pooled(panel, ret ~ size + f1, errors = err_hetero("HC3"))
      )
    }), recursive = FALSE)
    list(lapply(fits, function(fit) list(coef(fit), vcov(fit))), period_premia(fits[[1]]), augment(gls), alpha_test(gls))
  }
  one <- on_threads(1)
  expect_identical(on_threads(2), one)
  expect_identical(on_threads(8), one)
})

test_that("with the same characteristics every period the pooled and the averaged estimate are one", {
  rows <- factor_panel(T = 50, N = 14)$data
  set.seed(12)
  rows$size <- rep(rnorm(14), each = 50)
  rows$value <- rep(rexp(14), each = 50)
  panel <- asset_panel(rows, "asset", "period")
  averaged <- price_traits(panel, ret ~ size + value, errors = err_iid(adjust = FALSE))
  rival <- pooled(panel, ret ~ size + value, errors = err_cluster("period", small = "none"))
  expect_close(coef(averaged), coef(rival), 1e-12)
  expect_close(vcov(averaged), vcov(rival), 1e-12)
})

test_that("influence rows sum to zero and their products to the covariance", {
  plain <- err_iid(adjust = FALSE)
  ragged <- identity_panel()
  complete <- factor_panel()
  fits <- list(
    price_traits(ragged, ret ~ size + value + industry, errors = plain),
    price_traits(ragged, ret ~ size + value, average = "assets", errors = plain),
    price_traits(ragged, ret ~ size + value, average = "precision", errors = plain),
    price_factors(complete, ret ~ f1 + f2, method = "gls", errors = plain),
    price_factors(complete, ret ~ f1 + f2, errors = err_eiv("robust", plain)),
    price_factors(complete, ret ~ f1, method = "wls", errors = err_moments(plain)),
    price_factors(complete, ret ~ f1 + f2, errors = err_misspec(plain)),
    price_factors(ragged, ret ~ mkt, errors = err_misspec(plain)),
    price_factors(ragged, ret ~ mkt, errors = err_eiv("robust", plain)),
    price_factors(ragged, ret ~ mkt, traits = ~size, method = "wls", errors = err_eiv("robust", plain))
  )
  for (fit in fits) {
    rows <- influence_rows(fit)
    expect_lt(max(abs(colSums(rows)) / colSums(abs(rows))), 1e-12)
    expect_close(crossprod(rows), vcov(fit), 1e-12)
  }
})

test_that("Shanken less independent is the term of estimated betas alone", {
  panel <- factor_panel(T = 80, N = 10)
  for (method in c("ols", "wls", "gls")) {
    for (adjust in c(TRUE, FALSE)) {
      fit <- price_factors(panel, ret ~ f1 + f2, method = method, errors = err_iid(adjust))
      corrected <- vcov(restate(fit, err_eiv("shanken", err_iid(adjust))))
      f <- unique(panel$data[c("period", "f1", "f2")])
      own <- matrix(0, 3, 3)
      own[-1, -1] <- stats::cov(f[-1]) / 80 * (if (adjust) 1 else 79 / 80)
      # (1 + c) (V - V_f) + V_f with V_f the factors' own part: Shanken (1992), Review of
      # Financial Studies 5, 1-33.
      expect_close(corrected, (1 + fit$correction) * (vcov(fit) - own) + own, 1e-11)
    }
  }
})

test_that("traded factors among the assets are priced at their means by GLS", {
  panel <- factor_panel(T = 100, N = 6)
  f <- unique(panel$data[c("period", "f1", "f2")])
  returns <- cbind(matrix(panel$data$ret, 100), f1 = f$f1, f2 = f$f2)
  colnames(returns)[1:6] <- paste0("a", 1:6)
  own <- asset_panel(stack_returns(returns, cbind(m1 = f$f1, m2 = f$f2)), "asset", "period")
  fit <- price_factors(own, ret ~ m1 + m2, method = "gls", intercept = FALSE, errors = err_iid())
  expect_close(coef(fit), colMeans(f[-1]), 1e-11)
  expect_close(vcov(fit), stats::cov(f[-1]) / 100, 1e-11)
  expect_close(vcov(restate(fit, err_eiv("robust"))), stats::cov(f[-1]) / 100, 1e-11)
  expect_close(vcov(restate(fit, err_eiv("shanken"))), stats::cov(f[-1]) / 100, 1e-11)
})
