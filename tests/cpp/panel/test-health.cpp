#include <gtest/gtest.h>

#include <lambdabar/panel/health.hpp>
#include <lambdabar/panel/reshape.hpp>

namespace {

using lambdabar::Column;
using lambdabar::Index;
using lambdabar::kNaN;
using lambdabar::Part;

Column real_column(const std::vector<double>& x) {
  Part part;
  part.real = x.data();
  return {{part}};
}

TEST(Health, CountsOddValuesAndConstantPeriods) {
  const double inf = std::numeric_limits<double>::infinity();
  const std::vector<double> x{1, 1, kNaN, 2, -3, inf, 5, kNaN};
  const std::vector<int> period{0, 0, 0, 1, 1, 1, 2, 2};
  const auto health = lambdabar::column_health(real_column(x), 8, period.data(), 3);
  EXPECT_EQ(health.n_missing, 2);
  EXPECT_EQ(health.n_infinite, 1);
  EXPECT_EQ(health.minimum, -3);
  EXPECT_EQ(health.maximum, 5);
  EXPECT_EQ(health.n_periods_compared, 2);
  EXPECT_EQ(health.n_periods_constant, 1);
  EXPECT_EQ(health.mean_size, (std::vector<double>{1, 2.5, 5}));
}

TEST(Health, SpansCountCalendarSlots) {
  const std::vector<int> asset{0, 0, 1}, period{0, 2, 1};
  const auto spans = lambdabar::asset_spans(asset.data(), period.data(), 3, 2, {1, 3, 6});
  EXPECT_EQ(spans.n_rows, (std::vector<Index>{2, 1}));
  EXPECT_EQ(spans.first_slot, (std::vector<Index>{1, 3}));
  EXPECT_EQ(spans.last_slot, (std::vector<Index>{6, 3}));
  EXPECT_EQ(spans.n_assets, (std::vector<Index>{1, 1, 1}));
}

TEST(Columns, AreProductsOfParts) {
  const std::vector<double> x{1.5, 2, kNaN};
  const std::vector<int> code{2, 1, 1}, with_gap{lambdabar::kMissingInt, 7, 1};
  const std::vector<double> table{0, 10};
  Part real, coded, whole;
  real.real = x.data();
  coded.code = code.data();
  coded.table = table.data();
  whole.code = with_gap.data();
  std::vector<double> out(3);
  const Column product{{real, coded}};
  product.read(0, 3, out.data());
  EXPECT_EQ(out[0], 15);
  EXPECT_EQ(out[1], 0);
  EXPECT_TRUE(std::isnan(out[2]));
  EXPECT_EQ(product.at(0), 15);
  EXPECT_EQ(product.plain(), nullptr);
  const Column one{{whole}};
  one.read(0, 2, out.data());
  EXPECT_TRUE(std::isnan(out[0]));
  EXPECT_EQ(out[1], 7);
  EXPECT_EQ(real_column(x).plain(), x.data());
}

TEST(Reshape, WidensAndKeepsHoles) {
  const std::vector<double> x{1, 2, kNaN, 4};
  const std::vector<int> asset{0, 1, 1, 0}, period{0, 0, 1, 2};
  const auto wide = lambdabar::widen(real_column(x), 4, asset.data(), period.data(), 2, 3);
  EXPECT_EQ(wide(0, 0), 1);
  EXPECT_EQ(wide(0, 1), 2);
  EXPECT_EQ(wide(2, 0), 4);
  EXPECT_TRUE(std::isnan(wide(1, 0)) && std::isnan(wide(1, 1)) && std::isnan(wide(2, 1)));
}

TEST(Reshape, FactorsHaveOneValueAPeriod) {
  const std::vector<double> x{1, kNaN, 1 + 1e-15, 3, 4, 5};
  const std::vector<int> period{0, 0, 0, 1, 1, 1};
  const auto values = lambdabar::period_values(real_column(x), 6, period.data(), 3);
  EXPECT_EQ(values.value(0), 1);
  EXPECT_TRUE(std::isnan(values.value(2)));
  EXPECT_EQ(values.conflict_row, 4);
  EXPECT_EQ(values.n_conflicts, 1);
}

}  // namespace
