// Joint tests that all averaged pricing errors of a two-pass estimate are zero.
// N assets, T periods, K factors, q premia (K, plus one with an intercept), divisor T.
// With y = mean R and C an orthonormal complement of X = [1 B],
//   statistic = (C'y)' (C'S C)^-1 (C'y), S a covariance of the average, df N - q.
// A basis of known rank replaces a pseudo-inverse, whose tolerance can keep an eigenvalue
// made of rounding. Given S the weights of the second pass do not matter.
//   averaged      S = sum of rows e_t / T under `series` (betas taken as known)
//   corrected     S = (1 + c) Sigma / T                (Shanken 1985, 1992)
//   f_approx      Q / (1 + c) (T - K - N + q) / (N - q) ~ F(N - q, T - K - N + q),
//                 Q = corrected (1 + c) / T: Shanken's cross-sectional regression test,
//                 approximate for q > 0
//   moments       S = sum of rows e_t (1 - w_t) / T under `series` (estimated betas; the J of
//                 the moment conditions at the two-pass estimates)
//   grs, grs_chisq, grs_lr, grs_moments   see intercepts.hpp
// Data-driven lags of `series` come from the averaged pricing errors, each scaled to unit
// variance, with equal weights: they do not depend on the basis C.
// Cost O(T N^2 + N^3), paid only when N - q < T. Complete panels without traits only.
#pragma once

#include "../passes/two_pass.hpp"
#include "intercepts.hpp"

namespace lambdabar {
namespace detail {

// N x (N - q), orthonormal, C'X = 0.
inline Matrix complement(const Matrix& X) {
  const Index n = X.rows(), q = X.cols();
  const Vector norm = X.colwise().norm();
  const Eigen::HouseholderQR<Matrix> qr(X * norm.cwiseInverse().asDiagonal());
  Matrix selector = Matrix::Zero(n, n - q);
  selector.bottomRows(n - q).setIdentity();
  return qr.householderQ() * selector;
}

class PricingErrorTests {
 public:
  PricingErrorTests(const TwoPass& fit, const Matrix& residuals, const TestSizes& sizes)
      : fit_(fit), sizes_(sizes) {
    if (residuals.size() == 0 || sizes.n_assets == sizes.n_premia) return;
    C_ = complement(fit.X);
    rows_ = residuals * C_ / sizes.periods();
    error_ = C_.transpose() * fit.mean_return;
  }

  AlphaTest run(AlphaKind kind,
                const SeriesOptions& series,
                const std::vector<Index>& slot) const {
    AlphaTest test;
    test.kind = kind;
    test.df1 = static_cast<double>(sizes_.n_assets - sizes_.n_premia);
    if (kind == AlphaKind::f_approx)
      test.df2 = sizes_.periods() - static_cast<double>(sizes_.n_factors) - test.df1;
    if (sizes_.n_assets == sizes_.n_premia)
      refuse(test, Refusal::just_identified, sizes_);
    else if (rows_.size() == 0 || test.df2 < 1.0)
      refuse(test, Refusal::too_few_periods, sizes_);
    else if (kind == AlphaKind::averaged)
      series_test(tested(rows_), series, slot, sizes_, test);
    else if (kind == AlphaKind::moments)
      series_test(tested((1.0 - fit_.w.array()).matrix().asDiagonal() * rows_),
                  series,
                  slot,
                  sizes_,
                  test);
    else
      corrected(test);
    return test;
  }

 private:
  // The averaged errors are M C times the projected ones.
  TestedSeries tested(const Matrix& rows) const {
    return {rows, error_, C_ - fit_.X * (fit_.A * C_)};
  }

  void corrected(AlphaTest& test) const {
    finish(quadratic_form_of_rows(error_, rows_), sizes_, test);
    test.statistic /= 1.0 + fit_.c;
    if (test.kind == AlphaKind::f_approx)
      test.statistic *= test.df2 / (sizes_.periods() * test.df1);
  }

  const TwoPass& fit_;
  TestSizes sizes_;
  Matrix C_;      // N x (N - q)
  Matrix rows_;   // T x (N - q), C'e_t / T; empty when there are too few periods
  Vector error_;  // N - q, C'mean R
};

// Residuals of the first pass, T x N; empty when no test could use them.
inline Matrix first_pass_residuals(const TwoPassData& data,
                                   const TwoPass& fit,
                                   const TestSizes& sizes) {
  if (sizes.n_assets - sizes.n_premia >= sizes.n_periods) return Matrix();
  Matrix residuals = data.returns.rowwise() - fit.mean_return.transpose();
  residuals -= fit.factor_deviations * fit.first.beta.transpose();
  return residuals;
}

}  // namespace detail

// One test a kind, in the order asked. slot: calendar positions of the periods, or empty.
inline std::vector<AlphaTest> alpha_tests(const TwoPassData& data,
                                          const TwoPass& fit,
                                          const std::vector<AlphaKind>& kinds,
                                          const SeriesOptions& series = {},
                                          const std::vector<Index>& slot = {}) {
  detail::require_balanced(fit);
  const detail::TestSizes sizes{
      fit.X.rows(), fit.n_periods(), fit.n_factors, fit.n_terms()};
  const Matrix residuals = detail::first_pass_residuals(data, fit, sizes);
  const detail::PricingErrorTests errors(fit, residuals, sizes);
  const detail::InterceptTests intercepts(
      residuals, fit.first.alpha, fit.factor_deviations, fit.mean_factor, sizes);
  std::vector<AlphaTest> results;
  for (AlphaKind kind : kinds)
    results.push_back(detail::tests_intercepts(kind) ? intercepts.run(kind, series, slot)
                                                     : errors.run(kind, series, slot));
  return results;
}

}  // namespace lambdabar
