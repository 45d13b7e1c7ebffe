# Pooled errors against general-purpose covariance functions and a published table.

petersen_panel <- function() asset_panel(data_of("PetersenCL", "sandwich"), "firm", "year")

petersen_lm <- function() lm(y ~ x, data_of("PetersenCL", "sandwich"))

cluster_errors <- function(fit, ..., small = "each") std_errors(restate(fit, err_cluster(..., small = small)))

test_that("averaged and pooled errors print as in Petersen's tables", {
  skip_if_not_installed("sandwich")
  # M. A. Petersen, test-data page for standard errors, all tables; data of Petersen (2009),
  # Review of Financial Studies 22, 435-480: sandwich::PetersenCL.
  averaged <- tidy(price_traits(petersen_panel(), y ~ x, errors = err_iid()))
  expect_prints(averaged$estimate, c("0.0313", "1.0356"))
  expect_prints(averaged$std.error, c("0.0234", "0.0333"))
  expect_prints(averaged$statistic, c("1.34", "31.06"))

  fit <- pooled(petersen_panel(), y ~ x, errors = err_iid())
  expect_prints(coef(fit), c("0.0297", "1.0348"))
  expect_prints(std_errors(fit), c("0.0284", "0.0286"))
  expect_prints(tidy(fit)$statistic, c("1.05", "36.20"))
  expect_prints(glance(fit)$r.squared, "0.2078")
  white <- tidy(restate(fit, err_hetero("HC1")))
  expect_prints(white$std.error, c("0.0284", "0.0284"))
  expect_prints(white$statistic[2], "36.44")
  firm <- tidy(restate(fit, err_cluster("firm")))
  expect_prints(firm$std.error, c("0.0670", "0.0506"))
  expect_prints(firm$statistic, c("0.44", "20.45"))
  year <- tidy(restate(fit, err_cluster("year")))
  expect_prints(year$std.error, c("0.0234", "0.0334"))
  expect_prints(year$statistic, c("1.27", "30.99"))
  both <- tidy(restate(fit, err_cluster("firm", "year")))
  expect_prints(both$std.error, c("0.0651", "0.0536"))
  expect_prints(both$statistic, c("0.46", "19.32"))
})

test_that("firm clusters without a factor print as published", {
  skip_if_not_installed("sandwich")
  # Zeileis, Koell and Graham (2020), Journal of Statistical Software 95(1), section 5.2:
  # sandwich::PetersenCL, clustered by firm, no factor.
  fit <- pooled(petersen_panel(), y ~ x)
  expect_prints(cluster_errors(fit, "firm", small = "none"), c("0.066939", "0.050540"))
})

test_that("one- and two-way clusters equal vcovCL on Petersen's panel", {
  skip_if_not_installed("sandwich")
  fit <- pooled(petersen_panel(), y ~ x)
  outside <- petersen_lm()
  for (ways in list("firm", "year", c("firm", "year"))) {
    clusters <- data_of("PetersenCL", "sandwich")[ways]
    inside <- function(small) vcov(restate(fit, rlang::inject(err_cluster(!!!ways, small = small))))
    expect_close(inside("each"), sandwich::vcovCL(outside, clusters, type = "HC1", cadjust = TRUE), 1e-12)
    expect_close(inside("none"), sandwich::vcovCL(outside, clusters, type = "HC0", cadjust = FALSE), 1e-12)
    # The factor of the way with the fewest clusters, on the sum without factors.
    fewest <- min(vapply(clusters, function(id) length(unique(id)), 1L))
    expect_close(
      inside("min"),
      fewest / (fewest - 1) * sandwich::vcovCL(outside, clusters, type = "HC1", cadjust = FALSE), 1e-12
    )
  }
})

test_that("each factor differs from a plain last term by that term's own factor only", {
  skip_if_not_installed("sandwich")
  # One row a firm and year: multi0 = TRUE takes the intersection as plain HC0, the package
  # as n clusters with factor n/(n-1) (n-1)/(n-P).
  fit <- pooled(petersen_panel(), y ~ x, errors = err_cluster("firm", "year"))
  outside <- petersen_lm()
  clusters <- data_of("PetersenCL", "sandwich")[c("firm", "year")]
  plain_last <- sandwich::vcovCL(outside, clusters, type = "HC1", cadjust = TRUE, multi0 = TRUE)
  n <- nobs(outside)
  expect_close(
    vcov(fit), plain_last - (n / (n - 2) - 1) * sandwich::vcovHC(outside, type = "HC0"), 1e-12
  )
  # Zeileis, Koell and Graham (2020), section 5.2: two ways with the White part plain.
  expect_prints(
    sqrt(diag(vcov(fit) + (n / (n - 2) - 1) * vcov(restate(fit, err_hetero("HC0"))))), c("0.065066", "0.053561")
  )
})

innovation <- function() {
  rows <- data_of("InstInnovation", "sandwich")
  rows$y <- log1p(rows$cites)
  rows$intensity <- log(rows$capital / rows$employment)
  rows$size <- log(rows$sales)
  rows
}

test_that("three ways with nested ids equal vcovCL, also with missing values", {
  skip_if_not_installed("sandwich")
  rows <- innovation()
  model <- y ~ institutions + intensity + size
  ways <- ~ company + year + industry
  # Industries contain companies: a warning says so.
  three <- function(rows, small) {
    panel <- asset_panel(rows, "company", "year")
    expect_warning(
      fit <- pooled(panel, model, errors = err_cluster("company", "year", "industry", small = small)),
      class = "lambdabar_warning_covariance"
    )
    fit
  }
  plain <- three(rows, "none")
  # Computed with sandwich::vcovCL 3.0-2 on InstInnovation, type HC0, cadjust = FALSE.
  expect_close(
    std_errors(plain), c(0.551761880063, 0.003734117177558, 0.1366811441426, 0.07012381233383), 1e-11
  )
  by_two <- restate(plain, err_cluster("year", "industry", small = "none"))
  expect_close(vcov(plain), vcov(by_two), 1e-12)

  set.seed(11)
  rows$y[sample(nrow(rows), 400)] <- NA
  rows$institutions[sample(nrow(rows), 300)] <- NA
  outside <- lm(model, rows)
  expect_lt(nobs(outside), nrow(rows) - 600)
  fit <- three(rows, "each")
  expect_close(coef(fit), coef(outside), 1e-11)
  # vcovCL counts the levels of a factor, used or not; the package counts what is there.
  kept <- droplevels(rows[-outside$na.action, c("company", "year", "industry")])
  clusters <- lapply(kept, as.integer)
  expect_close(vcov(fit), sandwich::vcovCL(outside, as.data.frame(clusters), type = "HC1"), 1e-11)
  expect_close(
    vcov(three(rows, "none")),
    sandwich::vcovCL(outside, as.data.frame(clusters), type = "HC0", cadjust = FALSE), 1e-11
  )
})

# Ragged, weighted, with missing values, a group that crosses both keys, and a shock to
# regressors and returns in each dimension.
ragged_rows <- function() {
  set.seed(21)
  rows <- expand.grid(period = 1:15, asset = 1:40)
  rows <- rows[-sample(nrow(rows), 120), ]
  region <- sample(12, nrow(rows), replace = TRUE)
  shock <- function() rnorm(40)[rows$asset] + rnorm(15)[rows$period] + rnorm(12)[region]
  rows$region <- letters[region]
  rows$size <- 3 + shock() + rnorm(nrow(rows))
  rows$value <- shock() + rnorm(nrow(rows))
  rows$w <- rexp(nrow(rows)) + 0.1
  rows$ret <- 0.1 + 0.2 * rows$size + shock() + rnorm(nrow(rows)) * rows$size
  rows$value[c(5, 77, 200)] <- NA
  rows
}

test_that("ragged panels with any ways and weights equal vcovCL", {
  skip_if_not_installed("sandwich")
  rows <- ragged_rows()
  panel <- asset_panel(rows, "asset", "period")
  complete <- rows[!is.na(rows$value), ]
  for (weights in list(NULL, "w")) {
    fit <- pooled(panel, ret ~ size + value, weights = weights)
    complete$weight <- if (is.null(weights)) 1 else complete$w
    outside <- lm(ret ~ size + value, complete, weights = weight)
    expect_close(coef(fit), coef(outside), 1e-12, scale = std_errors(fit))
    for (ways in list("asset", "region", c("asset", "region"), c("asset", "period", "region"))) {
      inside <- function(small) vcov(restate(fit, rlang::inject(err_cluster(!!!ways, small = small))))
      clusters <- complete[ways]
      expect_close(inside("each"), sandwich::vcovCL(outside, clusters, type = "HC1"), 1e-11)
      expect_close(inside("none"), sandwich::vcovCL(outside, clusters, type = "HC0", cadjust = FALSE), 1e-11)
    }
  }
})

test_that("rows of weight zero do not count, as if they were not there", {
  skip_if_not_installed("sandwich")
  rows <- ragged_rows()
  rows$w[rows$region == "c" | rows$asset == 7] <- 0
  fit <- pooled(asset_panel(rows, "asset", "period"), ret ~ size + value, weights = "w", errors = err_cluster("asset", "region"))
  there <- rows[rows$w > 0 & !is.na(rows$value), ]
  outside <- lm(ret ~ size + value, there, weights = w)
  expect_close(coef(fit), coef(outside), 1e-12, scale = std_errors(fit))
  expect_close(vcov(fit), sandwich::vcovCL(outside, there[c("asset", "region")], type = "HC1"), 1e-11)
})

test_that("a clustered sum that is not positive is clipped in units of plain errors", {
  skip_if_not_installed("sandwich")
  # Cameron, Gelbach and Miller (2011), Journal of Business & Economic Statistics 29, 238-249:
  # negative eigenvalues become zero; here those of the matrix over HC0 standard deviations, so
  # that units do not matter. A variance that was not positive is no variance.
  repaired <- function(rows, model) {
    panel <- asset_panel(rows, "asset", "period")
    rows <- rows[!is.na(rows$value), ]
    outside <- lm(model, rows)
    raw <- sandwich::vcovCL(outside, rows[c("asset", "period")], type = "HC1")
    expect_lt(min(eigen(raw)$values), 0)
    scale <- sd_products(sandwich::vcovHC(outside, type = "HC0"))
    parts <- eigen(raw / scale)
    clipped <- parts$vectors %*% (pmax(parts$values, 0) * t(parts$vectors)) * scale
    clipped[diag(raw) <= 0, ] <- clipped[, diag(raw) <= 0] <- NA
    fit <- suppressWarnings(pooled(panel, model, errors = err_cluster("asset", "period")))
    expect_identical(unname(is.na(vcov(fit))), unname(is.na(clipped)))
    there <- !is.na(clipped)
    expect_close(vcov(fit)[there], clipped[there], 1e-11, scale = scale[there])
    sum(diag(raw) <= 0)
  }
  rows <- ragged_rows()
  expect_identical(repaired(rows, ret ~ size + value + region), 0L)
  # Nothing shared inside clusters: sums of few noisy terms.
  set.seed(5)
  rows$size <- rnorm(nrow(rows))
  rows$ret <- rnorm(nrow(rows))
  rows <- rows[rows$asset <= 12 & rows$period <= 6, ]
  expect_gt(repaired(rows, ret ~ size + value + I(size * value)), 0L)
})

test_that("heteroskedasticity-consistent errors equal vcovHC, weighted too", {
  skip_if_not_installed("sandwich")
  rows <- ragged_rows()
  panel <- asset_panel(rows, "asset", "period")
  for (weights in list(NULL, "w")) {
    rows$weight <- if (is.null(weights)) 1 else rows$w
    outside <- lm(ret ~ size + value + region, rows, weights = weight)
    fit <- pooled(panel, ret ~ size + value + region, weights = weights, errors = err_hetero())
    expect_identical(nobs(fit), as.double(nobs(outside)))
    for (type in paste0("HC", 0:3)) {
      expect_close(vcov(restate(fit, err_hetero(type))), sandwich::vcovHC(outside, type = type), 1e-11)
    }
  }
})

test_that("independent rows of equal variance are those of lm, weighted too", {
  rows <- ragged_rows()
  panel <- asset_panel(rows, "asset", "period")
  for (weights in list(NULL, "w")) {
    rows$weight <- if (is.null(weights)) 1 else rows$w
    outside <- lm(ret ~ size + value, rows, weights = weight)
    fit <- pooled(panel, ret ~ size + value, weights = weights, errors = err_iid())
    expect_close(coef(fit), coef(outside), 1e-12, scale = std_errors(fit))
    expect_close(vcov(fit), vcov(outside), 1e-12)
    table <- summary(outside)$coefficients
    expect_close(tidy(fit)$p.value, table[, 4], 1e-10)
    expect_close(confint(fit), confint(outside), 1e-11)
    expect_close(glance(fit)$r.squared, summary(outside)$r.squared, 1e-12)
  }
})

test_that("robust errors on a certified set equal exact rational arithmetic", {
  # fixtures/strd/exact_robust.json: HC0 and HC1 by exact rational arithmetic, 25 digits.
  # NIST StRD Longley: y on x1 to x6.
  rows <- read.csv(test_path("fixtures", "strd", "Longley.csv"))
  rows$asset <- seq_len(nrow(rows))
  rows$period <- 1L
  fit <- pooled(asset_panel(rows, "asset", "period"), y ~ x1 + x2 + x3 + x4 + x5 + x6, errors = err_hetero("HC0"))
  HC0 <- c(
    8.322115805803267390554356e+5, 5.122034744566391943272556e+1, 2.457599758264472930697033e-2,
    3.832391109259947945712076e-1, 1.462450011409842482473967e-1, 1.582084962199239363033461e-1,
    4.283843755350980347577696e+2
  )
  expect_close(std_errors(fit), HC0, 1e-12)
  expect_close(std_errors(restate(fit, err_hetero("HC1"))), HC0 * sqrt(16 / 9), 1e-12)
})
