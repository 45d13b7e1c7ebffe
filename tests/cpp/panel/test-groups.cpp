#include <gtest/gtest.h>

#include <lambdabar/panel/groups.hpp>

using namespace lambdabar;

TEST(Groups, BreakpointsInterpolateOrderStatistics) {
  const std::vector<double> got = breakpoints({4, 1, 3, 2}, 4);
  EXPECT_EQ(got, (std::vector<double>{1.75, 2.5, 3.25}));
  EXPECT_EQ(breakpoints({7}, 3), (std::vector<double>{7, 7}));
  EXPECT_TRUE(breakpoints({7}, 1).empty());
}

TEST(Groups, TiesStayTogetherAndClassesMayBeEmpty) {
  const std::vector<double> value = {1, 1, 1, 5};
  const std::vector<int> all = {1, 1, 1, 1};
  std::vector<int> cell = {0, 0, 0, 0};
  refine_cells(value.data(), all.data(), 4, 1, 3, cell.data());
  EXPECT_EQ(cell, (std::vector<int>{0, 0, 0, 2}));
}

TEST(Groups, CellMeansSkipMissingReturnsAndRowsWithoutCell) {
  const std::vector<double> y = {1, 3, kNaN, 8};
  const std::vector<int> period = {0, 0, 0, 1}, cell = {1, 1, 1, -1};
  Part part;
  part.real = y.data();
  Column column;
  column.parts.push_back(part);
  const CellMeans got = cell_means(column, period.data(), cell.data(), 4, 2, 2);
  EXPECT_EQ(got.mean(0, 1), 2.0);
  EXPECT_EQ(got.count(0, 1), 2.0);
  EXPECT_TRUE(std::isnan(got.mean(1, 1)));
  EXPECT_TRUE(std::isnan(got.mean(0, 0)));
}
