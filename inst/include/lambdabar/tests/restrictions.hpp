// Wald test of L theta = r:
//   statistic = g' (L V L')^- g,  g = L theta - r,  df = rank of L V L'
//
// V: covariance of theta (P x P), L: q x P, r: q. The generalised inverse drops
// eigenvalues of the unit-diagonal L V L' at or below `tolerance` times the largest
// (positive.hpp), so a singular covariance (fewer clusters than restrictions, repeated
// restrictions) gives a test on its rank, never one on rounding. `outside` is the share
// of g, in units of its standard errors, that lies where L V L' has no variance: a
// restriction broken there is broken for certain, whatever the statistic. The reference
// distribution (chi-square, or F with statistic / df) is the caller's. Cost O(q^3).
#pragma once

#include "../errors/positive.hpp"

namespace lambdabar {

struct WaldTest {
  double statistic;
  Index df;
  double min_eigen_relative;  // of the unit-diagonal L V L'; negative: V is not positive
  double outside;             // 0 .. 1
};

inline WaldTest wald_test(const Vector& theta,
                          const Matrix& V,
                          const Matrix& L,
                          const Vector& r,
                          double tolerance = kInverseTolerance) {
  if (L.rows() == 0 || L.cols() != theta.size() || V.rows() != theta.size() ||
      V.cols() != theta.size() || r.size() != L.rows())
    throw Error("input",
                "Shapes of the estimate, covariance and restrictions differ.",
                {{"n_terms", static_cast<double>(theta.size())},
                 {"n_restrictions", static_cast<double>(L.rows())}});
  const Vector gap = L * theta - r;
  const Matrix covariance = L * V * L.transpose();
  const GeneralisedInverse inverse =
      generalised_inverse(0.5 * (covariance + covariance.transpose()), tolerance);
  const Vector in_units = gap.cwiseQuotient(inverse.scale);
  const double length = in_units.norm();
  const double outside =
      length > 0.0 ? (inverse.null_space.transpose() * in_units).norm() / length : 0.0;
  const double statistic = inverse.rank > 0 ? gap.dot(inverse.value * gap) : kNaN;
  return {statistic, inverse.rank, inverse.min_eigen_relative, outside};
}

}  // namespace lambdabar
