// Rows of a design, a block at a time, packed for arithmetic.
//
// A block holds up to kBlockRows consecutive rows of y and every x (column 0 is y), less
// a shift per column, in column-major memory of its own. Incomplete rows are taken out
// and named. The design must outlive the block. Cost: one read of the columns; a block
// whose sums are all finite needs no look at single rows, because a sum is non-finite
// whenever a value is. (It may also overflow from finite values; the look at the rows
// then decides.)
#pragma once

#include "../panel/design.hpp"

#include <algorithm>
#include <cmath>

namespace lambdabar {
namespace detail {

// Long runs of one column keep the memory system streaming.
inline constexpr Index kBlockRows = 2048;
// Columns start 2112 bytes apart modulo a page, so that a tile of a dozen columns does
// not fall into the same few cache sets; the slack also holds the rows of zero padding.
inline constexpr Index kBlockStride = kBlockRows + 264;
inline constexpr Index kRowPadding = 4;

typedef double Lanes __attribute__((vector_size(16)));
typedef double LooseLanes __attribute__((vector_size(16), aligned(8), may_alias));

inline Lanes load_lanes(const double* from) {
  return *reinterpret_cast<const LooseLanes*>(from);
}
inline void store_lanes(double* to, Lanes value) {
  *reinterpret_cast<LooseLanes*>(to) = value;
}

// to = from - shift; returns the sum of what was written. `from` may be `to`.
inline double shift_and_sum(const double* from, Index n, double shift, double* to) {
  const Lanes c = {shift, shift};
  Lanes s0 = {0, 0}, s1 = s0, s2 = s0, s3 = s0;
  Index i = 0;
  for (; i + 8 <= n; i += 8) {
    const Lanes v0 = load_lanes(from + i) - c, v1 = load_lanes(from + i + 2) - c;
    const Lanes v2 = load_lanes(from + i + 4) - c, v3 = load_lanes(from + i + 6) - c;
    store_lanes(to + i, v0);
    store_lanes(to + i + 2, v1);
    store_lanes(to + i + 4, v2);
    store_lanes(to + i + 6, v3);
    s0 += v0;
    s1 += v1;
    s2 += v2;
    s3 += v3;
  }
  const Lanes s = (s0 + s1) + (s2 + s3);
  double sum = s[0] + s[1];
  for (; i < n; ++i) sum += to[i] = from[i] - shift;
  return sum;
}

struct IncompleteRow {
  Index row;
  Index variable;  // first offending one in the order y, x, weight
};

class RowBlock {
 public:
  // `n_padded` columns are kept (at least 1 + number of x); those beyond stay zero.
  RowBlock(const Design& design, Index n_padded)
      : weighted_(!design.weight.empty()),
        memory_(static_cast<std::size_t>(n_padded * kBlockStride), 0.0),
        sum_(design.x.size() + 1, 0.0),
        weight_(weighted_ ? kBlockRows : 0),
        root_(weighted_ ? kBlockRows : 0),
        offender_(kBlockRows),
        rows_(kBlockRows) {
    columns_.push_back(&design.y);
    for (const Column& column : design.x) columns_.push_back(&column);
    if (weighted_) weight_column_ = &design.weight[0];
    incomplete_.reserve(kBlockRows);
  }
  explicit RowBlock(const Design& design)
      : RowBlock(design, static_cast<Index>(design.x.size()) + 1) {}

  // shift: one a column, finite; n at most kBlockRows.
  void load(Index begin, Index n, const double* shift) {
    begin_ = begin;
    n_used_ = n;
    compacted_ = false;
    incomplete_.clear();
    bool suspect = weighted_ && !load_weights(n);
    for (std::size_t j = 0; j < columns_.size(); ++j) {
      load_column(j, n, shift[j]);
      suspect = suspect || !std::isfinite(sum_[j]);
    }
    if (suspect) drop_incomplete(n);
    pad();
  }

  // Multiplies every column by the root of the weight; sums become weighted sums.
  void weigh() {
    for (Index i = 0; i < n_used_; ++i) root_[i] = std::sqrt(weight_[i]);
    for (std::size_t j = 0; j < columns_.size(); ++j) {
      double* column = column_memory(j);
      double sum = 0;
      for (Index i = 0; i < n_used_; ++i) {
        column[i] *= root_[i];
        sum += root_[i] * column[i];
      }
      sum_[j] = sum;
    }
  }

  Index n_columns() const { return static_cast<Index>(columns_.size()); }
  Index n_used() const { return n_used_; }
  Index row(Index i) const { return compacted_ ? rows_[i] : begin_ + i; }
  const double* column(Index j) const { return memory_.data() + j * kBlockStride; }
  double sum(Index j) const { return sum_[static_cast<std::size_t>(j)]; }
  bool weighted() const { return weighted_; }
  double weight(Index i) const { return weighted_ ? weight_[i] : 1.0; }
  double total_weight() const {
    if (!weighted_) return static_cast<double>(n_used_);
    double total = 0;
    for (Index i = 0; i < n_used_; ++i) total += weight_[i];
    return total;
  }
  const std::vector<IncompleteRow>& incomplete() const { return incomplete_; }
  // Smallest row with a negative finite weight in any block so far, or -1.
  Index negative_row() const { return negative_row_; }

 private:
  double* column_memory(std::size_t j) {
    return memory_.data() + static_cast<Index>(j) * kBlockStride;
  }

  bool load_weights(Index n) {
    weight_column_->read(begin_, n, weight_.data());
    double sum = 0, smallest = 1;
    for (Index i = 0; i < n; ++i) {
      sum += weight_[i];
      smallest = std::min(smallest, weight_[i]);
    }
    return std::isfinite(sum) && smallest > 0;
  }

  void load_column(std::size_t j, Index n, double shift) {
    double* to = column_memory(j);
    const double* from = columns_[j]->plain();
    if (from) {
      from += begin_;
    } else {
      columns_[j]->read(begin_, n, to);
      from = to;
    }
    sum_[j] = shift_and_sum(from, n, shift, to);
  }

  void drop_incomplete(Index n) {
    const int n_variables = static_cast<int>(columns_.size());
    std::fill_n(offender_.begin(), n, -1);
    for (int j = 0; j < n_variables; ++j) {
      if (std::isfinite(sum_[static_cast<std::size_t>(j)])) continue;
      const double* values = column(j);
      for (Index i = 0; i < n; ++i) {
        if (std::isfinite(values[i]) || offender_[i] >= 0) continue;
        // A finite value less a finite shift may overflow: ask the value itself.
        if (!std::isfinite(columns_[j]->at(begin_ + i))) offender_[i] = j;
      }
    }
    if (weighted_) judge_weights(n);
    compact(n);
  }

  void judge_weights(Index n) {
    for (Index i = 0; i < n; ++i) {
      const bool finite = std::isfinite(weight_[i]);
      if (finite && weight_[i] > 0) continue;
      if (finite && weight_[i] < 0 && (negative_row_ < 0 || begin_ + i < negative_row_)) {
        negative_row_ = begin_ + i;
      }
      if (offender_[i] < 0) offender_[i] = static_cast<int>(columns_.size());
    }
  }

  void compact(Index n) {
    Index kept = 0;
    for (Index i = 0; i < n; ++i) {
      if (offender_[i] >= 0) {
        incomplete_.push_back({begin_ + i, offender_[i]});
      } else {
        rows_[kept++] = begin_ + i;
      }
    }
    compacted_ = true;
    n_used_ = kept;
    for (std::size_t j = 0; j < columns_.size(); ++j) {
      double* values = column_memory(j);
      for (Index i = 0; i < kept; ++i) values[i] = values[rows_[i] - begin_];
      sum_[j] = shift_and_sum(values, kept, 0.0, values);
    }
    if (!weighted_) return;
    for (Index i = 0; i < kept; ++i) weight_[i] = weight_[rows_[i] - begin_];
  }

  void pad() {
    for (std::size_t j = 0; j < columns_.size(); ++j) {
      std::fill_n(column_memory(j) + n_used_, kRowPadding, 0.0);
    }
  }

  bool weighted_;
  std::vector<const Column*> columns_;
  const Column* weight_column_ = nullptr;
  std::vector<double> memory_;
  std::vector<double> sum_;
  std::vector<double> weight_, root_;
  std::vector<int> offender_;
  std::vector<Index> rows_;
  std::vector<IncompleteRow> incomplete_;
  Index begin_ = 0, n_used_ = 0, negative_row_ = -1;
  bool compacted_ = false;
};

struct RowValues {
  std::vector<double> values;  // y, x..
  double weight = 1;
};

// Reads one row; false when it is incomplete.
inline bool read_row(const Design& design, Index row, RowValues& to) {
  to.values[0] = design.y.at(row);
  bool complete = std::isfinite(to.values[0]);
  for (std::size_t j = 0; j < design.x.size(); ++j) {
    to.values[j + 1] = design.x[j].at(row);
    complete = complete && std::isfinite(to.values[j + 1]);
  }
  if (!design.weight.empty()) {
    to.weight = design.weight[0].at(row);
    complete = complete && std::isfinite(to.weight) && to.weight > 0;
  }
  return complete;
}

}  // namespace detail
}  // namespace lambdabar
