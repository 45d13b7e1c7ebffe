#include <gtest/gtest.h>

#include <lambdabar/errors/average_clusters.hpp>
#include <lambdabar/errors/few_clusters.hpp>
#include <lambdabar/passes/average.hpp>

#include <random>

using namespace lambdabar;

namespace {

// A panel of 20 assets in 15 periods with holes; assets in 5 clusters.
struct Rows {
  std::vector<double> y, a, b, w;
  std::vector<int> asset, period, cluster;

  Rows() {
    std::mt19937 random(5);
    std::normal_distribution<double> normal;
    for (int i = 0; i < 20; ++i) {
      for (int t = 0; t < 15; ++t) {
        if ((i * 7 + t * 3) % 11 == 0) continue;
        asset.push_back(i);
        period.push_back(t);
        cluster.push_back(i % 5);
        a.push_back(normal(random) + 1000.0);
        b.push_back(normal(random) + 0.1 * (i % 5));
        w.push_back(std::exp(0.2 * normal(random)));
        y.push_back(0.5 * a.back() - b.back() + normal(random));
      }
    }
  }

  Design design() const {
    Design out;
    out.n_rows = static_cast<Index>(y.size());
    out.period = period.data();
    out.n_periods = 15;
    out.y = column(y);
    out.x = {column(a), column(b)};
    out.weight = {column(w)};
    return out;
  }

  static Column column(const std::vector<double>& values) {
    Part part;
    part.real = values.data();
    return {{part}};
  }
};

Matrix signs(Index G) {
  Matrix out(G, Index{1} << G);
  for (Index j = 0; j < out.cols(); ++j)
    for (Index g = 0; g < G; ++g) out(g, j) = (j >> g) % 2 ? 1.0 : -1.0;
  return out;
}

}  // namespace

TEST(FewClusters, MomentsAddUpToTheIdentityAndZero) {
  const Rows rows;
  const Design design = rows.design();
  const PooledFit fit = pooled(design, 1);
  const ClusterMoments m = cluster_moments(design, fit, rows.cluster.data(), 5);
  ASSERT_EQ(m.n_groups(), 5);
  Matrix S = Matrix::Zero(3, 3);
  for (const Matrix& at : m.S) S += at;
  EXPECT_LT((S - Matrix::Identity(3, 3)).norm(), 1e-9);
  EXPECT_LT(m.s.rowwise().sum().norm(), 1e-9 * m.s.norm());
}

TEST(FewClusters, CorrectionsAreLargerThanPlainClusters) {
  const Rows rows;
  const Design design = rows.design();
  const PooledFit fit = pooled(design, 1);
  const ClusterMoments m = cluster_moments(design, fit, rows.cluster.data(), 5);
  const Matrix plain =
      clustered(design, fit, {rows.cluster.data()}, {5}, SmallSample::none, 1).vcov;
  const FewClusters cr2 = few_clusters(m, 0.5), cr3 = few_clusters(m, 1.0);
  for (Index j = 0; j < 3; ++j) {
    EXPECT_GT(cr2.vcov(j, j), plain(j, j));
    EXPECT_GT(cr3.vcov(j, j), plain(j, j));
    EXPECT_GT(cr2.df(j), 0.9);
    EXPECT_LT(cr2.df(j), 5.0);
  }
  EXPECT_EQ(cr3.undecided, -1);
}

TEST(WildBootstrap, DrawsOfOnesRebuildTheSample) {
  const Rows rows;
  const Design design = rows.design();
  const PooledFit fit = pooled(design, 1);
  const ClusterMoments m = cluster_moments(design, fit, rows.cluster.data(), 5);
  const WildDraws draws = wild_draws(m, 1, signs(5));
  const double x = fit.coef(1) - 0.3;
  const Index all = draws.n0.size() - 1;
  const double numerator = draws.n0(all) + x * draws.n1(all);
  const double squares = draws.a(all) + x * (2.0 * draws.b(all) + x * draws.c(all));
  EXPECT_NEAR(numerator / std::sqrt(squares), x / std::sqrt(draws.scale), 1e-7);
  // Ties count: the smallest p of five clusters is 2 in 32.
  EXPECT_GE(wild_share(draws, 50.0 * x, true), 2.0 / 32.0);
  EXPECT_EQ(wild_share(draws, 0.0, true), 1.0);
  EXPECT_TRUE(std::isinf(wild_reach(
      [&](double at) { return wild_share(draws, at, true); }, std::sqrt(draws.scale), 0.05)));
}

TEST(AverageClusters, PeriodsGiveTheUsualErrorAndFarMeansCostNothing) {
  const Rows rows;
  const Design design = rows.design();
  const CrossSections sections = cross_sections(design, CrossSectionOptions());
  Matrix slopes(15, 3);
  for (Index t = 0; t < 15; ++t) slopes.row(t) = sections.coef.col(t).transpose();
  const AveragedPremia average =
      average_premia(slopes, Matrix::Ones(15, 3), Vector::Ones(15), Average::equal);
  const Matrix usual = average.rows.transpose() * average.rows * (15.0 / 14.0);
  const ClusterCovariance found = clustered_average(design,
                                                    Vector::Constant(15, 1.0 / 15.0),
                                                    average.estimate,
                                                    {rows.period.data()},
                                                    {15},
                                                    SmallSample::each);
  for (Index i = 0; i < 3; ++i)
    for (Index j = 0; j < 3; ++j)
      EXPECT_NEAR(found.vcov(i, j), usual(i, j), 1e-7 * std::sqrt(usual(i, i) * usual(j, j)));
}
