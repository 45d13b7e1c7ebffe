#include <gtest/gtest.h>

#include <lambdabar/passes/average.hpp>
#include <lambdabar/passes/predict.hpp>
#include <lambdabar/passes/usage.hpp>

#include <random>

namespace {

using lambdabar::Average;
using lambdabar::Design;
using lambdabar::Index;
using lambdabar::kNaN;
using lambdabar::Matrix;
using lambdabar::Vector;

Matrix draw(Index rows, Index cols, unsigned seed) {
  std::mt19937 random(seed);
  std::normal_distribution<double> normal;
  return Matrix::NullaryExpr(rows, cols, [&] { return normal(random); });
}

TEST(Average, EqualWeightsGiveTheSampleVarianceOfTheMean) {
  const Matrix b = draw(12, 3, 1);
  const auto out = lambdabar::average_premia(b, Matrix::Ones(12, 3), Vector::Ones(12), Average::equal);
  EXPECT_LT((out.estimate - b.colwise().mean().transpose()).norm(), 1e-15);
  EXPECT_LT(out.rows.colwise().sum().norm(), 1e-15);
  const Matrix centred = b.rowwise() - b.colwise().mean();
  const Matrix expected = centred.transpose() * centred / (12.0 * 11.0);
  const Matrix V = 12.0 / 11.0 * out.rows.transpose() * out.rows;
  EXPECT_LT((V - expected).norm(), 1e-15);
  EXPECT_DOUBLE_EQ(out.small_sample(0), 12.0 / 11.0);
}

// For independent slopes with one variance s2, E sum row^2 = s2 (sum w^2) / factor.
TEST(Average, SmallSampleFactorIsUnbiasedForUnequalWeights) {
  Vector n(5);
  n << 10, 20, 5, 40, 25;
  const Vector w = n / n.sum();
  const Matrix rows_of_unit = Matrix(w.asDiagonal()) - w * w.transpose();
  const auto out = lambdabar::average_premia(draw(5, 1, 2), Matrix::Ones(5, 1), n, Average::assets);
  EXPECT_NEAR(out.small_sample(0), w.squaredNorm() / rows_of_unit.squaredNorm(), 1e-13);
}

TEST(Average, PrecisionWeighsEachSlopeOnItsOwn) {
  const Matrix b = draw(6, 2, 3), se = draw(6, 2, 4).cwiseAbs();
  const auto out = lambdabar::average_premia(b, se, Vector::Ones(6), Average::precision);
  for (Index j = 0; j < 2; ++j) {
    const Vector w = se.col(j).array().square().inverse();
    EXPECT_NEAR(out.estimate(j), w.dot(b.col(j)) / w.sum(), 1e-14);
  }
  Matrix exact = se;
  exact(2, 1) = 0;
  EXPECT_THROW(lambdabar::average_premia(b, exact, Vector::Ones(6), Average::precision),
               lambdabar::Error);
}

struct SmallDesign {
  std::vector<double> y{1, kNaN, 3, 4}, x{1, 1, kNaN, 2}, w{1, 1, 1, 0};
  std::vector<int> period{0, 0, 1, 1};
  Design design() {
    lambdabar::Part part_y, part_x, part_w;
    part_y.real = y.data();
    part_x.real = x.data();
    part_w.real = w.data();
    Design out;
    out.n_rows = 4;
    out.period = period.data();
    out.n_periods = 2;
    out.y.parts = {part_y};
    out.x = {{{part_x}}};
    out.weight = {{{part_w}}};
    return out;
  }
};

TEST(Usage, CountsByFirstMissingVariable) {
  SmallDesign data;
  const std::vector<int> asset{0, 1, 0, 1};
  const auto usage = lambdabar::count_usage(data.design(), asset.data(), 2, {1, 1});
  EXPECT_EQ(usage.n_rows, (std::vector<Index>{2, 2}));
  EXPECT_EQ(usage.n_used, (std::vector<Index>{1, 0}));
  EXPECT_EQ(usage.missing(0, 0), 1);
  EXPECT_EQ(usage.missing(1, 1), 1);
  EXPECT_EQ(usage.missing(2, 1), 1);
  EXPECT_EQ(usage.n_assets, 1);
}

TEST(Predict, SkipsCollinearTermsAndKeepsHoles) {
  SmallDesign data;
  Vector coef(2);
  coef << 0.5, 2;
  const Vector fitted = lambdabar::linear_predictor(data.design(), coef);
  EXPECT_EQ(fitted(0), 2.5);
  EXPECT_TRUE(std::isnan(fitted(2)));
  coef(1) = kNaN;
  EXPECT_EQ(lambdabar::linear_predictor(data.design(), coef)(2), 0.5);
}

}  // namespace
