// Weighted least squares of y on P terms, from moments or from rows.
//
//   b = (X'WX)^-1 X'Wy,   rss = sum w (y - X b)^2,   bread = (X'WX)^-1
//
// Two routes give the same struct. From moments: centred cross-products scaled to unit
// diagonal, Cholesky. Normal equations lose twice the digits an orthogonal factorisation
// loses, so this route judges itself and says `trusted = false` when more than about
// three digits are gone; the caller then takes the second route. From rows: Householder
// reflections in extended precision, a block of rows at a time, leave one triangle of
// (P + 1)^2 numbers, so nothing of the size of the data is kept. Extended precision does
// the work of iterative refinement and needs no second pass; where `long double` is no
// wider than `double` the digits are those of a plain QR.
//
// Rank, from left to right: a term is aliased when its distance from the span of the kept
// terms before it is no more than what rounding the data themselves could have made,
//
//   |x_j - sum_l g_l x_l|  <=  C eps ( |x_j| + sum_l |g_l| |x_l| ),
//
// norms of the raw columns on the right, distance on the left after centring. A mean of a
// million spreads thus widens the tolerance a million times, which finds x3 = x1 + x2
// there, while a polynomial of degree ten stays at full rank: its cross-products look
// singular but its columns are known to far more digits than their distance needs.
//
// Shapes: k = number of x, P = k + 1 with a constant (which comes first), r = rank.
// Cost: k^3 / 3 from moments, 2 n P^2 from rows. Not handled: P = 0.
#pragma once

#include "moments.hpp"

#include <cfloat>

namespace lambdabar {

struct LeastSquares {
  bool trusted = false;
  Index rank = 0;
  Vector coef;                // P, NaN where aliased
  std::vector<bool> aliased;  // P
  // The fit around a centre, which keeps digits that a large mean would take from
  // residuals: e = (y - centre_0) - level - sum_j (x_j - centre_j) b_j.
  Vector centre;  // 1 + k; zeros without a constant
  double level = 0;
  // Rows W v, v = kept terms around the centre, have unit weighted cross-products.
  Matrix whiten;  // r x r, lower triangular
  Matrix bread;   // r x r, for the kept terms as the user wrote them
  double rss = kNaN;
  double tss = kNaN;  // around the mean with a constant, around zero without

  // The last term in the span of earlier ones, -1 when there is none.
  Index last_aliased() const {
    Index last = static_cast<Index>(aliased.size()) - 1;
    while (last >= 0 && !aliased[static_cast<std::size_t>(last)]) --last;
    return last;
  }
};

namespace detail {

// 1 / VIF and shares of this size cost three digits.
inline constexpr double kTrust = 1e-3;
// A constant that is what large parts leave over loses digits too, without harm to the
// slopes. Rows are read again for it only where there are few, as in certified sets; in
// large samples its standard error is many orders above that rounding.
inline constexpr Index kExactConstantRows = 1000;
// Rounding of stored data is half an epsilon an operation; sixteen halvings of slack
// cover columns that were themselves computed in a few operations.
inline constexpr double kRankTolerance = 16 * DBL_EPSILON;

using Extended = long double;
using ExtendedMatrix = Eigen::Matrix<Extended, Eigen::Dynamic, Eigen::Dynamic>;
using ExtendedVector = Eigen::Matrix<Extended, Eigen::Dynamic, 1>;

// False for a column whose centred norm is no more than the rounding of its values. An
// overflowing square is variation.
inline bool varies_in(const Moments& m, Index variable, Index period) {
  const double square = m.cross(Moments::slot(variable, variable), period);
  if (!std::isfinite(square)) return true;
  const double mean = m.mean(variable, period);
  const double noise = kRankTolerance * mean;
  return square > m.weight[period] * noise * noise;
}

// (whiten L)'(whiten L), L taking the centre out of the constant's column.
template <class M, class V>
M bread_of(M whiten, bool intercept, const V& centre) {
  const Index r = whiten.rows();
  if (intercept && r > 1) whiten.col(0) -= whiten.rightCols(r - 1) * centre;
  return whiten.transpose() * whiten;
}

struct NormalEquations {
  Vector mean;  // 1 + k
  Matrix xx;    // k x k
  Vector xy;    // k
  double yy = 0;
};

inline NormalEquations normal_equations(const Moments& m, Index period, bool intercept) {
  const Index k = m.n_variables - 1;
  NormalEquations e;
  e.mean = m.shift.col(period) + m.offset.col(period);
  e.xx.resize(k, k);
  e.xy.resize(k);
  const double around_zero = intercept ? 0.0 : m.weight[period];
  const auto cross = [&](Index i, Index j) {
    return m.cross(Moments::slot(i, j), period) + around_zero * e.mean[i] * e.mean[j];
  };
  e.yy = cross(0, 0);
  for (Index i = 0; i < k; ++i) {
    e.xy[i] = cross(i + 1, 0);
    for (Index j = 0; j <= i; ++j) e.xx(i, j) = e.xx(j, i) = cross(i + 1, j + 1);
  }
  return e;
}

// Places whitened slopes beside the constant's 1 / sqrt(W).
inline Matrix whiten_with_constant(const Matrix& slopes,
                                   const Vector& off_centre,
                                   double weight) {
  const Index k = slopes.rows();
  Matrix whiten = Matrix::Zero(k + 1, k + 1);
  whiten(0, 0) = 1 / std::sqrt(weight);
  whiten.bottomRightCorner(k, k) = slopes;
  whiten.col(0).tail(k) = -(slopes * off_centre);
  return whiten;
}

inline bool keeps_digits(const LeastSquares& fit,
                         const Vector& mean,
                         bool intercept,
                         Index n_used) {
  if (!(fit.rss >= kTrust * fit.tss)) return false;
  if (!intercept || n_used > kExactConstantRows) return true;
  const Index k = mean.size() - 1;
  const double parts =
      std::abs(mean[0]) + fit.coef.tail(k).cwiseProduct(mean.tail(k)).cwiseAbs().sum();
  return std::abs(fit.coef[0]) >= kTrust * parts;
}

inline LeastSquares solve_moments(const Moments& m, Index period, bool intercept) {
  LeastSquares fit;
  const Index k = m.n_variables - 1, n_terms = k + (intercept ? 1 : 0);
  const NormalEquations e = normal_equations(m, period, intercept);
  const Vector scale = e.xx.diagonal().cwiseSqrt().cwiseInverse();
  if (!scale.allFinite()) return fit;
  const Eigen::LLT<Matrix> cholesky(scale.asDiagonal() * e.xx * scale.asDiagonal());
  if (cholesky.info() != Eigen::Success) return fit;
  Matrix inverse = Matrix::Identity(k, k);
  cholesky.matrixL().solveInPlace(inverse);
  // Squared columns of the inverse factor sum to the variance inflation factors.
  if (!(inverse.colwise().squaredNorm().array() <= 1 / kTrust).all()) return fit;
  const Matrix slopes = inverse * scale.asDiagonal();
  const Vector projected = slopes * e.xy;
  const Vector b = slopes.transpose() * projected;
  fit.rank = n_terms;
  fit.aliased.assign(static_cast<std::size_t>(n_terms), false);
  fit.tss = e.yy;
  fit.rss = std::max(0.0, e.yy - projected.squaredNorm());
  fit.coef.resize(n_terms);
  fit.coef.tail(k) = b;
  if (!intercept) {
    fit.centre.setZero(k + 1);
    fit.whiten = slopes;
  } else {
    fit.centre = e.mean;
    const Vector off = (m.shift.col(period) - e.mean) + m.offset.col(period);
    fit.level = off[0] - off.tail(k).dot(b);
    fit.coef[0] = e.mean[0] + fit.level - e.mean.tail(k).dot(b);
    fit.whiten = whiten_with_constant(slopes, off.tail(k), m.weight[period]);
  }
  fit.bread = bread_of(fit.whiten, intercept, e.mean.tail(k));
  const Index n_used = m.n_used[static_cast<std::size_t>(period)];
  fit.trusted = keeps_digits(fit, e.mean, intercept, n_used) && fit.coef.allFinite();
  return fit;
}

// The triangle of the rows seen so far, columns (1), x - centre, y - centre, each row
// times the root of its weight.
class RowFactor {
 public:
  RowFactor(const Design& design, const Vector& centre)
      : design_(&design),
        centre_(centre),
        n_terms_(design.n_terms()),
        stack_(ExtendedMatrix::Zero(n_terms_ + 1 + capacity_, n_terms_ + 1)),
        raw_square_(ExtendedVector::Zero(n_terms_)) {
    values_.values.resize(design.x.size() + 1);
  }

  void add(Index row) {
    if (!read_row(*design_, row, values_)) return;
    const Extended root = std::sqrt(static_cast<Extended>(values_.weight));
    const Index k = static_cast<Index>(design_->x.size()), first = n_terms_ - k;
    const Index at = n_terms_ + 1 + pending_;
    if (design_->intercept) stack_(at, 0) = root;
    for (Index j = 0; j <= k; ++j) {
      const Extended value = values_.values[static_cast<std::size_t>(j)];
      const Index column = j == 0 ? n_terms_ : first + j - 1;
      stack_(at, column) = root * (value - centre_[j]);
      if (j > 0) raw_square_[column] += root * value * (root * value);
    }
    if (++pending_ == capacity_) absorb();
  }

  // Takes another factor's rows; both must share design and centre.
  void join(RowFactor& other) {
    other.absorb();
    absorb();
    stack_.middleRows(n_terms_ + 1, n_terms_ + 1) = other.stack_.topRows(n_terms_ + 1);
    pending_ = n_terms_ + 1;
    raw_square_ += other.raw_square_;
    absorb();
  }

  LeastSquares solve();

 private:
  // At least as many rows as a triangle, which join() stores here.
  static constexpr Index kMinPending = 128;

  void absorb() {
    if (pending_ == 0) return;
    const Index p = n_terms_ + 1;
    const Eigen::HouseholderQR<ExtendedMatrix> qr(stack_.topRows(p + pending_));
    stack_.setZero();
    stack_.topRows(p).triangularView<Eigen::Upper>() =
        qr.matrixQR().topRows(p).triangularView<Eigen::Upper>();
    pending_ = 0;
  }

  const Design* design_;
  Vector centre_;
  Index n_terms_;
  Index capacity_ = std::max(kMinPending, n_terms_ + 1);
  ExtendedMatrix stack_;
  ExtendedVector raw_square_;  // P, of the columns as the user wrote them
  RowValues values_;
  Index pending_ = 0;
};

// Reflects column `j`, from row `r` down, onto one axis, and all later columns with it.
inline void reflect(ExtendedMatrix& triangle, Index j, Index r) {
  const Index below = triangle.rows() - r, right = triangle.cols() - j - 1;
  ExtendedVector essential(below - 1), space(right + 1);
  Extended tau = 0, beta = 0;
  triangle.col(j).tail(below).makeHouseholder(essential, tau, beta);
  triangle(r, j) = beta;
  triangle.col(j).tail(below - 1).setZero();
  triangle.bottomRightCorner(below, right)
      .applyHouseholderOnTheLeft(essential, tau, space.data());
}

// Columns of `triangle` kept from left to right; the triangle is re-reflected over them.
inline std::vector<Index> keep_independent(ExtendedMatrix& triangle,
                                           const ExtendedVector& raw_norm) {
  const Index n_terms = raw_norm.size();
  std::vector<Index> kept;
  ExtendedMatrix factor(n_terms, n_terms);
  for (Index j = 0; j < n_terms; ++j) {
    const Index r = static_cast<Index>(kept.size());
    const ExtendedVector g =
        factor.topLeftCorner(r, r).triangularView<Eigen::Upper>().solve(
            triangle.col(j).head(r));
    Extended noise = raw_norm[j];
    for (Index l = 0; l < r; ++l) {
      noise += std::abs(g[l]) * raw_norm[kept[static_cast<std::size_t>(l)]];
    }
    const Extended distance = triangle.col(j).tail(triangle.rows() - r).norm();
    if (!(distance > kRankTolerance * noise)) continue;
    reflect(triangle, j, r);
    factor.col(r).head(r + 1) = triangle.col(j).head(r + 1);
    kept.push_back(j);
  }
  return kept;
}

inline LeastSquares RowFactor::solve() {
  absorb();
  const bool intercept = design_->intercept;
  ExtendedMatrix triangle = stack_.topRows(n_terms_ + 1);
  ExtendedVector raw_norm = raw_square_.cwiseSqrt();
  // The constant is exact, so it adds no rounding: its norm stays zero.
  const std::vector<Index> kept = keep_independent(triangle, raw_norm);
  const Index r = static_cast<Index>(kept.size()), first = intercept ? 1 : 0;
  LeastSquares fit;
  fit.trusted = true;
  fit.rank = r;
  fit.centre = centre_;
  fit.coef = Vector::Constant(n_terms_, kNaN);
  fit.aliased.assign(static_cast<std::size_t>(n_terms_), true);
  ExtendedMatrix upper(r, r);
  ExtendedVector centre(r);
  for (Index l = 0; l < r; ++l) {
    const Index term = kept[static_cast<std::size_t>(l)];
    upper.col(l) = triangle.col(term).head(r);
    centre[l] = term < first ? Extended(0) : Extended(centre_[term + 1 - first]);
    fit.aliased[static_cast<std::size_t>(term)] = false;
  }
  const ExtendedVector y = triangle.col(n_terms_);
  fit.tss = static_cast<double>(y.tail(y.size() - first).squaredNorm());
  fit.rss = static_cast<double>(y.tail(y.size() - r).squaredNorm());
  const auto solver = upper.triangularView<Eigen::Upper>();
  ExtendedVector b = solver.solve(y.head(r));
  ExtendedMatrix whiten = ExtendedMatrix::Identity(r, r);
  upper.transpose().triangularView<Eigen::Lower>().solveInPlace(whiten);
  fit.whiten = whiten.cast<double>();
  if (intercept) {
    fit.level = static_cast<double>(b[0]);
    b[0] += centre_[0] - centre.tail(r - 1).dot(b.tail(r - 1));
    fit.bread = bread_of(whiten, true, centre.tail(r - 1)).cast<double>();
  } else {
    fit.bread = bread_of(whiten, false, centre).cast<double>();
  }
  for (Index l = 0; l < r; ++l) {
    fit.coef[kept[static_cast<std::size_t>(l)]] = static_cast<double>(b[l]);
  }
  return fit;
}

// Where rows of a period are centred before they are factored: any nearby number will do.
inline Vector factor_centre(const Moments& m, Index period, bool intercept) {
  Vector centre = Vector::Zero(m.n_variables);
  if (!intercept) return centre;
  for (Index j = 0; j < m.n_variables; ++j) {
    const double mean = m.mean(j, period);
    if (std::isfinite(mean)) centre[j] = mean;
  }
  return centre;
}

}  // namespace detail
}  // namespace lambdabar
