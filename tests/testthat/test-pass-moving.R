# Second pass on betas that move, or that are corrected, against plain matrices.

market <- demo_market(firms = 60, months = 110)
month_panel <- function(data = market) suppressMessages(asset_panel(data, "firm", "month"))
quietly_price <- function(...) suppressWarnings(suppressMessages(price_factors(...)))
window <- window_rolling(48, min_obs = 24)

# Betas, and their errors, known one month before each row.
known_before <- function(data, formula, ...) {
  found <- exposures(month_panel(data), formula, ...)
  position <- function(month) month %/% 100 * 12 + month %% 100
  table <- augment(found)
  at <- match(paste(data$firm, position(data$month) - 1), paste(table$asset, position(table$period)))
  list(table = table[at, ], vcov = vcov(found)[, , at, drop = FALSE])
}

test_that("the betas in use at t are those of t - 1, and each cross-section is lm()", {
  fit <- quietly_price(month_panel(), ret ~ mkt + smb, exposure = window, traits = ~value)
  known <- known_before(market, ret ~ mkt + smb, window)$table
  used <- augment(fit)
  listed <- !is.na(known$asset)
  expect_equal(used$beta_mkt[listed], known$beta_mkt[listed], tolerance = 1e-12)
  # A row after a suspension has betas although the month before has no row.
  expect_gt(sum(!is.na(used$beta_mkt) & !listed), 0)
  series <- period_premia(fit)
  for (month in c(201905, 202203)) {
    rows <- market$month == month
    lm_fit <- lm(market$ret[rows] ~ used$beta_mkt[rows] + used$beta_smb[rows] + market$value[rows])
    expect_equal(series$estimate[series$period == month], unname(coef(lm_fit)), tolerance = 1e-10)
  }
  slopes <- series$estimate[series$term == "mkt" & series$status == "estimated"]
  expect_equal(coef(fit)[["mkt"]], mean(slopes), tolerance = 1e-12)
  expect_equal(vcov(restate(fit, err_iid()))["mkt", "mkt"], var(slopes) / length(slopes), tolerance = 1e-12)
})

test_that("returns of t or later never change the betas used at t", {
  cut <- 202006
  later <- market
  touched <- later$month >= cut
  later$ret[touched] <- 3 - 5 * later$ret[touched]
  for (correct in c("none", "bias", "instruments")) {
    before <- augment(quietly_price(month_panel(), ret ~ mkt, exposure = window, correct = correct))
    after <- augment(quietly_price(month_panel(later), ret ~ mkt, exposure = window, correct = correct))
    early <- market$month <= cut
    expect_gt(sum(!is.na(before$beta_mkt[market$month == cut])), 10)
    expect_identical(after$beta_mkt[early], before$beta_mkt[early])
    expect_false(identical(after$beta_mkt, before$beta_mkt))
  }
  peeking <- augment(quietly_price(month_panel(later), ret ~ mkt, exposure = window, beta_lag = 0))
  honest <- augment(quietly_price(month_panel(), ret ~ mkt, exposure = window, beta_lag = 0))
  expect_false(identical(peeking$beta_mkt[market$month == cut], honest$beta_mkt[market$month == cut]))
})

test_that("the corrected cross-section subtracts the sum of the betas' error covariances", {
  for (method in c("ols", "wls")) {
    fit <- quietly_price(
      month_panel(), ret ~ mkt + smb, exposure = window, traits = ~value, correct = "bias", method = method
    )
    known <- known_before(market, ret ~ mkt + smb, window)
    series <- period_premia(fit)
    for (month in c(201905, 202203)) {
      rows <- which(market$month == month & !is.na(known$table$alpha) & is.finite(market$ret) & is.finite(market$value))
      X <- cbind(1, known$table$beta_mkt[rows], known$table$beta_smb[rows], market$value[rows])
      w <- if (method == "wls") 1 / known$table$resid.var[rows] else rep(1, length(rows))
      A <- crossprod(X, w * X)
      C <- matrix(0, 4, 4)
      for (i in seq_along(rows)) C[2:3, 2:3] <- C[2:3, 2:3] + w[i] * known$vcov[, , rows[i]]
      # Smallest root of |S - mu C|, with S net of constant and trait.
      S <- A[2:3, 2:3] - A[2:3, c(1, 4)] %*% solve(A[c(1, 4), c(1, 4)], A[c(1, 4), 2:3])
      mu <- min(Re(eigen(solve(C[2:3, 2:3], S))$values))
      kappa <- min(1, 0.9 * mu)
      own <- series[series$period == month, ]
      if (own$n_assets[1] != length(rows)) next
      expect_equal(own$kappa[1], kappa, tolerance = 1e-9)
      expect_equal(own$reliability[1], max(0, 1 - 1 / mu), tolerance = 1e-9)
      expect_equal(own$estimate, drop(solve(A - kappa * C, crossprod(X, w * market$ret[rows]))), tolerance = 1e-8)
      checked <- TRUE
    }
    expect_true(checked)
  }
})

test_that("a month in which noise exceeds the spread is guarded and counted", {
  few <- market[market$firm %in% unique(market$firm)[1:14], ]
  fit <- quietly_price(month_panel(few), ret ~ mkt + smb, exposure = window_rolling(24, 12), correct = "bias")
  series <- period_premia(fit)
  guarded <- series$kappa < 1 & series$status == "estimated"
  expect_gt(sum(guarded), 0)
  expect_true(all(is.finite(series$estimate[guarded])))
  expect_true(any(grepl("in part only in", capture.output(print(fit)))))
})

test_that("instruments are betas of alternate months, and give two-stage least squares", {
  fit <- quietly_price(month_panel(), ret ~ mkt, exposure = window, traits = ~size, correct = "instruments")
  position <- market$month %/% 100 * 12 + market$month %% 100
  first <- min(position)
  month <- 202108
  now <- position[market$month == month][1]
  half_beta <- function(firm, parity) {
    rows <- market$firm == firm & position < now & position >= now - 48 & is.finite(market$ret) &
      (position - first) %% 2 == parity
    if (sum(rows) < 12) NA else coef(lm(ret ~ mkt, market[rows, ]))[[2]]
  }
  rows <- which(market$month == month & is.finite(market$ret))
  b0 <- vapply(market$firm[rows], half_beta, 0, parity = 0)
  b1 <- vapply(market$firm[rows], half_beta, 0, parity = 1)
  fine <- !is.na(b0) & !is.na(b1)
  y <- market$ret[rows][fine]
  X <- cbind(1, b0, market$size[rows])[fine, ]
  Z <- cbind(1, b1, market$size[rows])[fine, ]
  two <- cbind(solve(crossprod(Z, X), crossprod(Z, y)), solve(crossprod(X, Z), crossprod(X, y)))
  own <- period_premia(fit)
  own <- own[own$period == month, ]
  expect_equal(own$n_assets[1], sum(fine))
  partial <- cor(residuals(lm(X[, 2] ~ X[, 3])), residuals(lm(Z[, 2] ~ X[, 3])))
  expect_equal(own$strength[1], abs(partial), tolerance = 1e-9)
  if (own$status[1] == "estimated") expect_equal(own$estimate, unname(rowMeans(two)), tolerance = 1e-8)
  trimmed <- period_premia(fit)
  weak <- !is.na(trimmed$strength) & trimmed$strength < 2 / sqrt(trimmed$n_assets)
  expect_identical(trimmed$status == "weak_instruments", weak)
  expect_true(any(trimmed$status == "estimated"))
})

test_that("corrected betas of the whole sample are the pooled estimate with asset errors", {
  set.seed(11)
  T <- 60
  N <- 40
  f <- cbind(mkt = rnorm(T, 0.6, 4), smb = rnorm(T, 0.2, 3)) / 100
  beta <- cbind(rnorm(N, 1, 0.4), rnorm(N, 0.4, 0.5))
  returns <- f %*% t(beta) + matrix(rnorm(T * N, 0, 0.05), T)
  panel <- asset_panel(stack_returns(returns, f), "asset", "period")
  fit <- price_factors(panel, ret ~ mkt + smb, correct = "bias")

  d <- sweep(f, 2, colMeans(f))
  B <- unname(t(solve(crossprod(d), crossprod(d, returns))))
  e <- sweep(returns, 2, colMeans(returns)) - d %*% t(B)
  s2 <- colSums(e^2) / (T - 3)
  lambda <- matrix(0, 3, 3)
  lambda[2:3, 2:3] <- solve(unname(crossprod(d)))
  X <- cbind(1, B)
  A <- crossprod(X) - sum(s2) * lambda
  gamma <- drop(solve(A, crossprod(X, colMeans(returns))))
  expect_equal(unname(coef(fit)), gamma, tolerance = 1e-10)
  scores <- X * drop(colMeans(returns) - X %*% gamma) + s2 %o% drop(lambda %*% gamma)
  expect_equal(colSums(scores), rep(0, 3), tolerance = 1e-12)
  sandwich <- solve(A) %*% crossprod(scores) %*% solve(A) * N / (N - 1)
  expect_equal(unname(vcov(restate(fit, err_assets(realised = TRUE)))), sandwich, tolerance = 1e-9)
  both <- sandwich
  both[2:3, 2:3] <- both[2:3, 2:3] + unname(crossprod(d)) / T^2 * T / (T - 1)
  expect_equal(unname(vcov(fit)), both, tolerance = 1e-9)

  expect_error(restate(fit, err_hac()), class = "lambdabar_error_unsupported")
  expect_error(period_premia(fit), class = "lambdabar_error_unsupported")
  expect_equal(dim(influence_rows(fit)), c(N, 3L))

  panel$data$group <- rep(letters[1:8], length.out = N)[panel$asset + 1L]
  grouped <- asset_panel(panel$data, "asset", "period")
  clustered <- restate(price_factors(grouped, ret ~ mkt + smb, correct = "bias"), err_assets("group", realised = TRUE))
  group <- rep(letters[1:8], length.out = N)
  order_of_assets <- match(grouped$assets, unique(panel$data$asset))
  summed <- rowsum(scores[order_of_assets, ], group)
  expect_equal(unname(vcov(clustered)), solve(A) %*% crossprod(unname(summed)) %*% solve(A) * 8 / 7, tolerance = 1e-9)
})

# Simulated premia with a known answer; the bounds are four Monte Carlo standard errors, which
# a correct estimator leaves once in 16,000 runs.
test_that("naive premia are attenuated and both remedies are not", {
  set.seed(21)
  T <- 72
  N <- 300
  found <- vapply(1:12, function(run) {
    f <- cbind(mkt = rnorm(T, 0.01, 0.045))
    beta <- rnorm(N, 1, 0.4)
    returns <- f %*% t(beta) + matrix(rnorm(T * N, 0, 0.09), T)
    panel <- asset_panel(stack_returns(returns, f), "asset", "period")
    vapply(c("none", "bias", "instruments"), function(correct) {
      fit <- quietly_price(panel, ret ~ mkt, exposure = window_rolling(36), correct = correct)
      priced <- unique(period_premia(fit)$period[period_premia(fit)$status == "estimated"])
      coef(fit)[["mkt"]] / mean(f[priced, ])
    }, 0)
  }, numeric(3))
  error <- apply(found, 1, sd) / sqrt(ncol(found))
  expect_lt(mean(found["none", ]), 1 - 4 * error[["none"]])
  expect_lt(abs(mean(found["bias", ]) - 1), 4 * error[["bias"]])
  expect_lt(abs(mean(found["instruments", ]) - 1), 4 * error[["instruments"]])
})

test_that("exposures of another calendar price a monthly panel", {
  set.seed(5)
  days <- seq(as.Date("2021-01-01"), as.Date("2021-12-31"), by = "day")
  days <- days[!format(days, "%u") %in% c("6", "7")]
  f <- rnorm(length(days), 0, 0.01)
  returns <- f %*% t(seq(0.5, 1.5, length.out = 12)) + rnorm(12 * length(days), 0, 0.02)
  daily <- asset_panel(stack_returns(returns, cbind(mkt = f), period = days), "asset", "period")
  first_pass <- exposures(daily, ret ~ mkt, window = window_rolling(60))
  months <- expand.grid(asset = daily$assets, period = 202101:202112, stringsAsFactors = FALSE)
  months$ret <- rnorm(nrow(months))
  panel <- suppressMessages(asset_panel(months, "asset", "period"))
  used <- augment(quietly_price(panel, ret ~ mkt, exposure = first_pass))
  ends <- augment(exposures(daily, ret ~ mkt, window = window_rolling(60), every = "month"))
  at <- match(paste(used$asset, used$period), paste(ends$asset, ends$month + 1))
  expect_equal(used$beta_mkt[!is.na(at)], ends$beta_mkt[at[!is.na(at)]], tolerance = 1e-12)
  expect_true(all(is.na(used$beta_mkt[used$period == 202101])))
  expect_error(quietly_price(panel, ret ~ smb, exposure = first_pass), class = "lambdabar_error_input")
})

test_that("what has no meaning for moving betas is refused with advice", {
  fit <- quietly_price(month_panel(), ret ~ mkt, exposure = window)
  expect_error(restate(fit, err_eiv()), class = "lambdabar_error_unsupported")
  expect_error(restate(fit, err_assets()), class = "lambdabar_error_unsupported")
  expect_error(alpha_test(fit), class = "lambdabar_error_unsupported")
  expect_error(price_factors(month_panel(), ret ~ mkt, exposure = window, method = "gls"), class = "lambdabar_error_unsupported")
  expect_error(price_factors(month_panel(), ret ~ mkt, exposure = window, min_obs = 10), class = "lambdabar_error_input")
  shrunk <- suppressWarnings(exposures(month_panel(), ret ~ mkt, window = window, shrink = "vasicek"))
  expect_error(price_factors(month_panel(), ret ~ mkt, exposure = shrunk, correct = "bias"), class = "lambdabar_error_unsupported")
  shown <- capture.output(print(fit))
  expect_true(any(grepl("not corrected: premia are attenuated", shown)))
  expect_lte(max(nchar(shown)), 80)
})
