// Covariances of a pooled fit whose rows are independent, or dependent inside clusters.
//
//   psi_i = (X'WX)^-1 x_i w_i e_i,   sum_i psi_i = 0
//   heteroskedastic:  V = sum_i a_i^2 psi_i psi_i',   a = 1, sqrt(n / (n - r)),
//                     (1 - h_i)^(-1/2), (1 - h_i)^-1 for HC0 .. HC3
//                     (White, 1980; MacKinnon and White, 1985)
//   D ways:  V = sum over nonempty S of {1..D} of (-1)^(|S| + 1) c_S sum_g psi_g psi_g',
//            g the groups of the intersection of the dimensions in S
//            (Cameron, Gelbach and Miller, 2011; Thompson, 2011)
//   c_S = G_S / (G_S - 1) (n - 1) / (n - r)  `each`;  the smallest G of a single
//   dimension in every term  `min`;  1  `none`.
//
// Groups are counted over complete rows. Intersections are paired integers: nested
// dimensions share one grouping, pairs that never repeat need no groups at all, the rest
// gets new codes. Terms of one grouping are added up before they meet the data, so a
// dimension nested in another cancels exactly.
//
// With D >= 2 the sum need not be positive semidefinite. Negative eigenvalues are then
// cut off after scaling by HC0 errors; unscaled, the cut would depend on the regressors'
// units.
//
// Shapes: rank r; matrices are r x r over the kept terms. Memory: r numbers a group and,
// for each intersection that repeats, one integer a row. Cost: one read of the columns
// and n r (r + groupings). Rows are summed in order: same bits for any number of threads.
// Throws Error "cluster_id", "clusters", "leverage". Not handled: absorbed effects.
//
// Common shocks that persist (Driscoll and Kraay 1998, Review of Economics and Statistics
// 80, 549-560): P_t = sum of psi_i in period t, summed over periods by a kernel.
// period_scores() gives the P_t.
#pragma once

#include "../passes/pooled.hpp"
#include "positive.hpp"

namespace lambdabar {

struct ClusterSums {
  Matrix meat;         // r x r, sum over groups of psi_g psi_g', no factor
  Index n_groups = 0;  // groups with at least one complete row
};

enum class SmallSample { each, min, none };

struct ClusterCovariance {
  Matrix vcov;                        // r x r
  Matrix raw;                         // r x r, before any eigenvalue was cut off
  std::vector<Index> n_groups;        // D
  std::vector<Index> n_groups_terms;  // 2^D - 1; term s has dimension d if bit d of s + 1
  double min_eigen_relative = 0;      // smallest over largest eigenvalue, raw, scaled
  Index n_clipped = 0;
  std::vector<bool> not_positive;  // r: raw variance is zero, up to rounding, or negative
  std::vector<int> nested_in;      // D: the coarser dimension, or -1
};

namespace detail {

// A variance left over from terms this many times its size has no digits.
inline constexpr double kVarianceTolerance = 1e-13;
inline constexpr double kLeverageTolerance = 1e-10;
inline constexpr Index kMaxSumChunks = 8;
inline constexpr Index kSumDoubles = 2048 * 1024;  // 16 MB over all chunks

// Scores of a block's complete rows: v w e, v the terms around the centre. A fit from
// rows is too ill-conditioned for cross-products of v: there v is whitened first.
class ScoreBlock {
 public:
  ScoreBlock(const Design& design, const PooledFit& fit)
      : fit_(fit),
        reader_(design, fit),
        padded_(padded_columns(fit.rank)),
        stride_((fit.rank + 1) / 2 * 2),
        columns_(static_cast<std::size_t>(std::max(padded_, stride_) * kBlockStride),
                 0.0),
        turned_(static_cast<std::size_t>(stride_ * (kBlockRows + kRowPadding)), 0.0) {}

  void load(Index begin, Index n) {
    reader_.load(begin, n);
    Vector e = reader_.residuals();
    const RowBlock& block = reader_.block();
    if (block.weighted()) {
      for (Index i = 0; i < e.size(); ++i) e[i] *= block.weight(i);
    }
    fill(e);
    for (Index l = 0; l < padded_; ++l) {
      std::fill_n(column(l) + n_used(), kRowPadding, 0.0);
    }
  }

  // The scores row by row, stride() apart.
  void turn() {
    for (Index i = 0; i < n_used(); i += kTurnRows) {
      const Index stop = std::min(n_used(), i + kTurnRows);
      for (Index l = 0; l < stride_; l += 2)
        turn_pair(column(l), column(l + 1), i, stop, l);
    }
  }

  Index n_used() const { return reader_.block().n_used(); }
  Index row(Index i) const { return reader_.block().row(i); }
  Index stride() const { return stride_; }
  Index padded() const { return padded_; }
  const double* columns() const { return columns_.data(); }
  const double* turned(Index i) const { return turned_.data() + i * stride_; }

 private:
  static constexpr Index kTurnRows = 128;

  double* column(Index l) { return columns_.data() + l * kBlockStride; }

  void fill(const Vector& e) {
    if (fit_.from_rows) {
      Eigen::Map<Matrix, 0, Eigen::OuterStride<>> to(
          columns_.data(), n_used(), fit_.rank, Eigen::OuterStride<>(kBlockStride));
      to = reader_.terms() * fit_.whiten.transpose();
      to.array().colwise() *= e.array();
      return;
    }
    for (Index l = 0; l < fit_.rank; ++l) {
      Eigen::Map<Vector> to(column(l), n_used());
      if (reader_.is_constant(l)) {
        to = e;
      } else {
        to = reader_.term(l).cwiseProduct(e);
      }
    }
  }

  void turn_pair(const double* a, const double* b, Index i, Index stop, Index l) {
    for (; i < stop; i += 2) {
      const Lanes left = load_lanes(a + i), right = load_lanes(b + i);
      double* to = turned_.data() + i * stride_ + l;
      store_lanes(to, Lanes{left[0], right[0]});
      store_lanes(to + stride_, Lanes{left[1], right[1]});
    }
  }

  const PooledFit& fit_;
  PanelReader reader_;
  Index padded_, stride_;
  std::vector<double> columns_, turned_;
};

inline void add_outer(const Matrix& columns, Matrix& to) {
  to.selfadjointView<Eigen::Lower>().rankUpdate(columns);
}

// whiten L, L as in bread_of(): psi = (whiten L)' u for a whitened score u.
inline Matrix back_to_terms(const Design& design, const PooledFit& fit) {
  Matrix back = fit.whiten;
  const Index r = fit.rank;
  if (design.intercept && r > 1) {
    Vector centre(r - 1);
    Index l = 0;
    for (std::size_t j = 0; j < design.x.size(); ++j) {
      if (!fit.aliased[j + 1]) centre[l++] = fit.centre[static_cast<Index>(j) + 1];
    }
    back.col(0) -= back.rightCols(r - 1) * centre;
  }
  return back;
}

// From whitened scores to psi. Only the lower triangle of `meat` is read.
inline Matrix psi_meat(const Design& design, const PooledFit& fit, const Matrix& meat) {
  const Matrix back = back_to_terms(design, fit);
  const Matrix full = meat.selfadjointView<Eigen::Lower>();
  const Matrix psi = back.transpose() * full * back;
  return (psi + psi.transpose()) / 2;
}

// Groups of rows. One group a row needs no codes.
struct Grouping {
  const int* code = nullptr;  // length n_rows, null when every row is its own group
  Index n_codes = 0;
  Index n_groups = 0;
};

// Which rows enter; all of them when `flags` is empty.
struct UsedRows {
  std::vector<char> flags;
  Index n_rows = 0, n_used = 0;
  bool has(Index row) const {
    return flags.empty() || flags[static_cast<std::size_t>(row)] != 0;
  }
};

inline UsedRows used_rows(const Design& design, const PooledFit& fit) {
  UsedRows used;
  used.n_rows = design.n_rows;
  used.n_used = fit.n_used;
  if (fit.n_used == design.n_rows) return used;
  used.flags.assign(static_cast<std::size_t>(design.n_rows), 1);
  RowBlock block(design);
  for (Index begin = 0; begin < design.n_rows; begin += kBlockRows) {
    block.load(begin, std::min(kBlockRows, design.n_rows - begin), fit.centre.data());
    for (const IncompleteRow& bad : block.incomplete()) {
      used.flags[static_cast<std::size_t>(bad.row)] = 0;
    }
  }
  return used;
}

inline Grouping single_dimension(const UsedRows& used,
                                 const int* code,
                                 Index n_codes,
                                 Index dimension) {
  std::vector<char> present(static_cast<std::size_t>(n_codes), 0);
  Index n_missing = 0, first_missing = -1;
  for (Index row = 0; row < used.n_rows; ++row) {
    if (!used.has(row)) continue;
    if (code[row] >= 0) {
      present[static_cast<std::size_t>(code[row])] = 1;
    } else if (n_missing++ == 0) {
      first_missing = row;
    }
  }
  const double named = static_cast<double>(dimension + 1);
  if (n_missing > 0) {
    throw Error("cluster_id",
                "a row has no cluster",
                {{"dimension", named},
                 {"row", static_cast<double>(first_missing + 1)},
                 {"count", static_cast<double>(n_missing)}});
  }
  const Index n_groups = std::count(present.begin(), present.end(), 1);
  if (n_groups < 2) throw Error("clusters", "only one cluster", {{"dimension", named}});
  return {code, n_codes, n_groups};
}

// Every group of `fine` lies inside one group of `coarse`.
inline bool is_nested(const UsedRows& used,
                      const Grouping& fine,
                      const Grouping& coarse) {
  if (!fine.code) return true;
  if (!coarse.code) return fine.n_groups == used.n_used;
  if (fine.n_groups < coarse.n_groups) return false;
  std::vector<int> parent(static_cast<std::size_t>(fine.n_codes), -1);
  for (Index row = 0; row < used.n_rows; ++row) {
    if (!used.has(row)) continue;
    int& known = parent[static_cast<std::size_t>(fine.code[row])];
    if (known < 0) known = coarse.code[row];
    if (known != coarse.code[row]) return false;
  }
  return true;
}

inline bool is_ordered(const UsedRows& used, const Grouping& grouping) {
  int last = -1;
  for (Index row = 0; row < used.n_rows; ++row) {
    if (!used.has(row)) continue;
    if (grouping.code[row] < last) return false;
    last = grouping.code[row];
  }
  return true;
}

// Used rows, group by group.
inline std::vector<Index> rows_by_group(const UsedRows& used, const Grouping& grouping) {
  std::vector<Index> next(static_cast<std::size_t>(grouping.n_codes) + 1, 0);
  for (Index row = 0; row < used.n_rows; ++row) {
    if (used.has(row)) ++next[static_cast<std::size_t>(grouping.code[row]) + 1];
  }
  for (std::size_t g = 1; g < next.size(); ++g) next[g] += next[g - 1];
  std::vector<Index> rows(static_cast<std::size_t>(used.n_used));
  for (Index row = 0; row < used.n_rows; ++row) {
    if (!used.has(row)) continue;
    const std::size_t group = static_cast<std::size_t>(grouping.code[row]);
    rows[static_cast<std::size_t>(next[group]++)] = row;
  }
  return rows;
}

// Visits used rows so that the groups of one grouping come one after the other.
template <class Visit>
void visit_by_group(const UsedRows& used, const Grouping& grouping, const Visit& visit) {
  if (is_ordered(used, grouping)) {
    for (Index row = 0; row < used.n_rows; ++row) {
      if (used.has(row)) visit(row);
    }
  } else {
    for (const Index row : rows_by_group(used, grouping)) visit(row);
  }
}

// New codes for pairs of codes, numbered as they are met; a stamp on each inner code says
// in which outer group it was last seen.
inline Grouping pair_codes(const UsedRows& used,
                           const Grouping& a,
                           const Grouping& b,
                           std::vector<int>& codes) {
  const bool a_outer = is_ordered(used, a) || !is_ordered(used, b);
  const Grouping &outer = a_outer ? a : b, &inner = a_outer ? b : a;
  std::vector<int> stamp(static_cast<std::size_t>(inner.n_codes), -1);
  std::vector<int> given(static_cast<std::size_t>(inner.n_codes), -1);
  codes.assign(static_cast<std::size_t>(used.n_rows), -1);
  int n_pairs = 0;
  visit_by_group(used, outer, [&](Index row) {
    const std::size_t in = static_cast<std::size_t>(inner.code[row]);
    if (stamp[in] != outer.code[row]) {
      stamp[in] = outer.code[row];
      given[in] = n_pairs++;
    }
    codes[static_cast<std::size_t>(row)] = given[in];
  });
  return {codes.data(), n_pairs, n_pairs};
}

// The groupings of all 2^D - 1 intersections; equal ones are one.
class Intersections {
 public:
  Intersections(const UsedRows& used,
                const std::vector<const int*>& codes,
                const std::vector<Index>& n_codes)
      : used_(used), term_((std::size_t{1} << codes.size()) - 1, 0) {
    for (std::size_t d = 0; d < codes.size(); ++d) {
      groupings_.push_back(
          single_dimension(used, codes[d], n_codes[d], static_cast<Index>(d)));
      term_[(std::size_t{1} << d) - 1] = d;
    }
    for (std::size_t set = 1; set <= term_.size(); ++set) {
      const std::size_t last = highest_bit(set), rest = set - last;
      if (rest != 0) term_[set - 1] = intersect(term_[rest - 1], term_[last - 1]);
    }
  }

  const std::vector<Grouping>& groupings() const { return groupings_; }
  std::size_t n_terms() const { return term_.size(); }
  std::size_t grouping_of(std::size_t term) const { return term_[term]; }

  static double sign(std::size_t term) {
    bool even = true;
    for (std::size_t set = term + 1; set != 0; set &= set - 1) even = !even;
    return even ? -1.0 : 1.0;
  }

 private:
  static std::size_t highest_bit(std::size_t set) {
    while ((set & (set - 1)) != 0) set &= set - 1;
    return set;
  }

  std::size_t intersect(std::size_t a, std::size_t b) {
    if (a == b || is_nested(used_, groupings_[a], groupings_[b])) return a;
    if (is_nested(used_, groupings_[b], groupings_[a])) return b;
    std::vector<int> codes;
    Grouping pairs = pair_codes(used_, groupings_[a], groupings_[b], codes);
    if (pairs.n_groups == used_.n_used) {
      pairs.code = nullptr;
    } else {
      memory_.push_back(std::move(codes));
      pairs.code = memory_.back().data();
    }
    groupings_.push_back(pairs);
    return groupings_.size() - 1;
  }

  const UsedRows& used_;
  std::vector<std::size_t> term_;  // of a set of dimensions, less one: its grouping
  std::vector<Grouping> groupings_;
  std::vector<std::vector<int>> memory_;
};

// Scores of one chunk of rows, added up inside the groups of every grouping.
class GroupSums {
 public:
  GroupSums(const std::vector<Grouping>& groupings, Index rank)
      : groupings_(&groupings), rank_(rank) {
    for (const Grouping& grouping : groupings) {
      const Index stride = grouping.code ? (rank + 1) / 2 * 2 : 0;
      sums_.push_back(Matrix::Zero(stride, grouping.n_codes));
      any_codes_ = any_codes_ || grouping.code;
    }
    const Index padded = padded_columns(rank);
    cross_.assign(static_cast<std::size_t>(padded * padded), 0.0);
  }

  void add(ScoreBlock& block) {
    if (any_codes_) block.turn();
    bool alone = false;
    for (std::size_t s = 0; s < sums_.size(); ++s) {
      const int* code = (*groupings_)[s].code;
      if (code) {
        scatter(block, code, sums_[s]);
      } else {
        alone = true;
      }
    }
    if (!alone) return;
    add_cross_products(block.columns(), block.padded(), block.n_used(), cross_);
  }

  void join(const GroupSums& other) {
    for (std::size_t s = 0; s < sums_.size(); ++s) sums_[s] += other.sums_[s];
    for (std::size_t i = 0; i < cross_.size(); ++i) cross_[i] += other.cross_[i];
  }

  // rank x codes, of a grouping with codes.
  Matrix totals(std::size_t s) const { return sums_[s].topRows(rank_); }

  Matrix meat(std::size_t s) const {
    Matrix meat = Matrix::Zero(rank_, rank_);
    if (!(*groupings_)[s].code) {
      const Index padded = padded_columns(rank_);
      for (Index i = 0; i < rank_; ++i) {
        for (Index j = 0; j <= i; ++j) {
          meat(i, j) = cross_[static_cast<std::size_t>(i * padded + j)];
        }
      }
      return meat;
    }
    add_outer(sums_[s].topRows(rank_), meat);
    return meat;
  }

 private:
  static void scatter(const ScoreBlock& block, const int* code, Matrix& sums) {
    const Index stride = block.stride();
    for (Index i = 0; i < block.n_used(); ++i) {
      double* to = sums.data() + stride * code[block.row(i)];
      const double* from = block.turned(i);
      for (Index l = 0; l < stride; l += 2) {
        store_lanes(to + l, load_lanes(to + l) + load_lanes(from + l));
      }
    }
  }

  const std::vector<Grouping>* groupings_;
  Index rank_;
  bool any_codes_ = false;
  std::vector<Matrix> sums_;   // stride x codes
  std::vector<double> cross_;  // every row its own group
};

inline Index count_sum_chunks(const std::vector<Grouping>& groupings,
                              Index rank,
                              Index n_blocks) {
  Index doubles = 1;
  for (const Grouping& grouping : groupings) {
    if (grouping.code) doubles += (rank + 1) * grouping.n_codes;
  }
  const Index by_memory = std::max<Index>(1, kSumDoubles / doubles);
  return std::max<Index>(1, std::min({n_blocks, kMaxSumChunks, by_memory}));
}

// One pass for all groupings. Chunks are cut by the data alone and joined in order.
inline GroupSums add_up(const Design& design,
                        const PooledFit& fit,
                        const std::vector<Grouping>& groupings,
                        int threads) {
  const Index n_blocks = count_blocks(design.n_rows);
  const Index n_chunks = count_sum_chunks(groupings, fit.rank, n_blocks);
  std::vector<GroupSums> chunks(static_cast<std::size_t>(n_chunks),
                                GroupSums(groupings, fit.rank));
  for_each_task(n_chunks, threads, [&](Index c) {
    ScoreBlock block(design, fit);
    const Index end = chunk_begin(n_blocks, n_chunks, c + 1);
    for (Index b = chunk_begin(n_blocks, n_chunks, c); b < end; ++b) {
      const Index begin = b * kBlockRows;
      block.load(begin, std::min(kBlockRows, design.n_rows - begin));
      chunks[static_cast<std::size_t>(c)].add(block);
    }
  });
  for (std::size_t c = 1; c < chunks.size(); ++c) chunks[0].join(chunks[c]);
  return std::move(chunks[0]);
}

inline std::vector<ClusterSums> sum_groupings(const Design& design,
                                              const PooledFit& fit,
                                              const std::vector<Grouping>& groupings,
                                              int threads) {
  const GroupSums total = add_up(design, fit, groupings, threads);
  std::vector<ClusterSums> sums;
  for (std::size_t s = 0; s < groupings.size(); ++s) {
    Matrix meat = total.meat(s);
    if (!fit.from_rows) {
      const Matrix full = meat.selfadjointView<Eigen::Lower>();
      meat = fit.whiten * full * fit.whiten.transpose();
    }
    sums.push_back({psi_meat(design, fit, meat), groupings[s].n_groups});
  }
  return sums;
}

// Sums of psi inside the groups of one grouping, r x codes.
inline Matrix grouped_scores(const Design& design,
                             const PooledFit& fit,
                             const Grouping& grouping,
                             int threads) {
  const std::vector<Grouping> one{grouping};
  const GroupSums sums = add_up(design, fit, one, threads);
  const Matrix scores = sums.totals(0);
  return back_to_terms(design, fit).transpose() *
         (fit.from_rows ? scores : Matrix(fit.whiten * scores));
}

inline double small_sample_factor(SmallSample small,
                                  Index n_groups,
                                  const PooledFit& fit) {
  if (small == SmallSample::none) return 1;
  const double g = static_cast<double>(n_groups), n = static_cast<double>(fit.n_used);
  return g / (g - 1) * ((n - 1) / (n - static_cast<double>(fit.rank)));
}

inline void find_nesting(const UsedRows& used,
                         const std::vector<Grouping>& groupings,
                         std::vector<int>& nested_in) {
  for (std::size_t a = 0; a < nested_in.size(); ++a) {
    for (std::size_t b = 0; b < nested_in.size(); ++b) {
      if (a == b || nested_in[a] >= 0) continue;
      // The same dimension twice: the later one is called nested in the earlier.
      const bool twice = groupings[a].n_groups == groupings[b].n_groups;
      if (twice && a < b) continue;
      if (is_nested(used, groupings[a], groupings[b])) nested_in[a] = static_cast<int>(b);
    }
  }
}

// The groupings of all terms and, with more than one dimension, every row its own group:
// those errors scale the eigenvalues.
inline std::vector<Grouping> with_rows_alone(const UsedRows& used,
                                             const Intersections& sets) {
  std::vector<Grouping> groupings = sets.groupings();
  if (sets.n_terms() > 1 &&
      std::all_of(
          groupings.begin(), groupings.end(), [](const Grouping& g) { return g.code; }))
    groupings.push_back({nullptr, 0, used.n_used});
  return groupings;
}

// Inclusion and exclusion, and the repair of what comes out negative. `factor` gives the
// small-sample factor of a number of groups.
template <class Factor>
ClusterCovariance combine_groupings(const UsedRows& used,
                                    const Intersections& sets,
                                    const std::vector<Grouping>& groupings,
                                    const std::vector<ClusterSums>& sums,
                                    const Factor& factor_of,
                                    SmallSample small) {
  std::size_t n_dimensions = 0;
  while ((std::size_t{1} << n_dimensions) <= sets.n_terms()) ++n_dimensions;
  const Index rank = sums[0].meat.rows();
  ClusterCovariance to;
  for (std::size_t d = 0; d < n_dimensions; ++d) to.n_groups.push_back(sums[d].n_groups);
  const Index smallest = *std::min_element(to.n_groups.begin(), to.n_groups.end());
  std::vector<double> factor(groupings.size(), 0.0);
  for (std::size_t term = 0; term < sets.n_terms(); ++term) {
    const std::size_t g = sets.grouping_of(term);
    to.n_groups_terms.push_back(sums[g].n_groups);
    factor[g] += sets.sign(term) *
                 factor_of(small == SmallSample::min ? smallest : sums[g].n_groups);
  }
  to.raw.setZero(rank, rank);
  Vector size = Vector::Zero(rank);
  std::size_t rows_alone = 0;
  for (std::size_t g = 0; g < groupings.size(); ++g) {
    to.raw += factor[g] * sums[g].meat;
    size += std::abs(factor[g]) * sums[g].meat.diagonal();
    if (!groupings[g].code) rows_alone = g;
  }
  for (Index j = 0; j < rank; ++j)
    to.not_positive.push_back(to.raw(j, j) <= kVarianceTolerance * size[j]);
  const Matrix& scale = n_dimensions > 1 ? sums[rows_alone].meat : to.raw;
  const PositiveRepair repair =
      make_positive(to.raw, scale.diagonal().cwiseMax(0.0).cwiseSqrt());
  to.vcov = repair.value;
  to.min_eigen_relative = repair.min_eigen_relative;
  to.n_clipped = repair.n_clipped;
  to.nested_in.assign(n_dimensions, -1);
  find_nesting(used, groupings, to.nested_in);
  return to;
}

inline Matrix score_meat(const Design& design,
                         const PooledFit& fit,
                         int type,
                         int threads) {
  const Index n_blocks = count_blocks(design.n_rows);
  const Index n_chunks = std::min(n_blocks, kMaxChunks);
  std::vector<Matrix> meats(static_cast<std::size_t>(n_chunks),
                            Matrix::Zero(fit.rank, fit.rank));
  std::vector<Index> full(static_cast<std::size_t>(n_chunks), -1);
  for_each_task(n_chunks, threads, [&](Index c) {
    PanelReader reader(design, fit);
    const std::size_t at = static_cast<std::size_t>(c);
    const Index end = chunk_begin(n_blocks, n_chunks, c + 1);
    for (Index b = chunk_begin(n_blocks, n_chunks, c); b < end; ++b) {
      const Index begin = b * kBlockRows;
      reader.load(begin, std::min(kBlockRows, design.n_rows - begin));
      const RowBlock& block = reader.block();
      Matrix scores = reader.whitened();
      const Vector e = reader.residuals();
      for (Index i = 0; i < block.n_used(); ++i) {
        const double w = block.weight(i);
        const double rest = type >= 2 ? 1 - w * scores.col(i).squaredNorm() : 1.0;
        if (rest <= kLeverageTolerance && full[at] < 0) full[at] = block.row(i);
        scores.col(i) *= w * e[i] / (type == 2 ? std::sqrt(std::abs(rest)) : rest);
      }
      add_outer(scores, meats[at]);
    }
  });
  for (const Index row : full) {
    if (row < 0) continue;
    throw Error("leverage",
                "a row alone decides a coefficient, so its residual says nothing",
                {{"row", static_cast<double>(row + 1)}});
  }
  for (std::size_t c = 1; c < meats.size(); ++c) meats[0] += meats[c];
  return meats[0];
}

}  // namespace detail

// HC0 .. HC3, r x r over the kept terms.
inline Matrix heteroskedastic(const Design& design,
                              const PooledFit& fit,
                              int type,
                              int threads) {
  if (type < 0 || type > 3) {
    throw Error("unsupported", "types are HC0 to HC3", {{"type", double(type)}});
  }
  const Matrix meat = detail::score_meat(design, fit, type, threads);
  const Matrix covariance = detail::psi_meat(design, fit, meat);
  if (type != 1) return covariance;
  const double n = static_cast<double>(fit.n_used);
  return covariance * (n / (n - static_cast<double>(fit.rank)));
}

// Sums of psi in each period, n_periods x r; zero where no row entered.
inline Matrix period_scores(const Design& design, const PooledFit& fit, int threads) {
  const detail::Grouping periods{design.period, design.n_periods, design.n_periods};
  return detail::grouped_scores(design, fit, periods, threads).transpose();
}

// codes: D vectors of length n_rows with values 0 .. n_codes - 1, or -1 for missing.
inline ClusterCovariance clustered(const Design& design,
                                   const PooledFit& fit,
                                   const std::vector<const int*>& codes,
                                   const std::vector<Index>& n_codes,
                                   SmallSample small,
                                   int threads) {
  if (codes.empty()) throw Error("input", "clusters need at least one dimension");
  const detail::UsedRows used = detail::used_rows(design, fit);
  const detail::Intersections sets(used, codes, n_codes);
  const std::vector<detail::Grouping> groupings = detail::with_rows_alone(used, sets);
  const std::vector<ClusterSums> sums =
      detail::sum_groupings(design, fit, groupings, threads);

  return detail::combine_groupings(
      used,
      sets,
      groupings,
      sums,
      [&](Index n_groups) { return detail::small_sample_factor(small, n_groups, fit); },
      small);
}

}  // namespace lambdabar
