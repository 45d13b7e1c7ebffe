#include <gtest/gtest.h>

#include <lambdabar/tests/discount.hpp>
#include <lambdabar/tests/efficient.hpp>
#include <lambdabar/tests/pricing_r2.hpp>

#include "../simulated_panel.hpp"

using namespace lambdabar;

namespace {

struct Estimate {
  TwoPassData data;
  TwoPassOptions options;
  TwoPass fit;

  Estimate(const simulated::Panel& p, Weighting weighting, bool intercept)
      : data{p.returns, p.factors, {}} {
    options.weighting = weighting;
    options.intercept = intercept;
    fit = two_pass(data, options);
  }
  PricingR2 r2() const { return pricing_r2(data, fit, options, {}, {}); }
};

}  // namespace

TEST(PricingR2, RowsSumToZeroAndWeightsHaveTheirNumber) {
  const simulated::Panel p = simulated::panel(90, 8, 2, 3);
  for (Weighting weighting : {Weighting::ols, Weighting::gls}) {
    for (bool intercept : {true, false}) {
      const Estimate e(p, weighting, intercept);
      const PricingR2 r2 = e.r2();
      EXPECT_NEAR(r2.rows.sum(), 0.0, 1e-10);
      EXPECT_NEAR(r2.r2, 1.0 - r2.Q / r2.Q0, 1e-14);
      EXPECT_EQ(r2.one.weights.size(), 8 - e.fit.n_terms());
      EXPECT_EQ(r2.zero.weights.size(), 2);
      EXPECT_NEAR(r2.zero.statistic, 90.0 * r2.r2 * r2.Q0, 1e-8 * 90.0 * r2.Q0);
    }
  }
}

TEST(PricingR2, AsManyPremiaAsAssetsLeaveNothingToTest) {
  const simulated::Panel p = simulated::panel(50, 3, 2, 4);
  const Estimate e(p, Weighting::ols, true);
  EXPECT_EQ(e.r2().one.weights.size(), 0);
  EXPECT_NEAR(e.r2().r2, 1.0, 1e-12);
}

TEST(DiscountFactor, IsTheGlsEstimateFromTheOtherSide) {
  const simulated::Panel p = simulated::panel(90, 8, 2, 5);
  const Estimate e(p, Weighting::gls, false);
  const DiscountFactor m = discount_factor(p.returns, p.factors, false, {}, {});
  EXPECT_LT((e.fit.Vf * m.b - e.fit.premia).norm(), 1e-10 * e.fit.premia.norm());
  EXPECT_NEAR(m.distance2, e.r2().Q, 1e-10);
  EXPECT_LT(m.rows.colwise().sum().norm(), 1e-9 * m.b.norm());
  EXPECT_NEAR(m.distance_rows.sum(), 0.0, 1e-10);
  const CovariancePrices prices = covariance_prices(e.fit);
  EXPECT_LT((prices.b - m.b).norm(), 1e-9 * m.b.norm());
  EXPECT_THROW(discount_factor(p.returns.topRows(8), p.factors.topRows(8), false, {}, {}),
               Error);
}

TEST(EfficientMoments, RefusesWhatHasNoDegreesOfFreedom) {
  const simulated::Panel p = simulated::panel(40, 6, 1, 6);
  const Estimate e(p, Weighting::ols, true);
  const EfficientMoments found = efficient_moments(e.data, e.fit, {}, {});
  EXPECT_EQ(found.refusal, Refusal::none);
  EXPECT_GE(found.J, 0.0);
  EXPECT_EQ(found.premia.size(), 2);
  const simulated::Panel few = simulated::panel(13, 6, 1, 6);
  const Estimate short_sample(few, Weighting::ols, true);
  EXPECT_EQ(efficient_moments(short_sample.data, short_sample.fit, {}, {}).refusal,
            Refusal::too_few_periods);
}
