// One pass over a column of a panel: what a reader should know before regressing on it.
#pragma once

#include "design.hpp"

#include <algorithm>
#include <cmath>

namespace lambdabar {

struct ColumnHealth {
  Index n_missing = 0;         // NaN
  Index n_infinite = 0;
  double minimum = kNaN, maximum = kNaN;  // over finite values
  Index n_periods_constant = 0;   // periods with two or more finite values, all equal
  Index n_periods_compared = 0;   // periods with two or more finite values
  std::vector<double> mean_size;  // per period: mean absolute finite value, NaN if none
};

inline ColumnHealth column_health(const Column& column,
                                  Index n,
                                  const int* period,
                                  Index n_periods) {
  ColumnHealth out;
  const std::size_t T = static_cast<std::size_t>(n_periods);
  std::vector<double> first(T, kNaN), size(T, 0.0);
  std::vector<Index> count(T, 0);
  std::vector<char> differs(T, 0);
  for (Index i = 0; i < n; ++i) {
    const double value = column.at(i);
    if (std::isnan(value)) {
      ++out.n_missing;
      continue;
    }
    if (std::isinf(value)) {
      ++out.n_infinite;
      continue;
    }
    if (!(out.minimum <= value)) out.minimum = value;
    if (!(out.maximum >= value)) out.maximum = value;
    const std::size_t t = static_cast<std::size_t>(period[i]);
    if (count[t]++ == 0) first[t] = value;
    if (value != first[t]) differs[t] = 1;
    size[t] += std::abs(value);
  }
  out.mean_size.assign(T, kNaN);
  for (std::size_t t = 0; t < T; ++t) {
    if (count[t] > 0) out.mean_size[t] = size[t] / static_cast<double>(count[t]);
    if (count[t] < 2) continue;
    ++out.n_periods_compared;
    if (!differs[t]) ++out.n_periods_constant;
  }
  return out;
}

struct AssetSpans {
  std::vector<Index> n_rows, first_slot, last_slot;  // per asset; slots are calendar positions
  std::vector<Index> n_assets;                       // rows in each period
};

inline AssetSpans asset_spans(const int* asset,
                              const int* period,
                              Index n,
                              Index n_assets,
                              const std::vector<Index>& slot) {
  AssetSpans out;
  const std::size_t N = static_cast<std::size_t>(n_assets);
  out.n_rows.assign(N, 0);
  out.first_slot.assign(N, std::numeric_limits<Index>::max());
  out.last_slot.assign(N, -1);
  out.n_assets.assign(slot.size(), 0);
  for (Index i = 0; i < n; ++i) {
    const std::size_t a = static_cast<std::size_t>(asset[i]), t = static_cast<std::size_t>(period[i]);
    ++out.n_rows[a];
    ++out.n_assets[t];
    out.first_slot[a] = std::min(out.first_slot[a], slot[t]);
    out.last_slot[a] = std::max(out.last_slot[a], slot[t]);
  }
  return out;
}

}  // namespace lambdabar
