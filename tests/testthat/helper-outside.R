# Largest difference of two vectors or matrices, relative to `scale`: by default each
# reference number itself, for covariances the two standard deviations that belong to it.
expect_close <- function(object, expected, tolerance = 1e-10, scale = NULL) {
  label <- rlang::as_label(rlang::enquo(object))
  object <- unname(object)
  expected <- unname(expected)
  if (is.null(scale)) scale <- if (is_covariance(expected)) sd_products(expected) else abs(expected)
  apart <- if (length(object) == length(expected)) max(abs(object - expected) / scale) else NA
  expect(
    length(expected) > 0L && isTRUE(apart <= tolerance),
    paste0(label, ": ", length(object), " and ", length(expected), " numbers, relative difference ",
           signif(apart, 3), ", allowed ", tolerance, ".")
  )
  invisible(object)
}

is_covariance <- function(x) is.matrix(x) && nrow(x) == ncol(x) && all(diag(x) > 0)

sd_products <- function(covariance) outer(sqrt(diag(covariance)), sqrt(diag(covariance)))

# Half a unit of the last printed digit; printed numbers are strings, zeros at the end count.
expect_prints <- function(object, printed) {
  label <- rlang::as_label(rlang::enquo(object))
  digits <- nchar(sub("^[^.]*\\.?", "", printed))
  units <- abs(unname(object) - as.numeric(printed)) * 10^digits
  expect(
    length(printed) > 0L && length(object) == length(printed) && isTRUE(all(units <= 0.5 + 1e-6)),
    paste0(label, " is ", toString(format(object, digits = 8)), ", printed ", toString(printed), ".")
  )
}

std_errors <- function(fit) unname(sqrt(diag(vcov(fit))))

# A data set of a package, read once.
data_of <- local({
  read <- new.env()
  function(name, package) {
    if (is.null(read[[name]])) utils::data(list = name, package = package, envir = read)
    read[[name]]
  }
})

# gmm::Finance: excess returns and factors, percent a day; stocks in the order of the file.
finance_sample <- function(rows, n_stocks, n_factors) {
  d <- data_of("Finance", "gmm")[seq_len(rows), ]
  list(
    returns = as.matrix(d[, seq_len(n_stocks)] - d$rf),
    factors = cbind(mkt = d$rm - d$rf, smb = d$smb, hml = d$hml)[, seq_len(n_factors), drop = FALSE]
  )
}

sample_panel <- function(sample) {
  asset_panel(stack_returns(sample$returns, sample$factors, period = seq_len(nrow(sample$returns))), "asset", "period")
}

sample_fit <- function(sample, ...) {
  model <- stats::reformulate(colnames(sample$factors), "ret")
  price_factors(sample_panel(sample), model, ...)
}

# A complete panel of 8 assets whose cross-sections have exactly these slopes (T x P, the
# constant first, P up to 4): regressors and noise are orthogonal columns of -1 and 1, so
# that every product is a sum of few numbers.
slope_panel <- function(slopes, period = seq_len(nrow(slopes))) {
  signs <- outer(0:7, 0:7, function(i, j) 1 - 2 * (bitwAnd(bitwAnd(i, j), 1) + bitwAnd(bitwAnd(i, j), 2) / 2 +
    bitwAnd(bitwAnd(i, j), 4) / 4) %% 2)
  T <- nrow(slopes)
  used <- signs[, c(1, 2, 3, 5)[seq_len(ncol(slopes))], drop = FALSE]
  rows <- data.frame(asset = rep(1:8, each = T), period = rep(period, 8))
  for (j in seq_len(ncol(slopes))[-1L]) rows[[paste0("x", j - 1L)]] <- rep(used[, j], each = T)
  rows$y <- as.vector(slopes %*% t(used) + 0.25 * rep(signs[, 8], each = T))
  asset_panel(rows, "asset", "period")
}

# T x P premia of a fit, estimated periods only.
premium_series <- function(fit) {
  series <- period_premia(fit)
  series <- series[series$status == "estimated", ]
  matrix(series$estimate, ncol = length(coef(fit)), byrow = TRUE, dimnames = list(NULL, names(coef(fit))))
}

# Kernel sum of rows by its definition, lag by lag; `weight` maps lags 0, 1, ... to numbers.
plain_kernel_sum <- function(rows, weight) {
  T <- nrow(rows)
  total <- crossprod(rows)
  for (j in seq_len(T - 1L)) {
    lagged <- crossprod(rows[-seq_len(j), , drop = FALSE], rows[seq_len(T - j), , drop = FALSE])
    total <- total + weight(j) * (lagged + t(lagged))
  }
  total
}

bartlett_weight <- function(lags) function(j) pmax(0, 1 - j / (lags + 1))

# Correct digits of numbers against reference values, 15 at most.
correct_digits <- function(x, reference) pmin(15, -log10(abs(x - reference) / abs(reference)))
