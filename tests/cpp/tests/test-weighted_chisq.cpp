#include <gtest/gtest.h>

#include <lambdabar/tests/weighted_chisq.hpp>

using namespace lambdabar;

namespace {

Vector weights(std::initializer_list<double> values) {
  Vector out(static_cast<Index>(values.size()));
  Index i = 0;
  for (double value : values) out(i++) = value;
  return out;
}

// Every weight in pairs: a sum of exponentials with rates 1 / (2 lambda), all different.
double hypoexponential_tail(const Vector& lambda, double x) {
  double tail = 0;
  for (Index i = 0; i < lambda.size(); ++i) {
    double product = 1;
    for (Index j = 0; j < lambda.size(); ++j)
      if (j != i) product *= lambda(i) / (lambda(i) - lambda(j));
    tail += product * std::exp(-0.5 * x / lambda(i));
  }
  return tail;
}

}  // namespace

TEST(WeightedChisq, EqualWeightsAreAChiSquare) {
  // Upper 5 % points: from memory, any table of the distribution.
  EXPECT_NEAR(weighted_chisq_tail(weights({1}), 3.841458820694124), 0.05, 1e-12);
  EXPECT_NEAR(
      weighted_chisq_tail(weights({2, 2, 2}), 2 * 7.814727903251178), 0.05, 1e-12);
  EXPECT_NEAR(weighted_chisq_tail(Vector::Ones(10), 18.307038053275147), 0.05, 1e-12);
}

TEST(WeightedChisq, PairsOfWeightsAreSumsOfExponentials) {
  const Vector few = weights({1, 3, 7});
  const Vector spread = weights({1, 40, 900});
  for (double x : {0.5, 5.0, 20.0, 80.0}) {
    EXPECT_NEAR(weighted_chisq_tail(weights({1, 1, 3, 3, 7, 7}), x),
                hypoexponential_tail(few, x),
                1e-11);
  }
  for (double x : {30.0, 900.0, 9000.0})
    EXPECT_NEAR(weighted_chisq_tail(weights({1, 1, 40, 40, 900, 900}), x),
                hypoexponential_tail(spread, x),
                1e-10);
}

TEST(WeightedChisq, TinyWeightsArePutAtTheirMean) {
  const double x = 4.0;
  EXPECT_NEAR(weighted_chisq_tail(weights({1, 1, 1e-6, 1e-6}), x),
              hypoexponential_tail(weights({1, 1e-6}), x),
              1e-10);
  EXPECT_EQ(weighted_chisq_tail(weights({1, 0, 0}), x),
            weighted_chisq_tail(weights({1}), x));
}

TEST(WeightedChisq, ManyWeightsDoNotUnderflow) {
  // 600 weights from 1 to 1000: close to normal, about the mean.
  Vector lambda(600);
  for (Index i = 0; i < 600; ++i)
    lambda(i) = std::pow(1000.0, static_cast<double>(i) / 599.0);
  const double p = weighted_chisq_tail(lambda, lambda.sum());
  EXPECT_GT(p, 0.45);
  EXPECT_LT(p, 0.5);
}

TEST(WeightedChisq, Ends) {
  EXPECT_EQ(weighted_chisq_tail(weights({1, 2}), 0), 1.0);
  EXPECT_TRUE(std::isnan(weighted_chisq_tail(Vector(), 1)));
  EXPECT_TRUE(std::isnan(weighted_chisq_tail(weights({1}), kNaN)));
  EXPECT_LT(weighted_chisq_tail(weights({1, 2}), 500), 1e-50);
}
