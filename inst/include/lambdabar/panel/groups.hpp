// Sorting assets into classes, one sort inside the other, and the mean returns of the cells.
//
// Inside each class of the sorts before, breakpoints are quantiles (linear interpolation of
// order statistics, h = (n - 1) p) of the reference members, or of all members when none is a
// reference. The class of a value is 1 + the number of breakpoints strictly below it, so ties
// stay together and a class may be empty. O(n log n) a sort.
#pragma once

#include "design.hpp"

#include <algorithm>
#include <cmath>

namespace lambdabar {

// Inner breakpoints of n_classes equal shares; sorts `values`, which must not be empty.
inline std::vector<double> breakpoints(std::vector<double> values, int n_classes) {
  std::sort(values.begin(), values.end());
  std::vector<double> out;
  for (int c = 1; c < n_classes; ++c) {
    const double h = static_cast<double>(values.size() - 1) * c / n_classes;
    const auto low = static_cast<std::size_t>(h);
    const double next = values[std::min(low + 1, values.size() - 1)];
    out.push_back(values[low] + (h - static_cast<double>(low)) * (next - values[low]));
  }
  return out;
}

// Refines cells 0 .. n_cells - 1 (-1: none) into cell * n_classes + class - 1, in place.
inline void refine_cells(const double* value,
                         const int* reference,
                         Index n,
                         int n_cells,
                         int n_classes,
                         int* cell) {
  std::vector<std::vector<double>> all(static_cast<std::size_t>(n_cells)), chosen = all;
  for (Index i = 0; i < n; ++i) {
    if (cell[i] < 0) continue;
    const auto at = static_cast<std::size_t>(cell[i]);
    all[at].push_back(value[i]);
    if (reference[i]) chosen[at].push_back(value[i]);
  }
  std::vector<std::vector<double>> limits(all.size());
  for (std::size_t at = 0; at < all.size(); ++at)
    if (!all[at].empty())
      limits[at] = breakpoints(chosen[at].empty() ? all[at] : chosen[at], n_classes);
  for (Index i = 0; i < n; ++i) {
    if (cell[i] < 0) continue;
    const std::vector<double>& limit = limits[static_cast<std::size_t>(cell[i])];
    const auto below = std::lower_bound(limit.begin(), limit.end(), value[i]) - limit.begin();
    cell[i] = cell[i] * n_classes + static_cast<int>(below);
  }
}

struct CellMeans {
  Matrix mean;   // T x cells, NaN without a return
  Matrix count;  // T x cells, members with a return
};

// Equal-weighted mean of the finite values of each cell (-1: none) in each period.
inline CellMeans cell_means(const Column& column,
                            const int* period,
                            const int* cell,
                            Index n,
                            Index n_periods,
                            int n_cells) {
  CellMeans out{Matrix::Zero(n_periods, n_cells), Matrix::Zero(n_periods, n_cells)};
  for (Index i = 0; i < n; ++i) {
    const double value = column.at(i);
    if (cell[i] < 0 || !std::isfinite(value)) continue;
    double& count = out.count(period[i], cell[i]);
    double& mean = out.mean(period[i], cell[i]);
    count += 1.0;
    mean += (value - mean) / count;
  }
  out.mean = (out.count.array() > 0.0).select(out.mean, kNaN);
  return out;
}

}  // namespace lambdabar
