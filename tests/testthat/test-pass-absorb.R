absorb_rows <- function(seed = 8, n_firms = 25) {
  set.seed(seed)
  d <- expand.grid(year = 2001:2009, firm = seq_len(n_firms))
  d <- d[-sample(nrow(d), nrow(d) %/% 4), ]
  d$industry <- c("salt", "glass", "nets")[d$firm %% 3 + 1]
  d$x <- 100 + rnorm(n_firms)[d$firm] + rnorm(9)[d$year - 2000] + rnorm(nrow(d))
  d$z <- rnorm(nrow(d)) + 0.3 * d$x
  d$w <- exp(0.4 * rnorm(nrow(d)))
  d$y <- 0.5 * d$x - d$z + 2 * rnorm(n_firms)[d$firm] + rnorm(9)[d$year - 2000] + rnorm(nrow(d))
  d
}

absorbed <- function(d, ...) pooled(quiet_panel(d, "firm", "year"), y ~ x + z, ...)

# The regression on dummies.
dummies <- function(d, effects, weights = NULL) {
  d$use <- if (is.null(weights)) 1 else d[[weights]]
  lm(reformulate(c("x", "z", effects), "y"), d, weights = use)
}

test_that("slopes, residuals and errors are those of the regression on dummies", {
  d <- absorb_rows()
  cases <- list(
    list("firm", "factor(firm)"), list(c("firm", "year"), c("factor(firm)", "factor(year)")),
    list(c("firm", "industry:year"), c("factor(firm)", "interaction(industry, year)"))
  )
  for (case in cases) {
    for (weights in list(NULL, "w")) {
      model <- dummies(d, case[[2]], weights)
      fit <- absorbed(d, absorb = case[[1]], weights = weights, singletons = "keep", errors = err_iid())
      slopes <- c("x", "z")
      expect_equal(coef(fit), coef(model)[slopes], tolerance = 1e-8)
      expect_equal(unname(residuals(fit)), unname(residuals(model)), tolerance = 1e-8)
      expect_equal(unname(fitted(fit)), unname(fitted(model)), tolerance = 1e-9)
      expect_equal(vcov(fit), vcov(model)[slopes, slopes], tolerance = 1e-7)
      expect_equal(generics::glance(fit)$df, df.residual(model))
      if (requireNamespace("sandwich", quietly = TRUE)) {
        hc1 <- sandwich::vcovHC(model, "HC1")[slopes, slopes]
        expect_equal(vcov(restate(fit, err_hetero("HC1"))), hc1, tolerance = 1e-7)
        both <- sandwich::vcovCL(model, d[c("firm", "year")], type = "HC0", cadjust = FALSE)[slopes, slopes]
        ours <- suppressWarnings(vcov(restate(fit, err_cluster("firm", "year", small = "none"))))
        if (all(eigen(both)$values > 0)) expect_equal(ours, both, tolerance = 1e-7)
      }
    }
  }
})

test_that("degrees of freedom count connected components, and effects inside clusters do not count", {
  d <- absorb_rows()
  # Two markets that never meet: firms and years of each are a component of their own.
  d$year[d$firm > 12] <- d$year[d$firm > 12] + 100
  model <- dummies(d, c("factor(firm)", "factor(year)"))
  fit <- absorbed(d, absorb = c("firm", "year"), singletons = "keep", errors = err_iid())
  expect_equal(generics::glance(fit)$df, df.residual(model))
  expect_equal(coef(fit), coef(model)[c("x", "z")], tolerance = 1e-8)

  d <- absorb_rows()
  one <- absorbed(d, absorb = "firm", singletons = "keep")
  none <- vcov(restate(one, err_cluster("firm", small = "none")))
  n <- nrow(d)
  G <- length(unique(d$firm))
  expect_equal(vcov(restate(one, err_cluster("firm"))), none * G / (G - 1) * (n - 1) / (n - 3), tolerance = 1e-10)
  two <- absorbed(d, absorb = c("firm", "year"), singletons = "keep")
  none <- vcov(restate(two, err_cluster("firm", small = "none")))
  expect_equal(vcov(restate(two, err_cluster("firm"))), none * G / (G - 1) * (n - 1) / (n - 2 - 9), tolerance = 1e-10)
})

test_that("rows alone in a group are dropped again and again, and change no slope", {
  d <- absorb_rows()
  extra <- data.frame(year = c(2001, 2099), firm = c(901, 901), industry = "salt", x = c(3, 4), z = c(1, 0), w = 1, y = c(7, 9))
  d <- rbind(d, extra)
  keep <- absorbed(d, absorb = c("firm", "year"), singletons = "keep")
  drop <- absorbed(d, absorb = c("firm", "year"))
  # 2099 is alone in its year; without it firm 901 is alone.
  expect_equal(drop$effects$n_singletons, 2)
  expect_equal(nobs(keep) - nobs(drop), 2)
  expect_equal(coef(drop), coef(keep), tolerance = 1e-9)
  expect_output(print(drop), "2 rows alone in a group")
  expect_equal(sum(!generics::augment(drop)$.used), 2)
})

test_that("three dimensions converge to the regression on dummies, with a bound for their rank", {
  d <- absorb_rows(n_firms = 40)
  d$third <- sample(letters[1:6], nrow(d), TRUE)
  model <- dummies(d, c("factor(firm)", "factor(year)", "third"))
  fit <- absorbed(d, absorb = c("firm", "year", "third"), singletons = "keep")
  expect_equal(coef(fit), coef(model)[c("x", "z")], tolerance = 1e-8)
  expect_false(fit$effects$exact)
  expect_gte(fit$effects$rank, model$rank - 2)
  expect_output(print(fit), "at most")
})

test_that("a chain of groups, the worst case of plain sweeps, is exact too", {
  n <- 150
  d <- data.frame(firm = rep(seq_len(n), each = 2), year = as.vector(rbind(seq_len(n), seq_len(n) + 1)))
  set.seed(1)
  d$x <- rnorm(2 * n)
  d$z <- rnorm(2 * n)
  d$y <- d$x + rnorm(2 * n) + cumsum(rnorm(2 * n))
  model <- dummies(d, c("factor(firm)", "factor(year)"))
  # Every other row alone: nothing is dropped when asked to keep.
  fit <- suppressWarnings(tryCatch(absorbed(d, absorb = c("firm", "year"), singletons = "keep"), error = identity))
  if (df.residual(model) > 0) expect_equal(coef(fit), coef(model)[c("x", "z")], tolerance = 1e-6)
  d <- rbind(d, data.frame(firm = 1:100, year = 3:102, x = rnorm(100), z = rnorm(100), y = rnorm(100)))
  model <- dummies(d, c("factor(firm)", "factor(year)"))
  fit <- absorbed(d, absorb = c("firm", "year"), singletons = "keep")
  expect_equal(coef(fit), coef(model)[c("x", "z")], tolerance = 1e-8)
})

test_that("a term that the effects span is NA, and what is exact only inside clusters is refused", {
  d <- absorb_rows()
  d$fixed <- rnorm(25)[d$firm] * 1e6
  panel <- quiet_panel(d, "firm", "year")
  expect_warning(fit <- pooled(panel, y ~ x + fixed, absorb = "firm"), "absorbed effects")
  expect_true(is.na(coef(fit)[["fixed"]]))
  expect_equal(coef(fit)[["x"]], coef(lm(y ~ x + factor(firm), d))[["x"]], tolerance = 1e-8)
  two <- absorbed(d, absorb = c("firm", "year"))
  expect_error(restate(two, err_hetero("HC3")), class = "lambdabar_error_unsupported")
  expect_error(restate(two, err_cluster("firm", few = "cr2")), class = "lambdabar_error_unsupported")
  expect_error(restate(two, err_wild("industry")), class = "lambdabar_error_unsupported")
  expect_error(absorbed(d, absorb = "nothing"), class = "lambdabar_error_input")
  expect_error(absorbed(d, absorb = c("firm", "firm")), class = "lambdabar_error_input")
  # Inside the clusters the jackknife is that of the regression on dummies.
  one <- absorbed(d, absorb = "firm", singletons = "keep")
  without <- vapply(unique(d$industry), function(g) coef(lm(y ~ x + z + factor(firm), d[d$industry != g, ]))[2:3], numeric(2))
  expect_equal(vcov(restate(one, err_cluster("industry", few = "cr3"))), 2 / 3 * tcrossprod(without - coef(one)), tolerance = 1e-8)
})
