#include <gtest/gtest.h>

#include <lambdabar/passes/absorb.hpp>

#include <random>

using namespace lambdabar;

namespace {

struct Rows {
  std::vector<double> y, x, w;
  std::vector<int> firm, year;

  Column column(const std::vector<double>& values) const {
    Part part;
    part.real = values.data();
    return {{part}};
  }
  Design design() const {
    Design out;
    out.n_rows = static_cast<Index>(y.size());
    out.y = column(y);
    out.x = {column(x)};
    out.weight = {column(w)};
    return out;
  }
  Absorbed run(AbsorbOptions options = {}) const {
    const auto most = [](const std::vector<int>& codes) {
      return static_cast<Index>(*std::max_element(codes.begin(), codes.end()) + 1);
    };
    return absorb(
        design(), {firm.data(), year.data()}, {most(firm), most(year)}, options);
  }
};

Rows ragged(unsigned seed) {
  std::mt19937 random(seed);
  std::normal_distribution<double> normal;
  Rows rows;
  for (int i = 0; i < 30; ++i) {
    for (int t = 0; t < 12; ++t) {
      if (normal(random) < -0.3) continue;
      rows.firm.push_back(i);
      rows.year.push_back(t);
      rows.y.push_back(1e6 + i + 0.1 * t + normal(random));
      rows.x.push_back(normal(random) - 2.0 * i);
      rows.w.push_back(std::exp(normal(random)));
    }
  }
  return rows;
}

}  // namespace

TEST(Absorb, LeavesNoGroupMeanAndTheSameBitsOnAnyNumberOfThreads) {
  const Rows rows = ragged(1);
  AbsorbOptions options;
  options.drop_singletons = false;
  const Absorbed one = rows.run(options);
  options.threads = 3;
  const Absorbed three = rows.run(options);
  EXPECT_TRUE((one.columns.array() == three.columns.array()).all());
  EXPECT_LE(one.worst, 1e-10);
  for (Index k = 0; k < 2; ++k) {
    for (int t = 0; t < 12; ++t) {
      double sum = 0;
      for (std::size_t i = 0; i < rows.y.size(); ++i)
        if (rows.year[i] == t) sum += rows.w[i] * one.columns(static_cast<Index>(i), k);
      EXPECT_NEAR(sum, 0.0, 1e-7);
    }
  }
  EXPECT_EQ(one.rank, 30 + 12 - 1);
  EXPECT_TRUE(one.exact_rank);
}

TEST(Absorb, ColumnsOfTheEffectsAreGone) {
  Rows rows = ragged(2);
  for (std::size_t i = 0; i < rows.x.size(); ++i)
    rows.x[i] = 3.0 * rows.firm[i] - rows.year[i];
  const Absorbed found = rows.run();
  EXPECT_LT(found.kept_share(1), 1e-7);
  EXPECT_EQ(found.columns.col(1).array().isNaN().select(0.0, found.columns.col(1)).norm(),
            0.0);
}

TEST(Absorb, RowsAloneAreDroppedInTurn) {
  Rows rows = ragged(3);
  const Index before = rows.run().n_used;
  // Firm 30 in year 12, which nobody else has, and in year 3.
  for (int year : {12, 3}) {
    rows.firm.push_back(30);
    rows.year.push_back(year);
    rows.y.push_back(1.0);
    rows.x.push_back(2.0);
    rows.w.push_back(1.0);
  }
  const Absorbed found = rows.run();
  EXPECT_EQ(found.n_used, before);
  EXPECT_EQ(found.n_singletons - ragged(3).run().n_singletons, 2);
  EXPECT_TRUE(std::isnan(found.columns(found.columns.rows() - 1, 0)));
}

TEST(Absorb, IslandsAreCountedAndNoConvergenceIsAnError) {
  Rows rows = ragged(4);
  for (std::size_t i = 0; i < rows.firm.size(); ++i)
    if (rows.firm[i] >= 15) rows.year[i] += 12;
  AbsorbOptions options;
  options.drop_singletons = false;
  EXPECT_EQ(rows.run(options).rank, 30 + 24 - 2);
  options.most_steps = 1;
  EXPECT_THROW(rows.run(options), Error);
}
