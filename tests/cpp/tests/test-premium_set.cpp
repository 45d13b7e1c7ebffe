#include <gtest/gtest.h>

#include <lambdabar/tests/premium_set.hpp>
#include <lambdabar/tests/rank.hpp>

#include "../simulated_panel.hpp"

using namespace lambdabar;

namespace {

double statistic(const PremiumSets& sets, const Vector& premia) {
  Vector v(premia.size() + 1);
  v << 1.0, -premia;
  return v.dot(sets.YY * v) / v.dot(sets.one_Q * v);
}

Matrix no_signs(Index T) { return Matrix::Ones(T, 0); }

}  // namespace

TEST(QuadraticSet, EveryShape) {
  using detail::quadratic_set;
  EXPECT_EQ(quadratic_set(1, 0, 1).shape, SetShape::empty);
  const PremiumSet interval = quadratic_set(-4, 0, 1);  // l^2 <= 4
  EXPECT_EQ(interval.shape, SetShape::interval);
  EXPECT_DOUBLE_EQ(interval.pieces[0].first, -2.0);
  EXPECT_DOUBLE_EQ(interval.pieces[0].second, 2.0);
  EXPECT_EQ(quadratic_set(-1, 0, -1).shape, SetShape::line);
  const PremiumSet rays = quadratic_set(4, 0, -1);  // l^2 >= 4
  EXPECT_EQ(rays.shape, SetShape::rays);
  ASSERT_EQ(rays.pieces.size(), 2u);
  EXPECT_DOUBLE_EQ(rays.pieces[0].second, -2.0);
  EXPECT_DOUBLE_EQ(rays.pieces[1].first, 2.0);
  const PremiumSet ray = quadratic_set(2, 1, 0);  // -2 l + 2 <= 0
  ASSERT_EQ(ray.pieces.size(), 1u);
  EXPECT_DOUBLE_EQ(ray.pieces[0].first, 1.0);
  EXPECT_EQ(quadratic_set(1, 0, 0).shape, SetShape::empty);
  EXPECT_EQ(quadratic_set(-1, 0, 0).shape, SetShape::line);
}

TEST(PremiumSets, EndsOfASingleSetAreAtTheCriticalValue) {
  const simulated::Panel p = simulated::panel(120, 7, 1, 8);
  for (bool intercept : {true, false}) {
    const double critical = 0.2;
    const PremiumSets sets =
        premium_sets(p.returns, p.factors, intercept, critical, critical);
    for (const auto& piece : sets.each[0].pieces)
      for (double end : {piece.first, piece.second})
        if (std::isfinite(end)) {
          Vector at(1);
          at << end;
          EXPECT_NEAR(statistic(sets, at), critical, 1e-10);
        }
    EXPECT_NEAR(statistic(sets, sets.joint.estimate), sets.joint.smallest, 1e-10);
  }
}

TEST(PremiumSets, TheScanFindsTheClosedSetOfManyPeriodsNearly) {
  const simulated::Panel p = simulated::panel(4000, 5, 1, 9);
  const double chisq = 9.4877;  // upper 5 % point with 4 degrees of freedom, from memory
  const PremiumSets closed =
      premium_sets(p.returns, p.factors, true, chisq / 4000, chisq / 4000);
  const PremiumSet scanned =
      premium_set_by_scan(p.returns, p.factors, true, false, chisq, {}, {});
  ASSERT_EQ(scanned.shape, closed.each[0].shape);
  if (scanned.shape == SetShape::interval) {
    const double width = closed.each[0].pieces[0].second - closed.each[0].pieces[0].first;
    EXPECT_NEAR(scanned.pieces[0].first, closed.each[0].pieces[0].first, 0.2 * width);
    EXPECT_NEAR(scanned.pieces[0].second, closed.each[0].pieces[0].second, 0.2 * width);
  }
}

TEST(RankTest, FormsAgreeOnTheirRootsAndBootstrapCounts) {
  const simulated::Panel p = simulated::panel(100, 6, 2, 10);
  const RankTest cd = rank_test(
      p.returns, p.factors, true, 1, RankKind::cragg_donald, {}, {}, no_signs(100));
  const RankTest bartlett =
      rank_test(p.returns, p.factors, true, 1, RankKind::bartlett, {}, {}, no_signs(100));
  const double d = cd.statistic / 100.0;
  EXPECT_NEAR(bartlett.statistic, (99.0 - 0.5 * 8.0) * std::log1p(d), 1e-10);
  EXPECT_EQ(cd.df, 4.0);
  EXPECT_TRUE(std::isnan(cd.p_bootstrap));
  Matrix signs = Matrix::Ones(100, 19);
  for (Index j = 0; j < 19; ++j)
    for (Index t = 0; t < 100; ++t)
      if ((t * 7 + j * 13 + t * j) % 3 == 0) signs(t, j) = -1.0;
  const RankTest drawn =
      rank_test(p.returns, p.factors, true, 1, RankKind::kleibergen_paap, {}, {}, signs);
  EXPECT_GE(drawn.p_bootstrap, 1.0 / 20.0);
  EXPECT_LE(drawn.p_bootstrap, 1.0);
}

TEST(RankTest, RefusesTooFewAssetsOrPeriods) {
  const simulated::Panel p = simulated::panel(12, 3, 2, 11);
  const simulated::Panel short_panel = simulated::panel(9, 8, 1, 11);
  EXPECT_THROW(rank_test(p.returns.leftCols(2),
                         p.factors,
                         true,
                         1,
                         RankKind::bartlett,
                         {},
                         {},
                         no_signs(12)),
               Error);
  EXPECT_THROW(rank_test(short_panel.returns,
                         short_panel.factors,
                         false,
                         0,
                         RankKind::bartlett,
                         {},
                         {},
                         no_signs(9)),
               Error);
}
