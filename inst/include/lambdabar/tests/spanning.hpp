// Do K benchmark returns span N test assets? R2 = a + B R1 + e; H0: a = 0 and B 1 = 1
// (Huberman and Kandel 1987, Journal of Finance 42, 873-888). With S residual
// cross-products of the free, the a = 0, and the restricted fit (R2 - R1_K on R1_k -
// R1_K, no constant), U = |S_u| / |S_r|:
//   joint   N >= 2: (U^-1/2 - 1)(T - K - N) / N ~ F(2 N, 2 (T - K - N))
//           N = 1:  (U^-1 - 1)(T - K - 1) / 2 ~ F(2, T - K - 1)
//   first   (|S_a| / |S_u| - 1)(T - K - N) / N ~ F(N, T - K - N)            a = 0
//   second  (|S_r| / |S_a| - 1)(T - K - N + 1) / N ~ F(N, T - K - N + 1)    B 1 = 1
//           given a = 0
//   wald    h'S^-1 h ~ chi2(2 N), h = (a, B 1 - 1), S the sum of its rows by `series`
// The first three are exact if e is normal and independent; the two steps are those of
// Kan and Zhou (2012, Annals of Economics and Finance 13, 139-187). Determinants come
// from QR factors.
#pragma once

#include "../errors/series_sum.hpp"
#include "quadratic_forms.hpp"

namespace lambdabar {

struct SpanningTests {
  double joint = kNaN, first = kNaN, second = kNaN, wald = kNaN;
  Refusal wald_refusal = Refusal::none;
};

namespace detail {

inline Matrix residuals_of(const Matrix& Y, const Matrix& X) {
  if (X.cols() == 0) return Y;
  const Eigen::HouseholderQR<Matrix> qr(X);
  return Y - X * qr.solve(Y);
}

inline double log_determinant(const Matrix& residuals) {
  const Triangle triangle = upper_triangle(residuals);
  if (triangle.spanned >= 0)
    throw Error("rank",
                "The residuals of the test assets are collinear.",
                {{"asset", static_cast<double>(triangle.spanned + 1)}});
  return 2.0 * triangle.U.diagonal().cwiseAbs().array().log().sum();
}

}  // namespace detail

inline SpanningTests spanning_tests(const Eigen::Ref<const Matrix>& returns,
                                    const Eigen::Ref<const Matrix>& benchmarks,
                                    const SeriesOptions& series,
                                    const std::vector<Index>& slot) {
  const Index T = returns.rows(), N = returns.cols(), K = benchmarks.cols();
  const double left = static_cast<double>(T - K - N), n_assets = static_cast<double>(N);
  if (T - K - N < 1)
    throw Error("too_few",
                "Spanning needs more periods than benchmarks and test assets together.",
                {{"n_periods", static_cast<double>(T)}, {"n_assets", n_assets}});
  Matrix X(T, K + 1);
  X << Vector::Ones(T), benchmarks;
  const detail::Triangle design = detail::upper_triangle(X);
  if (design.spanned >= 0)
    throw Error("rank",
                "The benchmarks are collinear.",
                {{"factor", static_cast<double>(design.spanned)}});
  const Matrix free = detail::residuals_of(returns, X);
  const Vector last = benchmarks.col(K - 1);
  const double unrestricted = detail::log_determinant(free);
  const double no_alpha =
      detail::log_determinant(detail::residuals_of(returns, benchmarks));
  const double restricted = detail::log_determinant(detail::residuals_of(
      returns.colwise() - last, benchmarks.leftCols(K - 1).colwise() - last));
  SpanningTests out;
  out.first = std::expm1(no_alpha - unrestricted) * left / n_assets;
  out.second = std::expm1(restricted - no_alpha) * (left + 1.0) / n_assets;
  out.joint = N == 1 ? std::expm1(restricted - unrestricted) * left / 2.0
                     : std::expm1(0.5 * (restricted - unrestricted)) * left / n_assets;

  const Matrix coefficients = Eigen::HouseholderQR<Matrix>(X).solve(Matrix(returns));
  const Matrix inverse =
      design.U.triangularView<Eigen::Upper>().solve(Matrix::Identity(K + 1, K + 1));
  Matrix pick = Matrix::Zero(K + 1, 2);
  pick(0, 0) = 1.0;
  pick.col(1).tail(K).setOnes();
  // Rows of a and B 1 are x_t'(X'X)^-1 pick times e_t.
  const Matrix load = X * (inverse * (inverse.transpose() * pick));
  Matrix rows(T, 2 * N);
  rows << load.col(0).asDiagonal() * free, load.col(1).asDiagonal() * free;
  Vector h(2 * N);
  h << coefficients.row(0).transpose(),
      (pick.col(1).transpose() * coefficients).transpose().array() - 1.0;
  if (T <= 2 * N) {
    out.wald_refusal = Refusal::too_few_periods;
    return out;
  }
  const auto form =
      detail::quadratic_form(h, detail::sum_alike(rows, Matrix(), slot, series).S);
  out.wald = form.value;
  out.wald_refusal = form.refusal;
  return out;
}

}  // namespace lambdabar
