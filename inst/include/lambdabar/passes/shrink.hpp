// Shrinkage of betas towards the cross-section of their date (Vasicek 1973, Journal of
// Finance 28, 1233-1239), one factor at a time:
//   b* = m + k (b - m),  k = tau2 / (tau2 + se^2),  posterior variance k se^2
// m: mean of the betas that exist at that date. tau2, the variance of the true betas:
//   net            max(0, var(b) - mean(se^2)), var with divisor n - 1
//   paule_mandel   root of sum (b - m)^2 / (tau2 + se^2) = n - 1 with m the mean weighted by
//                  1 / (tau2 + se^2) (Paule and Mandel 1982), 0 when there is none
//   raw            var(b), which counts noise as signal
// With tau2 = 0 every beta becomes m. Cost O(n), times the steps of the root.
#pragma once

#include "../base.hpp"

#include <cmath>

namespace lambdabar {

enum class PriorVariance { net, paule_mandel, raw };

struct BetaPrior {
  double mean = kNaN, variance = kNaN;
  Index n = 0;
};

namespace detail {

struct BetaGroup {
  std::vector<double> beta, error2;
};

inline double weighted_excess(const BetaGroup& group, double tau2, double* mean) {
  double weights = 0, sum = 0;
  for (std::size_t i = 0; i < group.beta.size(); ++i) {
    const double w = 1.0 / (tau2 + group.error2[i]);
    weights += w;
    sum += w * group.beta[i];
  }
  *mean = sum / weights;
  double q = 0;
  for (std::size_t i = 0; i < group.beta.size(); ++i)
    q += (group.beta[i] - *mean) * (group.beta[i] - *mean) / (tau2 + group.error2[i]);
  return q - static_cast<double>(group.beta.size() - 1);
}

// The excess falls in tau2, so bisection cannot miss the root.
inline BetaPrior paule_mandel_prior(const BetaGroup& group, double spread) {
  BetaPrior prior;
  prior.n = static_cast<Index>(group.beta.size());
  prior.variance = 0.0;
  double smallest = group.error2[0];
  for (double e : group.error2) smallest = std::min(smallest, e);
  // Betas without error leave nothing to net out.
  if (!(smallest > 0.0)) {
    prior.variance = spread;
    weighted_excess(group, std::max(spread, 1e-300), &prior.mean);
    return prior;
  }
  if (weighted_excess(group, 0.0, &prior.mean) <= 0.0) return prior;
  double low = 0.0, high = spread;
  while (weighted_excess(group, high, &prior.mean) > 0.0) high *= 2.0;
  for (int step = 0; step < 200 && high - low > 1e-15 * high; ++step) {
    const double middle = 0.5 * (low + high);
    (weighted_excess(group, middle, &prior.mean) > 0.0 ? low : high) = middle;
  }
  prior.variance = 0.5 * (low + high);
  weighted_excess(group, prior.variance, &prior.mean);
  return prior;
}

inline BetaPrior beta_prior(const BetaGroup& group, PriorVariance rule) {
  BetaPrior prior;
  prior.n = static_cast<Index>(group.beta.size());
  if (prior.n < 2) return prior;
  const double n = static_cast<double>(prior.n);
  double mean = 0, noise = 0, spread = 0;
  for (double b : group.beta) mean += b / n;
  for (double e : group.error2) noise += e / n;
  for (double b : group.beta) spread += (b - mean) * (b - mean) / (n - 1.0);
  if (rule == PriorVariance::paule_mandel && spread > 0.0)
    return paule_mandel_prior(group, spread);
  prior.mean = mean;
  prior.variance = rule == PriorVariance::net ? std::max(0.0, spread - noise) : spread;
  return prior;
}

}  // namespace detail

// beta and std_error (n, in place; NaN stays) of dates 0 .. n_dates - 1. A date with a single
// beta has no prior: its beta becomes NaN.
inline std::vector<BetaPrior> shrink_betas(
    double* beta, double* std_error, const int* date, Index n, Index n_dates, PriorVariance rule) {
  std::vector<detail::BetaGroup> groups(static_cast<std::size_t>(n_dates));
  for (Index i = 0; i < n; ++i) {
    if (!std::isfinite(beta[i])) continue;
    detail::BetaGroup& group = groups[static_cast<std::size_t>(date[i])];
    group.beta.push_back(beta[i]);
    group.error2.push_back(std_error[i] * std_error[i]);
  }
  std::vector<BetaPrior> priors;
  priors.reserve(groups.size());
  for (const detail::BetaGroup& group : groups)
    priors.push_back(detail::beta_prior(group, rule));
  for (Index i = 0; i < n; ++i) {
    if (!std::isfinite(beta[i])) continue;
    const BetaPrior& prior = priors[static_cast<std::size_t>(date[i])];
    const double e2 = std_error[i] * std_error[i];
    // Without error and without spread there is nothing to weigh: the beta is the mean.
    const double k = prior.variance + e2 > 0.0 ? prior.variance / (prior.variance + e2) : 1.0;
    beta[i] = prior.mean + k * (beta[i] - prior.mean);
    std_error[i] = std::isfinite(prior.mean) ? std::sqrt(k) * std_error[i] : kNaN;
  }
  return priors;
}

}  // namespace lambdabar
