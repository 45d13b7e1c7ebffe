#include <gtest/gtest.h>

#include <lambdabar/panel/keys.hpp>

#include <map>
#include <random>
#include <set>

namespace {

using lambdabar::Codes;
using lambdabar::Index;

// Codes by first appearance, the slow way.
template <class T>
std::vector<int> expected_codes(const std::vector<T>& x, const T& missing, bool nan = false) {
  std::map<T, int> seen;
  std::vector<int> out;
  for (const T& value : x) {
    if (value == missing || (nan && value != value)) {
      out.push_back(-1);
      continue;
    }
    out.push_back(seen.emplace(value, static_cast<int>(seen.size())).first->second);
  }
  return out;
}

TEST(Keys, IntegersOfNarrowAndWideRange) {
  std::mt19937 random(1);
  for (int spread : {50, 2000000000}) {
    std::uniform_int_distribution<int> draw(-spread, spread);
    std::vector<int> pool(5000), x;
    for (int& value : pool) value = draw(random);
    for (int i = 0; i < 20000; ++i) x.push_back(pool[random() % pool.size()]);
    x[7] = x[100] = INT_MIN;
    std::vector<int> code(x.size());
    const Codes codes = lambdabar::encode_integers(x.data(), 20000, INT_MIN, code.data());
    EXPECT_EQ(code, expected_codes(x, INT_MIN));
    EXPECT_EQ(codes.n_missing, 2);
    for (std::size_t g = 0; g < codes.first.size(); ++g) {
      EXPECT_EQ(code[static_cast<std::size_t>(codes.first[g])], static_cast<int>(g));
    }
  }
}

TEST(Keys, RealsWholeAndNot) {
  std::mt19937 random(2);
  const double nan = std::numeric_limits<double>::quiet_NaN();
  for (double scale : {1.0, 0.37, 1e14}) {
    std::vector<double> x;
    for (int i = 0; i < 5000; ++i) x.push_back(scale * (static_cast<int>(random() % 300) - 150));
    x[3] = nan;
    std::vector<int> code(x.size());
    const Codes codes = lambdabar::encode_reals(x.data(), 5000, code.data());
    EXPECT_EQ(code, expected_codes(x, 1e300, true));
    EXPECT_EQ(codes.n_missing, 1);
  }
}

TEST(Keys, MinusZeroAndZeroAreOneKey) {
  const std::vector<double> x{0.0, -0.0, 0.5};
  std::vector<int> code(3);
  lambdabar::encode_reals(x.data(), 3, code.data());
  EXPECT_EQ(code, (std::vector<int>{0, 0, 1}));
}

TEST(Keys, AllMissing) {
  const std::vector<int> x(4, INT_MIN);
  std::vector<int> code(4);
  const Codes codes = lambdabar::encode_integers(x.data(), 4, INT_MIN, code.data());
  EXPECT_EQ(codes.n_missing, 4);
  EXPECT_TRUE(codes.first.empty());
}

TEST(Keys, Addresses) {
  const int a = 0, b = 0, none = 0;
  const std::vector<const void*> x{&b, &a, &none, &b, &a};
  std::vector<int> code(5);
  const Codes codes = lambdabar::encode_addresses(x.data(), 5, &none, code.data());
  EXPECT_EQ(code, (std::vector<int>{0, 1, -1, 0, 1}));
  EXPECT_EQ(codes.first, (std::vector<Index>{0, 1}));
}

TEST(Duplicates, BitmapAndSortFindTheSameRows) {
  std::mt19937 random(3);
  // The second size makes pairs outnumber the bitmap's limit.
  for (int n_keys : {40, 50000}) {
    std::vector<int> asset, period;
    std::set<std::pair<int, int>> seen;
    std::vector<Index> repeats;
    for (int i = 0; i < 3000; ++i) {
      int a = static_cast<int>(random() % static_cast<unsigned>(n_keys));
      int t = static_cast<int>(random() % static_cast<unsigned>(n_keys));
      if (i > 2900) {
        a = asset[static_cast<std::size_t>(i - 2000)];
        t = period[static_cast<std::size_t>(i - 2000)];
      }
      asset.push_back(a);
      period.push_back(t);
      if (!seen.insert({a, t}).second) repeats.push_back(i);
    }
    const auto found =
        lambdabar::find_duplicates(asset.data(), period.data(), 3000, n_keys, n_keys, 5);
    EXPECT_EQ(found.n_rows, static_cast<Index>(repeats.size()));
    repeats.resize(5);
    EXPECT_EQ(found.rows, repeats);
    for (std::size_t i = 0; i < 5; ++i) {
      const auto row = static_cast<std::size_t>(found.rows[i]);
      const auto earlier = static_cast<std::size_t>(found.earlier[i]);
      EXPECT_LT(earlier, row);
      EXPECT_EQ(asset[earlier], asset[row]);
      EXPECT_EQ(period[earlier], period[row]);
    }
  }
}

TEST(Duplicates, NoneInACompletePanel) {
  const std::vector<int> asset{0, 0, 1, 1}, period{0, 1, 0, 1};
  EXPECT_EQ(lambdabar::find_duplicates(asset.data(), period.data(), 4, 2, 2, 5).n_rows, 0);
}

}  // namespace
