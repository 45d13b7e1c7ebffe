// Joint tests that all time-series intercepts a are zero: factors are traded and, like
// the returns, excess returns (the caller's word). N assets, T periods, K factors,
// divisor T, theta2 = mean f' Vf^-1 mean f, Q = a' Sigma^-1 a (Gibbons, Ross and Shanken
// 1989):
//   grs           Q / (1 + theta2) (T - N - K) / N ~ F(N, T - N - K), exact if e is normal
//   grs_chisq     T Q / (1 + theta2) ~ chi2(N)
//   grs_lr        T log(1 + Q / (1 + theta2)) ~ chi2(N)
//   grs_moments   a' S^-1 a ~ chi2(N), S = sum of rows e_t (1 - mean f' Vf^-1 d_t) / T under
//                 a series rule (Hansen 1982)
// Data-driven lags come from the intercepts' rows, each scaled to unit variance, with
// equal weights. No second pass is needed, so N may be smaller than K. A test that the
// sample cannot carry is refused with a reason and its numbers. Complete returns only.
// Cost O(T N^2 + N^3).
#pragma once

#include "../errors/series_sum.hpp"
#include "quadratic_forms.hpp"

namespace lambdabar {

enum class AlphaKind {
  averaged,
  corrected,
  f_approx,
  grs,
  grs_chisq,
  grs_lr,
  grs_moments,
  moments
};

struct AlphaTest {
  AlphaKind kind = AlphaKind::averaged;
  double statistic = kNaN;  // NaN when refused
  double df1 = kNaN;
  double df2 = kNaN;  // NaN: chi-square with df1
  Refusal refusal = Refusal::none;
  Error::Facts facts;  // the numbers behind a refusal
  double lags = kNaN;  // of the series tests, as a user counts them
  bool capped = false, negative_s0 = false, closed_gaps = false;
};

namespace detail {

struct TestSizes {
  Index n_assets, n_periods, n_factors, n_premia;

  double assets() const { return static_cast<double>(n_assets); }
  double periods() const { return static_cast<double>(n_periods); }
};

inline void refuse(AlphaTest& test, Refusal why, const TestSizes& sizes) {
  test.statistic = kNaN;
  test.refusal = why;
  test.facts = {{"n_assets", sizes.assets()},
                {"n_periods", sizes.periods()},
                {"n_factors", static_cast<double>(sizes.n_factors)},
                {"n_premia", static_cast<double>(sizes.n_premia)}};
}

inline void finish(const QuadraticForm& form, const TestSizes& sizes, AlphaTest& test) {
  test.statistic = form.value;
  if (form.refusal != Refusal::none) refuse(test, form.refusal, sizes);
}

// Rows of the tested errors, their mean and the way back to the errors that a lag rule sees.
struct TestedSeries {
  Matrix rows;
  Vector error;
  Matrix back;
};

inline void series_test(const TestedSeries& tested,
                        const SeriesOptions& series,
                        const std::vector<Index>& slot,
                        const TestSizes& sizes,
                        AlphaTest& test) {
  const SeriesSum sum = sum_alike(tested.rows, tested.back, slot, series);
  test.lags = sum.lags;
  test.capped = sum.capped;
  test.negative_s0 = sum.negative_s0;
  test.closed_gaps = sum.closed_gaps;
  finish(quadratic_form(tested.error, sum.S), sizes, test);
}

class InterceptTests {
 public:
  // residuals T x N, alpha N, deviations T x K of the factors; all kept alive by the
  // caller.
  InterceptTests(const Matrix& residuals,
                 const Vector& alpha,
                 const Matrix& deviations,
                 const Vector& mean_factor,
                 const TestSizes& sizes)
      : residuals_(residuals), alpha_(alpha), deviations_(deviations), sizes_(sizes) {
    const Matrix U = upper_triangle(deviations).U;
    const Vector root = U.transpose().triangularView<Eigen::Lower>().solve(mean_factor);
    sharpe2_ = sizes.periods() * root.squaredNorm();
    tilt_ = U.triangularView<Eigen::Upper>().solve(root);
  }

  AlphaTest run(AlphaKind kind,
                const SeriesOptions& series,
                const std::vector<Index>& slot) const {
    AlphaTest test;
    test.kind = kind;
    test.df1 = sizes_.assets();
    if (kind == AlphaKind::grs_moments)
      moments(series, slot, test);
    else
      homoskedastic(test);
    return test;
  }

 private:
  void homoskedastic(AlphaTest& test) const {
    const Index left = sizes_.n_periods - sizes_.n_assets - sizes_.n_factors;
    if (test.kind == AlphaKind::grs) test.df2 = static_cast<double>(left);
    if (left < 1) return refuse(test, Refusal::too_few_periods, sizes_);
    finish(quadratic_form_of_rows(alpha_, residuals_ / sizes_.periods()), sizes_, test);
    test.statistic /= 1.0 + sharpe2_;
    const double ratio = test.statistic / sizes_.periods();
    if (test.kind == AlphaKind::grs_lr)
      test.statistic = sizes_.periods() * std::log1p(ratio);
    if (test.kind == AlphaKind::grs) test.statistic = ratio * test.df2 / test.df1;
  }

  void moments(const SeriesOptions& series,
               const std::vector<Index>& slot,
               AlphaTest& test) const {
    if (sizes_.n_assets >= sizes_.n_periods)
      return refuse(test, Refusal::too_few_periods, sizes_);
    const Vector factor = 1.0 / sizes_.periods() - (deviations_ * tilt_).array();
    const Matrix rows = factor.asDiagonal() * residuals_;
    series_test({rows, alpha_, Matrix()}, series, slot, sizes_, test);
  }

  const Matrix& residuals_;
  const Vector& alpha_;
  const Matrix& deviations_;
  TestSizes sizes_;
  double sharpe2_;  // theta2
  Vector tilt_;     // K, Vf^-1 mean f / T
};

inline bool tests_intercepts(AlphaKind kind) {
  return kind == AlphaKind::grs || kind == AlphaKind::grs_chisq ||
         kind == AlphaKind::grs_lr || kind == AlphaKind::grs_moments;
}

}  // namespace detail

// kinds: the grs ones. slot: calendar positions of the periods, or empty.
inline std::vector<AlphaTest> intercept_tests(const Eigen::Ref<const Matrix>& returns,
                                              const Eigen::Ref<const Matrix>& factors,
                                              const std::vector<AlphaKind>& kinds,
                                              const SeriesOptions& series = {},
                                              const std::vector<Index>& slot = {}) {
  const detail::FactorBasis basis = detail::checked_basis(returns, factors);
  if (!returns.allFinite())
    throw Error("unsupported", "Tests of intercepts need complete returns.");
  Matrix residuals(returns.rows(), returns.cols());
  Vector alpha(returns.cols());
  for (Index i = 0; i < returns.cols(); ++i) {
    const detail::AssetFit fit = detail::fit_asset(basis, returns.col(i));
    residuals.col(i) = fit.residual;
    alpha(i) = fit.mean - basis.mean.dot(fit.beta);
  }
  const detail::TestSizes sizes{returns.cols(), returns.rows(), factors.cols(), 0};
  const detail::InterceptTests tests(residuals, alpha, basis.D, basis.mean, sizes);
  std::vector<AlphaTest> results;
  for (AlphaKind kind : kinds) {
    if (!detail::tests_intercepts(kind))
      throw Error("input", "This test needs a two-pass estimate.");
    results.push_back(tests.run(kind, series, slot));
  }
  return results;
}

}  // namespace lambdabar
