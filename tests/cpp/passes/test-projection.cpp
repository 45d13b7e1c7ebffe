#include <gtest/gtest.h>

#include <lambdabar/passes/projection.hpp>

#include "../simulated_panel.hpp"

using namespace lambdabar;

namespace {

Matrix design(Index n, Index n_others, unsigned seed) {
  std::mt19937 engine(seed);
  Matrix X(n, n_others + 1);
  X.col(0).setOnes();
  X.rightCols(n_others) = simulated::normals(engine, n, n_others).array() + 1.0;
  return X;
}

TEST(Projection, spans_the_design_and_gives_least_squares) {
  std::mt19937 engine(1);
  const Matrix X = design(25, 3, 2);
  const Vector root = simulated::normals(engine, 25, 1).array().abs() + 0.2;
  const Vector y = simulated::normals(engine, 25, 1);
  for (bool intercept : {true, false}) {
    const Matrix plain = intercept ? X : Matrix(X.rightCols(3));
    const Matrix whitened = root.asDiagonal() * plain;
    const detail::Projection p = detail::project(whitened, intercept);
    ASSERT_TRUE(p.usable());
    const Matrix H = (whitened.transpose() * whitened).inverse();
    EXPECT_LT(simulated::distance(p.C * p.C.transpose(), H), 1e-12);
    EXPECT_LT((p.Q.transpose() * p.Q - Matrix::Identity(p.Q.cols(), p.Q.cols())).norm(),
              1e-13);
    const Vector direct = H * (whitened.transpose() * root.asDiagonal() * y);
    EXPECT_LT(
        simulated::distance(p.C * (p.Q.transpose() * root.asDiagonal() * y), direct),
        1e-12);
  }
}

TEST(Projection, tells_a_flat_column_from_a_spanned_one) {
  Matrix X = design(20, 3, 3);
  X.col(2).setConstant(1.7);
  detail::Projection p = detail::project(X, true);
  EXPECT_FALSE(p.usable());
  EXPECT_TRUE(p.no_variation);
  EXPECT_EQ(p.culprit, 2);
  // Without a constant the same column is a regressor like any other.
  EXPECT_TRUE(detail::project(X.rightCols(3), false).usable());

  X = design(20, 3, 4);
  X.col(2) = 2.0 * X.col(1).array() - 3.0;
  p = detail::project(X, true);
  EXPECT_FALSE(p.usable());
  EXPECT_FALSE(p.no_variation);
  EXPECT_EQ(p.rank, 3);
  EXPECT_EQ(p.culprit, 2);
}

TEST(Projection, finds_a_spanned_column_behind_large_means) {
  Matrix X = design(200, 3, 5);
  X.col(1).array() += 1e6;
  X.col(2).array() += 1e6;
  X.col(3) = X.col(1) + X.col(2);
  const detail::Projection p = detail::project(X, true);
  EXPECT_EQ(p.rank, 3);
  EXPECT_EQ(p.culprit, 3);
  X.col(3) += design(200, 1, 6).col(1);
  EXPECT_TRUE(detail::project(X, true).usable());
}

TEST(Projection, condition_is_of_columns_at_unit_norm) {
  Matrix X(4, 2);
  X << 1, 1, 1, -1, 1, 1, 1, -1;
  EXPECT_NEAR(detail::scaled_condition(detail::project(X, true), X), 1.0, 1e-14);
  X.col(1) *= 1e5;
  EXPECT_NEAR(detail::scaled_condition(detail::project(X, true), X), 1.0, 1e-14);
  X.col(1).array() += 1e8;
  EXPECT_GT(detail::scaled_condition(detail::project(X, true), X), 1e3);
}

TEST(Projection, period_quality_is_that_of_the_regression) {
  std::mt19937 engine(7);
  const Matrix X = design(15, 2, 8);
  const Vector y = simulated::normals(engine, 15, 1);
  const detail::Projection p = detail::project(X, true);
  const detail::PeriodQuality q = detail::period_quality(p, y, true);
  const Matrix H = (X.transpose() * X).inverse();
  const double rss = (y - X * (H * (X.transpose() * y))).squaredNorm();
  const double tss = (y.array() - y.mean()).square().sum();
  EXPECT_NEAR(q.r_squared, 1.0 - rss / tss, 1e-13);
  EXPECT_LT((q.std_error - (H.diagonal() * rss / 12.0).cwiseSqrt()).norm(), 1e-13);
}

}  // namespace
