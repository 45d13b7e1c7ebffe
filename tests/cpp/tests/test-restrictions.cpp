#include <gtest/gtest.h>

#include <lambdabar/tests/restrictions.hpp>

#include "../simulated_panel.hpp"

using namespace lambdabar;

namespace {

struct Estimate {
  Vector theta;
  Matrix V;
};

Estimate estimate() {
  std::mt19937 engine(11);
  const Matrix Y = simulated::normals(engine, 30, 4);
  return {simulated::normals(engine, 4, 1), Y.transpose() * Y / 900.0};
}

TEST(Restrictions, one_restriction_is_a_squared_t) {
  const Estimate e = estimate();
  const Matrix L = Vector::Unit(4, 2).transpose();
  const WaldTest w = wald_test(e.theta, e.V, L, Vector::Constant(1, 0.5));
  const double t = (e.theta(2) - 0.5) / std::sqrt(e.V(2, 2));
  EXPECT_NEAR(w.statistic / (t * t), 1.0, 1e-13);
  EXPECT_EQ(w.df, 1);
}

TEST(Restrictions, regular_case_is_the_textbook_form) {
  const Estimate e = estimate();
  Matrix L(2, 4);
  L << 0, 1, 0, 0, 0, 0, 1, -1;
  Vector r(2);
  r << 0.1, 0.0;
  const Vector gap = L * e.theta - r;
  const Matrix covariance = L * e.V * L.transpose();
  const WaldTest w = wald_test(e.theta, e.V, L, r);
  EXPECT_NEAR(w.statistic / gap.dot(covariance.fullPivLu().solve(gap)), 1.0, 1e-12);
  EXPECT_EQ(w.df, 2);
  EXPECT_EQ(w.outside, 0.0);
  // Units and order of the restrictions do not matter.
  Matrix mixed(2, 2);
  mixed << 0.0, 1e5, 1e-4, 0.0;
  EXPECT_NEAR(
      wald_test(e.theta, e.V, mixed * L, mixed * r).statistic / w.statistic, 1.0, 1e-11);
}

TEST(Restrictions, a_repeated_restriction_counts_once) {
  const Estimate e = estimate();
  Matrix L(3, 4);
  L << 0, 1, 0, 0, 0, 0, 1, -1, 0, 2, 0, 0;
  const WaldTest w = wald_test(e.theta, e.V, L, Vector::Zero(3));
  const WaldTest once = wald_test(e.theta, e.V, L.topRows(2), Vector::Zero(2));
  EXPECT_EQ(w.df, 2);
  EXPECT_NEAR(w.statistic / once.statistic, 1.0, 1e-11);
  EXPECT_LT(w.outside, 1e-7);
}

TEST(Restrictions, contradicting_restrictions_are_told) {
  const Estimate e = estimate();
  Matrix L(2, 4);
  L << 0, 1, 0, 0, 0, 1, 0, 0;
  Vector r(2);
  r << 0.0, 1.0;
  const WaldTest w = wald_test(e.theta, e.V, L, r);
  EXPECT_EQ(w.df, 1);
  EXPECT_GT(w.outside, 0.1);
}

TEST(Restrictions, a_covariance_of_low_rank_gives_its_rank) {
  std::mt19937 engine(12);
  const Matrix Y = simulated::normals(engine, 2, 4);  // two clusters
  const Matrix V = Y.transpose() * Y;
  const WaldTest w =
      wald_test(Vector::Ones(4), V, Matrix::Identity(4, 4), Vector::Zero(4));
  EXPECT_EQ(w.df, 2);
  EXPECT_GT(w.outside, 0.0);
}

TEST(Restrictions, shapes_are_checked) {
  const Estimate e = estimate();
  EXPECT_THROW(wald_test(e.theta, e.V, Matrix::Identity(3, 3), Vector::Zero(3)), Error);
}

}  // namespace
