# A small ragged panel whose numbers are easy to follow: 12 assets, 10 months, two holes.
small_rows <- function(seed = 7) {
  set.seed(seed)
  rows <- expand.grid(month = 202301:202310, firm = sprintf("f%02d", 1:12), stringsAsFactors = FALSE)
  rows$size <- rnorm(nrow(rows), 5)
  rows$value <- rnorm(nrow(rows))
  rows$industry <- factor(rep(c("salt", "glass", "nets"), each = 10, length.out = nrow(rows)))
  rows$mkt <- rep(rnorm(10, 0.01, 0.05), 12)
  rows$ret <- 0.01 + 0.002 * rows$size - 0.003 * rows$value + rnorm(nrow(rows), 0, 0.02)
  rows[-c(15, 16), ]
}

quiet_panel <- function(...) suppressMessages(asset_panel(...))

small_panel <- function(rows = small_rows()) quiet_panel(rows, "firm", "month")

# A complete panel of N assets with betas spread over K factors.
factor_panel <- function(T = 60, N = 8, K = 2, seed = 3) {
  set.seed(seed)
  f <- matrix(rnorm(T * K, 0.01, 0.04), T, K, dimnames = list(NULL, paste0("f", seq_len(K))))
  betas <- matrix(runif(N * K, 0.2, 1.8), N, K)
  returns <- f %*% t(betas) + matrix(rnorm(T * N, 0, 0.03), T, N)
  asset_panel(stack_returns(returns, f), "asset", "period")
}

# A complete panel whose betas have mean one and a spread of `strength`, in percent.
loaded_panel <- function(T = 120, N = 8, strength = 0.4, seed = 3, K = 2) {
  set.seed(seed)
  f <- matrix(rnorm(T * K, 0.4, 4), T, dimnames = list(NULL, c("mkt", "smb", "hml")[seq_len(K)]))
  betas <- 1 + strength * matrix(rnorm(N * K), N)
  returns <- f %*% t(betas) + matrix(rnorm(T * N, 0, 3), T)
  asset_panel(stack_returns(returns, f), "asset", "period")
}

# Differences to the last asset, and what the tests need of them, in base R.
contrasted <- function(fit) {
  R <- fit$input$returns
  if (fit$intercept) R <- R[, -ncol(R)] - R[, ncol(R)]
  f <- fit$input$factors
  model <- lm(R ~ f)
  list(
    R = R, f = f, T = nrow(R), n = ncol(R), K = ncol(f), B = t(coef(model)[-1, , drop = FALSE]),
    Sigma = crossprod(as.matrix(residuals(model))) / nrow(R), e = as.matrix(residuals(model)),
    d = sweep(f, 2, colMeans(f)), Q = crossprod(sweep(f, 2, colMeans(f))) / nrow(R), mu = colMeans(R)
  )
}
