// Symmetric matrices that should be positive: how far they are from it, their repair by
// clipping eigenvalues, and a generalised inverse with a rank.
//
// Eigenvalues of a covariance depend on the units of its columns, so all three work on
// the matrix scaled by given standard deviations, D^-1 S D^-1, and scale back. A matrix
// that is already positive up to rounding comes back from the repair with its bits
// unchanged. Cost: one symmetric eigen-decomposition, O(P^3). Not handled: non-finite
// entries.
#pragma once

#include "../base.hpp"

#include <algorithm>
#include <cmath>

namespace lambdabar {

struct PositiveRepair {
  Matrix value;               // P x P
  double min_eigen_relative;  // of the scaled input: smallest over largest modulus
  Index n_clipped;
};

struct GeneralisedInverse {
  Matrix value;  // P x P
  Index rank;
  double min_eigen_relative;  // of the scaled input
  Matrix null_space;          // P x (P - rank), orthonormal in scaled units
  Vector scale;               // P, the scaling used
};

// An eigenvalue of the unit-diagonal matrix below this share of the largest counts as
// zero in a generalised inverse: about the square root of double precision, since a
// covariance of rank r holds its zero eigenvalues only up to rounding in its largest
// ones.
inline constexpr double kInverseTolerance = 1e-9;

// Eigenvalues this little below zero, relative to the largest, are rounding: sums over
// clusters of fewer than P groups have exact zeros there.
inline constexpr double kNegativeTolerance = 1e-12;

namespace detail {

inline Vector usable_scale(const Vector& scale) {
  return (scale.array() > 0.0).select(scale, Vector::Ones(scale.size()));
}

inline Matrix scaled_by_inverse(const Matrix& S, const Vector& scale) {
  const Vector inverse = scale.cwiseInverse();
  return inverse.asDiagonal() * S * inverse.asDiagonal();
}

inline double smallest_over_largest(const Vector& eigenvalues) {
  const double largest = eigenvalues.cwiseAbs().maxCoeff();
  return largest > 0.0 ? eigenvalues.minCoeff() / largest : 0.0;
}

}  // namespace detail

// Smallest eigenvalue over the largest modulus of S scaled by `scale` (zeros read as 1).
inline double min_eigen_relative(const Matrix& S, const Vector& scale) {
  if (S.rows() == 0) return kNaN;
  const Matrix scaled = detail::scaled_by_inverse(S, detail::usable_scale(scale));
  const Eigen::SelfAdjointEigenSolver<Matrix> eigen(scaled, Eigen::EigenvaluesOnly);
  return detail::smallest_over_largest(eigen.eigenvalues());
}

// S with negative eigenvalues of its scaled form set to zero.
inline PositiveRepair make_positive(const Matrix& S, const Vector& scale) {
  if (S.rows() == 0) return {S, kNaN, 0};
  const Vector d = detail::usable_scale(scale);
  const Eigen::SelfAdjointEigenSolver<Matrix> eigen(detail::scaled_by_inverse(S, d));
  const Vector& values = eigen.eigenvalues();
  const double relative = detail::smallest_over_largest(values);
  const double floor = -kNegativeTolerance * values.cwiseAbs().maxCoeff();
  const Index n_clipped = (values.array() < floor).count();
  if (n_clipped == 0) return {S, relative, 0};
  const Matrix root = d.asDiagonal() * eigen.eigenvectors() *
                      values.cwiseMax(0.0).cwiseSqrt().asDiagonal();
  Matrix repaired = Matrix::Zero(S.rows(), S.cols());
  repaired.selfadjointView<Eigen::Lower>().rankUpdate(root);
  repaired.triangularView<Eigen::StrictlyUpper>() = repaired.transpose();
  return {repaired, relative, n_clipped};
}

// Inverse on the span of the eigenvectors whose eigenvalue exceeds
// tolerance x the largest, in units where the diagonal is one. Eigenvalues at or below
// it, negative ones too, are left out and reduce the rank.
inline GeneralisedInverse generalised_inverse(const Matrix& S,
                                              double tolerance = kInverseTolerance) {
  const Index size = S.rows();
  const Vector d = detail::usable_scale(S.diagonal().cwiseMax(0.0).cwiseSqrt());
  if (size == 0) return {S, 0, kNaN, Matrix(0, 0), d};
  const Eigen::SelfAdjointEigenSolver<Matrix> eigen(detail::scaled_by_inverse(S, d));
  const Vector& values = eigen.eigenvalues();
  const double floor = tolerance * values.cwiseAbs().maxCoeff();
  const Index n_dropped = (values.array() <= floor).count();
  const Index rank = size - n_dropped;
  // Eigenvalues come in increasing order: the kept ones are the last.
  const Matrix root = d.cwiseInverse().asDiagonal() *
                      eigen.eigenvectors().rightCols(rank) *
                      values.tail(rank).cwiseSqrt().cwiseInverse().asDiagonal();
  return {root * root.transpose(),
          rank,
          detail::smallest_over_largest(values),
          eigen.eigenvectors().leftCols(n_dropped),
          d};
}

}  // namespace lambdabar
