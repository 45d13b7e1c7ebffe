# The distribution that t-statistics are held against: one place for tidy(), confint(), printouts
# and tests. A covariance without `reference` has t with its df.

# Two-sided p-values of t statistics, one a term.
reference_p <- function(covariance, statistic) {
  reference <- covariance$reference
  switch(reference_kind(covariance),
    t = 2 * stats::pt(-abs(statistic), covariance$df),
    fixed_b = fixed_b_p(statistic, reference$b),
    wild = reference$at$p,
    resampled = {
      draws <- reference$t
      vapply(seq_along(statistic), function(j) {
        if (is.na(statistic[j])) NA_real_ else (1 + sum(draws[, j] >= abs(statistic[j]) * (1 - 1e-12))) / (nrow(draws) + 1)
      }, 1)
    }
  )
}

reference_kind <- function(covariance) {
  if (is.null(covariance$reference)) "t" else covariance$reference$kind
}

# Limits of the interval of each term.
reference_interval <- function(covariance, estimate, std_error, level) {
  reference <- covariance$reference
  if (reference_kind(covariance) == "wild") {
    found <- if (level == 0.95) reference$at else wild_limits(reference, wild_signs_again(reference), level)
    return(list(low = found$lower, high = found$upper))
  }
  reach <- std_error * switch(reference_kind(covariance),
    t = stats::qt((1 + level) / 2, covariance$df),
    fixed_b = fixed_b_quantile(level, reference$b),
    resampled = {
      at <- ceiling(level * (nrow(reference$t) + 1))
      apply(reference$t, 2L, function(t) if (at > length(t)) Inf else sort(t)[at])
    }
  )
  list(low = estimate - reach, high = estimate + reach)
}

reference_phrase <- function(covariance) {
  reference <- covariance$reference
  switch(reference_kind(covariance),
    t = paste0("t with ", paste(unique(format_df(range(covariance$df, na.rm = TRUE))), collapse = " to "), " df"),
    fixed_b = paste0("fixed-b critical values, b = ", format(reference$b, digits = 2)),
    resampled = paste0("t resampled ", format_count(nrow(reference$t)), " times"),
    wild = "p and intervals by inversion"
  )
}

fixed_b_levels <- c(0.5, 0.6, 0.7, 0.8, 0.9, 0.95, 0.975, 0.99, 0.995, 0.999)

# Quantiles of |t| at the levels, for Bartlett's kernel with a bandwidth of b times the sample
# (Kiefer and Vogelsang 2005). Simulated by tools/bench/fixed-b.R.
fixed_b_table <- list(
  # 200,000 draws of 1000 steps
  `0.02` = c(0.684, 0.856, 1.055, 1.305, 1.682, 2.008, 2.306, 2.668, 2.913, 3.433),
  `0.05` = c(0.699, 0.876, 1.081, 1.343, 1.737, 2.091, 2.416, 2.802, 3.092, 3.692),
  `0.1` = c(0.726, 0.910, 1.128, 1.406, 1.836, 2.232, 2.600, 3.051, 3.389, 4.177),
  `0.2` = c(0.782, 0.984, 1.227, 1.547, 2.055, 2.533, 3.005, 3.607, 4.039, 5.076),
  `0.3` = c(0.842, 1.064, 1.334, 1.693, 2.279, 2.847, 3.409, 4.157, 4.737, 5.957),
  `0.4` = c(0.906, 1.148, 1.446, 1.848, 2.513, 3.156, 3.810, 4.680, 5.334, 6.746),
  `0.5` = c(0.973, 1.236, 1.562, 2.003, 2.740, 3.460, 4.201, 5.162, 5.867, 7.428),
  `0.6` = c(1.039, 1.325, 1.675, 2.157, 2.962, 3.746, 4.549, 5.594, 6.369, 8.192),
  `0.7` = c(1.108, 1.412, 1.789, 2.307, 3.171, 4.012, 4.863, 5.988, 6.834, 8.768),
  `0.8` = c(1.174, 1.500, 1.901, 2.454, 3.371, 4.268, 5.173, 6.369, 7.236, 9.226),
  `0.9` = c(1.242, 1.586, 2.013, 2.595, 3.569, 4.512, 5.470, 6.734, 7.644, 9.749),
  `1` = c(1.308, 1.672, 2.121, 2.734, 3.761, 4.752, 5.757, 7.085, 8.062, 10.267)
)

# The quantiles at b beside those of the normal distribution: straight lines between the
# tabulated points, and beyond the last level.
fixed_b_points <- function(b) {
  shares <- c(0, as.numeric(names(fixed_b_table)))
  z <- stats::qnorm((1 + fixed_b_levels) / 2)
  table <- rbind(z, do.call(rbind, fixed_b_table))
  list(z = c(0, z), t = c(0, apply(table, 2L, function(column) stats::approx(shares, column, b)$y)))
}

follow <- function(x, y, at) {
  n <- length(x)
  beyond <- y[n] + (at - x[n]) * (y[n] - y[n - 1L]) / (x[n] - x[n - 1L])
  ifelse(at > x[n], beyond, stats::approx(x, y, at)$y)
}

fixed_b_p <- function(statistic, b) {
  points <- fixed_b_points(b)
  2 * stats::pnorm(-follow(points$t, points$z, abs(statistic)))
}

fixed_b_quantile <- function(level, b) {
  points <- fixed_b_points(b)
  follow(points$z, points$t, stats::qnorm((1 + level) / 2))
}
