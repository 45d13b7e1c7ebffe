// Did the mean of a series change at an unknown date (Andrews 1993, Econometrica 61,
// 821-856)? For each date tau that leaves a share `trim` on both sides
//   W(tau) = (m1 - m2)^2 / V,  V the variance of m1 - m2 with each part about its own
//     mean:
//   rows h_t = (x_t - m1) / tau before, -(x_t - m2) / (T - tau) after, summed by `series`
// The statistic is the largest. Cost O(T) dates times the sum.
#pragma once

#include "../errors/series_sum.hpp"

namespace lambdabar {

struct BreakScan {
  Vector wald;           // one a date
  Index first_date = 0;  // periods before the first date
};

inline BreakScan scan_breaks(const Eigen::Ref<const Vector>& x,
                             double trim,
                             const SeriesOptions& series,
                             const std::vector<Index>& slot) {
  const Index T = x.size();
  const auto first = static_cast<Index>(std::ceil(trim * static_cast<double>(T)));
  if (first < 2 || T - first < first)
    throw Error("too_few",
                "Too few periods to look for a break.",
                {{"n_periods", static_cast<double>(T)}});
  BreakScan out;
  out.first_date = first;
  out.wald.resize(T - 2 * first + 1);
  for (Index tau = first; tau <= T - first; ++tau) {
    const double m1 = x.head(tau).mean(), m2 = x.tail(T - tau).mean();
    Vector rows(T);
    rows.head(tau) = (x.head(tau).array() - m1) / static_cast<double>(tau);
    rows.tail(T - tau) = -(x.tail(T - tau).array() - m2) / static_cast<double>(T - tau);
    const double variance =
        detail::sum_series_by(rows, slot, Matrix(), Vector::Ones(1), series).S(0, 0);
    out.wald(tau - first) = variance > 0.0 ? (m1 - m2) * (m1 - m2) / variance : kNaN;
  }
  return out;
}

}  // namespace lambdabar
