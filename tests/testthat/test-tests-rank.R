test_that("Cragg-Donald roots are canonical correlations, whatever the contrasts", {
  for (intercept in c(TRUE, FALSE)) {
    fit <- price_factors(loaded_panel(), ret ~ mkt + smb, intercept = intercept)
    h <- contrasted(fit)
    rho <- cancor(h$R, h$f)$cor
    d <- rho^2 / (1 - rho^2)
    tests <- rank_test(fit, rank = 0:1, kind = c("cragg_donald", "bartlett"))
    expect_equal(tests$statistic[tests$test == "cragg_donald"], h$T * c(sum(d), d[2]), tolerance = 1e-9)
    factor <- h$T - 1 - (h$n + h$K + 1) / 2
    expect_equal(tests$statistic[tests$test == "bartlett"], factor * c(sum(log1p(d)), log1p(d[2])), tolerance = 1e-9)
    expect_identical(tests$num.df, as.numeric(c(2 * h$n, 2 * h$n, h$n - 1, h$n - 1)))
    expect_equal(tests$p.value, pchisq(tests$statistic, tests$num.df, lower.tail = FALSE))
  }
})

test_that("Cragg-Donald is the smallest distance to betas of lower rank", {
  fit <- price_factors(loaded_panel(N = 5), ret ~ mkt + smb)
  h <- contrasted(fit)
  weight <- solve(kronecker(solve(h$Q), h$Sigma)) * h$T
  distance <- function(p) {
    apart <- as.numeric(h$B - outer(p[1:4], c(cos(p[5]), sin(p[5]))))
    as.numeric(t(apart) %*% weight %*% apart)
  }
  best <- min(vapply(c(-1, 0, 1), function(start) {
    optim(c(rowMeans(h$B), start), distance, method = "BFGS", control = list(reltol = 1e-14, maxit = 2000))$value
  }, 1))
  expect_equal(rank_test(fit, 1, "cragg_donald")$statistic, best, tolerance = 1e-5)
})

test_that("Kleibergen-Paap is its definition, and at rank 0 the Wald test of all betas", {
  fit <- price_factors(loaded_panel(), ret ~ mkt + smb)
  h <- contrasted(fit)
  G <- t(solve(chol(h$Sigma)))
  L <- t(chol(h$Q))
  s <- svd(G %*% h$B %*% L, nu = h$n, nv = h$K)
  for (q in 0:1) {
    U2 <- s$u[, (q + 1):h$n, drop = FALSE]
    V2 <- s$v[, (q + 1):h$K, drop = FALSE]
    lam <- as.numeric(t(U2) %*% G %*% h$B %*% L %*% V2)
    rows <- t(vapply(seq_len(h$T), function(t) {
      as.numeric(kronecker(t(V2) %*% solve(L, h$d[t, ]), t(U2) %*% G %*% h$e[t, ]))
    }, lam))
    for (lags in c(0, 3)) {
      S <- crossprod(rows) / h$T
      for (j in seq_len(lags)) {
        G_j <- crossprod(rows[-seq_len(j), , drop = FALSE], rows[seq_len(h$T - j), , drop = FALSE]) / h$T
        S <- S + (1 - j / (lags + 1)) * (G_j + t(G_j))
      }
      found <- rank_test(fit, q, "kleibergen_paap", series = err_hac(lags))
      expect_equal(found$statistic, h$T * sum(lam * solve(S, lam)), tolerance = 1e-8)
    }
  }
  scores <- t(vapply(seq_len(h$T), function(t) as.numeric(kronecker(solve(h$Q, h$d[t, ]), h$e[t, ])), numeric(14)))
  b <- as.numeric(h$B)
  V <- crossprod(scores) / h$T^2
  expect_equal(rank_test(fit, 0, "kleibergen_paap")$statistic, sum(b * solve(V, b)), tolerance = 1e-8)
})

test_that("rank tests do not change with the factors' units and mixtures", {
  panel <- loaded_panel()
  fit <- price_factors(panel, ret ~ mkt + smb)
  data <- panel$data
  data$a <- 3 * data$mkt - 0.2 * data$smb
  data$b <- data$mkt + 100 * data$smb + 5
  mixed <- price_factors(asset_panel(data, "asset", "period"), ret ~ a + b)
  kinds <- c("cragg_donald", "bartlett", "kleibergen_paap")
  expect_equal(rank_test(mixed, 0:1, kinds)$statistic, rank_test(fit, 0:1, kinds)$statistic, tolerance = 1e-7)
})

test_that("the wild bootstrap is reproducible and close to chi-square for a long sample", {
  fit <- price_factors(loaded_panel(T = 600, N = 4, K = 1), ret ~ mkt)
  data <- fit$panel$data
  set.seed(8)
  data$noise <- rnorm(600)[match(data$period, unique(data$period))]
  useless <- price_factors(asset_panel(data, "asset", "period"), ret ~ mkt + noise)
  set.seed(1)
  first <- rank_test(useless, kind = "kleibergen_paap", reps = 199)
  set.seed(1)
  expect_identical(rank_test(useless, kind = "kleibergen_paap", reps = 199)$p.value, first$p.value)
  expect_match(first$note, "199 wild draws")
  expect_equal(first$p.value, rank_test(useless, kind = "kleibergen_paap")$p.value, tolerance = 0.3)
  expect_equal((first$p.value * 200) %% 1, 0, tolerance = 1e-9)
})

test_that("a useless factor is named in print(), a strong one is not", {
  strong <- price_factors(loaded_panel(T = 400, strength = 0.8), ret ~ mkt + smb)
  expect_false(any(grepl("useless", capture.output(print(strong)))))
  data <- strong$panel$data
  set.seed(5)
  data$noise <- rnorm(400)[match(data$period, unique(data$period))]
  weak <- price_factors(asset_panel(data, "asset", "period"), ret ~ mkt + noise)
  expect_output(print(weak), "useless factor")
  expect_match(attr(rank_test(weak), "reading"), "useless")
})

test_that("samples and arguments that rank tests cannot take are refused", {
  fit <- price_factors(loaded_panel(), ret ~ mkt + smb)
  expect_error(rank_test(fit, 2), class = "lambdabar_error_input")
  expect_error(rank_test(fit, kind = "anova"), class = "lambdabar_error_input")
  short <- price_factors(loaded_panel(T = 10, N = 10), ret ~ mkt)
  expect_error(rank_test(short), class = "lambdabar_error_sample")
  expect_output(print(short), "Premia")
  few <- price_factors(loaded_panel(N = 3), ret ~ mkt + smb)
  expect_false(anyNA(rank_test(few, kind = "cragg_donald")$p.value))
  thin <- rank_test(price_factors(loaded_panel(T = 14, N = 9, K = 3), ret ~ mkt + smb + hml), 0:2)
  expect_true(anyNA(thin$statistic))
  expect_match(thin$note[is.na(thin$statistic)], "too few periods")
})
