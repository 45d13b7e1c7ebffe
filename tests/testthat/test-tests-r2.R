priced_panel <- function(T = 300, N = 12, wrong = 0, seed = 1) {
  set.seed(seed)
  f <- cbind(mkt = rnorm(T, 0.6, 4), smb = rnorm(T, 0.3, 3), hml = rnorm(T, 0.2, 2))
  f[, "hml"] <- f[, "hml"] + 0.3 * f[, "mkt"]
  betas <- cbind(seq(0.5, 1.5, length.out = N), sin(seq_len(N)), cos(2 * seq_len(N)))
  returns <- f %*% t(betas) + matrix(rnorm(T * N, 0, 2), T) + rep(wrong * cos(5 * seq_len(N)), each = T)
  asset_panel(stack_returns(returns, f), "asset", "period")
}

# Pieces of the second pass under W, computed in base R.
by_hand <- function(fit, W) {
  R <- fit$input$returns
  f <- fit$input$factors
  T <- nrow(R)
  d <- sweep(f, 2, colMeans(f))
  B <- t(stats::lm.fit(cbind(1, f), R)$coefficients)[, -1, drop = FALSE]
  X <- cbind(1, B)
  A <- solve(t(X) %*% W %*% X, t(X) %*% W)
  mu <- colMeans(R)
  gamma <- as.numeric(A %*% mu)
  a <- mu - as.numeric(X %*% gamma)
  e0 <- mu - sum(W %*% mu) / sum(W)
  list(R = R, d = d, B = B, X = X, A = A, gamma = gamma, a = a, e0 = e0, mu = mu, T = T, Vf = crossprod(d) / T)
}

test_that("R2 is that of the weighted regression of mean returns on betas", {
  fit <- price_factors(priced_panel(wrong = 0.3), ret ~ mkt + smb)
  found <- pricing_r2(fit)
  for (measure in c("ols", "gls")) {
    R <- fit$input$returns
    W <- if (measure == "ols") diag(ncol(R)) else solve(crossprod(sweep(R, 2, colMeans(R))) / nrow(R))
    h <- by_hand(fit, W)
    root <- chol(W)
    y <- root %*% h$mu
    one <- root %*% rep(1, ncol(R))
    r2 <- 1 - sum(lm.fit(root %*% h$X, y)$residuals^2) / sum(lm.fit(one, y)$residuals^2)
    expect_equal(found$estimate[found$measure == measure], r2, tolerance = 1e-11)
  }
  # The measures do not depend on how the second pass of the fit was weighted.
  expect_equal(pricing_r2(price_factors(priced_panel(wrong = 0.3), ret ~ mkt + smb, method = "gls"))$estimate, found$estimate)
})

test_that("rows of R2 are its derivative in the weights of the periods", {
  fit <- price_factors(priced_panel(T = 60, wrong = 0.3), ret ~ mkt + smb)
  weighted_r2 <- function(p, gls) {
    R <- fit$input$returns
    f <- fit$input$factors
    p <- p / sum(p)
    mu <- colSums(p * R)
    r <- sweep(R, 2, mu)
    d <- sweep(f, 2, colSums(p * f))
    B <- t(solve(crossprod(d, p * d), crossprod(d, p * r)))
    W <- if (gls) solve(crossprod(r, p * r)) else diag(ncol(R))
    X <- cbind(1, B)
    a <- mu - X %*% solve(t(X) %*% W %*% X, t(X) %*% W %*% mu)
    e0 <- mu - sum(W %*% mu) / sum(W)
    1 - as.numeric(t(a) %*% W %*% a) / as.numeric(t(e0) %*% W %*% e0)
  }
  for (gls in c(FALSE, TRUE)) {
    rows <- cpp_pricing_r2(fit$input, gls, series_options(err_iid()), fit$slot_estimated - 1L)$rows
    T <- length(rows)
    at <- c(1, 7, 23, 60)
    slope <- vapply(at, function(t) {
      step <- 1e-4
      up <- down <- rep(1, T)
      up[t] <- 1 + step
      down[t] <- 1 - step
      (weighted_r2(up, gls) - weighted_r2(down, gls)) / (2 * step)
    }, 1)
    expect_equal(rows[at], slope, tolerance = 1e-6)
    expect_equal(sum(rows), 0, tolerance = 1e-12)
  }
})

test_that("prices of covariance risk and their rows are those of the derivative", {
  fit <- price_factors(priced_panel(T = 60, wrong = 0.3), ret ~ mkt + smb)
  core <- cpp_pricing_r2(fit$input, FALSE, series_options(err_iid()), fit$slot_estimated - 1L)
  h <- by_hand(fit, diag(12))
  expect_equal(as.numeric(core$b), as.numeric(solve(h$Vf, h$gamma[-1])), tolerance = 1e-10)
  weighted_b <- function(p) {
    p <- p / sum(p)
    mu <- colSums(p * h$R)
    f <- fit$input$factors
    d <- sweep(f, 2, colSums(p * f))
    V <- crossprod(d, p * d)
    X <- cbind(1, t(solve(V, crossprod(d, p * sweep(h$R, 2, mu)))))
    solve(V, solve(crossprod(X), crossprod(X, mu))[-1])
  }
  for (t in c(2, 31)) {
    step <- 1e-4
    up <- down <- rep(1, 60)
    up[t] <- 1 + step
    down[t] <- 1 - step
    expect_equal(core$b_rows[t, ], as.numeric(weighted_b(up) - weighted_b(down)) / (2 * step), tolerance = 1e-5)
  }
})

test_that("two models are compared by the case that they are in", {
  panel <- priced_panel(wrong = 0.3)
  one <- price_factors(panel, ret ~ mkt)
  two <- price_factors(panel, ret ~ mkt + smb)
  other <- price_factors(panel, ret ~ mkt + hml)

  nested <- pricing_r2(two, rival = one)
  expect_identical(nested$measure, c("ols", "gls", "ols difference", "gls difference"))
  expect_equal(nested$estimate[3:4], nested$estimate[1:2] - pricing_r2(one)$estimate)
  core <- cpp_pricing_r2(two$input, FALSE, series_options(err_iid()), two$slot_estimated - 1L)
  wald <- core$b[2]^2 / sum(core$b_rows[, 2]^2)
  expect_equal(nested$p_zero[3], pchisq(wald, 1, lower.tail = FALSE), tolerance = 1e-10)
  expect_match(nested$note[3], "nested")
  # The rank of the difference does not depend on which of the two is the rival.
  reverse <- pricing_r2(one, rival = two)
  expect_equal(reverse$p_zero[3:4], nested$p_zero[3:4])

  apart <- pricing_r2(two, rival = other)
  cores <- lapply(list(two, other), function(fit) cpp_pricing_r2(fit$input, TRUE, series_options(err_iid()), fit$slot_estimated - 1L))
  b <- c(cores[[1]]$b[2], cores[[2]]$b[2])
  V <- crossprod(cbind(cores[[1]]$b_rows[, 2], cores[[2]]$b_rows[, 2]))
  worthless <- pchisq(sum(b * solve(V, b)), 2, lower.tail = FALSE)
  se <- sqrt(sum((cores[[1]]$rows - cores[[2]]$rows)^2))
  expect_equal(apart$std.error[4], se, tolerance = 1e-10)
  expected <- if (worthless > 0.05) worthless else 2 * pnorm(-abs(apart$estimate[4] / se))
  expect_equal(apart$p_zero[4], expected, tolerance = 1e-9)
  expect_identical(pricing_r2(two, rival = two)$note[3], "the two models are the same")
})

test_that("samples that cannot carry a measure say why", {
  short <- price_factors(priced_panel(T = 10, N = 12), ret ~ mkt)
  found <- pricing_r2(short)
  expect_true(is.na(found$estimate[2]) && grepl("^GLS needs more periods than assets$", found$note[2]))
  exact <- price_factors(priced_panel(T = 60, N = 3), ret ~ mkt + smb)
  found <- pricing_r2(exact)
  expect_true(all(is.na(found$p_one)))
  expect_match(found$note[1], "as many premia as assets")

  panel <- priced_panel()
  fit <- price_factors(panel, ret ~ mkt)
  expect_error(pricing_r2(price_factors(priced_panel(seed = 2), ret ~ mkt), rival = fit), class = "lambdabar_error_input")
  expect_error(pricing_r2(price_factors(panel, ret ~ mkt, intercept = FALSE), rival = fit), class = "lambdabar_error_input")
  expect_error(pricing_r2(pooled(panel, ret ~ mkt)), class = "lambdabar_error_unsupported")
  holed <- panel
  data <- panel$data
  data$ret[5] <- NA
  expect_error(
    pricing_r2(suppressMessages(price_factors(asset_panel(data, "asset", "period"), ret ~ mkt))),
    class = "lambdabar_error_unsupported"
  )
})

test_that("the discount factor is the GLS two-pass estimate from the other side", {
  panel <- priced_panel(wrong = 0.3)
  fit <- price_factors(panel, ret ~ mkt + smb)
  gls <- price_factors(panel, ret ~ mkt + smb, method = "gls", intercept = FALSE)
  m <- discount_factor(fit)
  Vf <- cov(gls$input$factors) * (299 / 300)
  expect_equal(m$estimate, as.numeric(solve(Vf, coef(gls))), tolerance = 1e-9)
  expect_equal(m$premium, unname(coef(gls)), tolerance = 1e-9)
  h <- by_hand(gls, diag(12))
  V <- crossprod(sweep(h$R, 2, h$mu)) / h$T
  expect_equal(generics::glance(m)$distance^2, as.numeric(gls$alpha %*% solve(V, gls$alpha)), tolerance = 1e-9)
  # With homoskedastic rows of a right model the test of the distance is that of the GLS R2.
  expect_equal(generics::glance(m)$statistic, 300 * generics::glance(m)$distance^2)
  # Coefficients price in units of the factor: ten times the factor, a tenth of the coefficient.
  data <- panel$data
  data$smb <- 10 * data$smb
  scaled <- discount_factor(price_factors(asset_panel(data, "asset", "period"), ret ~ mkt + smb))
  expect_equal(scaled$estimate[2], m$estimate[2] / 10, tolerance = 1e-9)
  expect_equal(scaled$statistic, m$statistic, tolerance = 1e-8)
})

test_that("rows of the discount factor are its derivative in the weights of the periods", {
  fit <- price_factors(priced_panel(T = 60, wrong = 0.3), ret ~ mkt + smb)
  R <- 1 + fit$input$returns / 100
  f <- fit$input$factors / 100
  weighted_b <- function(p, gross) {
    p <- p / sum(p)
    x <- if (gross) cbind(1, f) else sweep(f, 2, colSums(p * f))
    r <- if (gross) R else sweep(R, 2, colSums(p * R))
    target <- if (gross) rep(1, ncol(R)) else colSums(p * R)
    C <- crossprod(r, p * x)
    U <- crossprod(r, p * r)
    b <- solve(t(C) %*% solve(U, C), t(C) %*% solve(U, target))
    e <- target - C %*% b
    c(b, sum(e * solve(U, e)))
  }
  input <- fit$input
  input$returns <- R
  input$factors <- f
  for (gross in c(FALSE, TRUE)) {
    core <- cpp_discount_factor(input, gross, series_options(err_iid()), fit$slot_estimated - 1L)
    expect_equal(c(core$b, core$distance2), weighted_b(rep(1, 60), gross), tolerance = 1e-7)
    for (t in c(3, 44)) {
      step <- 1e-4
      up <- down <- rep(1, 60)
      up[t] <- 1 + step
      down[t] <- 1 - step
      slope <- (weighted_b(up, gross) - weighted_b(down, gross)) / (2 * step)
      expect_equal(c(core$rows[t, ], core$distance_rows[t]), slope, tolerance = 1e-4)
    }
  }
})

test_that("gross returns that are none are refused, distances of small samples say why", {
  fit <- price_factors(priced_panel(T = 10, N = 12), ret ~ mkt)
  expect_error(discount_factor(fit, "gross"), class = "lambdabar_error_input")
  expect_error(discount_factor(fit), class = "lambdabar_error_sample")
  rows <- alpha_test(price_factors(priced_panel(T = 16, N = 8), ret ~ mkt), c("grs", "efficient", "hj_excess"))
  expect_true(is.na(rows$statistic[2]) && grepl("too few periods", rows$note[2]))
  expect_false(anyNA(rows$p.value[c(1, 3)]))
  expect_error(alpha_test(fit, "hj_excess"), class = "lambdabar_error_sample")
})

test_that("R2 and the discount factor print a sentence that can be quoted", {
  panel <- priced_panel(wrong = 0.3)
  two <- price_factors(panel, ret ~ mkt + smb)
  expect_output(print(pricing_r2(two)), "The betas explain")
  expect_output(print(pricing_r2(two, rival = price_factors(panel, ret ~ mkt))), "equal R2")
  expect_output(print(discount_factor(two)), "does not lower the")
})
