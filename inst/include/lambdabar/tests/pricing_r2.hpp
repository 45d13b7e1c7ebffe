// The cross-sectional R2 of a two-pass estimate on a complete panel (Kan, Robotti and
// Shanken 2013, Journal of Finance 68, 2617-2649). W = I or V^-1, the weights of the
// second pass, e0 = mean R less its W-mean (less nothing without an intercept), a =
// pricing errors:
//   Q = a'W a,  Q0 = e0'W e0,  R2 = 1 - Q / Q0 = gamma_f' C gamma_f / Q0
//   rows   u = a'W r_t, v = e0'W r_t, y = 1 - w_t;  OLS (2 (1 - R2) v - 2 u y) / (Q0 T),
//          GLS (u^2 - 2 u y + (1 - R2)(2 v - v^2)) / (Q0 T); valid for 0 < R2 < 1
//   R2 = 1: T Q against sum xi_i chi2_1, xi: eigenvalues of P'F S F'P, F'F = W, P
//     orthonormal
//           with P'F X = 0, S the long-run covariance of e_t (1 - w_t)
//   R2 = 0: T gamma_f'C gamma_f against sum xi_i chi2_1, xi: eigenvalues of C^1/2 Vg
//     C^1/2,
//           Vg the long-run covariance of the misspecified rows of gamma_f at w_t = 0
// All moments have divisor T. Cost O(T N^2 + N^3).
//
// Two models on the same assets: b = Vf^-1 gamma_f are the prices of covariance risk,
// rows Vf^-1 (h_t - d_t (d_t'b) / T + gamma_f / T). Factors that only one model has add
// nothing to its R2 exactly when their b is zero.
#pragma once

#include "../passes/two_pass.hpp"
#include "alpha.hpp"

namespace lambdabar {

struct WeightedForm {
  double statistic = kNaN;
  Vector weights;  // of independent chi2_1
};

struct PricingR2 {
  double r2 = kNaN;
  double std_error = kNaN;
  double Q = kNaN, Q0 = kNaN;
  Vector rows;  // T, summing
  WeightedForm one, zero;
};

namespace detail {

inline Vector positive_eigenvalues(const Matrix& S) {
  const Eigen::SelfAdjointEigenSolver<Matrix> eigen(S, Eigen::EigenvaluesOnly);
  return eigen.eigenvalues().reverse().cwiseMax(0.0);
}

inline double series_variance(const Vector& rows,
                              const std::vector<Index>& slot,
                              const SeriesOptions& series) {
  return sum_series_by(rows, slot, Matrix(), Vector::Ones(1), series).S(0, 0);
}

}  // namespace detail

inline PricingR2 pricing_r2(const TwoPassData& data,
                            const TwoPass& fit,
                            const TwoPassOptions& options,
                            const SeriesOptions& series,
                            const std::vector<Index>& slot) {
  detail::require_balanced(fit);
  const Index N = fit.X.rows(), T = fit.n_periods(), P = fit.n_terms();
  const double n = static_cast<double>(T);
  const Index first = fit.first_factor(), K = fit.n_factors;
  const detail::Whitening whitening = detail::make_whitening(data, options, fit.first);
  const Matrix FX = whitening.apply(fit.X);
  const Vector F_one = whitening.apply(Matrix::Ones(N, 1));
  auto take_mean = [&](const Matrix& M) -> Matrix {
    return fit.intercept
               ? Matrix(M - F_one * (F_one.transpose() * M) / F_one.squaredNorm())
               : M;
  };
  const Vector Fe0 = take_mean(whitening.apply(fit.mean_return));
  const Vector Fa = whitening.apply(fit.alpha);
  const Matrix FB = take_mean(FX.rightCols(K));

  PricingR2 out;
  out.Q = Fa.squaredNorm();
  out.Q0 = Fe0.squaredNorm();
  out.r2 = 1.0 - out.Q / out.Q0;

  auto centred = [&](const Vector& weights) {
    Vector x = data.returns * weights;
    x.array() -= x.mean();
    return x;
  };
  const Vector u = centred(whitening.apply_transposed(Fa));
  const Vector v = centred(whitening.apply_transposed(Fe0));
  const Vector y = 1.0 - fit.w.array();
  const double left = 1.0 - out.r2;
  if (fit.weighting == Weighting::gls)
    out.rows = u.array().square() - 2.0 * u.array() * y.array() +
               left * (2.0 * v.array() - v.array().square());
  else
    out.rows = 2.0 * left * v.array() - 2.0 * u.array() * y.array();
  out.rows /= out.Q0 * n;
  out.std_error = std::sqrt(detail::series_variance(out.rows, slot, series));

  const Vector gamma = fit.premia.segment(first, K);
  const Matrix C = FB.transpose() * FB;
  const Matrix rows_zero = (fit.rows_misspecified + fit.w.asDiagonal() * fit.loading_rows)
                               .middleCols(first, K);
  const Matrix Vg =
      detail::sum_series_by(rows_zero, slot, Matrix(), Vector::Ones(K), series).S;
  const Eigen::HouseholderQR<Matrix> qr(FB);
  const Matrix R = qr.matrixQR().topRows(K).triangularView<Eigen::Upper>();
  out.zero.statistic = n * gamma.dot(C * gamma);
  out.zero.weights = detail::positive_eigenvalues(n * (R * Vg * R.transpose()));

  if (N > P) {
    Matrix residuals = data.returns.rowwise() - fit.mean_return.transpose();
    residuals -= fit.factor_deviations * fit.first.beta.transpose();
    const Matrix complement = detail::complement(FX);
    const Matrix rows = (y / n).asDiagonal() *
                        (whitening.apply(residuals.transpose()).transpose() * complement);
    const Matrix S = detail::sum_alike(rows, complement, slot, series).S;
    out.one.statistic = n * out.Q;
    out.one.weights = detail::positive_eigenvalues(n * S);
  }
  return out;
}

struct CovariancePrices {
  Vector b;     // K, Vf^-1 gamma_f
  Matrix rows;  // T x K, summing; valid when the model does not price the assets
};

inline CovariancePrices covariance_prices(const TwoPass& fit) {
  const Index first = fit.first_factor(), K = fit.n_factors;
  const double n = static_cast<double>(fit.n_periods());
  const Vector gamma = fit.premia.segment(first, K);
  const Eigen::LDLT<Matrix> solver(fit.Vf);
  CovariancePrices out;
  out.b = solver.solve(gamma);
  const Vector moved = fit.factor_deviations * out.b;
  Matrix rows = fit.rows_misspecified.middleCols(first, K);
  rows -= moved.asDiagonal() * fit.factor_deviations / n;
  rows.rowwise() += gamma.transpose() / n;
  out.rows = solver.solve(rows.transpose()).transpose();
  return out;
}

// Wald statistic that some of the entries are zero, with the joint rows of two models.
inline detail::QuadraticForm joint_zero(const Vector& value,
                                        const Matrix& rows,
                                        const std::vector<Index>& slot,
                                        const SeriesOptions& series) {
  const Matrix S =
      detail::sum_series_by(rows, slot, Matrix(), Vector::Ones(rows.cols()), series).S;
  return detail::quadratic_form(value, S);
}

}  // namespace lambdabar
