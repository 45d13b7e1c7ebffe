// Cross-sections on estimated betas, corrected for the betas' own error (Litzenberger and
// Ramaswamy, 1979, Journal of Financial Economics 7, 163-195):
//
//   b_t = (A_t - kappa_t C_t)^-1 X_t'W y_t,   A_t = X_t'W X_t,   C_t = sum_i w_i V_i
//
// over the complete rows of period t. V_i is the error covariance of row i's betas, zero
// for the constant and the traits, which are exact.
//
// Guard. mu is the smallest root of |S - mu C| = 0, S being the cross-products of the
// betas net of the exact columns. A - C is positive definite if and only if mu > 1, and 1
// - 1/mu is the reliability of the worst direction. kappa = min(1, (1 - min_reliability)
// mu) leaves at least that share of it, is continuous in the data, and A - kappa C is
// always positive definite. The rule is this package's own, in the spirit of Fuller's
// modified moment estimators (Fuller, 1987, Measurement Error Models).
//
// Least squares (least_squares.hpp) gives H = L'L, the inverse of the centred X'WX. With
// L C L' = U D U' and the whitened slopes q, b = L'q, everything else is a change to it:
//   mu = 1 / max D,   b_t = L'(q + g),   g = U kappa D (I - kappa D)^-1 U'q,
//   rss_t = rss + g'g,   (A - kappa C)^-1 = L'(I + U kappa D (I - kappa D)^-1 U') L,
// so that nothing is subtracted from a cross-product and kappa = 0 is least squares to
// the last bit. Moments of every period include the V_i as further variables, whose means
// are what C_t needs: one read of the columns, rows in any order. Statuses, rank and the
// way back to the rows are those of cross_sections.hpp.
//
// Errors within a period, s2 (A - kappa C)^-1 A (A - kappa C)^-1 with s2 = rss / (n - P)
// at the corrected slopes, leave out that betas are estimated. R2 = 1 - rss / tss may be
// below zero: corrected slopes do not minimise the rss.
//
// Assumes that a beta's error is unrelated to the return it prices, as for betas from
// before the period, and that betas are unbiased. For betas of the whole sample the first
// holds in the sum over periods only, and slopes of single periods are amplified: use
// pooled_corrected().
//
// Shapes: n rows, T periods, P terms (the constant first), K betas. Cost: that of
// cross_sections() with K (K + 1) / 2 more columns. Same bits for any number of threads.
// Not handled: covariances that are not positive semidefinite (they are not looked at);
// columns whose sum within a period overflows.
#pragma once

#include "pooled.hpp"

#include <Eigen/Eigenvalues>

namespace lambdabar {

// The first n_factors columns of design.x are betas with sampling error.
struct BetaErrors {
  Index n_factors = 0;  // K
  // n x K (K + 1) / 2, column-major: the lower triangle by columns, 11, 21, .., K1, 22,
  // .. A row with a non-finite number in it is not complete.
  const double* covariance = nullptr;

  Index n_packed() const { return n_factors * (n_factors + 1) / 2; }
};

struct CorrectedOptions {
  // Share of the worst direction's spread that is never taken for error; in (0, 1]. One
  // leaves the betas uncorrected.
  double min_reliability = 0.1;
  // Complete rows a period needs (assets in the pooled form); never fewer than P + 1,
  // which 0 stands for.
  Index min_assets = 0;
  int threads = 1;
};

// R2 may be below zero.
struct CorrectedSections : SectionResults {
  Vector smallest_root;  // T: mu, infinite without error; NaN unless estimated
  Vector kappa;          // T: share of C subtracted; NaN unless estimated
};

namespace detail {

inline void check_errors(const Design& design,
                         const BetaErrors& errors,
                         const CorrectedOptions& options) {
  check_terms(design);
  if (errors.n_factors < 1 || errors.n_factors > static_cast<Index>(design.x.size()))
    throw Error("input",
                "the betas with an error must be some of the columns",
                {{"n_factors", static_cast<double>(errors.n_factors)}});
  if (!(options.min_reliability > 0 && options.min_reliability <= 1))
    throw Error("input",
                "the smallest reliability must lie above 0 and be at most 1",
                {{"min_reliability", options.min_reliability}});
}

inline bool has_errors(const BetaErrors& errors, Index n_rows, Index row) {
  for (Index j = 0; j < errors.n_packed(); ++j)
    if (!std::isfinite(errors.covariance[j * n_rows + row])) return false;
  return true;
}

// The design with the V_i behind its own columns: a row is complete when they are there.
inline Design with_errors(const Design& design, const BetaErrors& errors) {
  Design out = design;
  for (Index j = 0; j < errors.n_packed(); ++j) {
    const double* column = errors.covariance + j * design.n_rows;
    out.x.push_back(Column{{Part{column, nullptr, nullptr}}});
  }
  return out;
}

// Moments of the design's own variables over rows that have an error covariance, and the
// sums of those.
struct ErrorMoments {
  Moments own;
  Matrix error_sum;  // K (K + 1) / 2 x periods, sum of w V

  ErrorMoments(const Design& design, const BetaErrors& errors, Moments all)
      : own(std::move(all)) {
    const Index q = static_cast<Index>(design.x.size()) + 1, n_packed = errors.n_packed();
    error_sum = (own.shift + own.offset).bottomRows(n_packed) * own.weight.asDiagonal();
    own.n_variables = q;
    own.shift = own.shift.topRows(q).eval();
    own.offset = own.offset.topRows(q).eval();
    // A packed triangle by rows starts with the triangle of its first variables.
    own.cross = own.cross.topRows(q * (q + 1) / 2).eval();
  }
};

// Means of the x, or zeros where columns are not centred.
inline Vector centre_of(const Moments& m, Index period, bool intercept) {
  const Index k = m.n_variables - 1;
  if (!intercept) return Vector::Zero(k);
  return (m.shift.col(period) + m.offset.col(period)).tail(k);
}

inline Matrix unpack(const double* packed, Index n_factors) {
  Matrix V(n_factors, n_factors);
  for (Index j = 0; j < n_factors; ++j)
    for (Index i = j; i < n_factors; ++i) V(i, j) = V(j, i) = *packed++;
  return V;
}

struct Correction {
  double smallest_root = kNaN, kappa = kNaN;
  Matrix L;    // k x k, whitens the slopes' columns
  Matrix map;  // k x k: (A - kappa C)^-1 = map L
  Vector g;    // k, to add to the whitened slopes
  double rss = kNaN;

  Vector slope_change() const { return L.transpose() * g; }
  // Of the constant. L takes the centre's part in nearly collinear columns out before g
  // multiplies it.
  double constant_change(const Vector& centre) const { return -(L * centre).dot(g); }
};

// fit: of full rank. error_sum: C, K x K.
inline Correction correct(const LeastSquares& fit,
                          const Matrix& error_sum,
                          double min_reliability) {
  const Index k = fit.centre.size() - 1, K = error_sum.rows();
  Correction out;
  out.L = fit.whiten.bottomRightCorner(k, k);
  const Vector q =
      out.L.transpose().triangularView<Eigen::Upper>().solve(fit.coef.tail(k));
  const Matrix M = out.L.leftCols(K) * error_sum * out.L.leftCols(K).transpose();
  const Eigen::SelfAdjointEigenSolver<Matrix> eigen(M);
  const Vector& root = eigen.eigenvalues();
  const double largest = root[k - 1];
  out.smallest_root = largest > 0 ? 1 / largest : std::numeric_limits<double>::infinity();
  out.kappa = largest > 0 ? std::min(1.0, (1 - min_reliability) / largest) : 1.0;
  const Vector excess = out.kappa * root.array() / (1 - out.kappa * root.array());
  const Matrix extra =
      eigen.eigenvectors() * excess.asDiagonal() * eigen.eigenvectors().transpose();
  out.g = extra * q;
  out.map = out.L.transpose() + out.L.transpose() * extra;
  out.rss = fit.rss + out.g.squaredNorm();
  return out;
}

class CorrectedSolver : public SectionSolver<CorrectedSections> {
 public:
  CorrectedSolver(const Design& design,
                  const BetaErrors& errors,
                  const CorrectedOptions& options)
      : CorrectedSolver(
            design,
            errors,
            options,
            ErrorMoments(design,
                         errors,
                         period_moments(with_errors(design, errors), options.threads))) {}

 private:
  CorrectedSolver(const Design& design,
                  const BetaErrors& errors,
                  const CorrectedOptions& options,
                  ErrorMoments moments)
      : SectionSolver(
            design, options.min_assets, options.threads, std::move(moments.own)),
        errors_(errors),
        error_sum_(std::move(moments.error_sum)),
        min_reliability_(options.min_reliability) {
    out_.smallest_root = out_.kappa = Vector::Constant(moments_.n_periods(), kNaN);
  }

  void store(Index p, const LeastSquares& fit) override {
    const Index k = moments_.n_variables - 1;
    const Correction correction = correct(
        fit, unpack(error_sum_.col(p).data(), errors_.n_factors), min_reliability_);
    Vector variance(design_.n_terms());
    variance.tail(k) = correction.map.rowwise().squaredNorm();
    out_.coef.col(p) = fit.coef;
    out_.coef.col(p).tail(k) += correction.slope_change();
    if (design_.intercept) {
      const Vector centre = centre_of(moments_, p, true);
      out_.coef(0, p) += correction.constant_change(centre);
      variance[0] =
          1 / moments_.weight[p] + (correction.map.transpose() * centre).squaredNorm();
    }
    out_.std_error.col(p) =
        (variance * residual_variance(p, correction.rss)).cwiseSqrt();
    out_.r_squared[p] = r_squared(p, correction.rss, fit.tss);
    out_.smallest_root[p] = correction.smallest_root;
    out_.kappa[p] = correction.kappa;
  }

  bool counts(Index row) const override {
    return has_errors(errors_, design_.n_rows, row);
  }

  const BetaErrors& errors_;
  Matrix error_sum_;  // K (K + 1) / 2 x T
  double min_reliability_;
};

}  // namespace detail

inline CorrectedSections corrected_sections(const Design& design,
                                            const BetaErrors& errors,
                                            const CorrectedOptions& options) {
  detail::check_errors(design, errors, options);
  return detail::CorrectedSolver(design, errors, options).solve();
}

// One regression over all periods, for betas of the whole sample:
//
//   b = (sum_t A_t - kappa C_t)^-1 sum_t X_t'W y_t
//
// A full-sample beta's error is related to the returns it was estimated from, but over
// the asset's sample that relation sums to zero, so b is consistent as assets grow in
// number for any fixed T >= K + 2. It estimates the premia that the factors earned in the
// sample (Shanken, 1992, Review of Financial Studies 5, 1-33; Raponi, Robotti and
// Zaffaroni, 2020, Review of Financial Studies 33, 2796-2842, for a balanced panel).
//
// Asset i's score, summing over its rows, and its influence row are
//   psi_i = sum w [x (y - x'b) + kappa (0, V b)],   (sum A - kappa C)^-1 psi_i.
// Both sum to zero over assets. The outer products of the rows sum to the covariance of b
// under errors that are independent between assets and over time, of any variance; rows
// added up within clusters allow for relations between assets.
//
// Cost: one read of the columns for the moments and one for the scores; n K^2 more.
// Throws Error "input", "too_few" (rows or assets), "no_variation" and "rank"; the last
// two name the term, counted from one.
struct PooledCorrected {
  Vector estimate;              // P
  Matrix asset_rows;            // N x P, summing; zero for assets without a complete row
  double smallest_root = kNaN;  // mu of the pooled sums
  double kappa = kNaN;
  Index n_used = 0;                     // complete rows
  std::vector<Index> n_used_by_period;  // T
  Index n_assets = 0;                   // with a complete row
};

namespace detail {

inline void require_enough(const char* message, const char* fact, Index n, Index needed) {
  if (n >= needed) return;
  throw Error("too_few",
              message,
              {{fact, static_cast<double>(n)}, {"needed", static_cast<double>(needed)}});
}

inline void require_variation(const Moments& m) {
  for (Index j = 1; j < m.n_variables; ++j) {
    if (varies_in(m, j, 0)) continue;
    throw Error("no_variation",
                "a term has one value in the whole panel",
                {{"term", static_cast<double>(j + 1)}});
  }
}

inline void require_full_rank(const LeastSquares& fit) {
  const Index last = fit.last_aliased();
  if (last < 0) return;
  throw Error("rank",
              "a term is a combination of the terms before it",
              {{"term", static_cast<double>(last + 1)}});
}

inline LeastSquares factor_complete_rows(const Design& design,
                                         const BetaErrors& errors,
                                         const Moments& m,
                                         int threads) {
  const RowFactor empty(design, factor_centre(m, 0, design.intercept));
  const Index n_chunks = count_chunks(design, 1, true);
  std::vector<RowFactor> factors(static_cast<std::size_t>(n_chunks), empty);
  for_each_task(n_chunks, threads, [&](Index c) {
    const Index end = chunk_begin(design.n_rows, n_chunks, c + 1);
    for (Index row = chunk_begin(design.n_rows, n_chunks, c); row < end; ++row)
      if (has_errors(errors, design.n_rows, row))
        factors[static_cast<std::size_t>(c)].add(row);
  });
  for (std::size_t c = 1; c < factors.size(); ++c) factors[0].join(factors[c]);
  return factors[0].solve();
}

// Scores around the columns' centre, the constant's (sum w e) first: 1 + k numbers an
// asset.
class AssetScores {
 public:
  AssetScores(const Design& design, const BetaErrors& errors, Index n_assets)
      : design_(design),
        n_factors_(errors.n_factors),
        with_errors_(detail::with_errors(design, errors)),
        sums_(Matrix::Zero(static_cast<Index>(design.x.size()) + 1, n_assets)),
        rows_(static_cast<std::size_t>(n_assets), 0),
        used_(static_cast<std::size_t>(design.n_periods), 0) {}

  // e = (y - centre_0) - level - (x - centre)'slopes.
  void add_all(const Vector& centre,
               double level,
               const Vector& slopes,
               double kappa,
               const int* asset) {
    const Index k = slopes.size();
    RowBlock block(with_errors_);
    Vector shift = Vector::Zero(block.n_columns());
    shift.head(k + 1) = centre;
    for (Index begin = 0; begin < design_.n_rows; begin += kBlockRows) {
      block.load(begin, std::min(kBlockRows, design_.n_rows - begin), shift.data());
      Vector residual = Eigen::Map<const Vector>(block.column(0), block.n_used());
      residual.array() -= level;
      for (Index j = 0; j < k; ++j)
        residual -=
            slopes[j] * Eigen::Map<const Vector>(block.column(j + 1), residual.size());
      for (Index i = 0; i < block.n_used(); ++i) {
        add_row(block, i, residual[i], slopes, kappa, asset[block.row(i)]);
        ++used_[static_cast<std::size_t>(design_.period[block.row(i)])];
      }
    }
  }

  const Matrix& sums() const { return sums_; }
  const std::vector<Index>& used_by_period() const { return used_; }
  Index n_assets() const {
    return static_cast<Index>(rows_.size()) - std::count(rows_.begin(), rows_.end(), 0);
  }

 private:
  void add_row(const RowBlock& block,
               Index i,
               double residual,
               const Vector& slopes,
               double kappa,
               int asset) {
    double* sum = sums_.col(asset).data();
    const double we = block.weight(i) * residual, wk = block.weight(i) * kappa;
    sum[0] += we;
    for (Index j = 1; j <= slopes.size(); ++j) sum[j] += we * block.column(j)[i];
    Index packed = slopes.size() + 1;
    for (Index b = 0; b < n_factors_; ++b) {
      sum[b + 1] += wk * block.column(packed++)[i] * slopes[b];
      for (Index a = b + 1; a < n_factors_; ++a) {
        const double v = wk * block.column(packed++)[i];
        sum[a + 1] += v * slopes[b];
        sum[b + 1] += v * slopes[a];
      }
    }
    rows_[static_cast<std::size_t>(asset)] = 1;
  }

  const Design& design_;
  Index n_factors_;
  Design with_errors_;
  Matrix sums_;             // 1 + k x N
  std::vector<char> rows_;  // N, has a complete row
  std::vector<Index> used_;
};

inline LeastSquares pooled_least_squares(const Design& design,
                                         const BetaErrors& errors,
                                         const Moments& m,
                                         int threads) {
  if (design.intercept) require_variation(m);
  LeastSquares fit = solve_moments(m, 0, design.intercept);
  if (!fit.trusted) fit = factor_complete_rows(design, errors, m, threads);
  require_full_rank(fit);
  return fit;
}

class PooledCorrector {
 public:
  PooledCorrector(const Design& design,
                  const BetaErrors& errors,
                  const CorrectedOptions& options)
      : design_(design),
        errors_(errors),
        k_(static_cast<Index>(design.x.size())),
        needed_(std::max(options.min_assets, design.n_terms() + 1)),
        moments_(
            design, errors, panel_moments(with_errors(design, errors), options.threads)) {
    require_enough("too few complete rows", "n_used", moments_.own.n_used[0], needed_);
    fit_ = pooled_least_squares(design, errors, moments_.own, options.threads);
    correction_ = correct(fit_,
                          unpack(moments_.error_sum.data(), errors.n_factors),
                          options.min_reliability);
    centre_ = centre_of(moments_.own, 0, design.intercept);
  }

  PooledCorrected solve(const int* asset, Index n_assets) const {
    PooledCorrected out;
    out.smallest_root = correction_.smallest_root;
    out.kappa = correction_.kappa;
    out.n_used = moments_.own.n_used[0];
    out.estimate = fit_.coef;
    const Vector change = correction_.slope_change();
    out.estimate.tail(k_) += change;
    if (design_.intercept) out.estimate[0] += correction_.constant_change(centre_);
    AssetScores scores(design_, errors_, n_assets);
    scores.add_all(fit_.centre,
                   fit_.level - off_centre().dot(change),
                   out.estimate.tail(k_),
                   correction_.kappa,
                   asset);
    out.n_assets = scores.n_assets();
    out.n_used_by_period = scores.used_by_period();
    require_enough("too few assets", "n_assets", out.n_assets, needed_);
    out.asset_rows = influence(scores.sums());
    return out;
  }

 private:
  // What rounding leaves between the columns' means and the centre of the fit.
  Vector off_centre() const {
    if (!design_.intercept) return Vector::Zero(k_);
    const Moments& m = moments_.own;
    return ((m.shift.col(0) - fit_.centre) + m.offset.col(0)).tail(k_);
  }

  // Whitened first, so that nearly collinear columns cancel where they are small.
  Matrix influence(const Matrix& scores) const {
    const Vector constant = scores.row(0);
    const Matrix centred =
        scores.bottomRows(k_).transpose() - constant * off_centre().transpose();
    const Matrix whitened = centred * correction_.L.transpose();
    Matrix rows(scores.cols(), design_.n_terms());
    rows.rightCols(k_).noalias() = whitened * correction_.map.transpose();
    if (design_.intercept)
      rows.col(0) = constant / moments_.own.weight[0] -
                    whitened * (correction_.map.transpose() * centre_);
    return rows;
  }

  const Design& design_;
  const BetaErrors& errors_;
  Index k_, needed_;
  ErrorMoments moments_;
  LeastSquares fit_;
  Correction correction_;
  Vector centre_;  // of the x; zeros without a constant
};

}  // namespace detail

// asset: 0 .. n_assets - 1, length n_rows.
inline PooledCorrected pooled_corrected(const Design& design,
                                        const BetaErrors& errors,
                                        const int* asset,
                                        Index n_assets,
                                        const CorrectedOptions& options) {
  detail::check_errors(design, errors, options);
  return detail::PooledCorrector(design, errors, options).solve(asset, n_assets);
}

}  // namespace lambdabar
