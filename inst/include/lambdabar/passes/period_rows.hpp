// The complete rows of each period as one small matrix.
//
// Rows lie in any order: those in period order are found by counting, others by a
// counting sort, 4 bytes a row. Periods are read a few at a time, column by column: where
// the rows of an asset lie together, neighbouring periods share the cache lines, which
// are then fetched once. Nothing of the size of the panel is copied.
//
// The rows of a period come back sorted by their values (first by the first column), so
// that no bit of what is computed from them depends on the order of the panel. Cost: one
// read of the columns, n log n comparisons.
#pragma once

#include "../parallel.hpp"
#include "../panel/design.hpp"

#include <algorithm>
#include <cmath>
#include <numeric>

namespace lambdabar {
namespace detail {

// Periods read together: the doubles in a cache line.
inline constexpr Index kPeriodsTogether = 8;

class RowsByPeriod {
 public:
  explicit RowsByPeriod(const Design& design)
      : begin_(static_cast<std::size_t>(design.n_periods) + 1, 0) {
    const int* period = design.period;
    for (Index i = 0; i < design.n_rows; ++i)
      ++begin_[static_cast<std::size_t>(period[i]) + 1];
    std::partial_sum(begin_.begin(), begin_.end(), begin_.begin());
    if (std::is_sorted(period, period + design.n_rows)) return;
    row_.resize(static_cast<std::size_t>(design.n_rows));
    std::vector<Index> next(begin_.begin(), begin_.end() - 1);
    for (Index i = 0; i < design.n_rows; ++i) {
      Index& at = next[static_cast<std::size_t>(period[i])];
      row_[static_cast<std::size_t>(at++)] = static_cast<int>(i);
    }
  }

  Index n_periods() const { return static_cast<Index>(begin_.size()) - 1; }
  Index begin(Index period) const { return begin_[static_cast<std::size_t>(period)]; }
  Index count(Index period) const { return begin(period + 1) - begin(period); }
  // Row of the panel of the i-th row of a period.
  Index row(Index period, Index i) const {
    const Index at = begin(period) + i;
    return row_.empty() ? at : row_[static_cast<std::size_t>(at)];
  }
  bool in_order() const { return row_.empty(); }

 private:
  std::vector<Index> begin_;
  std::vector<int> row_;  // empty: rows lie in order
};

struct PeriodValues {
  Matrix values;            // complete rows x columns
  Index n_rows = 0;         // with the incomplete ones
  Index negative_row = -1;  // smallest row of the panel with a negative weight, or -1
};

class PeriodReader {
 public:
  // A row is complete when all columns are finite and the last of them, if it is a
  // weight, is positive.
  PeriodReader(const RowsByPeriod& rows,
               std::vector<const Column*> columns,
               bool weighted)
      : rows_(rows), columns_(std::move(columns)), weighted_(weighted) {}

  Index n_tasks() const {
    return (rows_.n_periods() + kPeriodsTogether - 1) / kPeriodsTogether;
  }
  Index first_period(Index task) const { return task * kPeriodsTogether; }

  std::vector<PeriodValues> read(Index task) const {
    const Index first = first_period(task);
    const Index n = std::min(kPeriodsTogether, rows_.n_periods() - first);
    std::vector<PeriodValues> out(static_cast<std::size_t>(n));
    for (Index p = 0; p < n; ++p) {
      PeriodValues& period = out[static_cast<std::size_t>(p)];
      period.n_rows = rows_.count(first + p);
      period.values.resize(period.n_rows, static_cast<Index>(columns_.size()));
    }
    for (std::size_t j = 0; j < columns_.size(); ++j)
      for (Index p = 0; p < n; ++p)
        read_column(
            j, first + p, out[static_cast<std::size_t>(p)].values.col(Index(j)).data());
    for (Index p = 0; p < n; ++p) {
      drop_incomplete(first + p, out[static_cast<std::size_t>(p)]);
      sort_rows(out[static_cast<std::size_t>(p)].values);
    }
    return out;
  }

 private:
  void read_column(std::size_t j, Index period, double* to) const {
    const Column& column = *columns_[j];
    const Index n = rows_.count(period);
    if (rows_.in_order()) return column.read(rows_.begin(period), n, to);
    if (const double* from = column.plain()) {
      for (Index i = 0; i < n; ++i) to[i] = from[rows_.row(period, i)];
    } else {
      for (Index i = 0; i < n; ++i) to[i] = column.at(rows_.row(period, i));
    }
  }

  void drop_incomplete(Index period, PeriodValues& out) const {
    Matrix& values = out.values;
    const auto weight = values.col(values.cols() - 1);
    const bool positive = !weighted_ || (weight.array() > 0).all();
    // A sum is not finite whenever a value is not; it may also overflow, which the look
    // at single rows then finds out.
    if (positive && std::isfinite(values.sum())) return;
    Index kept = 0;
    for (Index i = 0; i < values.rows(); ++i) {
      const double w = weight[i];
      if (weighted_ && std::isfinite(w) && w < 0) {
        const Index row = rows_.row(period, i);
        if (out.negative_row < 0 || row < out.negative_row) out.negative_row = row;
      }
      if (!values.row(i).allFinite() || (weighted_ && !(w > 0))) continue;
      if (kept < i) values.row(kept) = values.row(i);
      ++kept;
    }
    values.conservativeResize(kept, Eigen::NoChange);
  }

  static void sort_rows(Matrix& values) {
    struct Key {
      double value;
      int row;
    };
    std::vector<Key> keys(static_cast<std::size_t>(values.rows()));
    for (std::size_t i = 0; i < keys.size(); ++i)
      keys[i] = {values(static_cast<Index>(i), 0), static_cast<int>(i)};
    std::sort(keys.begin(), keys.end(), [&](const Key& a, const Key& b) {
      if (a.value != b.value) return a.value < b.value;
      for (Index j = 1; j < values.cols(); ++j)
        if (values(a.row, j) != values(b.row, j))
          return values(a.row, j) < values(b.row, j);
      return false;
    });
    for (Index j = 0; j < values.cols(); ++j) {
      const Vector column = values.col(j);
      for (std::size_t i = 0; i < keys.size(); ++i)
        values(static_cast<Index>(i), j) = column[keys[i].row];
    }
  }

  const RowsByPeriod& rows_;
  std::vector<const Column*> columns_;
  bool weighted_;
};

}  // namespace detail
}  // namespace lambdabar
