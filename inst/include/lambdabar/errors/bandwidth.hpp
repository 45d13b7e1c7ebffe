// How many lags: fixed, the rules of thumb floor(4 (T/100)^(2/9)) and ceil(1.3 sqrt(T)) - 1
// (Lazarus, Lewis, Stock and Watson 2018, for fixed-b critical values), and two data-driven
// rules.
//
// Newey and West (1994), on the combination x_t = v'h_t, with s_j its autocovariances:
//   n = floor(4 (T/100)^q), 3 instead of 4 after prewhitening; q = 2/9 bartlett,
//   4/25 parzen, 2/25 qs;  s(m) = [m = 0] s_0 + 2 sum_{j<=n} j^m s_j
//   bartlett 1.1447 ((s(1)/s(0))^2)^(1/3) T^(1/3)     lags = floor of it
//   parzen   2.6614 ((s(2)/s(0))^2)^(1/5) T^(1/5)     lags = floor of it
//   qs       1.3221 ((s(2)/s(0))^2)^(1/5) T^(1/5)     divisor itself
// T is the length before prewhitening. The constants 4 and 3 agree with
// sandwich::bwNeweyWest. s(0) is a truncated sum and can be negative: the square keeps
// the rule defined, `negative_s0` tells.
//
// Andrews (1991), from an AR(1) without constant for each column a (rho, s2), weights v:
//   alpha(1) = sum v 4 rho^2 s2^2 / ((1-rho)^6 (1+rho)^2) / sum v s2^2 / (1-rho)^4
//   alpha(2) = sum v 4 rho^2 s2^2 / (1-rho)^8             / sum v s2^2 / (1-rho)^4
//   bartlett 1.1447 (alpha(1) T)^(1/3); (alpha(2) T)^(1/5) times 2.6614 parzen,
//   1.3221 qs, 0.6611 truncated: the divisor, a real number
// T is the length of the series the rule sees (one less after prewhitening); rho is kept
// in
// [-0.97, 0.97] (a choice). sandwich fits the AR(1) with a constant, an O(1/T)
// difference.
//
// Rows may carry any common factor (the 1/T of summing rows): the rules are free of it.
// Weights may not be negative. Newey and West give no rule for the truncated kernel.
#pragma once

#include "kernels.hpp"

namespace lambdabar {

enum class LagRule { fixed, rule_of_thumb, root, newey_west, andrews };

struct SeriesOptions {
  Kernel kernel = Kernel::bartlett;
  LagRule rule = LagRule::fixed;
  double lags = 0;         // for LagRule::fixed
  bool prewhiten = false;  // VAR(1) first (Andrews and Monahan 1992)
};

struct Bandwidth {
  double divisor = 0;  // 0: no lags
  double lags = 0;     // as a user counts them
  bool capped = false;
  bool negative_s0 = false;
};

namespace detail {

inline constexpr double kMaxPersistence = 0.97;

inline double lagged_product(const Vector& x, Index lag) {
  const Index n = x.size() - lag;
  return n > 0 ? x.tail(n).dot(x.head(n)) : 0.0;
}

inline Index newey_west_pilot(Kernel kernel, bool prewhitened, Index n_periods) {
  const double power = kernel == Kernel::bartlett ? 2.0 / 9.0
                       : kernel == Kernel::parzen ? 4.0 / 25.0
                                                  : 2.0 / 25.0;
  const double constant = prewhitened ? 3.0 : 4.0;
  return static_cast<Index>(
      std::floor(constant * std::pow(static_cast<double>(n_periods) / 100.0, power)));
}

struct PlugIn {
  double value;
  bool negative_s0;
};

inline PlugIn newey_west_bandwidth(const Vector& x,
                                   Index n_periods,
                                   const SeriesOptions& options) {
  if (options.kernel == Kernel::truncated)
    throw Error("unsupported", "No Newey-West lag rule for the truncated kernel.");
  const Index n = std::min(newey_west_pilot(options.kernel, options.prewhiten, n_periods),
                           x.size() - 1);
  const bool first_order = options.kernel == Kernel::bartlett;
  double s0 = lagged_product(x, 0);
  double sm = 0.0;
  for (Index j = 1; j <= n; ++j) {
    const double twice = 2.0 * lagged_product(x, j);
    const double lag = static_cast<double>(j);
    s0 += twice;
    sm += (first_order ? lag : lag * lag) * twice;
  }
  if (s0 == 0.0) return {0.0, false};
  const double ratio = (sm / s0) * (sm / s0) * static_cast<double>(n_periods);
  const double value = first_order                        ? 1.1447 * std::cbrt(ratio)
                       : options.kernel == Kernel::parzen ? 2.6614 * std::pow(ratio, 0.2)
                                                          : 1.3221 * std::pow(ratio, 0.2);
  return {value, s0 < 0.0};
}

inline double andrews_bandwidth(const Matrix& series,
                                const Vector& weights,
                                Kernel kernel) {
  const Index n = series.rows();
  double numerator1 = 0.0, numerator2 = 0.0, denominator = 0.0;
  for (Index a = 0; a < series.cols(); ++a) {
    if (weights(a) == 0.0 || n < 2) continue;
    const auto lead = series.col(a).tail(n - 1);
    const auto lag = series.col(a).head(n - 1);
    const double spread = lag.squaredNorm();
    if (spread == 0.0) continue;
    double rho = lag.dot(lead) / spread;
    const double s2 = (lead - rho * lag).squaredNorm();
    rho = std::max(-kMaxPersistence, std::min(kMaxPersistence, rho));
    const double away = 1.0 - rho;
    const double common = weights(a) * 4.0 * rho * rho * s2 * s2 / std::pow(away, 6);
    numerator1 += common / ((1.0 + rho) * (1.0 + rho));
    numerator2 += common / (away * away);
    denominator += weights(a) * s2 * s2 / std::pow(away, 4);
  }
  if (denominator == 0.0) return 0.0;
  const double length = static_cast<double>(n);
  if (kernel == Kernel::bartlett)
    return 1.1447 * std::cbrt(numerator1 / denominator * length);
  const double constant = kernel == Kernel::parzen ? 2.6614
                          : kernel == Kernel::qs   ? 1.3221
                                                   : 0.6611;
  return constant * std::pow(numerator2 / denominator * length, 0.2);
}

inline void check_weights(const Vector& weights, Index n_columns) {
  const bool usable = weights.size() == n_columns && (weights.array() >= 0.0).all() &&
                      (weights.array() > 0.0).any();
  if (!usable)
    throw Error(
        "input",
        "Bandwidth weights must be one non-negative number a column, not all zero.",
        {{"n_columns", static_cast<double>(n_columns)}});
}

inline Bandwidth from_lags(Kernel kernel, double lags, double longest) {
  Bandwidth result;
  result.capped = lags > longest;
  result.lags = std::min(lags, longest);
  result.divisor = kernel_divisor(kernel, result.lags);
  return result;
}

inline Bandwidth from_divisor(Kernel kernel, double divisor, double longest) {
  const double most = kernel_divisor(kernel, longest);
  Bandwidth result;
  result.capped = divisor > most;
  result.divisor = result.lags = std::min(divisor, most);
  return result;
}

}  // namespace detail

// series: the rows the rule sees (prewhitened ones if so), T x P; weights: P; n_periods:
// T before prewhitening; longest_lag: beyond it a lag is capped.
inline Bandwidth choose_bandwidth(const Matrix& series,
                                  const Vector& weights,
                                  Index n_periods,
                                  Index longest_lag,
                                  const SeriesOptions& options) {
  const double longest = static_cast<double>(longest_lag);
  switch (options.rule) {
    case LagRule::fixed:
      if (!(options.lags >= 0.0) || std::isinf(options.lags))
        throw Error("input",
                    "The number of lags must be finite and not negative.",
                    {{"lags", options.lags}});
      return detail::from_lags(options.kernel, options.lags, longest);
    case LagRule::rule_of_thumb: {
      const double hundreds = static_cast<double>(n_periods) / 100.0;
      return detail::from_lags(
          options.kernel, std::floor(4.0 * std::pow(hundreds, 2.0 / 9.0)), longest);
    }
    case LagRule::root:
      return detail::from_lags(
          options.kernel,
          std::ceil(1.3 * std::sqrt(static_cast<double>(n_periods))) - 1.0,
          longest);
    case LagRule::newey_west: {
      detail::check_weights(weights, series.cols());
      const detail::PlugIn rule =
          detail::newey_west_bandwidth(series * weights, n_periods, options);
      Bandwidth result =
          options.kernel == Kernel::qs
              ? detail::from_divisor(options.kernel, rule.value, longest)
              : detail::from_lags(options.kernel, std::floor(rule.value), longest);
      result.negative_s0 = rule.negative_s0;
      return result;
    }
    case LagRule::andrews:
      detail::check_weights(weights, series.cols());
      return detail::from_divisor(
          options.kernel,
          detail::andrews_bandwidth(series, weights, options.kernel),
          longest);
  }
  throw Error("input", "Unknown lag rule.");
}

}  // namespace lambdabar
