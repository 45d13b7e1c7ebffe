# Two passes on open daily returns (gmm::Finance): against an independent computation kept in
# fixtures/two-pass-finance.R, closed formulas written out here, and general-purpose estimators.

finance_reference <- local({
  reference <- NULL
  function() {
    if (is.null(reference)) reference <<- dget(test_path("fixtures", "two-pass-finance.R"))
    reference
  }
})

# Assets of a fit stand in the order of their names, those of a sample in that of the file.
in_file_order <- function(fit, sample) match(colnames(sample$returns), fit$panel$assets)

# The cases of the reference, each with its fit, estimated once.
fitted_cases <- local({
  cases <- NULL
  function() {
    if (is.null(cases)) {
      cases <<- lapply(finance_reference()$cases, function(case) {
        sample <- finance_sample(case[["T"]], case[["N"]], case[["K"]])
        case$fit <- sample_fit(sample, method = case$method, intercept = case$intercept)
        case$order <- in_file_order(case$fit, sample)
        case
      })
    }
    cases
  }
})

lower_triangle <- function(covariance) covariance[lower.tri(covariance, diag = TRUE)]

# Each covariance of the reference and the sum over periods that it stands for.
reference_sums <- function() {
  list(
    nw0 = err_iid(adjust = FALSE), nw5 = err_hac(5, adjust = FALSE),
    nw94 = err_hac("newey_west", adjust = FALSE),
    nw94_prewhite = err_hac("newey_west", prewhiten = TRUE, adjust = FALSE),
    andrews_qs = err_hac("andrews", "qs", adjust = FALSE),
    andrews_qs_prewhite = err_hac("andrews", "qs", prewhiten = TRUE, adjust = FALSE),
    parzen_bw6 = err_hac(5, "parzen", adjust = FALSE), hh5 = err_hac(5, "truncated", adjust = FALSE)
  )
}

expect_covariance <- function(fit, expected) {
  scale <- lower_triangle(sd_products(vcov(fit)))
  expect_close(lower_triangle(vcov(fit)), expected, 1e-11, scale = scale)
}

test_that("premia and pricing errors of all cases equal the reference", {
  skip_if_not_installed("gmm")
  for (case in fitted_cases()) {
    fit <- case$fit
    expect_close(coef(fit), case$gamma, 1e-11)
    expect_close(fit$correction, case$c, 1e-11)
    table <- augment(fit)[case$order, ]
    expect_close(table$alpha, case$alpha, 1e-11, scale = max(abs(case$alpha)))
  }
})

test_that("covariances of premia under every structure and kernel equal the reference", {
  skip_if_not_installed("gmm")
  for (case in fitted_cases()) {
    fit <- case$fit
    expect_covariance(restate(fit, err_iid()), case$iid_Tminus1)
    expect_covariance(restate(fit, err_eiv("shanken", err_iid(adjust = FALSE))), case$shanken)
    expect_covariance(restate(fit, err_eiv("shanken", err_hac(5, adjust = FALSE))), case$shanken_nw5)
    for (sum in names(reference_sums())) {
      series <- reference_sums()[[sum]]
      quietly <- function(errors) suppressWarnings(restate(fit, errors))
      fits <- list(
        averaged = quietly(series), estimated = quietly(err_eiv("robust", series)), misspecified = quietly(err_misspec(series))
      )
      for (kind in names(fits)) {
        expect_covariance(fits[[kind]], case[[kind]][[sum]])
        bandwidth <- case[[kind]]$bandwidth[[sum]]
        if (is.null(bandwidth)) next
        if (series$kernel == "qs") {
          expect_close(glance(fits[[kind]])$bandwidth, bandwidth, 1e-11)
        } else {
          expect_identical(glance(fits[[kind]])$lags, floor(bandwidth))
        }
      }
      # Stacked moments and the rows of estimated betas are one and the same sum.
      expect_identical(vcov(quietly(err_moments(series))), vcov(fits$estimated))
    }
  }
})

test_that("errors of single pricing errors equal the reference", {
  skip_if_not_installed("gmm")
  for (case in fitted_cases()) {
    fit <- case$fit
    errors_under <- function(errors) augment(restate(fit, errors))$std.error[case$order]
    five <- err_hac(5, adjust = FALSE)
    expect_close(errors_under(err_iid(adjust = FALSE)), case$se_alpha_iid, 1e-11)
    expect_close(errors_under(err_eiv("robust", five)), case$se_alpha_estimated_nw5, 1e-11)
    expect_close(errors_under(err_misspec(five)), case$se_alpha_misspecified_nw5, 1e-11)
  }
})

test_that("joint tests of pricing errors equal the reference", {
  skip_if_not_installed("gmm")
  for (case in fitted_cases()) {
    fit <- case$fit
    tested <- function(kind, series = err_iid()) {
      row <- alpha_test(fit, kind, series)
      expect_identical(row$test, kind)
      unlist(row[c("statistic", "num.df", "p.value")])
    }
    expect_close(tested("averaged"), case$alpha_test$averaged, 1e-11)
    expect_close(tested("corrected"), case$alpha_test$corrected, 1e-11)
    expect_close(tested("moments"), case$alpha_test$moments_iid, 1e-11)
    expect_close(tested("moments", err_hac(5)), case$alpha_test$moments_nw5, 1e-11)
    if (!is.null(case$csrt)) {
      expect_close(tested("corrected"), case$csrt$chisq, 1e-11)
      f_form <- unlist(alpha_test(fit, "f_approx")[c("statistic", "num.df", "den.df", "p.value")])
      expect_close(f_form, case$csrt$F, 1e-11)
    }
  }
})

test_that("first passes and tests of their intercepts equal the reference", {
  skip_if_not_installed("gmm")
  for (name in names(finance_reference()$time_series)) {
    reference <- finance_reference()$time_series[[name]]
    first <- finance_reference()$first_pass[[name]]
    K <- if (grepl("f1", name)) 1 else 3
    sample <- if (grepl("short", name)) finance_sample(60, 8, K) else finance_sample(500, 20, K)
    fit <- sample_fit(sample)
    numbers <- function(kind, series = err_iid()) {
      row <- alpha_test(fit, kind, series)
      c(row$statistic, row$num.df, if (is.finite(row$den.df)) row$den.df, row$p.value)
    }
    expect_close(numbers("grs"), reference$grs, 1e-11)
    expect_close(numbers("grs_chisq"), reference$grs_chisq, 1e-11)
    expect_close(numbers("grs_lr")[1], reference$grs_lr, 1e-11)
    expect_close(numbers("grs_moments")[-2], reference$moments_iid, 1e-11)
    if (!is.null(reference$moments_nw5)) {
      expect_close(numbers("grs_moments", err_hac(5))[-2], reference$moments_nw5, 1e-11)
    }
    if (!is.null(first)) {
      table <- augment(fit)[in_file_order(fit, sample), ]
      betas <- as.matrix(table[paste0("beta_", colnames(sample$factors))])
      expect_close(as.vector(betas), first$B, 1e-11)
      intercepts <- table$mean_return - drop(betas %*% colMeans(sample$factors))
      expect_close(intercepts, first$a, 1e-11, scale = max(abs(first$a)))
    }
  }
})

test_that("alphas and betas print as published", {
  skip_if_not_installed("gmm")
  # Chausse (2010), Journal of Statistical Software 34(11), section 3.5: gmm::Finance, rows 1
  # to 500, columns 1 to 5, the market in excess of rf.
  sample <- finance_sample(500, 5, 1)
  fit <- sample_fit(sample)
  table <- augment(fit)[in_file_order(fit, sample), ]
  expect_identical(table$asset, c("WMK", "UIS", "ORB", "MAT", "ABAX"))
  expect_prints(table$beta_mkt, c("0.265160711", "1.191251310", "1.468351230", "0.944597286", "0.945732586"))
  expect_prints(
    table$mean_return - table$beta_mkt * mean(sample$factors),
    c("-0.006175863", "-0.040071898", "0.034540959", "0.030904524", "-0.100401093")
  )
})

# Premia and Shanken's covariance by their formulas, from lm: Shanken (1992), Review of
# Financial Studies 5, 1-33, all moments with divisor T.
plain_two_pass <- function(sample, method, intercept) {
  returns <- sample$returns
  T <- nrow(returns)
  first <- lm(returns ~ sample$factors)
  betas <- t(coef(first)[-1, , drop = FALSE])
  X <- if (intercept) cbind(1, betas) else betas
  residual_covariance <- crossprod(residuals(first)) / T
  W <- switch(method,
    ols = diag(ncol(returns)), wls = diag(1 / diag(residual_covariance)), gls = solve(residual_covariance)
  )
  A <- solve(t(X) %*% W %*% X, t(X) %*% W)
  premia <- drop(A %*% colMeans(returns))
  factor_covariance <- stats::cov(sample$factors) * (T - 1) / T
  on_factors <- if (intercept) premia[-1] else premia
  correction <- drop(on_factors %*% solve(factor_covariance, on_factors))
  padded <- matrix(0, length(premia), length(premia))
  loaded <- if (intercept) -1 else seq_along(premia)
  padded[loaded, loaded] <- factor_covariance
  alpha <- drop(colMeans(returns) - X %*% premia)
  list(
    premia = premia, alpha = alpha, correction = correction,
    shanken = ((1 + correction) * A %*% residual_covariance %*% t(A) + padded) / T,
    Q = drop(alpha %*% solve(residual_covariance, alpha)), betas = betas, first = first
  )
}

test_that("premia, Shanken's errors and the F form follow from lm and their formulas", {
  skip_if_not_installed("gmm")
  for (sample in list(finance_sample(500, 20, 3), finance_sample(120, 8, 1), finance_sample(4012, 20, 3))) {
    T <- nrow(sample$returns)
    N <- ncol(sample$returns)
    K <- ncol(sample$factors)
    for (method in c("ols", "wls", "gls")) {
      for (intercept in c(TRUE, FALSE)) {
        by_hand <- plain_two_pass(sample, method, intercept)
        fit <- sample_fit(sample, method = method, intercept = intercept, errors = err_eiv("shanken", err_iid(adjust = FALSE)))
        expect_close(coef(fit), by_hand$premia, 1e-11)
        expect_close(vcov(fit), by_hand$shanken, 1e-11)
        expect_close(vcov(restate(fit, err_eiv())), by_hand$shanken * T / (T - 1), 1e-11)
        table <- augment(fit)[in_file_order(fit, sample), ]
        expect_close(table$alpha, by_hand$alpha, 1e-11, scale = max(abs(by_hand$alpha)))
        if (method != "gls") next
        # Shanken (1985), Journal of Financial Economics 14, 327-348: Q / (1 + c) in F form.
        q <- length(by_hand$premia)
        statistic <- by_hand$Q / (1 + by_hand$correction) * (T - K - N + q) / (N - q)
        row <- alpha_test(fit, "f_approx")
        expect_close(row$statistic, statistic, 1e-11)
        expect_close(row$p.value, pf(statistic, N - q, T - K - N + q, lower.tail = FALSE), 1e-11)
      }
    }
  }
})

test_that("GRS is the exact F of a multivariate linear model", {
  skip_if_not_installed("gmm")
  # stats::anova of two multivariate fits is exact for one restricted row.
  for (sample in list(finance_sample(500, 5, 1), finance_sample(500, 20, 3), finance_sample(4012, 20, 3))) {
    returns <- sample$returns
    factors <- sample$factors
    table <- as.data.frame(stats::anova(lm(returns ~ factors), lm(returns ~ factors - 1), test = "Pillai"))
    row <- alpha_test(sample_fit(sample), "grs")
    expect_close(row$statistic, table[2, "approx F"], 1e-11)
    expect_identical(c(row$num.df, row$den.df), as.double(table[2, c("num Df", "den Df")]))
    expect_close(row$p.value, table[2, "Pr(>F)"], 1e-11)
  }
  # Rows 1 to 500, 5 stocks, by the direct formula in base R on gmm::Finance.
  row <- alpha_test(sample_fit(finance_sample(500, 5, 1)), "grs")
  expect_close(c(row$statistic, row$p.value), c(0.09501107348289, 0.9929665400036), 1e-12)
})

test_that("tests of intercepts by moments are Wald tests with sandwich covariances", {
  skip_if_not_installed("gmm")
  skip_if_not_installed("sandwich")
  sample <- finance_sample(500, 6, 2)
  returns <- sample$returns
  factors <- sample$factors
  first <- lm(returns ~ factors)
  intercepts <- 3 * (0:5) + 1
  for (lags in c(0, 3, 8)) {
    V <- sandwich::NeweyWest(first, lag = lags, prewhite = FALSE, adjust = FALSE)[intercepts, intercepts]
    statistic <- drop(coef(first)[1, ] %*% solve(V, coef(first)[1, ]))
    row <- alpha_test(sample_fit(sample), "grs_moments", err_hac(lags))
    expect_close(row$statistic, statistic, 1e-11)
  }
})

test_that("estimators of stacked moments find the premia and their covariance", {
  skip_if_not_installed("gmm")
  # Both passes as exactly identified moments (e, f e, X'(R - X gamma)) in gmm::gmm. With X held
  # at its estimates in the weights this is err_moments(); with X moving along with the betas it
  # is err_misspec().
  sample <- finance_sample(500, 5, 1)
  fit <- sample_fit(sample)
  table <- augment(fit)[in_file_order(fit, sample), ]
  N <- 5
  held <- cbind(1, table$beta_mkt)
  moments <- function(moving) function(theta, x) {
    betas <- theta[N + 1:N]
    X <- cbind(1, betas)
    e <- x$returns - rep(theta[1:N], each = nrow(x$returns)) - x$factors %*% t(betas)
    u <- x$returns - rep(X %*% theta[2 * N + 1:2], each = nrow(x$returns))
    cbind(e, e * drop(x$factors), u %*% (if (moving) X else held))
  }
  slopes_of_moments <- function(moving) function(theta, x) {
    X <- cbind(1, theta[N + 1:N])
    weights <- if (moving) X else held
    u <- colMeans(x$returns) - X %*% theta[2 * N + 1:2]
    on_betas <- -theta[2 * N + 2] * t(weights) + if (moving) rbind(0, t(u)) else 0
    f <- drop(x$factors)
    rbind(
      cbind(-kronecker(rbind(c(1, mean(f)), c(mean(f), mean(f^2))), diag(N)), matrix(0, 2 * N, 2)),
      cbind(matrix(0, 2, N), on_betas, -t(weights) %*% X)
    )
  }
  estimate <- c(table$mean_return - table$beta_mkt * mean(sample$factors), table$beta_mkt, coef(fit))
  for (moving in c(FALSE, TRUE)) {
    for (lags in c(2, 5)) {
      outside <- suppressWarnings(gmm::gmm(
        moments(moving), sample, 0.9 * estimate + 0.01, gradv = slopes_of_moments(moving), wmatrix = "ident",
        vcov = "HAC", kernel = "Bartlett", bw = lags + 1, prewhite = 0, optfct = "nlminb",
        control = list(rel.tol = 1e-15, x.tol = 1e-12, iter.max = 1000, eval.max = 5000)
      ))
      series <- err_hac(lags, adjust = FALSE)
      restated <- restate(fit, if (moving) err_misspec(series) else err_moments(series))
      # What its optimiser leaves.
      expect_close(coef(fit), coef(outside)[11:12], 1e-9)
      expect_close(vcov(restated), vcov(outside)[11:12, 11:12], 1e-9)
    }
  }
})
