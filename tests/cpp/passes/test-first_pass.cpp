#include <gtest/gtest.h>

#include <lambdabar/passes/first_pass.hpp>

#include "../simulated_panel.hpp"

using namespace lambdabar;

namespace {

struct Line {
  Vector coef, se;  // constant first
  double rss, tss;
  Index n;
};

// One regression with a constant, by normal equations on the rows where y is finite.
Line regress(const Vector& y, const Matrix& factors) {
  std::vector<Index> rows;
  for (Index t = 0; t < y.size(); ++t)
    if (std::isfinite(y(t))) rows.push_back(t);
  const Index n = static_cast<Index>(rows.size());
  Matrix X(n, factors.cols() + 1);
  Vector z(n);
  for (Index i = 0; i < n; ++i) {
    X(i, 0) = 1.0;
    X.row(i).tail(factors.cols()) = factors.row(rows[static_cast<std::size_t>(i)]);
    z(i) = y(rows[static_cast<std::size_t>(i)]);
  }
  const Matrix bread = (X.transpose() * X).inverse();
  Line line;
  line.coef = bread * X.transpose() * z;
  line.rss = (z - X * line.coef).squaredNorm();
  line.tss = (z.array() - z.mean()).square().sum();
  line.n = n;
  line.se = (bread.diagonal() * line.rss / static_cast<double>(n - X.cols())).cwiseSqrt();
  return line;
}

void expect_lines(const FirstPass& first, const Matrix& returns, const Matrix& factors) {
  for (Index i = 0; i < returns.cols(); ++i) {
    const Line line = regress(returns.col(i), factors);
    const Index size = factors.cols();
    EXPECT_LT((first.beta.row(i).transpose() - line.coef.tail(size)).norm(), 1e-12);
    EXPECT_LT((first.beta_se.row(i).transpose() - line.se.tail(size)).norm(), 1e-12);
    EXPECT_NEAR(first.alpha(i), line.coef(0), 1e-12);
    EXPECT_NEAR(first.alpha_se(i), line.se(0), 1e-12);
    EXPECT_NEAR(first.resid_var(i), line.rss / static_cast<double>(line.n), 1e-12);
    EXPECT_NEAR(first.r_squared(i), 1.0 - line.rss / line.tss, 1e-12);
    EXPECT_EQ(first.n_obs[static_cast<std::size_t>(i)], line.n);
  }
}

TEST(FirstPass, is_one_regression_an_asset) {
  const simulated::Panel p = simulated::panel(50, 7, 3, 1);
  expect_lines(first_pass(p.returns, p.factors), p.returns, p.factors);
}

TEST(FirstPass, holes_leave_each_asset_its_own_sample) {
  simulated::Panel p = simulated::panel(60, 9, 2, 2);
  simulated::punch_holes(p.returns, 0.3, 3);
  p.returns(4, 0) = std::numeric_limits<double>::infinity();
  Matrix expected = p.returns;
  expected(4, 0) = kNaN;
  expect_lines(first_pass(p.returns, p.factors), expected, p.factors);
}

TEST(FirstPass, large_means_cost_no_digits) {
  simulated::Panel p = simulated::panel(50, 5, 2, 4);
  const FirstPass plain = first_pass(p.returns, p.factors);
  // Multiples of 2^-30 keep the shifted data exact.
  const double grid = 1073741824.0;
  p.returns = (p.returns * grid).array().round() / grid;
  p.factors = (p.factors * grid).array().round() / grid;
  const FirstPass rounded = first_pass(p.returns, p.factors);
  const FirstPass shifted = first_pass((p.returns.array() + 4096.0).matrix(),
                                       (p.factors.array() + 65536.0).matrix());
  EXPECT_LT(simulated::distance(rounded.beta, plain.beta), 1e-7);
  EXPECT_LT(simulated::distance(shifted.beta, rounded.beta), 1e-11);
  EXPECT_LT(simulated::distance(shifted.resid_var, rounded.resid_var), 1e-11);
}

TEST(FirstPass, thin_assets_are_marked_and_left_empty) {
  simulated::Panel p = simulated::panel(20, 4, 2, 5);
  p.returns.col(1).head(17).setConstant(kNaN);  // three periods, K + 2 = 4 needed
  p.returns.col(2).setConstant(kNaN);
  const FirstPass first = first_pass(p.returns, p.factors);
  EXPECT_EQ(first.min_obs, 4);
  EXPECT_EQ(first.status[0], AssetStatus::estimated);
  EXPECT_EQ(first.status[1], AssetStatus::too_few_periods);
  EXPECT_EQ(first.status[2], AssetStatus::empty);
  EXPECT_EQ(first.n_obs[1], 3);
  EXPECT_TRUE(std::isnan(first.beta(1, 0)) && std::isnan(first.alpha(2)));
  EXPECT_EQ(first_pass(p.returns, p.factors, 21).status[0], AssetStatus::too_few_periods);
}

TEST(FirstPass, factors_that_fail_on_one_sample_only_touch_that_asset) {
  simulated::Panel p = simulated::panel(30, 3, 2, 6);
  p.factors.col(1).head(10).setConstant(0.25);
  p.returns.col(2).tail(20).setConstant(kNaN);
  const FirstPass first = first_pass(p.returns, p.factors);
  EXPECT_EQ(first.status[2], AssetStatus::rank_deficient);
  EXPECT_TRUE(std::isnan(first.beta(2, 0)));
  EXPECT_EQ(first.status[0], AssetStatus::estimated);
}

std::string tag_of(const Matrix& returns, const Matrix& factors) {
  try {
    first_pass(returns, factors);
  } catch (const Error& error) {
    return error.tag();
  }
  return "none";
}

TEST(FirstPass, factors_that_fail_on_all_periods_are_errors) {
  simulated::Panel p = simulated::panel(30, 3, 3, 7);
  Matrix factors = p.factors;
  factors.col(1).setConstant(0.1);
  EXPECT_EQ(tag_of(p.returns, factors), "constant_factor");
  factors = p.factors;
  factors.col(2) = (factors.col(0) - 2.0 * factors.col(1)).array() + 1e3;
  EXPECT_EQ(tag_of(p.returns, factors), "rank");
  factors = p.factors;
  factors(3, 1) = kNaN;
  EXPECT_EQ(tag_of(p.returns, factors), "input");
  EXPECT_EQ(tag_of(p.returns, p.factors.topRows(29)), "input");
  EXPECT_EQ(tag_of(p.returns.topRows(4), p.factors.topRows(4)), "too_few");
}

TEST(FirstPass, bits_do_not_depend_on_threads) {
  simulated::Panel p = simulated::panel(40, 300, 2, 8);
  simulated::punch_holes(p.returns, 0.1, 9);
  const FirstPass one = first_pass(p.returns, p.factors, 0, 1);
  const FirstPass four = first_pass(p.returns, p.factors, 0, 4);
  EXPECT_TRUE((one.beta.array() == four.beta.array()).all());
  EXPECT_TRUE((one.alpha_se.array() == four.alpha_se.array()).all());
}

}  // namespace
