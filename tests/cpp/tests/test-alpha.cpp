#include <gtest/gtest.h>

#include <lambdabar/tests/alpha.hpp>

#include "../simulated_panel.hpp"

using namespace lambdabar;

namespace {

const Weighting kAll[] = {Weighting::ols, Weighting::wls, Weighting::gls};

TwoPass fit_of(const TwoPassData& data, Weighting weighting, bool intercept) {
  TwoPassOptions options;
  options.weighting = weighting;
  options.intercept = intercept;
  return two_pass(data, options);
}

AlphaTest test_of(const TwoPassData& data,
                  const TwoPass& fit,
                  AlphaKind kind,
                  const SeriesOptions& series = {}) {
  return alpha_tests(data, fit, {kind}, series)[0];
}

SeriesOptions newey_west(double lags) {
  SeriesOptions options;
  options.lags = lags;
  return options;
}

// Moore-Penrose form with the known rank N - q.
double pseudo_inverse_form(const Vector& alpha, const Matrix& omega, Index rank) {
  const Eigen::SelfAdjointEigenSolver<Matrix> eigen(omega);
  const Vector along = eigen.eigenvectors().rightCols(rank).transpose() * alpha;
  return along.cwiseAbs2().cwiseQuotient(eigen.eigenvalues().tail(rank)).sum();
}

TEST(Alpha, averaged_test_is_the_gls_quadratic_form_whatever_the_weights) {
  const simulated::Panel p = simulated::panel(80, 7, 2, 1);
  const TwoPassData data{p.returns, p.factors, {}};
  for (bool intercept : {true, false}) {
    const TwoPass gls = fit_of(data, Weighting::gls, intercept);
    Matrix e = p.returns.rowwise() - p.returns.colwise().mean();
    e -= gls.factor_deviations * gls.first.beta.transpose();
    const Matrix sigma = e.transpose() * e / 80.0;
    const double Q = gls.alpha.dot(sigma.fullPivLu().solve(gls.alpha));
    for (Weighting weighting : kAll) {
      const TwoPass f = fit_of(data, weighting, intercept);
      const AlphaTest averaged = test_of(data, f, AlphaKind::averaged);
      EXPECT_NEAR(averaged.statistic / (80.0 * Q), 1.0, 1e-11);
      EXPECT_EQ(averaged.df1, 7.0 - static_cast<double>(f.n_terms()));
      EXPECT_TRUE(std::isnan(averaged.df2));
      EXPECT_NEAR(
          test_of(data, f, AlphaKind::corrected).statistic * (1.0 + f.c) / (80.0 * Q),
          1.0,
          1e-11);
      const AlphaTest approx = test_of(data, f, AlphaKind::f_approx);
      EXPECT_EQ(approx.df2, 80.0 - 2.0 - averaged.df1);
      EXPECT_NEAR(approx.statistic, Q / (1.0 + f.c) * approx.df2 / averaged.df1, 1e-11);
    }
  }
}

TEST(Alpha, complement_form_is_the_pseudo_inverse_of_known_rank) {
  const simulated::Panel p = simulated::panel(80, 7, 2, 2);
  const TwoPassData data{p.returns, p.factors, {}};
  for (Weighting weighting : kAll)
    for (double lags : {0.0, 3.0}) {
      const TwoPass f = fit_of(data, weighting, true);
      const auto omega = [&](AlphaRows kind) {
        return sum_series(
                   alpha_rows(data, f, kind), {}, Vector::Ones(7), newey_west(lags))
            .S;
      };
      EXPECT_NEAR(test_of(data, f, AlphaKind::averaged, newey_west(lags)).statistic /
                      pseudo_inverse_form(f.alpha, omega(AlphaRows::series), 4),
                  1.0,
                  1e-10);
      EXPECT_NEAR(test_of(data, f, AlphaKind::moments, newey_west(lags)).statistic /
                      pseudo_inverse_form(f.alpha, omega(AlphaRows::estimated), 4),
                  1.0,
                  1e-10);
    }
}

TEST(Alpha, data_driven_lags_come_from_the_pricing_errors) {
  simulated::Panel p = simulated::panel(90, 6, 1, 3);
  for (Index t = 1; t < 90; ++t) p.returns.row(t) += 0.5 * p.returns.row(t - 1);
  const TwoPassData data{p.returns, p.factors, {}};
  const TwoPass f = fit_of(data, Weighting::ols, true);
  Matrix rows = alpha_rows(data, f, AlphaRows::series);
  const Vector spread = rows.colwise().norm();
  rows = rows * spread.cwiseInverse().asDiagonal();
  for (LagRule rule : {LagRule::newey_west, LagRule::andrews}) {
    SeriesOptions series;
    series.rule = rule;
    const Bandwidth expected = choose_bandwidth(rows, Vector::Ones(6), 90, 89, series);
    ASSERT_GT(expected.lags, 1.0);
    EXPECT_NEAR(test_of(data, f, AlphaKind::averaged, series).lags, expected.lags, 1e-10);
  }
}

TEST(Alpha, moments_test_is_the_corrected_one_in_a_product_sample) {
  std::mt19937 engine(4);
  const Matrix f = simulated::normals(engine, 8, 1).array() + 0.5;
  Matrix e = simulated::normals(engine, 11, 5);
  e.rowwise() -= e.colwise().mean();
  const Vector beta = simulated::normals(engine, 5, 1);
  Matrix returns(88, 5), factors(88, 1);
  for (Index s = 0; s < 8; ++s)
    for (Index j = 0; j < 11; ++j) {
      factors(11 * s + j, 0) = f(s, 0);
      returns.row(11 * s + j) = f(s, 0) * beta.transpose() + e.row(j);
      returns(11 * s + j, 2) += 0.4;
    }
  const TwoPassData data{returns, factors, {}};
  for (Weighting weighting : kAll) {
    const TwoPass fit = fit_of(data, weighting, true);
    ASSERT_GT(fit.c, 0.001);
    EXPECT_NEAR(test_of(data, fit, AlphaKind::moments).statistic /
                    test_of(data, fit, AlphaKind::corrected).statistic,
                1.0,
                1e-10);
  }
}

TEST(Alpha, with_the_factors_among_the_assets_the_regression_test_is_the_exact_one) {
  const simulated::Panel p = simulated::panel(60, 5, 2, 5);
  Matrix assets(60, 7);
  assets << p.returns, p.factors;
  const TwoPassData data{assets, p.factors, {}};
  const AlphaTest approx =
      test_of(data, fit_of(data, Weighting::gls, false), AlphaKind::f_approx);
  const AlphaTest exact = intercept_tests(p.returns, p.factors, {AlphaKind::grs})[0];
  EXPECT_NEAR(approx.statistic / exact.statistic, 1.0, 1e-9);
  EXPECT_EQ(approx.df1, exact.df1);
  EXPECT_EQ(approx.df2, exact.df2);
}

TEST(Alpha, intercept_tests_are_those_of_the_first_pass) {
  const simulated::Panel p = simulated::panel(60, 5, 2, 6);
  const TwoPassData data{p.returns, p.factors, {}};
  const std::vector<AlphaKind> kinds{
      AlphaKind::grs, AlphaKind::grs_chisq, AlphaKind::grs_lr, AlphaKind::grs_moments};
  const auto direct = intercept_tests(p.returns, p.factors, kinds, newey_west(2));
  const auto through =
      alpha_tests(data, fit_of(data, Weighting::ols, true), kinds, newey_west(2));
  for (std::size_t k = 0; k < 4; ++k) {
    EXPECT_EQ(through[k].kind, kinds[k]);
    EXPECT_NEAR(through[k].statistic / direct[k].statistic, 1.0, 1e-12);
    EXPECT_EQ(through[k].df1, direct[k].df1);
  }
}

TEST(Alpha, repackaged_assets_give_the_same_gls_tests) {
  const simulated::Panel p = simulated::panel(60, 5, 1, 7);
  std::mt19937 engine(8);
  Matrix mix = simulated::normals(engine, 5, 5);
  mix.array().colwise() /= mix.rowwise().sum().array();
  const Matrix packaged = p.returns * mix.transpose();
  const TwoPassData a{p.returns, p.factors, {}}, b{packaged, p.factors, {}};
  for (AlphaKind kind : {AlphaKind::averaged, AlphaKind::corrected, AlphaKind::moments})
    EXPECT_NEAR(test_of(b, fit_of(b, Weighting::gls, true), kind).statistic /
                    test_of(a, fit_of(a, Weighting::gls, true), kind).statistic,
                1.0,
                1e-8);
}

TEST(Alpha, gaps_in_the_calendar_reach_the_sums) {
  const simulated::Panel p = simulated::panel(40, 5, 1, 9);
  const TwoPassData data{p.returns, p.factors, {}};
  const TwoPass f = fit_of(data, Weighting::ols, true);
  std::vector<Index> slot;
  for (Index t = 0; t < 40; ++t) slot.push_back(10 * t);
  const AlphaTest far =
      alpha_tests(data, f, {AlphaKind::averaged}, newey_west(5), slot)[0];
  EXPECT_NEAR(
      far.statistic / test_of(data, f, AlphaKind::averaged).statistic, 1.0, 1e-12);
  EXPECT_GT(std::abs(test_of(data, f, AlphaKind::averaged, newey_west(5)).statistic /
                         far.statistic -
                     1.0),
            1e-3);
}

TEST(Alpha, just_identified_models_have_nothing_to_test) {
  const simulated::Panel p = simulated::panel(30, 3, 2, 10);
  const TwoPassData data{p.returns, p.factors, {}};
  const TwoPass f = fit_of(data, Weighting::ols, true);
  for (AlphaKind kind : {AlphaKind::averaged,
                         AlphaKind::corrected,
                         AlphaKind::f_approx,
                         AlphaKind::moments}) {
    const AlphaTest test = test_of(data, f, kind);
    EXPECT_TRUE(std::isnan(test.statistic));
    EXPECT_EQ(test.df1, 0.0);
    EXPECT_EQ(test.refusal, Refusal::just_identified);
  }
  EXPECT_EQ(test_of(data, f, AlphaKind::grs).refusal, Refusal::none);
}

TEST(Alpha, samples_too_short_for_a_test_are_refused) {
  // T = 12, K = 1, q = 2: the F form needs N - q <= 10.
  const simulated::Panel p = simulated::panel(12, 30, 1, 11);
  const auto refusal = [&](Index n_assets, AlphaKind kind) {
    const Matrix returns = p.returns.leftCols(n_assets);
    const TwoPassData data{returns, p.factors, {}};
    return test_of(data, fit_of(data, Weighting::ols, true), kind).refusal;
  };
  EXPECT_EQ(refusal(12, AlphaKind::f_approx), Refusal::none);
  EXPECT_EQ(refusal(13, AlphaKind::f_approx), Refusal::too_few_periods);
  EXPECT_EQ(refusal(12, AlphaKind::averaged), Refusal::none);
  EXPECT_NE(refusal(13, AlphaKind::averaged), Refusal::none);
  EXPECT_EQ(refusal(30, AlphaKind::averaged), Refusal::too_few_periods);
  EXPECT_EQ(refusal(30, AlphaKind::moments), Refusal::too_few_periods);
  EXPECT_EQ(refusal(30, AlphaKind::grs), Refusal::too_few_periods);
  EXPECT_EQ(refusal(30, AlphaKind::grs_moments), Refusal::too_few_periods);
}

TEST(Alpha, singular_and_negative_covariances_are_told_apart) {
  simulated::Panel p = simulated::panel(40, 6, 1, 12);
  p.returns.col(5) = p.returns.col(4);
  const TwoPassData data{p.returns, p.factors, {}};
  const TwoPass f = fit_of(data, Weighting::ols, true);
  EXPECT_EQ(test_of(data, f, AlphaKind::averaged).refusal, Refusal::singular);
  EXPECT_EQ(test_of(data, f, AlphaKind::corrected).refusal, Refusal::singular);

  const simulated::Panel q = simulated::panel(40, 5, 1, 13);
  Matrix alternating = q.returns;
  for (Index t = 1; t < 40; ++t) alternating.row(t) -= 0.95 * q.returns.row(t - 1);
  const TwoPassData jumpy{alternating, q.factors, {}};
  SeriesOptions truncated = newey_west(1);
  truncated.kernel = Kernel::truncated;
  const AlphaTest test =
      test_of(jumpy, fit_of(jumpy, Weighting::ols, true), AlphaKind::averaged, truncated);
  EXPECT_EQ(test.refusal, Refusal::not_positive);
  EXPECT_TRUE(std::isnan(test.statistic));
}

TEST(Alpha, needs_a_complete_panel) {
  simulated::Panel p = simulated::panel(40, 6, 1, 14);
  p.returns(3, 3) = kNaN;
  const TwoPassData data{p.returns, p.factors, {}};
  EXPECT_THROW(test_of(data, fit_of(data, Weighting::ols, true), AlphaKind::grs), Error);
}

}  // namespace
