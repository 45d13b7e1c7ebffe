# Quantiles of |t| with Bartlett's kernel when the bandwidth is a share b of the sample (Kiefer and
# Vogelsang 2005, Econometric Theory 21, 1130-1164): W(1) / sqrt(Q(b)), with V the bridge of the
# Wiener process W, Q(b) = (2/b) (int V(r)^2 dr - int_0^(1-b) V(r) V(r+b) dr).
#   Rscript tools/bench/fixed-b.R [runs]
# Prints the table of R/errors-reference.R.

arguments <- commandArgs(trailingOnly = TRUE)
runs <- if (length(arguments)) as.integer(arguments[1L]) else 400000L
steps <- 1000L
shares <- c(0.02, 0.05, 0.1, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9, 1)
levels <- c(0.5, 0.6, 0.7, 0.8, 0.9, 0.95, 0.975, 0.99, 0.995, 0.999)

chunk <- 4000L
set.seed(20261201L)
draws <- lapply(seq_len(ceiling(runs / chunk)), function(i) {
  walk <- apply(matrix(rnorm(steps * chunk, 0, 1 / sqrt(steps)), steps), 2L, cumsum)
  end <- walk[steps, ]
  bridge <- walk - outer(seq_len(steps) / steps, end)
  squares <- colMeans(bridge^2)
  vapply(shares, function(b) {
    lag <- round(b * steps)
    cross <- if (lag < steps) {
      colSums(bridge[seq_len(steps - lag), , drop = FALSE] * bridge[(lag + 1L):steps, , drop = FALSE]) / steps
    } else {
      0
    }
    abs(end) / sqrt(2 / b * (squares - cross))
  }, numeric(chunk))
})
t <- do.call(rbind, draws)
table <- t(apply(t, 2L, quantile, probs = levels, names = FALSE))
cat("  # ", format(nrow(t), big.mark = ","), " draws of ", steps, " steps\n", sep = "")
for (i in seq_along(shares)) {
  cat("  `", shares[i], "` = c(", paste(formatC(table[i, ], digits = 3, format = "f"), collapse = ", "), ")", if (i < length(shares)) ",", "\n", sep = "")
}
