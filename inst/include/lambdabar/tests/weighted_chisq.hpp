// P(sum_i lambda_i z_i^2 > x), z independent standard normal, lambda_i >= 0.
//
// A mixture of chi-squares with scale beta = min lambda (Ruben 1962, Annals of
// Mathematical Statistics 33, 542-570): P = sum_k a_k P(chi2_{n + 2k} > x / beta), and
// with q_i = 1 - beta / lambda_i,
//   a_0 = prod sqrt(beta / lambda_i),   a_k = 1/(2k) sum_i T_ik,   T_ik = q_i (T_i,k-1 +
//     a_k-1)
// All a_k are positive and sum to one, so what is left out is known: less than 1e-12.
// Terms grow with max / min, cost O(n) each. Values below 1e-5 of the largest are put at
// their mean: what that changes is of the order of their squares, 1e-10.
#pragma once

#include "../base.hpp"

#include <cmath>

namespace lambdabar {
namespace detail {

// log of (y/2)^a e^(-y/2) / Gamma(a + 1): what P(chi2_{2a + 2} > y) adds to P(chi2_{2a} >
// y).
inline double log_chisq_step(double a, double y) {
  return a * std::log(0.5 * y) - 0.5 * y - std::lgamma(a + 1.0);
}

// P(chi2_n > y), n a whole number.
inline double chisq_tail(Index n, double y) {
  const bool odd = n % 2 == 1;
  double tail = odd ? std::erfc(std::sqrt(0.5 * y)) : std::exp(-0.5 * y);
  for (Index m = odd ? 1 : 2; m < n; m += 2)
    tail += std::exp(log_chisq_step(0.5 * static_cast<double>(m), y));
  return tail;
}

}  // namespace detail

inline double weighted_chisq_tail(const Vector& lambda, double x) {
  if (!std::isfinite(x) || lambda.size() == 0 || !lambda.allFinite()) return kNaN;
  const double largest = lambda.maxCoeff();
  std::vector<double> kept;
  for (Index i = 0; i < lambda.size(); ++i) {
    if (lambda(i) > 1e-5 * largest)
      kept.push_back(lambda(i));
    else
      x -= lambda(i);
  }
  if (x <= 0.0) return 1.0;
  const auto n = static_cast<Index>(kept.size());
  const double beta = *std::min_element(kept.begin(), kept.end()), y = x / beta;
  Vector q(n), T = Vector::Zero(n);
  double log_scale = 0;  // of the a_k, which are kept relative to a_0
  for (Index i = 0; i < n; ++i) {
    q(i) = 1.0 - beta / kept[static_cast<std::size_t>(i)];
    log_scale += 0.5 * std::log(beta / kept[static_cast<std::size_t>(i)]);
  }
  constexpr Index kMostTerms = 20000000;
  double a = 1.0, tail = detail::chisq_tail(n, y), mass = 0, sum = 0;
  for (Index k = 1; k <= kMostTerms; ++k) {
    mass += a;
    sum += a * tail;
    if (mass > 1e200) {
      a *= 1e-200, mass *= 1e-200, sum *= 1e-200, T *= 1e-200;
      log_scale += 200.0 * std::log(10.0);
    }
    // The rest has tails of at most one.
    if (std::log(mass) + log_scale > -1e-12) break;
    const double half = 0.5 * static_cast<double>(n) + static_cast<double>(k) - 1.0;
    tail += std::exp(detail::log_chisq_step(half, y));
    T = q.cwiseProduct((T.array() + a).matrix());
    a = T.sum() / (2.0 * static_cast<double>(k));
  }
  return std::min(1.0, sum / mass);
}

}  // namespace lambdabar
