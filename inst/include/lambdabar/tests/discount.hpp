// The stochastic discount factor of a linear factor model at the smallest
// Hansen-Jagannathan distance (Hansen and Jagannathan 1997, Journal of Finance 52,
// 557-590):
//   excess returns  m_t = 1 - b'(f_t - mean f):  C = Cov(R, f), U = Var(R), target mean R
//                   (Kan and Robotti 2008, Journal of Empirical Finance 15, 816-838)
//   gross returns   m_t = b'(1, f_t):  C = mean R (1, f'), U = mean R R', target 1
//   b = (C'U^-1 C)^-1 C'U^-1 target,  e = target - C b,  delta^2 = e'U^-1 e
// Rows of b (Gospodinov, Kan and Robotti 2014, Review of Financial Studies 27,
// 2139-2170), with H = (C'U^-1 C)^-1, p_t = C'U^-1 R_t, u_t = e'U^-1 R_t, x_t = f_t or
// (1, f_t); R and x less their means for excess returns:
//   excess H (p_t (1 - x_t'b) - mean + (x_t - p_t) u_t) / T
//   gross  H (-p_t x_t'b - mean + (x_t - p_t) u_t) / T
// The term in u_t is what a wrong model adds. Rows of delta^2 (Hansen, Heaton and Luttmer
// 1995, Review of Financial Studies 8, 237-274), for delta > 0:
//   excess (2 u_t (1 - x_t'b) - u_t^2 + delta^2) / T
//   gross  (-2 (u_t x_t'b - mean) - u_t^2 + delta^2) / T
// T delta^2 under delta = 0: sum xi_i chi2_1 (Jagannathan and Wang 1996, Journal of
// Finance 51, 3-53), xi: eigenvalues of P'U^-1/2 S U^-1/2 P, P orthonormal with P'U^-1/2
// C = 0, S the long-run covariance of R_t m_t less its mean. Cost O(T N^2 + N^3); T > N.
#pragma once

#include "pricing_r2.hpp"

namespace lambdabar {

struct DiscountFactor {
  Vector b;
  Vector premium;           // Cov(f) b, excess returns only
  Matrix rows, usual_rows;  // T x size of b, summing: any model; only a right one
  double distance2 = kNaN;
  Vector distance_rows;  // T, of delta^2
  WeightedForm
      right;  // of delta = 0; empty when there are as many assets as coefficients
};

inline DiscountFactor discount_factor(const Eigen::Ref<const Matrix>& returns,
                                      const Eigen::Ref<const Matrix>& factors,
                                      bool gross,
                                      const SeriesOptions& series,
                                      const std::vector<Index>& slot) {
  const Index T = returns.rows(), N = returns.cols(), K = factors.cols();
  const double n = static_cast<double>(T);
  Matrix R = returns, X(T, gross ? K + 1 : K);
  Vector target;
  if (gross) {
    X << Vector::Ones(T), factors;
    target = Vector::Ones(N);
  } else {
    target = R.colwise().mean();
    R.rowwise() -= target.transpose();
    X = factors.rowwise() - factors.colwise().mean();
  }
  if (N < X.cols())
    throw Error("too_few",
                "Too few assets for the coefficients of the discount factor.",
                {{"n_assets", static_cast<double>(N)},
                 {"n_terms", static_cast<double>(X.cols())}});
  if (gross ? T < N : T - 1 < N)
    throw Error("too_few",
                "The distance needs more periods than assets.",
                {{"n_periods", n}, {"n_assets", static_cast<double>(N)}});
  const detail::Triangle triangle = detail::upper_triangle(R);
  if (triangle.spanned >= 0)
    throw Error("rank",
                "The second moments of the returns are singular.",
                {{"asset", static_cast<double>(triangle.spanned + 1)}});
  // F = sqrt(T) U'^-1, F'F = U^-1.
  const auto lower = triangle.U.transpose().triangularView<Eigen::Lower>();
  const Matrix FR = std::sqrt(n) * lower.solve(R.transpose());  // N x T
  const Matrix FC = FR * X / n;
  const Vector Ft = std::sqrt(n) * lower.solve(target);
  const detail::Projection projection = detail::project(FC, false);
  if (!projection.usable())
    throw Error("rank",
                "The factors' covariances with the returns are collinear.",
                {{"factor", static_cast<double>(projection.culprit + (gross ? 0 : 1))}});
  DiscountFactor out;
  out.b = projection.C * (projection.Q.transpose() * Ft);
  const Matrix H = projection.C * projection.C.transpose();
  const Vector Fe = Ft - FC * out.b;
  out.distance2 = Fe.squaredNorm();

  const Matrix p = FR.transpose() * FC;
  const Vector u = FR.transpose() * Fe;
  const Vector xb = X * out.b;
  if (!gross) out.premium = X.transpose() * xb / n;
  const Vector weight = gross ? Vector(-xb) : Vector(1.0 - xb.array());
  Matrix rows = weight.asDiagonal() * p;
  rows.rowwise() -= rows.colwise().mean().eval();
  out.usual_rows = rows * H / n;
  out.rows = (rows + u.asDiagonal() * (X - p)) * H / n;
  Vector first = weight.cwiseProduct(u);
  first.array() -= first.mean();
  out.distance_rows = (2.0 * first.array() - u.array().square() + out.distance2) / n;

  if (N > X.cols()) {
    const Matrix complement = detail::complement(FC);
    Matrix tested = weight.asDiagonal() * (FR.transpose() * complement);
    tested.rowwise() -= tested.colwise().mean().eval();
    tested /= n;
    const Matrix S = detail::sum_alike(tested, complement, slot, series).S;
    out.right.statistic = n * out.distance2;
    out.right.weights = detail::positive_eigenvalues(n * S);
  }
  return out;
}

}  // namespace lambdabar
