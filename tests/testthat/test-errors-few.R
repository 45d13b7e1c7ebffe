few_panel <- function(G = 9, seed = 3) {
  set.seed(seed)
  d <- expand.grid(year = 2001:2012, firm = 1:(3 * G))
  d$region <- paste0("r", (d$firm - 1) %/% 3 + 1)
  d <- d[-sample(nrow(d), 20), ]
  code <- match(d$region, unique(d$region))
  d$x <- rnorm(G)[code] + rnorm(nrow(d))
  d$w <- exp(0.3 * rnorm(nrow(d)))
  d$z <- rnorm(nrow(d), 100)
  d$y <- 0.3 * d$x + rnorm(G)[code] + rnorm(nrow(d))
  d
}

fit_few <- function(d, ...) pooled(quiet_panel(d, "firm", "year"), y ~ x + z, ...)

test_that("CR3 is the cluster jackknife, by leaving each cluster out", {
  d <- few_panel()
  for (weights in list(NULL, "w")) {
    fit <- restate(fit_few(d, weights = weights), err_cluster("region", few = "cr3"))
    d$use <- if (is.null(weights)) 1 else d$w
    without <- vapply(unique(d$region), function(g) {
      keep <- d$region != g
      coef(lm(y ~ x + z, d[keep, ], weights = use))
    }, numeric(3))
    changes <- without - coef(fit)
    expect_equal(unname(vcov(fit)), unname(8 / 9 * tcrossprod(changes)), tolerance = 1e-8)
    expect_equal(generics::glance(fit)$df, 8)
  }
})

test_that("CR2 and its degrees of freedom are their definition with matrices of rows", {
  d <- few_panel()
  for (weights in list(NULL, "w")) {
    d$use <- if (is.null(weights)) 1 else d$w
    model <- lm(y ~ x + z, d, weights = use)
    X <- model.matrix(model) * sqrt(d$use)
    e <- residuals(model) * sqrt(d$use)
    M <- solve(crossprod(X))
    H <- X %*% M %*% t(X)
    rows <- split(seq_len(nrow(d)), d$region)
    root <- lapply(rows, function(r) {
      s <- eigen(diag(length(r)) - H[r, r], symmetric = TRUE)
      s$vectors %*% (1 / sqrt(s$values) * t(s$vectors))
    })
    psi <- vapply(names(rows), function(g) as.numeric(M %*% t(X[rows[[g]], ]) %*% root[[g]] %*% e[rows[[g]]]), numeric(3))
    fit <- restate(fit_few(d, weights = weights), err_cluster("region", few = "cr2"))
    expect_equal(unname(vcov(fit)), unname(tcrossprod(psi)), tolerance = 1e-8)
    # Satterthwaite with the n x G form: columns (I - H)_g A_g X_g M c.
    df <- vapply(1:3, function(j) {
      columns <- vapply(names(rows), function(g) as.numeric((diag(nrow(d)) - H)[, rows[[g]]] %*% root[[g]] %*% X[rows[[g]], ] %*% M[, j]), numeric(nrow(d)))
      inner <- crossprod(columns)
      sum(diag(inner))^2 / sum(inner^2)
    }, 1)
    tidied <- generics::tidy(fit)
    expect_equal(tidied$p.value, 2 * pt(-abs(tidied$statistic), df), tolerance = 1e-6)
    expect_equal(tidied$conf.high - tidied$estimate, tidied$std.error * qt(0.975, df), tolerance = 1e-6)
  }
})

test_that("CR2 and CR3 agree with a general library where it has them", {
  skip_if_not_installed("sandwich")
  d <- few_panel()
  d <- d[order(d$firm, d$year), ]
  model <- lm(y ~ x + z, d)
  fit <- fit_few(d)
  theirs <- sandwich::vcovCL(model, cluster = d$region, type = "HC3", cadjust = FALSE)
  expect_equal(unname(vcov(restate(fit, err_cluster("region", few = "cr3")))), unname(theirs), tolerance = 1e-8)
  theirs <- sandwich::vcovCL(model, cluster = d$region, type = "HC2", cadjust = FALSE)
  expect_equal(unname(vcov(restate(fit, err_cluster("region", few = "cr2")))) * 8 / 9, unname(theirs), tolerance = 1e-8)
})

# One wild p-value by refitting every sample.
wild_by_refitting <- function(d, r, restricted) {
  G <- unique(d$region)
  full <- lm(y ~ x + z, d)
  under <- lm(I(y - r * x) ~ z, d)
  t_of <- function(y, null) {
    data <- d
    data$y <- y
    model <- lm(y ~ x + z, data)
    X <- model.matrix(model)
    scores <- rowsum(X * residuals(model), d$region)
    V <- solve(crossprod(X)) %*% crossprod(scores) %*% solve(crossprod(X))
    (coef(model)[["x"]] - null) / sqrt(V[2, 2])
  }
  t0 <- t_of(d$y, r)
  signs <- as.matrix(expand.grid(rep(list(c(-1, 1)), length(G))))
  t_star <- apply(signs, 1, function(s) {
    flip <- s[match(d$region, G)]
    if (restricted) t_of(r * d$x + fitted(under) + flip * residuals(under), r) else t_of(fitted(full) + flip * residuals(full), coef(full)[["x"]])
  })
  mean(abs(t_star) >= abs(t0) * (1 - 1e-9))
}

test_that("the wild bootstrap is that of refitted samples, and its interval inverts it", {
  d <- few_panel(G = 6)
  fit <- fit_few(d)
  for (null in c(TRUE, FALSE)) {
    wild <- restate(fit, err_wild("region", reps = 999, null = null))
    tidied <- generics::tidy(wild)
    expect_equal(tidied$p.value[2], wild_by_refitting(d, 0, null), tolerance = 1e-12)
    expect_equal(tidied$std.error, generics::tidy(restate(fit, err_cluster("region")))$std.error)
    narrow <- generics::tidy(wild, conf.level = 0.8)
    expect_gt(wild_by_refitting(d, narrow$conf.high[2] - 1e-6, null), 0.2)
    expect_lte(wild_by_refitting(d, narrow$conf.high[2] + 1e-6, null), 0.2)
    expect_lte(wild_by_refitting(d, narrow$conf.low[2] - 1e-6, null), 0.2)
  }
  expect_output(print(restate(fit, err_wild("region"))), "all 64 sign vectors")
})

test_that("draws are reproducible, the generator goes on, five clusters give the whole line", {
  d <- few_panel(G = 14)
  fit <- fit_few(d)
  for (draws in c("rademacher", "webb")) {
    set.seed(1)
    first <- restate(fit, err_wild("region", reps = 499, draws = draws))
    after <- runif(1)
    set.seed(1)
    again <- restate(fit, err_wild("region", reps = 499, draws = draws))
    expect_identical(generics::tidy(again), generics::tidy(first))
    expect_identical(runif(1), after)
    wide <- generics::tidy(first, conf.level = 0.99)
    plain <- generics::tidy(first)
    expect_true(all(wide$conf.low <= plain$conf.low & wide$conf.high >= plain$conf.high))
    expect_equal((plain$p.value * 500) %% 1, rep(0, 3), tolerance = 1e-9)
    # The interval leaves out zero exactly when zero is rejected.
    expect_identical(plain$conf.low > 0 | plain$conf.high < 0, plain$p.value <= 0.05)
  }
  few <- fit_few(few_panel(G = 5))
  tidied <- generics::tidy(restate(few, err_wild("region")))
  expect_true(all(is.infinite(tidied$conf.low)) && all(is.infinite(tidied$conf.high)))
})

test_that("corrections for few clusters refuse what they are not for", {
  d <- few_panel()
  expect_error(err_cluster("firm", "year", few = "cr2"), class = "lambdabar_error_input")
  expect_error(err_cluster("firm", few = "cr1"), class = "lambdabar_error_input")
  expect_error(err_wild(c("a", "b")), class = "lambdabar_error_input")
  averaged <- price_traits(quiet_panel(d, "firm", "year"), y ~ x)
  expect_error(restate(averaged, err_wild("region")), class = "lambdabar_error_unsupported")
  expect_error(restate(averaged, err_cluster("region", few = "cr2")), class = "lambdabar_error_unsupported")
  d$only <- as.numeric(d$region == "r1")
  alone <- pooled(quiet_panel(d, "firm", "year"), y ~ x + only)
  expect_error(restate(alone, err_cluster("region", few = "cr3")), class = "lambdabar_error_sample")
  expect_true(all(is.finite(generics::tidy(restate(alone, err_cluster("region", few = "cr2")))$std.error)))
})
