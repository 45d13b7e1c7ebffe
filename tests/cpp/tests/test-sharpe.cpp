#include <gtest/gtest.h>

#include <lambdabar/tests/frontier.hpp>
#include <lambdabar/tests/sharpe.hpp>
#include <lambdabar/tests/spanning.hpp>

#include "../simulated_panel.hpp"

#include <random>

using namespace lambdabar;

TEST(Sharpe, RowsSumToZeroAndTheFrontierReachesIt) {
  const simulated::Panel p = simulated::panel(80, 5, 3, 12);
  const SharpeRatio ratio = squared_sharpe(p.factors);
  EXPECT_NEAR(ratio.rows.sum(), 0.0, 1e-12);
  const Frontier frontier = mean_variance_frontier(p.factors, 80.0);
  EXPECT_NEAR(frontier.sharpe * frontier.sharpe, ratio.squared, 1e-10);
  EXPECT_NEAR(frontier.least.sum(), 1.0, 1e-12);
  EXPECT_NEAR(frontier.tangency.sum(), 1.0, 1e-9);
  const Vector mean = p.factors.colwise().mean();
  EXPECT_NEAR(frontier.least.dot(mean), frontier.least_mean, 1e-12);
}

TEST(Orthant, ProjectsOntoTheNearestFace) {
  Matrix V(2, 2);
  V << 1.0, 0.5, 0.5, 2.0;
  const detail::Orthant orthant(V);
  Vector inside(2), corner(2), side(2);
  inside << 1.0, 2.0;
  EXPECT_EQ(orthant.project(inside).distance, 0.0);
  EXPECT_EQ(orthant.project(inside).zeros, 0);
  corner << -3.0, -4.0;
  EXPECT_EQ(orthant.project(corner).zeros, 2);
  EXPECT_NEAR(orthant.project(corner).distance, corner.dot(V.inverse() * corner), 1e-12);
  side << -1.0, 5.0;
  EXPECT_EQ(orthant.project(side).zeros, 1);
  EXPECT_NEAR(orthant.project(side).distance, 1.0, 1e-12);
}

TEST(Orthant, WeightsOfIndependentCoordinatesAreBinomial) {
  std::mt19937 random(1);
  std::normal_distribution<double> normal;
  Matrix draws(40000, 3);
  for (Index i = 0; i < draws.size(); ++i) draws.data()[i] = normal(random);
  Vector delta(3);
  delta << -1.0, 0.5, -0.2;
  const BestModelTest test = best_model_test(delta, Matrix::Identity(3, 3), draws);
  EXPECT_NEAR(test.statistic, 1.04, 1e-12);
  double p = 0;
  const double weight[] = {0, 3.0 / 8, 3.0 / 8, 1.0 / 8};
  for (Index k = 1; k <= 3; ++k) p += weight[k] * detail::chisq_tail(k, 1.04);
  EXPECT_NEAR(test.p, p, 0.01);
}

TEST(Spanning, StepsMultiplyToTheJointDeterminant) {
  const simulated::Panel p = simulated::panel(80, 3, 2, 13);
  const SpanningTests tests = spanning_tests(p.returns, p.factors, {}, {});
  const double left = 80 - 2 - 3;
  const double first = 1.0 + tests.first * 3.0 / left;
  const double second = 1.0 + tests.second * 3.0 / (left + 1.0);
  EXPECT_NEAR(std::sqrt(first * second), 1.0 + tests.joint * 3.0 / left, 1e-10);
  EXPECT_GT(tests.wald, 0.0);
  EXPECT_THROW(spanning_tests(p.returns.topRows(5), p.factors.topRows(5), {}, {}), Error);
}
