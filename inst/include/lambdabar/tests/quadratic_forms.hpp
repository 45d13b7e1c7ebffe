// z' S^-1 z for a covariance S that may be singular or not positive: a value, or the
// reason why there is none. Refusals are outcomes, not exceptions.
#pragma once

#include "../errors/positive.hpp"
#include "../passes/projection.hpp"

namespace lambdabar {

enum class Refusal {
  none = 0,
  just_identified = 1,  // as many premia as assets: no pricing error to test
  too_few_periods = 2,  // no degree of freedom left in the denominator or the covariance
  singular = 3,         // the covariance of the tested errors is singular
  not_positive = 4,     // a truncated kernel gave a covariance that is not positive
  no_convergence = 5    // an iterated estimate did not settle
};

namespace detail {

// A squared pivot of the unit-diagonal matrix below this is a variance that the other
// columns explain: the form has lost all digits by then.
inline constexpr double kCovariancePivot = 1e-13;

struct QuadraticForm {
  double value = kNaN;
  Refusal refusal = Refusal::none;
};

// Through the Cholesky factor of the unit-diagonal form of a symmetric S.
inline QuadraticForm quadratic_form(const Vector& z, const Matrix& S) {
  if (!(S.diagonal().array() > 0.0).all()) {
    const bool negative = (S.diagonal().array() < 0.0).any();
    return {kNaN, negative ? Refusal::not_positive : Refusal::singular};
  }
  const Vector scale = S.diagonal().cwiseSqrt();
  const Matrix unit = scaled_by_inverse(S, scale);
  const Eigen::LLT<Matrix> cholesky(unit);
  if (cholesky.info() != Eigen::Success ||
      cholesky.matrixLLT().diagonal().cwiseAbs2().minCoeff() < kCovariancePivot) {
    const Eigen::SelfAdjointEigenSolver<Matrix> eigen(unit, Eigen::EigenvaluesOnly);
    const bool negative = smallest_over_largest(eigen.eigenvalues()) < -kCovariancePivot;
    return {kNaN, negative ? Refusal::not_positive : Refusal::singular};
  }
  const Vector root = cholesky.matrixL().solve(z.cwiseQuotient(scale));
  return {root.squaredNorm(), Refusal::none};
}

// S = Y'Y, through the QR of Y: S is never formed.
inline QuadraticForm quadratic_form_of_rows(const Vector& z, const Matrix& Y) {
  if (Y.rows() < Y.cols()) return {kNaN, Refusal::too_few_periods};
  const Triangle triangle = upper_triangle(Y);
  if (triangle.spanned >= 0) return {kNaN, Refusal::singular};
  const Vector root = triangle.U.transpose().triangularView<Eigen::Lower>().solve(z);
  return {root.squaredNorm(), Refusal::none};
}

}  // namespace detail
}  // namespace lambdabar
