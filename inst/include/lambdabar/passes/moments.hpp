// Moments of every period's cross-section: the small symmetric matrix that all else
// needs.
//
//   W = sum w,   m = sum w z / W,   S = sum w (z - m)(z - m)',   z = (y, x_1 .. x_k)
//
// Shapes: q = k + 1 variables, T periods; S is kept as its lower triangle by rows,
// q (q + 1) / 2 numbers a period.
//
// Sums run around a shift, the period's first complete row, and are corrected by the mean
// afterwards, so a mean far from zero costs no digits. The mean itself is kept as shift +
// offset: their sum would round away what a large mean has in front of a small spread. A
// shift that turns out to lie far out is replaced by the mean in a second pass over the
// periods concerned.
//
// Rows in period order are multiplied as blocks; any other order adds each row to its
// period's entry in a table. Rows are cut into chunks by the data alone and chunks are
// merged in order: the bits do not depend on the number of threads.
//
// Cost: one read of the columns and n q (q + 1) / 2 multiplications; a table of about
// T q (q + 4) / 2 numbers a chunk. Chunks get fewer as T grows, down to one.
// Not handled: values whose products overflow (the sums become infinite; see
// least_squares.hpp for the way out).
#pragma once

#include "../parallel.hpp"
#include "blocks.hpp"

namespace lambdabar {

struct Moments {
  Index n_variables = 0;                                         // q, y first
  std::vector<Index> n_rows;                                     // T
  std::vector<Index> n_used;                                     // T, complete rows
  Eigen::Matrix<Index, Eigen::Dynamic, Eigen::Dynamic> missing;  // n_variables() x T
  Vector weight;                                                 // T
  Matrix shift;                                                  // q x T
  Matrix offset;         // q x T; mean = shift + offset
  Matrix cross;          // q (q + 1) / 2 x T, centred
  bool in_order = true;  // rows came in non-decreasing period order

  static Index slot(Index i, Index j) { return i * (i + 1) / 2 + j; }  // i >= j
  Index n_periods() const { return weight.size(); }
  double mean(Index variable, Index period) const {
    return shift(variable, period) + offset(variable, period);
  }
};

namespace detail {

// A shift d away from the mean multiplies the rounding in a centred square S by
// (S + W d^2) / S. Two decimal digits are let go; beyond, the pass is done again.
inline constexpr double kShiftLoss = 64;
inline constexpr Index kTileRows = 128;  // a dozen columns of a tile stay in 32 kB
inline constexpr Index kChunkRows = 32768;
inline constexpr Index kMaxChunks = 64;
inline constexpr Index kMaxScatterChunks = 8;
inline constexpr Index kScatterDoubles = 1280 * 1024;  // 10 MB over all chunks

// Sums of one chunk. The sums of v v', v = (1, z - shift), stand in 2 x 2 tiles of the
// lower triangle, so that a rank-one update is a straight run of two-lane operations.
struct MomentTable {
  Index first_period = 0, n_periods = 0, n_variables = 0;
  Index half = 0;   // pairs of v
  Index width = 0;  // numbers a period
  std::vector<double> sums, shift;
  std::vector<Index> used, missing;
  Index negative_row = -1;

  MomentTable() = default;
  MomentTable(Index first, Index count, const Design& design)
      : first_period(first),
        n_periods(count),
        n_variables(static_cast<Index>(design.x.size()) + 1),
        half((n_variables + 2) / 2),
        width(2 * half * (half + 1)),
        sums(static_cast<std::size_t>(count * width), 0.0),
        shift(static_cast<std::size_t>(count * 2 * half), 0.0),
        used(static_cast<std::size_t>(count), 0),
        missing(static_cast<std::size_t>(count * design.n_variables()), 0) {}

  static Index slot(Index i, Index j) {
    const Index a = i / 2, b = j / 2;
    return (a * (a + 1) / 2 + b) * 4 + (i % 2) * 2 + j % 2;
  }
  double* sums_of(Index period) { return sums.data() + (period - first_period) * width; }
  const double* sums_of(Index period) const {
    return sums.data() + (period - first_period) * width;
  }
  // The shift of v: a zero for the constant, then one a variable.
  double* shift_of(Index period) {
    return shift.data() + (period - first_period) * 2 * half;
  }
  const double* shift_of(Index period) const {
    return shift.data() + (period - first_period) * 2 * half;
  }
};

// Which periods a pass is for, and their shifts if those are settled already.
struct MomentPass {
  const Design* design = nullptr;
  const int* period = nullptr;  // null: all rows are period 0
  Index n_periods = 0;
  const std::vector<char>* wanted = nullptr;  // null: all
  const Matrix* shift = nullptr;              // q x T; null: first complete row

  Index period_of(Index row) const { return period ? period[row] : 0; }
  bool wants(Index p) const { return !wanted || (*wanted)[static_cast<std::size_t>(p)]; }
};

// Dot products of three columns with three columns, added to out (row by row, ld apart).
inline void add_dots_3x3(
    const double* a, const double* b, Index n, double* out, Index ld) {
  const double *a1 = a + kBlockStride, *a2 = a1 + kBlockStride;
  const double *b1 = b + kBlockStride, *b2 = b1 + kBlockStride;
  Lanes s00 = {0, 0}, s01 = s00, s02 = s00, s10 = s00, s11 = s00, s12 = s00;
  Lanes s20 = s00, s21 = s00, s22 = s00;
  for (Index i = 0; i < n; i += 2) {
    const Lanes y0 = load_lanes(b + i), y1 = load_lanes(b1 + i), y2 = load_lanes(b2 + i);
    const Lanes x0 = load_lanes(a + i);
    s00 += x0 * y0;
    s01 += x0 * y1;
    s02 += x0 * y2;
    const Lanes x1 = load_lanes(a1 + i);
    s10 += x1 * y0;
    s11 += x1 * y1;
    s12 += x1 * y2;
    const Lanes x2 = load_lanes(a2 + i);
    s20 += x2 * y0;
    s21 += x2 * y1;
    s22 += x2 * y2;
  }
  const Lanes all[9] = {s00, s01, s02, s10, s11, s12, s20, s21, s22};
  for (Index r = 0; r < 3; ++r) {
    for (Index c = 0; c < 3; ++c)
      out[r * ld + c] += all[3 * r + c][0] + all[3 * r + c][1];
  }
}

// The same for three columns with themselves: lower triangle only.
inline void add_dots_3(const double* a, Index n, double* out, Index ld) {
  const double *a1 = a + kBlockStride, *a2 = a1 + kBlockStride;
  Lanes s00 = {0, 0}, s10 = s00, s11 = s00, s20 = s00, s21 = s00, s22 = s00;
  for (Index i = 0; i < n; i += 2) {
    const Lanes x0 = load_lanes(a + i), x1 = load_lanes(a1 + i), x2 = load_lanes(a2 + i);
    s00 += x0 * x0;
    s10 += x1 * x0;
    s11 += x1 * x1;
    s20 += x2 * x0;
    s21 += x2 * x1;
    s22 += x2 * x2;
  }
  out[0] += s00[0] + s00[1];
  out[ld] += s10[0] + s10[1];
  out[ld + 1] += s11[0] + s11[1];
  out[2 * ld] += s20[0] + s20[1];
  out[2 * ld + 1] += s21[0] + s21[1];
  out[2 * ld + 2] += s22[0] + s22[1];
}

inline Index padded_columns(Index n) { return (n + 2) / 3 * 3; }

// cross (padded x padded, by rows) += the lower triangle of the cross-products of packed
// columns, kBlockStride apart, with rows of zeros behind the last.
inline void add_cross_products(const double* columns,
                               Index padded,
                               Index n_rows,
                               std::vector<double>& cross) {
  for (Index begin = 0; begin < n_rows; begin += kTileRows) {
    const Index n = std::min(kTileRows, n_rows - begin);
    for (Index i = 0; i < padded; i += 3) {
      const double* a = columns + i * kBlockStride + begin;
      double* out = cross.data() + i * padded;
      for (Index j = 0; j < i; j += 3) {
        add_dots_3x3(a, columns + j * kBlockStride + begin, n, out + j, padded);
      }
      add_dots_3(a, n, out + i, padded);
    }
  }
}

// Adds w v v' of kTogether rows to a period's tiles; each v and wv holds `half` pairs,
// the rows one after the other. Together they share the loads and stores of the sums.
inline constexpr Index kTogether = 4;

inline void add_rows(const double* v, const double* wv, Index half, double* sums) {
  const Index size = 2 * half;
  const double *v1 = v + size, *v2 = v1 + size, *v3 = v2 + size;
  const double *wv1 = wv + size, *wv2 = wv1 + size, *wv3 = wv2 + size;
  for (Index a = 0; a < size; a += 2) {
    const Lanes upper0 = {wv[a], wv[a]}, lower0 = {wv[a + 1], wv[a + 1]};
    const Lanes upper1 = {wv1[a], wv1[a]}, lower1 = {wv1[a + 1], wv1[a + 1]};
    const Lanes upper2 = {wv2[a], wv2[a]}, lower2 = {wv2[a + 1], wv2[a + 1]};
    const Lanes upper3 = {wv3[a], wv3[a]}, lower3 = {wv3[a + 1], wv3[a + 1]};
    for (Index b = 0; b <= a; b += 2, sums += 4) {
      const Lanes p0 = load_lanes(v + b), p1 = load_lanes(v1 + b);
      const Lanes p2 = load_lanes(v2 + b), p3 = load_lanes(v3 + b);
      const Lanes upper = (upper0 * p0 + upper1 * p1) + (upper2 * p2 + upper3 * p3);
      const Lanes lower = (lower0 * p0 + lower1 * p1) + (lower2 * p2 + lower3 * p3);
      store_lanes(sums, load_lanes(sums) + upper);
      store_lanes(sums + 2, load_lanes(sums + 2) + lower);
    }
  }
}

inline void count_incomplete(const MomentPass& pass,
                             const RowBlock& block,
                             MomentTable& table) {
  const Index n_variables = pass.design->n_variables();
  for (const IncompleteRow& bad : block.incomplete()) {
    const Index p = pass.period_of(bad.row);
    if (!pass.wants(p)) continue;
    const Index cell = (p - table.first_period) * n_variables + bad.variable;
    ++table.missing[static_cast<std::size_t>(cell)];
  }
}

// One run of rows of a single period.
class RunSummer {
 public:
  RunSummer(const MomentPass& pass, MomentTable& table)
      : pass_(pass),
        table_(table),
        padded_(padded_columns(table.n_variables)),
        block_(*pass.design, padded_),
        cross_(static_cast<std::size_t>(padded_ * padded_)),
        sum_(static_cast<std::size_t>(table.n_variables)) {
    first_.values.resize(static_cast<std::size_t>(table.n_variables));
  }

  void add(Index period, Index begin, Index end) {
    settle_shift(period, begin, end);
    const double* shift = table_.shift_of(period) + 1;
    std::fill(cross_.begin(), cross_.end(), 0.0);
    std::fill(sum_.begin(), sum_.end(), 0.0);
    Index used = 0;
    double weight = 0;
    for (Index row = begin; row < end; row += kBlockRows) {
      block_.load(row, std::min(kBlockRows, end - row), shift);
      count_incomplete(pass_, block_, table_);
      if (block_.weighted()) block_.weigh();
      used += block_.n_used();
      weight += block_.total_weight();
      for (std::size_t j = 0; j < sum_.size(); ++j) {
        sum_[j] += block_.sum(static_cast<Index>(j));
      }
      add_cross_products(block_.column(0), padded_, block_.n_used(), cross_);
    }
    table_.used[static_cast<std::size_t>(period - table_.first_period)] = used;
    write(weight, table_.sums_of(period));
  }

  Index negative_row() const { return block_.negative_row(); }

 private:
  void settle_shift(Index period, Index begin, Index end) {
    double* shift = table_.shift_of(period) + 1;
    if (pass_.shift) {
      for (Index j = 0; j < table_.n_variables; ++j) shift[j] = (*pass_.shift)(j, period);
      return;
    }
    for (Index row = begin; row < end; ++row) {
      if (!read_row(*pass_.design, row, first_)) continue;
      std::copy(first_.values.begin(), first_.values.end(), shift);
      return;
    }
  }

  void write(double weight, double* sums) const {
    sums[0] = weight;
    for (Index i = 0; i < table_.n_variables; ++i) {
      sums[MomentTable::slot(i + 1, 0)] = sum_[static_cast<std::size_t>(i)];
      for (Index j = 0; j <= i; ++j) {
        sums[MomentTable::slot(i + 1, j + 1)] =
            cross_[static_cast<std::size_t>(i * padded_ + j)];
      }
    }
  }

  const MomentPass& pass_;
  MomentTable& table_;
  Index padded_;
  RowBlock block_;
  RowValues first_;
  std::vector<double> cross_, sum_;
};

inline MomentTable sum_runs(const MomentPass& pass, Index begin, Index end) {
  const Index first = pass.period_of(begin), last = pass.period_of(end - 1);
  MomentTable table(first, last - first + 1, *pass.design);
  RunSummer summer(pass, table);
  for (Index row = begin; row < end;) {
    const Index p = pass.period_of(row);
    Index stop = pass.period ? row + 1 : end;
    while (stop < end && pass.period[stop] == p) ++stop;
    if (pass.wants(p)) summer.add(p, row, stop);
    row = stop;
  }
  table.negative_row = summer.negative_row();
  return table;
}

// Rows in any order. A slab of rows is turned row by row and threaded into one list a
// period, so that a period's entry is fetched once for all its rows in the slab.
class RowScatterer {
 public:
  RowScatterer(const MomentPass& pass, MomentTable& table)
      : pass_(pass),
        table_(table),
        size_(2 * table.half),
        block_(*pass.design, size_),
        zero_(static_cast<std::size_t>(table.n_variables), 0.0),
        ones_(kBlockRows + kRowPadding, 1.0),
        slab_(static_cast<std::size_t>(size_ * (kSlabRows + 1)), 0.0),
        weight_(kSlabRows, 1.0),
        period_(kSlabRows),
        next_(kSlabRows),
        head_(static_cast<std::size_t>(table.n_periods), kNone),
        v_(static_cast<std::size_t>(kTogether * size_), 0.0),
        wv_(static_cast<std::size_t>(kTogether * size_), 0.0) {
    touched_.reserve(kSlabRows);
  }

  void add(Index begin, Index end) {
    Index filled = 0;
    for (Index row = begin; row < end; row += kBlockRows) {
      block_.load(row, std::min(kBlockRows, end - row), zero_.data());
      count_incomplete(pass_, block_, table_);
      if (filled + block_.n_used() > kSlabRows) {
        add_slab(filled);
        filled = 0;
      }
      filled = append(filled);
    }
    add_slab(filled);
  }

  Index negative_row() const { return block_.negative_row(); }

 private:
  static constexpr Index kSlabRows = 4 * kBlockRows;
  static constexpr Index kTurnRows = 128;
  static constexpr int kNone = -1;

  // The block's rows, one after the other, each behind a one.
  Index append(Index filled) {
    const Index n = block_.n_used();
    for (Index i = 0; i < n; i += kTurnRows) {
      const Index stop = std::min(n, i + kTurnRows);
      for (Index j = 0; j < size_; j += 2) {
        turn_pair(j == 0 ? ones_.data() : block_.column(j - 1),
                  block_.column(j),
                  i,
                  stop,
                  slab_.data() + filled * size_ + j);
      }
    }
    for (Index i = 0; i < n; ++i) {
      const std::size_t at = static_cast<std::size_t>(filled + i);
      period_[at] = pass_.period_of(block_.row(i));
      weight_[at] = block_.weight(i);
    }
    return filled + n;
  }

  // Rows i .. stop - 1 of two columns, side by side. An odd end turns a row of padding.
  void turn_pair(
      const double* a, const double* b, Index i, Index stop, double* to) const {
    for (; i < stop; i += 2) {
      const Lanes left = load_lanes(a + i), right = load_lanes(b + i);
      store_lanes(to + i * size_, Lanes{left[0], right[0]});
      store_lanes(to + (i + 1) * size_, Lanes{left[1], right[1]});
    }
  }

  void add_slab(Index n) {
    touched_.clear();
    // From the back, so that each list runs forward.
    for (Index i = n - 1; i >= 0; --i) {
      const Index p = period_[static_cast<std::size_t>(i)];
      if (!pass_.wants(p)) continue;
      int& head = head_[static_cast<std::size_t>(p - table_.first_period)];
      if (head == kNone) touched_.push_back(p);
      next_[static_cast<std::size_t>(i)] = head;
      head = static_cast<int>(i);
    }
    // In period order the table is walked straight through; worth it unless most of it
    // has no row in the slab.
    if (table_.n_periods <= kSlabRows) {
      for (Index p = 0; p < table_.n_periods; ++p) {
        if (head_[static_cast<std::size_t>(p)] != kNone) add_list(p);
      }
    } else {
      for (const Index p : touched_) add_list(p);
    }
  }

  void add_list(Index p) {
    int& head = head_[static_cast<std::size_t>(p - table_.first_period)];
    Index& used = table_.used[static_cast<std::size_t>(p - table_.first_period)];
    double* shift = table_.shift_of(p);
    double* sums = table_.sums_of(p);
    if (used == 0) settle_shift(p, slab_.data() + head * size_, shift);
    while (head != kNone) {
      for (Index k = 0; k < kTogether; ++k) {
        if (head != kNone) {
          ++used;
          head = prepare(head, shift, k * size_);
        } else {
          std::fill_n(v_.begin() + k * size_, size_, 0.0);
          std::fill_n(wv_.begin() + k * size_, size_, 0.0);
        }
      }
      const double* wv = block_.weighted() ? wv_.data() : v_.data();
      add_rows(v_.data(), wv, table_.half, sums);
    }
  }

  // Shifts a row of the slab into place `to`; returns the next row of its period.
  int prepare(int i, const double* shift, Index to) {
    const double* row = slab_.data() + i * size_;
    double* v = v_.data() + to;
    for (Index k = 0; k < size_; k += 2) {
      store_lanes(v + k, load_lanes(row + k) - load_lanes(shift + k));
    }
    if (block_.weighted()) {
      const double w = weight_[static_cast<std::size_t>(i)];
      double* wv = wv_.data() + to;
      for (Index k = 0; k < size_; ++k) wv[k] = w * v[k];
    }
    return next_[static_cast<std::size_t>(i)];
  }

  void settle_shift(Index period, const double* row, double* shift) {
    for (Index j = 0; j < table_.n_variables; ++j) {
      shift[j + 1] = pass_.shift ? (*pass_.shift)(j, period) : row[j + 1];
    }
  }

  const MomentPass& pass_;
  MomentTable& table_;
  Index size_;  // of a row behind its one, made even
  RowBlock block_;
  std::vector<double> zero_, ones_, slab_, weight_;
  std::vector<Index> period_;  // of the slab's rows
  std::vector<int> next_;      // row of the slab, same period
  std::vector<int> head_;      // first row of the slab, a period
  std::vector<Index> touched_;
  std::vector<double> v_, wv_;  // kTogether rows
};

inline MomentTable scatter_rows(const MomentPass& pass, Index begin, Index end) {
  MomentTable table(0, pass.n_periods, *pass.design);
  RowScatterer scatterer(pass, table);
  scatterer.add(begin, end);
  table.negative_row = scatterer.negative_row();
  return table;
}

inline bool in_period_order(const Design& design) {
  return std::is_sorted(design.period, design.period + design.n_rows);
}

inline Index count_chunks(const Design& design, Index n_periods, bool in_order) {
  const Index by_rows = std::max<Index>(1, design.n_rows / kChunkRows);
  if (in_order) return std::min(by_rows, kMaxChunks);
  const MomentTable one(0, 1, design);
  const Index by_memory = kScatterDoubles / (n_periods * (one.width + 2 * one.half));
  return std::min({by_rows, kMaxScatterChunks, std::max<Index>(1, by_memory)});
}

// First row of chunk `c` of `n_chunks`.
inline Index chunk_begin(Index n_rows, Index n_chunks, Index c) {
  const Index size = n_rows / n_chunks, rest = n_rows % n_chunks;
  return c * size + std::min(c, rest);
}

inline Moments empty_moments(const Design& design, Index n_periods, bool in_order) {
  Moments m;
  const Index q = static_cast<Index>(design.x.size()) + 1;
  m.n_variables = q;
  m.n_rows.assign(static_cast<std::size_t>(n_periods), 0);
  m.n_used.assign(static_cast<std::size_t>(n_periods), 0);
  m.missing.setZero(design.n_variables(), n_periods);
  m.weight.setZero(n_periods);
  m.shift.setZero(q, n_periods);
  m.offset.setZero(q, n_periods);
  m.cross.setZero(q * (q + 1) / 2, n_periods);
  m.in_order = in_order;
  return m;
}

// Joins chunks, in order, by the update for means and centred products (Chan, Golub and
// LeVeque, 1983, The American Statistician 37), written for pairs shift + offset.
class MomentMerger {
 public:
  MomentMerger(const Design& design, Index n_periods, bool in_order)
      : moments_(empty_moments(design, n_periods, in_order)),
        around_shift_(Matrix::Zero(moments_.n_variables, n_periods)),
        offset_(moments_.n_variables),
        delta_(moments_.n_variables) {}

  void add(const MomentTable& table) {
    const Index n_variables = moments_.missing.rows();
    for (Index k = 0; k < table.n_periods; ++k) {
      const Index p = table.first_period + k;
      const std::size_t at = static_cast<std::size_t>(p);
      Index rows = table.used[static_cast<std::size_t>(k)];
      for (Index j = 0; j < n_variables; ++j) {
        const Index n = table.missing[static_cast<std::size_t>(k * n_variables + j)];
        moments_.missing(j, p) += n;
        rows += n;
      }
      moments_.n_rows[at] += rows;
      if (table.used[static_cast<std::size_t>(k)] > 0) add_sums(table, p);
      moments_.n_used[at] += table.used[static_cast<std::size_t>(k)];
    }
  }

  const Moments& moments() const { return moments_; }
  Moments take() { return std::move(moments_); }

  // Periods whose shift cost digits.
  std::vector<char> spoiled() const {
    std::vector<char> flags(moments_.n_used.size(), 0);
    for (Index p = 0; p < moments_.n_periods(); ++p) {
      for (Index j = 0; j < moments_.n_variables; ++j) {
        const double centred = moments_.cross(Moments::slot(j, j), p);
        if (!(around_shift_(j, p) > kShiftLoss * centred)) continue;
        if (std::isfinite(moments_.mean(j, p))) flags[static_cast<std::size_t>(p)] = 1;
      }
    }
    return flags;
  }

  void clear(const std::vector<char>& flags) {
    for (Index p = 0; p < moments_.n_periods(); ++p) {
      if (!flags[static_cast<std::size_t>(p)]) continue;
      moments_.n_rows[static_cast<std::size_t>(p)] = 0;
      moments_.n_used[static_cast<std::size_t>(p)] = 0;
      moments_.missing.col(p).setZero();
    }
  }

 private:
  void add_sums(const MomentTable& table, Index p) {
    const double* sums = table.sums_of(p);
    const double* shift = table.shift_of(p) + 1;
    const Index q = moments_.n_variables;
    const double weight = sums[0];
    const bool first = moments_.n_used[static_cast<std::size_t>(p)] == 0;
    const double before = first ? 0.0 : moments_.weight[p];
    const double total = before + weight;
    for (Index j = 0; j < q; ++j) {
      offset_[j] = sums[MomentTable::slot(j + 1, 0)] / weight;
      delta_[j] =
          (shift[j] - moments_.shift(j, p)) + (offset_[j] - moments_.offset(j, p));
    }
    const double joint = before * (weight / total);
    for (Index i = 0; i < q; ++i) {
      const double square = sums[MomentTable::slot(i + 1, i + 1)];
      around_shift_(i, p) = (first ? 0.0 : around_shift_(i, p)) + square;
      for (Index j = 0; j <= i; ++j) {
        const double centred =
            sums[MomentTable::slot(i + 1, j + 1)] - weight * offset_[i] * offset_[j];
        double& cross = moments_.cross(Moments::slot(i, j), p);
        cross = first ? centred : cross + (centred + joint * delta_[i] * delta_[j]);
      }
    }
    for (Index j = 0; j < q; ++j) {
      if (first) moments_.shift(j, p) = shift[j];
      double& offset = moments_.offset(j, p);
      offset = first ? offset_[j] : offset + delta_[j] * (weight / total);
    }
    moments_.weight[p] = total;
  }

  Moments moments_;
  Matrix around_shift_;  // q x T, sums of squares before centring
  Vector offset_, delta_;
};

inline void run_pass(const MomentPass& pass,
                     bool in_order,
                     int threads,
                     MomentMerger& merger) {
  const Index n_rows = pass.design->n_rows;
  const Index n_chunks = count_chunks(*pass.design, pass.n_periods, in_order);
  std::vector<MomentTable> tables(static_cast<std::size_t>(n_chunks));
  for_each_task(n_chunks, threads, [&](Index c) {
    const Index begin = chunk_begin(n_rows, n_chunks, c);
    const Index end = chunk_begin(n_rows, n_chunks, c + 1);
    tables[static_cast<std::size_t>(c)] =
        in_order ? sum_runs(pass, begin, end) : scatter_rows(pass, begin, end);
  });
  for (const MomentTable& table : tables) {
    if (table.negative_row >= 0) {
      throw Error("input",
                  "a weight is negative",
                  {{"row", static_cast<double>(table.negative_row + 1)}});
    }
    merger.add(table);
  }
}

inline Moments moments_of(const Design& design,
                          const int* period,
                          Index n_periods,
                          int threads) {
  const bool in_order = !period || in_period_order(design);
  MomentMerger merger(design, n_periods, in_order);
  if (design.n_rows == 0 || n_periods == 0) return merger.take();
  MomentPass pass;
  pass.design = &design;
  pass.period = period;
  pass.n_periods = n_periods;
  run_pass(pass, in_order, threads, merger);
  const std::vector<char> spoiled = merger.spoiled();
  if (std::find(spoiled.begin(), spoiled.end(), 1) == spoiled.end()) return merger.take();
  const Matrix means = merger.moments().shift + merger.moments().offset;
  merger.clear(spoiled);
  pass.wanted = &spoiled;
  pass.shift = &means;
  run_pass(pass, in_order, threads, merger);
  return merger.take();
}

}  // namespace detail

// One column of moments a period.
inline Moments period_moments(const Design& design, int threads) {
  return detail::moments_of(design, design.period, design.n_periods, threads);
}

// The whole panel as one period.
inline Moments panel_moments(const Design& design, int threads) {
  return detail::moments_of(design, nullptr, 1, threads);
}

}  // namespace lambdabar
