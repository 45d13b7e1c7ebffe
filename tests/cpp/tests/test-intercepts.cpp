#include <gtest/gtest.h>

#include <lambdabar/passes/two_pass.hpp>
#include <lambdabar/tests/intercepts.hpp>

#include "../simulated_panel.hpp"

#include <fstream>
#include <sstream>

using namespace lambdabar;

namespace {

Matrix read_csv(const std::string& name) {
  std::ifstream in(std::string(LAMBDABAR_FIXTURES) + "/strd/" + name + ".csv");
  std::string line;
  std::getline(in, line);
  std::vector<double> values;
  Index n_rows = 0;
  while (std::getline(in, line)) {
    std::stringstream cells(line);
    std::string cell;
    while (std::getline(cells, cell, ',')) values.push_back(std::stod(cell));
    ++n_rows;
  }
  const Index n_cols = n_rows == 0 ? 0 : static_cast<Index>(values.size()) / n_rows;
  return Eigen::Map<Eigen::Matrix<double, -1, -1, Eigen::RowMajor>>(
      values.data(), n_rows, n_cols);
}

Matrix powers(const Vector& x, Index degree) {
  Matrix out(x.size(), degree);
  for (Index k = 0; k < degree; ++k)
    out.col(k) = x.array().pow(static_cast<double>(k + 1));
  return out;
}

double statistic(const Matrix& returns, const Matrix& factors, AlphaKind kind) {
  return intercept_tests(returns, factors, {kind})[0].statistic;
}

TEST(Intercepts, one_asset_is_the_squared_certified_t) {
  // NIST StRD certified constant and its standard deviation: Norris, Longley, Filip.
  const auto squared_t = [](double b, double sd) { return (b / sd) * (b / sd); };
  const Matrix norris = read_csv("Norris"), longley = read_csv("Longley"),
               filip = read_csv("Filip");
  ASSERT_EQ(norris.rows(), 36);
  EXPECT_NEAR(statistic(norris.col(0), norris.col(1), AlphaKind::grs) /
                  squared_t(-0.262323073774029, 0.232818234301152),
              1.0,
              1e-11);
  EXPECT_NEAR(statistic(longley.col(0), longley.rightCols(6), AlphaKind::grs) /
                  squared_t(-3482258.63459582, 890420.383607373),
              1.0,
              1e-10);
  EXPECT_NEAR(statistic(filip.col(0), powers(filip.col(1), 10), AlphaKind::grs) /
                  squared_t(-1467.48961422980, 298.084530995537),
              1.0,
              1e-6);
}

TEST(Intercepts, forms_are_transforms_of_one_ratio) {
  const simulated::Panel p = simulated::panel(60, 5, 2, 1);
  const auto tests = intercept_tests(
      p.returns,
      p.factors,
      {AlphaKind::grs, AlphaKind::grs_chisq, AlphaKind::grs_lr, AlphaKind::grs_moments});
  const double ratio = tests[1].statistic / 60.0;
  EXPECT_NEAR(tests[0].statistic, ratio * (60 - 5 - 2) / 5.0, 1e-12);
  EXPECT_NEAR(tests[2].statistic, 60.0 * std::log(1.0 + ratio), 1e-11);
  EXPECT_EQ(tests[0].df1, 5.0);
  EXPECT_EQ(tests[0].df2, 53.0);
  for (std::size_t k = 1; k < 4; ++k) {
    EXPECT_EQ(tests[k].df1, 5.0);
    EXPECT_TRUE(std::isnan(tests[k].df2));
  }
}

double squared_sharpe(const Matrix& returns) {
  const Vector mean = returns.colwise().mean();
  const Matrix d = returns.rowwise() - mean.transpose();
  const Matrix V = d.transpose() * d / static_cast<double>(returns.rows());
  return mean.dot(V.fullPivLu().solve(mean));
}

TEST(Intercepts, statistic_is_a_difference_of_squared_sharpe_ratios) {
  const simulated::Panel p = simulated::panel(60, 5, 2, 2);
  Matrix all(60, 7);
  all << p.returns, p.factors;
  const double of_factors = squared_sharpe(p.factors);
  const double expected = 60.0 * (squared_sharpe(all) - of_factors) / (1.0 + of_factors);
  EXPECT_NEAR(
      statistic(p.returns, p.factors, AlphaKind::grs_chisq) / expected, 1.0, 1e-11);
}

TEST(Intercepts, moment_form_is_the_sandwich_of_each_regression) {
  const simulated::Panel p = simulated::panel(60, 3, 2, 3);
  SeriesOptions nw;
  nw.lags = 4;
  Matrix X(60, 3);
  X << Vector::Ones(60), p.factors;
  const Matrix bread = (X.transpose() * X).inverse();
  const Matrix coef = bread * X.transpose() * p.returns;
  const Matrix e = p.returns - X * coef;
  const Matrix rows = (X * bread.col(0)).asDiagonal() * e;
  const Vector a = coef.row(0);
  for (const SeriesOptions& series : {SeriesOptions{}, nw}) {
    const Matrix S = detail::kernel_sum(rows,
                                        detail::consecutive(60),
                                        Kernel::bartlett,
                                        kernel_divisor(Kernel::bartlett, series.lags));
    const AlphaTest test =
        intercept_tests(p.returns, p.factors, {AlphaKind::grs_moments}, series)[0];
    EXPECT_NEAR(test.statistic / a.dot(S.fullPivLu().solve(a)), 1.0, 1e-11);
    EXPECT_EQ(test.lags, series.lags);
  }
}

TEST(Intercepts, chisquare_is_the_white_form_in_a_product_sample) {
  // Every factor value meets every error row.
  std::mt19937 engine(4);
  const Matrix f = simulated::normals(engine, 7, 1).array() + 0.6;
  Matrix e = simulated::normals(engine, 9, 3);
  e.rowwise() -= e.colwise().mean();
  Matrix returns(63, 3), factors(63, 1);
  for (Index s = 0; s < 7; ++s)
    for (Index j = 0; j < 9; ++j) {
      factors(9 * s + j, 0) = f(s, 0);
      returns.row(9 * s + j) = (e.row(j).array() + 0.2 + f(s, 0)).matrix();
    }
  EXPECT_NEAR(statistic(returns, factors, AlphaKind::grs_moments) /
                  statistic(returns, factors, AlphaKind::grs_chisq),
              1.0,
              1e-11);
}

TEST(Intercepts, repackaging_and_units_change_nothing) {
  const simulated::Panel p = simulated::panel(60, 4, 2, 5);
  std::mt19937 engine(6);
  const Matrix mix = simulated::normals(engine, 4, 4);
  Matrix turn(2, 2);
  turn << 0.3, 1.0, -40.0, 2.0;
  for (AlphaKind kind : {AlphaKind::grs, AlphaKind::grs_moments})
    EXPECT_NEAR(statistic(p.returns * mix, p.factors * turn, kind) /
                    statistic(p.returns, p.factors, kind),
                1.0,
                1e-9);
}

TEST(Intercepts, are_refused_with_a_reason) {
  const simulated::Panel p = simulated::panel(12, 10, 2, 7);
  const std::vector<AlphaKind> kinds{AlphaKind::grs, AlphaKind::grs_lr};
  for (const AlphaTest& test : intercept_tests(p.returns, p.factors, kinds)) {
    EXPECT_TRUE(std::isnan(test.statistic));
    EXPECT_EQ(test.refusal, Refusal::too_few_periods);
    EXPECT_EQ(test.facts[0].second, 10.0);
  }
  EXPECT_EQ(intercept_tests(p.returns.leftCols(9), p.factors, kinds)[0].refusal,
            Refusal::none);
  Matrix twice = p.returns.leftCols(4);
  twice.col(3) = 2.0 * twice.col(0);
  for (AlphaKind kind : {AlphaKind::grs, AlphaKind::grs_moments})
    EXPECT_EQ(intercept_tests(twice, p.factors, {kind})[0].refusal, Refusal::singular);
  EXPECT_THROW(intercept_tests(p.returns, p.factors, {AlphaKind::averaged}), Error);
  twice(2, 2) = kNaN;
  EXPECT_THROW(intercept_tests(twice, p.factors, {AlphaKind::grs}), Error);
}

}  // namespace
