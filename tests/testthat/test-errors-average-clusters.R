# Rows of observations by their definition, in base R.
observation_rows <- function(data, formula, id, theta, weights = NULL) {
  frame <- model.frame(formula, data, na.action = na.pass)
  X <- model.matrix(formula, frame)
  y <- model.response(frame)
  w <- if (is.null(weights)) rep(1, nrow(data)) else data[[weights]]
  good <- complete.cases(X, y, w) & w > 0
  psi <- matrix(0, nrow(data), ncol(X))
  periods <- unique(data$month[good])
  for (t in periods) {
    rows <- which(good & data$month == t)
    M <- solve(crossprod(X[rows, ], w[rows] * X[rows, ])) / length(periods)
    u <- y[rows] - X[rows, ] %*% theta
    slopes <- X[rows, ] %*% M * as.numeric(w[rows] * (u - weighted.mean(u, w[rows])))
    level <- X[rows, ] %*% M * as.numeric(w[rows] * u)
    centre <- colSums(w[rows] * X[rows, ]) / sum(w[rows])
    psi[rows, -1] <- slopes[, -1]
    # The constant: its share of the period's mean error less what the slopes' rows take.
    psi[rows, 1] <- w[rows] * u / sum(w[rows]) / length(periods) - slopes[, -1, drop = FALSE] %*% centre[-1]
  }
  list(psi = psi, good = good)
}

cluster_sum <- function(psi, good, group) crossprod(rowsum(psi[good, ], group[good]))

test_that("clustered errors of averaged premia are sums of observations' rows", {
  rows <- small_rows()
  rows$w <- exp(rows$value / 3)
  for (weights in list(NULL, "w")) {
    fit <- price_traits(quiet_panel(rows, "firm", "month"), ret ~ size + value, weights = weights)
    h <- observation_rows(rows, ret ~ size + value, "firm", coef(fit), weights)
    # Inside a period they are the period's influence row.
    expect_equal(unname(rowsum(h$psi, rows$month)), unname(influence_rows(fit)), tolerance = 1e-10)
    G <- 12
    by_firm <- cluster_sum(h$psi, h$good, rows$firm)
    expect_equal(unname(vcov(restate(fit, err_cluster("asset")))), unname(by_firm) * G / (G - 1), tolerance = 1e-10)
    expect_equal(unname(vcov(restate(fit, err_cluster("asset", small = "none")))), unname(by_firm), tolerance = 1e-10)
    both <- by_firm * 12 / 11 + cluster_sum(h$psi, h$good, rows$month) * 10 / 9 - crossprod(h$psi) * sum(h$good) / (sum(h$good) - 1)
    two <- suppressWarnings(restate(fit, err_cluster("asset", "period")))
    if (all(eigen(both)$values > 0)) expect_equal(unname(vcov(two)), unname(both), tolerance = 1e-9)
    expect_equal(generics::glance(two)$df, 9)
  }
})

test_that("clusters of periods are the usual error of averaged premia", {
  fit <- price_traits(small_panel(), ret ~ size + value)
  expect_equal(vcov(restate(fit, err_cluster("period"))), vcov(restate(fit, err_iid())), tolerance = 1e-10)
  assets <- price_traits(small_panel(), ret ~ size + value, average = "assets")
  expect_equal(
    unname(vcov(restate(assets, err_cluster("period", small = "none")))),
    unname(crossprod(influence_rows(assets))), tolerance = 1e-10
  )
  expect_error(
    restate(price_traits(small_panel(), ret ~ size, average = "precision"), err_cluster("asset")),
    class = "lambdabar_error_unsupported"
  )
  expect_output(print(restate(fit, err_cluster("asset"))), "observations' rows of the average")
  shuffled <- small_rows()
  shuffled <- shuffled[sample(nrow(shuffled)), ]
  again <- restate(price_traits(small_panel(shuffled), ret ~ size + value), err_cluster("industry"))
  expect_equal(vcov(again), vcov(restate(fit, err_cluster("industry"))), tolerance = 1e-9)
  expect_error(restate(price_factors(factor_panel(), ret ~ f1), err_cluster("asset")), class = "lambdabar_error_unsupported")
})

test_that("common shocks agree with a general library, and with what they nest", {
  skip_if_not_installed("sandwich")
  rows <- small_rows()
  rows <- rows[order(rows$firm, rows$month), ]
  fit <- pooled(quiet_panel(rows, "firm", "month"), ret ~ size + value, errors = err_cluster("period"))
  model <- lm(ret ~ size + value, rows)
  for (lag in c(0, 2, 4)) {
    # Months follow each other here, so that ranks and calendar agree.
    theirs <- sandwich::vcovPL(model, cluster = rows$firm, order.by = rows$month, lag = lag, adjust = FALSE, aggregate = TRUE)
    ours <- vcov(restate(fit, err_common(lag, adjust = FALSE)))
    expect_equal(unname(ours), unname(theirs), tolerance = 1e-10)
  }
  expect_equal(vcov(restate(fit, err_common(0))), vcov(fit), tolerance = 1e-10)
  averaged <- price_traits(quiet_panel(rows, "firm", "month"), ret ~ size + value)
  expect_identical(vcov(restate(averaged, err_common(3))), vcov(restate(averaged, err_hac(3))))
  expect_equal(generics::glance(restate(fit, err_common(3)))$df, 9)
  expect_output(print(restate(fit, err_common())), "Driscoll-Kraay")
  ladder <- error_ladder(averaged, terms = "size")
  expect_true(all(c("clustered by asset", "common shocks, Bartlett, rule of thumb") %in% ladder$errors))
})

test_that("a firm effect that the usual error cannot see is seen by clusters of firms", {
  # 40 firms, 12 years, a characteristic and a return that both stay with the firm.
  set.seed(11)
  ratio <- vapply(1:30, function(run) {
    d <- expand.grid(year = 2001:2012, firm = 1:40)
    d$x <- rnorm(40)[d$firm] + 0.3 * rnorm(480)
    d$y <- rnorm(40)[d$firm] + 0.3 * rnorm(480)
    fit <- price_traits(quiet_panel(d, "firm", "year"), y ~ x, errors = err_iid())
    c(coef(fit)[["x"]], sqrt(vcov(fit)["x", "x"]), sqrt(vcov(restate(fit, err_cluster("asset")))["x", "x"]))
  }, numeric(3))
  truth <- sd(ratio[1, ])
  expect_lt(mean(ratio[2, ]) / truth, 0.4)
  expect_gt(mean(ratio[3, ]) / truth, 0.7)
})
