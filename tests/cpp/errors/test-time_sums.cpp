#include <gtest/gtest.h>

#include <lambdabar/errors/time_sums.hpp>
#include <lambdabar/tests/stability.hpp>

#include "../simulated_panel.hpp"

using namespace lambdabar;

namespace {

Matrix centred_rows(Index T, Index P) {
  Matrix rows = simulated::panel(T, P, 1, 16).returns;
  rows.rowwise() -= rows.colwise().mean().eval();
  return rows / static_cast<double>(T);
}

}  // namespace

TEST(TimeSums, AllCosinesAreIndependentPeriods) {
  const Matrix rows = centred_rows(30, 3);
  const Matrix expected = outer_sum(rows) * (30.0 / 29.0);
  EXPECT_LT((cosine_sum(rows, 29) - expected).norm(), 1e-12 * expected.norm());
  EXPECT_THROW(cosine_sum(rows, 30), Error);
}

TEST(TimeSums, GroupsOfOnePeriodAreIndependentPeriods) {
  const Matrix rows = centred_rows(30, 3);
  const Matrix expected = outer_sum(rows) * (30.0 / 29.0);
  EXPECT_LT((block_sum(rows, 30) - expected).norm(), 1e-12 * expected.norm());
  EXPECT_THROW(block_sum(rows, 31), Error);
}

TEST(TimeSums, BlocksOfOnePeriodAreIndependentPeriods) {
  const Matrix rows = centred_rows(30, 2);
  const Matrix expected = outer_sum(rows);
  EXPECT_LT((geometric_sum(rows, 1.0) - expected).norm(), 1e-12 * expected.norm());
}

TEST(TimeSums, ResampledStatisticsAreTheSameOnAnyNumberOfThreads) {
  const Matrix rows = centred_rows(40, 2);
  std::vector<int> index;
  for (int i = 0; i < 40 * 50; ++i) index.push_back((i * 17 + i / 40) % 40);
  const Matrix one = resampled_t(rows, index, 4.0, 1),
               four = resampled_t(rows, index, 4.0, 4);
  EXPECT_TRUE((one.array() == four.array()).all());
}

TEST(TimeSums, BlockLengthsStayInTheirBounds) {
  EXPECT_EQ(block_length(Vector::Constant(50, 2.0)), 1.0);
  const double length = block_length(Vector::LinSpaced(50, 0.0, 1.0));
  EXPECT_GE(length, 1.0);
  EXPECT_LE(length, std::ceil(std::min(3.0 * std::sqrt(50.0), 50.0 / 3.0)));
}

TEST(Breaks, AStepIsFoundWhereItIs) {
  Vector x(60);
  for (Index t = 0; t < 60; ++t)
    x(t) = (t >= 25 ? 1.0 : 0.0) + 0.1 * std::sin(3.0 * static_cast<double>(t));
  const BreakScan scan = scan_breaks(x, 0.15, {}, {});
  Index best = 0;
  scan.wald.maxCoeff(&best);
  EXPECT_EQ(scan.first_date + best, 25);
  EXPECT_THROW(scan_breaks(x.head(4), 0.15, {}, {}), Error);
}
