#include "sample-panel.hpp"

#include <gtest/gtest.h>

#include <cstring>

using namespace lambdabar;
using namespace lambdabar::sample;

namespace {

void expect_reference(const Design& design, const PooledFit& fit, double tolerance) {
  const Reference wanted = plain_qr(design, [](Index) { return true; });
  ASSERT_EQ(fit.rank, design.n_terms());
  EXPECT_EQ(fit.n_used, wanted.n);
  for (Index j = 0; j < wanted.coef.size(); ++j) {
    const double scale = std::abs(wanted.coef[j]) + wanted.std_error[j];
    EXPECT_LE(std::abs(fit.coef[j] - wanted.coef[j]), tolerance * scale) << j;
    const double std_error = std::sqrt(fit.sigma2 * fit.bread(j, j));
    EXPECT_LE(std::abs(std_error - wanted.std_error[j]), tolerance * wanted.std_error[j]);
  }
  EXPECT_LE(std::abs(fit.rss - wanted.rss), tolerance * wanted.rss);
  EXPECT_LE(std::abs(fit.tss - wanted.tss), tolerance * wanted.tss);
}

// sum_i w x e over the complete rows, relative to the sizes of its summands.
double largest_gradient(const Design& design, const PooledFit& fit) {
  const Vector e = pooled_residuals(design, fit);
  const Index first = design.intercept ? 1 : 0;
  Vector sum = Vector::Zero(design.n_terms()), size = sum;
  detail::RowValues v;
  v.values.resize(design.x.size() + 1);
  for (Index i = 0; i < design.n_rows; ++i) {
    if (!detail::read_row(design, i, v)) continue;
    for (Index j = 0; j < design.n_terms(); ++j) {
      const double x = j < first ? 1 : v.values[static_cast<std::size_t>(j - first) + 1];
      sum[j] += v.weight * x * e[i];
      size[j] += std::abs(v.weight * x * e[i]);
    }
  }
  return sum.cwiseAbs().cwiseQuotient(size).maxCoeff();
}

}  // namespace

TEST(Pooled, AgreesWithAPlainQr) {
  const Panel panel = ragged_panel(90, 40, 4, 101);
  for (const bool intercept : {true, false}) {
    for (const bool weighted : {true, false}) {
      const Design design = panel.design(intercept, weighted);
      const PooledFit fit = pooled(design, 1);
      EXPECT_FALSE(fit.from_rows);
      expect_reference(design, fit, 1e-12);
      EXPECT_LT(largest_gradient(design, fit), 1e-12);
      EXPECT_NEAR(fit.r_squared, 1 - fit.rss / fit.tss, 1e-15);
    }
  }
}

TEST(Pooled, ManyChunksAnyOrderAnyThreads) {
  const Panel panel = ragged_panel(900, 150, 2, 102);
  const Design design = panel.design(true, true);
  const PooledFit one = pooled(design, 1);
  expect_reference(design, one, 1e-12);
  for (const int threads : {2, 5}) {
    const PooledFit fit = pooled(design, threads);
    EXPECT_EQ(0, std::memcmp(fit.coef.data(), one.coef.data(), 3 * sizeof(double)));
    EXPECT_EQ(0, std::memcmp(fit.bread.data(), one.bread.data(), 9 * sizeof(double)));
    EXPECT_EQ(fit.rss, one.rss);
  }
  const Panel shuffled = panel.shuffled(3);
  const PooledFit other = pooled(shuffled.design(true, true), 1);
  EXPECT_LT((other.coef - one.coef).cwiseAbs().maxCoeff(), 1e-12);
}

TEST(Pooled, RowsFactoredInChunks) {
  // Nearly collinear, so that the rows of several chunks are folded into triangles.
  Panel panel = ragged_panel(900, 120, 2, 103);
  for (std::size_t i = 0; i < panel.n(); ++i) {
    panel.x[1][i] = panel.x[0][i] + 1e-5 * panel.w[i];
  }
  const Design design = panel.design(true, true);
  const PooledFit one = pooled(design, 1), three = pooled(design, 3);
  EXPECT_TRUE(one.from_rows);
  expect_reference(design, one, 1e-11);
  EXPECT_EQ(0, std::memcmp(one.coef.data(), three.coef.data(), 3 * sizeof(double)));
  EXPECT_EQ(0, std::memcmp(one.bread.data(), three.bread.data(), 9 * sizeof(double)));
}

TEST(Pooled, AliasedTermsAreLeftOut) {
  Panel panel = ragged_panel(50, 20, 5, 104);
  for (std::size_t i = 0; i < panel.n(); ++i) {
    panel.x[1][i] = 2 * panel.x[0][i] - 7;
    panel.x[3][i] = panel.x[0][i] - panel.x[2][i];
  }
  const Design design = panel.design(true, true);
  const PooledFit fit = pooled(design, 1);
  EXPECT_EQ(fit.aliased, (std::vector<bool>{false, false, true, false, true, false}));
  EXPECT_EQ(fit.rank, 4);
  EXPECT_TRUE(std::isnan(fit.coef[2]) && std::isnan(fit.coef[4]));

  Panel kept = panel;
  kept.x = {panel.x[0], panel.x[2], panel.x[4]};
  const Design kept_design = kept.design(true, true);
  const PooledFit wanted = pooled(kept_design, 1);
  const std::vector<Index> at = {0, 1, 3, 5};
  for (Index l = 0; l < 4; ++l) {
    EXPECT_NEAR(fit.coef[at[static_cast<std::size_t>(l)]], wanted.coef[l], 1e-13);
  }
  EXPECT_LT((fit.bread - wanted.bread).cwiseAbs().maxCoeff(),
            1e-12 * wanted.bread.cwiseAbs().maxCoeff());
  EXPECT_LT((pooled_residuals(design, fit) - pooled_residuals(kept_design, wanted))
                .cwiseAbs()
                .maxCoeff(),
            1e-13);
}

TEST(Pooled, AConstantColumnIsAliasedByTheConstant) {
  Panel panel = ragged_panel(50, 4, 2, 105);
  for (double& x : panel.x[0]) x = 0.7;
  const PooledFit fit = pooled(panel.design(), 1);
  EXPECT_EQ(fit.aliased, (std::vector<bool>{false, true, false}));
  EXPECT_FALSE(pooled(panel.design(false), 1).aliased[0]);
}

TEST(Pooled, MissingRowsAreCountedAndHaveNoResidual) {
  Panel panel = ragged_panel(50, 4, 2, 106);
  panel.y[3] = kNaN;
  panel.x[1][3] = kNaN;
  panel.x[1][8] = kNaN;
  panel.w[9] = 0;
  const Design design = panel.design(true, true);
  const PooledFit fit = pooled(design, 1);
  EXPECT_EQ(fit.missing, (std::vector<Index>{1, 0, 1, 1}));
  EXPECT_EQ(fit.n_rows, design.n_rows);
  EXPECT_EQ(fit.n_used, design.n_rows - 3);
  const Vector e = pooled_residuals(design, fit);
  for (Index i = 0; i < e.size(); ++i) {
    EXPECT_EQ(std::isnan(e[i]), i == 3 || i == 8 || i == 9);
  }
  const Vector x = Eigen::Map<const Vector>(panel.x[0].data(), e.size());
  const Vector z = Eigen::Map<const Vector>(panel.x[1].data(), e.size());
  const double fitted = fit.coef[0] + fit.coef[1] * x[20] + fit.coef[2] * z[20];
  EXPECT_NEAR(e[20], panel.y[20] - fitted, 1e-14);
}

TEST(Pooled, ResidualsKeepTheirDigitsUnderALargeMean) {
  Panel panel = ragged_panel(60, 10, 2, 107), far = panel;
  for (std::size_t i = 0; i < far.n(); ++i) {
    far.x[0][i] += 1e8;
    far.y[i] -= 1e8;
    panel.x[0][i] = far.x[0][i] - 1e8;  // the same doubles, moved exactly
    panel.y[i] = far.y[i] + 1e8;
  }
  const Design design = panel.design(), far_design = far.design();
  const Vector e = pooled_residuals(design, pooled(design, 1));
  const Vector far_e = pooled_residuals(far_design, pooled(far_design, 1));
  EXPECT_LT((e - far_e).cwiseAbs().maxCoeff(), 1e-13);
}

TEST(Pooled, CertifiedSetsReachTheDigitsOfAQr) {
  for (const Attainable& wanted : attainable_sets()) {
    const CertifiedSet set = certified_set(wanted.name, wanted.degree);
    const PooledFit fit = pooled(set.panel.design(set.intercept), 1);
    ASSERT_EQ(fit.rank, static_cast<Index>(set.estimate.size())) << wanted.name;
    EXPECT_GE(digits(fit.coef, set.estimate), wanted.beta) << wanted.name;
    if (std::isnan(wanted.sd)) continue;
    const Vector sd = (fit.sigma2 * fit.bread.diagonal()).cwiseSqrt();
    EXPECT_GE(digits(sd, set.sd), wanted.sd) << wanted.name;
  }
}

TEST(Pooled, NoResidualDegreeOfFreedomIsAnError) {
  Panel panel = ragged_panel(50, 1, 2, 108);
  for (std::size_t i = 3; i < panel.n(); ++i) panel.y[i] = kNaN;
  try {
    pooled(panel.design(), 1);
    FAIL();
  } catch (const Error& error) {
    EXPECT_EQ(error.tag(), "too_few_rows");
    EXPECT_EQ(error.facts()[0].second, 3);
  }
  panel.x.clear();
  EXPECT_THROW(pooled(panel.design(false), 1), Error);
}
