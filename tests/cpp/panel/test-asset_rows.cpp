#include <gtest/gtest.h>

#include <lambdabar/panel/asset_rows.hpp>

using namespace lambdabar;

namespace {

std::vector<Index> listed(const AssetRows& rows, Index asset) {
  std::vector<Index> out;
  for (Index i = rows.begin(asset); i < rows.end(asset); ++i) out.push_back(rows.row(i));
  return out;
}

}  // namespace

TEST(AssetRows, KeepsRowsThatLieInOrder) {
  const std::vector<int> asset = {0, 0, 2, 2}, time = {1, 3, 0, 1};
  const AssetRows rows(asset.data(), time.data(), 4, 3, 4);
  EXPECT_EQ(listed(rows, 0), (std::vector<Index>{0, 1}));
  EXPECT_TRUE(listed(rows, 1).empty());
  EXPECT_EQ(listed(rows, 2), (std::vector<Index>{2, 3}));
}

TEST(AssetRows, OrdersRowsByPeriodAndShuffledRows) {
  const std::vector<int> asset = {1, 0, 1, 0, 1}, by_time = {0, 1, 1, 2, 3};
  const AssetRows ordered(asset.data(), by_time.data(), 5, 2, 4);
  EXPECT_EQ(listed(ordered, 0), (std::vector<Index>{1, 3}));
  EXPECT_EQ(listed(ordered, 1), (std::vector<Index>{0, 2, 4}));
  const std::vector<int> shuffled = {3, 2, 0, 1, 1};
  const AssetRows sorted(asset.data(), shuffled.data(), 5, 2, 4);
  EXPECT_EQ(listed(sorted, 0), (std::vector<Index>{3, 1}));
  EXPECT_EQ(listed(sorted, 1), (std::vector<Index>{2, 4, 0}));
}
