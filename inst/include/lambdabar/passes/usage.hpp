// Which rows a regression can use: counts by period, by first missing variable, by asset.
// One pass over the columns, O(n P).
#pragma once

#include "../panel/design.hpp"

#include <algorithm>
#include <cmath>

namespace lambdabar {

struct Usage {
  std::vector<Index> n_rows, n_used;                                // T
  Eigen::Matrix<Index, Eigen::Dynamic, Eigen::Dynamic> missing;     // n_variables x T
  Index n_assets = 0;  // with a complete row in a period of `periods_in`
};

// periods_in: T flags; rows of other periods count everywhere but in n_assets.
inline Usage count_usage(const Design& design,
                         const int* asset,
                         Index n_assets,
                         const std::vector<char>& periods_in) {
  const std::size_t T = static_cast<std::size_t>(design.n_periods);
  Usage out;
  out.n_rows.assign(T, 0);
  out.n_used.assign(T, 0);
  out.missing.setZero(design.n_variables(), design.n_periods);
  std::vector<char> seen(static_cast<std::size_t>(n_assets), 0);

  std::vector<const Column*> variables{&design.y};
  for (const Column& column : design.x) variables.push_back(&column);
  for (const Column& column : design.weight) variables.push_back(&column);
  const std::size_t weight_at = design.x.size() + 1;

  constexpr Index kBlock = 2048;
  std::vector<double> value(static_cast<std::size_t>(kBlock));
  std::vector<int> first_missing(static_cast<std::size_t>(kBlock));
  for (Index begin = 0; begin < design.n_rows; begin += kBlock) {
    const Index n = std::min(kBlock, design.n_rows - begin);
    std::fill(first_missing.begin(), first_missing.end(), -1);
    for (std::size_t v = 0; v < variables.size(); ++v) {
      variables[v]->read(begin, n, value.data());
      for (std::size_t i = 0; i < static_cast<std::size_t>(n); ++i) {
        const bool usable = std::isfinite(value[i]) && (v != weight_at || value[i] > 0);
        if (!usable && first_missing[i] < 0) first_missing[i] = static_cast<int>(v);
      }
    }
    for (Index i = 0; i < n; ++i) {
      const std::size_t t = static_cast<std::size_t>(design.period[begin + i]);
      const int v = first_missing[static_cast<std::size_t>(i)];
      ++out.n_rows[t];
      if (v >= 0) {
        ++out.missing(v, static_cast<Index>(t));
        continue;
      }
      ++out.n_used[t];
      char& mark = seen[static_cast<std::size_t>(asset[begin + i])];
      if (periods_in[t] && !mark) {
        mark = 1;
        ++out.n_assets;
      }
    }
  }
  return out;
}

}  // namespace lambdabar
