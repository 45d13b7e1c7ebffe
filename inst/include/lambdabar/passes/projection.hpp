// Least squares of one cross-section, kept as a projection:
//   coefficients = C Q'(F y),  H = (X'WX)^-1 = C C',  F'F = W
//
// project() takes the whitened design F X (n x P; with an intercept its first column is
// F 1). Columns are centred against that first column and scaled to unit norm before a
// column-pivoted QR, so neither units nor a large mean cost digits, and a column without
// spread is told apart from one that others span. Cost O(n P^2).
// A failed projection has rank < P and empty Q and C; nothing throws.
#pragma once

#include "first_pass.hpp"

namespace lambdabar {

enum class Weighting { ols, wls, gls };

namespace detail {

// Exposures are estimates: a spread or a pivot below this share of the column's norm is
// the first pass's own rounding (epsilon x the condition of the factors, some 1e-12 at
// worst in samples worth pricing), not a difference between assets.
inline constexpr double kExposureTolerance = 1e-11;

// Upper triangle U of the QR of Y (n x m, n >= m): Y'Y = U'U without forming it.
struct Triangle {
  Matrix U;            // m x m
  Index spanned = -1;  // first column in the span of the ones before it, or -1
};

inline Triangle upper_triangle(const Matrix& Y) {
  const Vector norm = Y.colwise().norm();
  const Eigen::HouseholderQR<Matrix> qr(Y);
  Triangle out;
  out.U = qr.matrixQR().topRows(Y.cols()).triangularView<Eigen::Upper>();
  for (Index j = 0; j < Y.cols() && out.spanned < 0; ++j)
    if (!(std::abs(out.U(j, j)) > kExposureTolerance * norm(j))) out.spanned = j;
  return out;
}

struct Projection {
  Matrix Q;       // n x P, orthonormal; column 0 along F 1 with an intercept
  Matrix C;       // P x P
  Vector centre;  // means of the other columns, W-weighted; empty without an intercept
  Matrix slopes;  // C without its first row and column, or C
  double constant_norm2 = 0;  // 1'W1
  Index rank = 0;
  Index culprit = -1;  // column without spread, or the last one spanned by earlier
  bool no_variation = false;

  bool usable() const { return Q.size() > 0; }
};

// Last column, from left to right, in the span of the ones before it.
inline Index last_spanned(const Matrix& unit, double tolerance) {
  Matrix basis(unit.rows(), 0);
  Index last = -1;
  for (Index j = 0; j < unit.cols(); ++j) {
    Vector rest = unit.col(j);
    for (int pass = 0; pass < 2; ++pass) rest -= basis * (basis.transpose() * rest);
    if (rest.norm() <= tolerance) {
      last = j;
      continue;
    }
    basis.conservativeResize(Eigen::NoChange, basis.cols() + 1);
    basis.rightCols(1) = rest.normalized();
  }
  return last;
}

inline void centre_columns(Matrix& others, const Vector& constant, Projection& out) {
  out.constant_norm2 = constant.squaredNorm();
  out.centre = others.transpose() * constant / out.constant_norm2;
  others.noalias() -= constant * out.centre.transpose();
  const Vector rest = others.transpose() * constant / out.constant_norm2;
  others.noalias() -= constant * rest.transpose();
  out.centre += rest;
}

inline void fill_slopes(const Eigen::ColPivHouseholderQR<Matrix>& qr,
                        const Vector& scale,
                        Projection& out) {
  const Index size = scale.size();
  const Matrix root = qr.matrixR()
                          .topLeftCorner(size, size)
                          .triangularView<Eigen::Upper>()
                          .solve(Matrix::Identity(size, size));
  out.slopes = scale.cwiseInverse().asDiagonal() * (qr.colsPermutation() * root);
}

inline Projection project(Matrix X, bool intercept) {
  Projection out;
  const Index n = X.rows(), n_terms = X.cols(), first = intercept ? 1 : 0;
  const Index size = n_terms - first;
  const Vector raw = X.rightCols(size).colwise().norm();
  Matrix others = X.rightCols(size);
  if (intercept) centre_columns(others, X.col(0), out);
  const Vector scale = others.colwise().norm();
  for (Index j = 0; j < size; ++j) {
    if (scale(j) > kExposureTolerance * raw(j)) continue;
    out.culprit = j + first;
    out.no_variation = true;
    out.rank = n_terms - 1;
    return out;
  }
  others = others * scale.cwiseInverse().asDiagonal();
  const double tolerance = std::max(
      kExposureTolerance, pivot_tolerance((raw.array() / scale.array()).maxCoeff()));
  Eigen::ColPivHouseholderQR<Matrix> qr(others);
  qr.setThreshold(tolerance);
  out.rank = qr.rank() + first;
  if (out.rank < n_terms) {
    const Index spanned = last_spanned(others, tolerance);
    const Index pivot = qr.colsPermutation().indices()(size - 1);
    out.culprit = (spanned >= 0 ? spanned : pivot) + first;
    return out;
  }
  fill_slopes(qr, scale, out);
  out.Q.resize(n, n_terms);
  out.Q.rightCols(size) = qr.householderQ() * Matrix::Identity(n, size);
  out.C = Matrix::Zero(n_terms, n_terms);
  out.C.bottomRightCorner(size, size) = out.slopes;
  if (intercept) {
    const double norm = std::sqrt(out.constant_norm2);
    out.Q.col(0) = X.col(0) / norm;
    out.C(0, 0) = 1.0 / norm;
    out.C.block(0, 1, 1, size) = -out.centre.transpose() * out.slopes;
  }
  return out;
}

// Largest over smallest singular value of X with columns scaled to unit norm.
inline double scaled_condition(const Projection& projection, const Matrix& X) {
  const Vector norm = X.colwise().norm();
  const Matrix unit = X * norm.cwiseInverse().asDiagonal();
  const Eigen::JacobiSVD<Matrix> svd(projection.Q.transpose() * unit);
  return svd.singularValues()(0) / svd.singularValues()(X.cols() - 1);
}

struct PeriodQuality {
  double r_squared = kNaN;
  Vector std_error;  // P, classical: s2 = e'We / (n - P)
};

// y is whitened like the design; the coefficients themselves are not needed.
inline PeriodQuality period_quality(const Projection& projection,
                                    const Vector& y,
                                    bool intercept) {
  PeriodQuality out;
  const Index n = y.size(), n_terms = projection.C.rows();
  Vector base = y;
  if (intercept) base -= projection.Q.col(0) * projection.Q.col(0).dot(y);
  const double tss = base.squaredNorm();
  const double rss =
      (base - projection.Q * (projection.Q.transpose() * base)).squaredNorm();
  if (tss > 0.0) out.r_squared = 1.0 - rss / tss;
  out.std_error = Vector::Constant(n_terms, kNaN);
  if (n > n_terms)
    out.std_error =
        projection.C.rowwise().norm() * std::sqrt(rss / static_cast<double>(n - n_terms));
  return out;
}

}  // namespace detail
}  // namespace lambdabar
