// From rows to a T x N matrix, and from rows to one value a period.
#pragma once

#include "design.hpp"

#include <cmath>

namespace lambdabar {

// T x N, NaN where the panel has no row or the value is not finite.
inline Matrix widen(const Column& column,
                    Index n,
                    const int* asset,
                    const int* period,
                    Index n_assets,
                    Index n_periods) {
  Matrix wide = Matrix::Constant(n_periods, n_assets, kNaN);
  for (Index i = 0; i < n; ++i) {
    const double value = column.at(i);
    if (std::isfinite(value)) wide(period[i], asset[i]) = value;
  }
  return wide;
}

struct PeriodValues {
  Vector value;              // T, NaN where no row of the period has a finite value
  Index conflict_row = -1;   // first row whose value differs from its period's
  Index n_conflicts = 0;     // periods with more than one value
};

// The common value of a column inside each period, as a factor's must be. Values that differ
// by rounding alone (1e-12 of their size) count as equal: merges and unit changes leave such.
inline PeriodValues period_values(const Column& column,
                                  Index n,
                                  const int* period,
                                  Index n_periods) {
  PeriodValues out;
  out.value = Vector::Constant(n_periods, kNaN);
  std::vector<char> conflict(static_cast<std::size_t>(n_periods), 0);
  for (Index i = 0; i < n; ++i) {
    const double value = column.at(i);
    if (!std::isfinite(value)) continue;
    double& seen = out.value(period[i]);
    if (std::isnan(seen)) {
      seen = value;
    } else if (std::abs(value - seen) > 1e-12 * std::abs(seen)) {
      if (out.conflict_row < 0) out.conflict_row = i;
      char& mark = conflict[static_cast<std::size_t>(period[i])];
      out.n_conflicts += mark ? 0 : 1;
      mark = 1;
    }
  }
  return out;
}

}  // namespace lambdabar
