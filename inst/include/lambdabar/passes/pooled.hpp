// One regression on the whole panel.
//
//   b = (X'WX)^-1 X'Wy,   sigma2 = rss / (n - r),   iid covariance = sigma2 * bread
//
// The panel is treated as a single period: moments in fixed chunks, and, when those are
// too ill-conditioned, a second pass that folds the rows into one triangle a chunk.
// Terms in the span of earlier ones (left to right) are aliased: NaN, left out of
// `bread`.
//
// Shapes: n_rows rows, P terms (the constant first), rank r. Cost: one read of the
// columns and n P^2 / 2; from rows 2 n P^2 more in extended precision. Same bits for any
// number of threads. Throws Error "input" (no terms, a negative weight) and
// "too_few_rows" (no residual degree of freedom). Not handled: absorbed effects.
#pragma once

#include "cross_sections.hpp"

namespace lambdabar {

struct PooledFit {
  Vector coef;                // P, NaN where aliased
  std::vector<bool> aliased;  // P: in the span of earlier terms
  Matrix bread;               // r x r, (X'WX)^-1 of the kept terms
  double rss = kNaN, tss = kNaN, sigma2 = kNaN;
  double r_squared = kNaN;  // centred with a constant; NaN where y does not vary
  Index n_used = 0, n_rows = 0, rank = 0;
  bool from_rows = false;
  std::vector<Index> missing;  // by first offending variable: y, x, weight
  // The same fit around a centre; see LeastSquares. Residuals and influence rows come
  // from these, because a mean far from zero would cost them digits.
  Vector centre;  // 1 + number of x
  double level = 0;
  Matrix whiten;  // r x r
};

namespace detail {

inline LeastSquares factor_panel(const Design& design, const Moments& m, int threads) {
  const Vector centre = factor_centre(m, 0, design.intercept);
  const Index n_chunks = count_chunks(design, 1, true);
  std::vector<RowFactor> factors(static_cast<std::size_t>(n_chunks),
                                 RowFactor(design, centre));
  for_each_task(n_chunks, threads, [&](Index c) {
    RowFactor& factor = factors[static_cast<std::size_t>(c)];
    const Index end = chunk_begin(design.n_rows, n_chunks, c + 1);
    for (Index row = chunk_begin(design.n_rows, n_chunks, c); row < end; ++row) {
      factor.add(row);
    }
  });
  for (std::size_t c = 1; c < factors.size(); ++c) factors[0].join(factors[c]);
  return factors[0].solve();
}

inline bool all_vary(const Moments& m, bool intercept) {
  if (!intercept) return true;
  for (Index j = 1; j < m.n_variables; ++j) {
    if (!varies_in(m, j, 0)) return false;
  }
  return true;
}

// What a row needs for its residual and its whitened terms.
class PanelReader {
 public:
  PanelReader(const Design& design, const PooledFit& fit) : fit_(fit), block_(design) {
    const Index first = design.intercept ? 1 : 0;
    for (Index term = 0; term < design.n_terms(); ++term) {
      if (fit.aliased[static_cast<std::size_t>(term)]) continue;
      columns_.push_back(term < first ? kConstant : term + 1 - first);
      slopes_.push_back(fit.coef[term]);
    }
  }

  void load(Index begin, Index n) { block_.load(begin, n, fit_.centre.data()); }
  const RowBlock& block() const { return block_; }

  // Residuals of the block's complete rows.
  Vector residuals() const {
    const Index n = block_.n_used();
    Vector e = block_column(0).array() - fit_.level;
    for (std::size_t l = 0; l < columns_.size(); ++l) {
      if (columns_[l] != kConstant) e.head(n) -= slopes_[l] * block_column(columns_[l]);
    }
    return e;
  }

  // Whitened terms, one row of the panel a column (r x n): their weighted cross-products
  // over the panel are the identity.
  Matrix whitened() const { return fit_.whiten * terms().transpose(); }

  // Terms around the centre, n x r.
  Matrix terms() const {
    Matrix terms(block_.n_used(), rank());
    for (Index l = 0; l < rank(); ++l) {
      if (is_constant(l)) {
        terms.col(l).setOnes();
      } else {
        terms.col(l) = block_column(columns_[static_cast<std::size_t>(l)]);
      }
    }
    return terms;
  }

  Index rank() const { return static_cast<Index>(columns_.size()); }
  bool is_constant(Index l) const {
    return columns_[static_cast<std::size_t>(l)] == kConstant;
  }
  Eigen::Map<const Vector> term(Index l) const {
    return block_column(columns_[static_cast<std::size_t>(l)]);
  }

 private:
  static constexpr Index kConstant = -1;

  Eigen::Map<const Vector> block_column(Index j) const {
    return Eigen::Map<const Vector>(block_.column(j), block_.n_used());
  }

  const PooledFit& fit_;
  RowBlock block_;
  std::vector<Index> columns_;  // of the block, for each kept term
  std::vector<double> slopes_;
};

inline Index count_blocks(Index n_rows) { return (n_rows + kBlockRows - 1) / kBlockRows; }

}  // namespace detail

inline PooledFit pooled(const Design& design, int threads) {
  detail::check_terms(design);
  const Moments m = panel_moments(design, threads);
  PooledFit fit;
  fit.n_rows = design.n_rows;
  fit.n_used = m.n_used[0];
  fit.missing.assign(m.missing.data(), m.missing.data() + m.missing.rows());
  LeastSquares solved;
  if (fit.n_used > design.n_terms() && detail::all_vary(m, design.intercept)) {
    solved = detail::solve_moments(m, 0, design.intercept);
  }
  fit.from_rows = !solved.trusted;
  if (fit.from_rows) solved = detail::factor_panel(design, m, threads);
  if (fit.n_used <= solved.rank) {
    throw Error("too_few_rows",
                "no residual degree of freedom is left",
                {{"n_used", static_cast<double>(fit.n_used)},
                 {"rank", static_cast<double>(solved.rank)}});
  }
  fit.coef = solved.coef;
  fit.aliased = solved.aliased;
  fit.bread = solved.bread;
  fit.rank = solved.rank;
  fit.rss = solved.rss;
  fit.tss = solved.tss;
  fit.sigma2 = solved.rss / static_cast<double>(fit.n_used - fit.rank);
  const bool y_varies = design.intercept ? detail::varies_in(m, 0, 0) : fit.tss > 0;
  if (y_varies) fit.r_squared = 1 - fit.rss / fit.tss;
  fit.centre = solved.centre;
  fit.level = solved.level;
  fit.whiten = solved.whiten;
  return fit;
}

// y - X b, length n_rows, NaN at incomplete rows.
inline Vector pooled_residuals(const Design& design, const PooledFit& fit) {
  Vector residuals = Vector::Constant(design.n_rows, kNaN);
  detail::PanelReader reader(design, fit);
  for (Index begin = 0; begin < design.n_rows; begin += detail::kBlockRows) {
    reader.load(begin, std::min(detail::kBlockRows, design.n_rows - begin));
    const Vector e = reader.residuals();
    for (Index i = 0; i < e.size(); ++i) residuals[reader.block().row(i)] = e[i];
  }
  return residuals;
}

}  // namespace lambdabar
