#include "../passes/sample-panel.hpp"

#include "lambdabar/errors/clusters.hpp"

#include <gtest/gtest.h>

#include <cstring>
#include <functional>

using namespace lambdabar;
using namespace lambdabar::sample;

namespace {

using Codes = std::vector<std::vector<int>>;

struct Clusters {
  std::vector<const int*> codes;
  std::vector<Index> n_codes;
};

Clusters point_to(const Codes& codes) {
  Clusters to;
  for (const auto& code : codes) {
    to.codes.push_back(code.data());
    to.n_codes.push_back(*std::max_element(code.begin(), code.end()) + 1);
  }
  return to;
}

ClusterCovariance solve(const Design& design,
                        const PooledFit& fit,
                        const Codes& codes,
                        SmallSample small,
                        int threads = 1) {
  const Clusters clusters = point_to(codes);
  return clustered(design, fit, clusters.codes, clusters.n_codes, small, threads);
}

// Rows psi_i and leverages of the kept terms, spelled out; rows of zeros where
// incomplete.
struct Spelled {
  Matrix psi;  // n x r
  Vector leverage;
  std::vector<bool> used;
};

Spelled spell(const Design& design, const PooledFit& fit) {
  const Index first = design.intercept ? 1 : 0;
  Spelled to;
  to.psi.setZero(design.n_rows, fit.rank);
  to.leverage.setZero(design.n_rows);
  const Vector e = pooled_residuals(design, fit);
  for (Index i = 0; i < design.n_rows; ++i) {
    to.used.push_back(std::isfinite(e[i]));
    if (!to.used.back()) continue;
    Vector x(fit.rank);
    Index l = 0;
    for (Index j = 0; j < design.n_terms(); ++j) {
      if (fit.aliased[static_cast<std::size_t>(j)]) continue;
      x[l++] = j < first ? 1 : design.x[static_cast<std::size_t>(j - first)].at(i);
    }
    const double w = design.weight.empty() ? 1 : design.weight[0].at(i);
    to.psi.row(i) = (fit.bread * x * (w * e[i])).transpose();
    to.leverage[i] = w * x.dot(fit.bread * x);
  }
  return to;
}

// sum_i sum_j kappa(i, j) psi_i psi_j', pair by pair.
Matrix brute_force(const Spelled& rows,
                   const std::function<bool(std::size_t, std::size_t)>& kappa) {
  Matrix sum = Matrix::Zero(rows.psi.cols(), rows.psi.cols());
  for (std::size_t i = 0; i < rows.used.size(); ++i) {
    for (std::size_t j = 0; j < rows.used.size(); ++j) {
      if (!kappa(i, j)) continue;
      sum += rows.psi.row(Index(i)).transpose() * rows.psi.row(Index(j));
    }
  }
  return sum;
}

bool share_all(const Codes& codes, std::size_t set, std::size_t i, std::size_t j) {
  for (std::size_t d = 0; d < codes.size(); ++d) {
    if ((set >> d & 1) != 0 && codes[d][i] != codes[d][j]) return false;
  }
  return true;
}

Index count_groups(const Spelled& rows, const Codes& codes, std::size_t set) {
  Index n = 0;
  for (std::size_t i = 0; i < rows.used.size(); ++i) {
    bool is_new = rows.used[i];
    for (std::size_t j = 0; j < i && is_new; ++j) {
      is_new = !(rows.used[j] && share_all(codes, set, i, j));
    }
    n += is_new;
  }
  return n;
}

// Inclusion-exclusion, each term pair by pair.
Matrix spelled_out(const Design& design,
                   const PooledFit& fit,
                   const Codes& codes,
                   SmallSample small) {
  const Spelled rows = spell(design, fit);
  const double n = static_cast<double>(fit.n_used), r = static_cast<double>(fit.rank);
  Index smallest = design.n_rows;
  for (std::size_t d = 0; d < codes.size(); ++d) {
    smallest = std::min(smallest, count_groups(rows, codes, std::size_t{1} << d));
  }
  Matrix sum = Matrix::Zero(fit.rank, fit.rank);
  for (std::size_t set = 1; set < std::size_t{1} << codes.size(); ++set) {
    const Matrix meat = brute_force(
        rows, [&](std::size_t i, std::size_t j) { return share_all(codes, set, i, j); });
    double sign = -1;
    for (std::size_t d = 0; d < codes.size(); ++d) sign *= (set >> d & 1) != 0 ? -1 : 1;
    const double g = static_cast<double>(
        small == SmallSample::min ? smallest : count_groups(rows, codes, set));
    const double factor =
        small == SmallSample::none ? 1 : g / (g - 1) * (n - 1) / (n - r);
    sum += sign * factor * meat;
  }
  return sum;
}

void expect_close(const Matrix& value, const Matrix& wanted, double tolerance) {
  ASSERT_EQ(value.rows(), wanted.rows());
  const Vector scale = wanted.diagonal().cwiseAbs().cwiseSqrt();
  for (Index i = 0; i < value.rows(); ++i) {
    for (Index j = 0; j < value.cols(); ++j) {
      EXPECT_LE(std::abs(value(i, j) - wanted(i, j)), tolerance * scale[i] * scale[j]);
    }
  }
}

// Firms, periods and a region that crosses both.
Codes crossing_codes(const Panel& panel) {
  Codes codes = {panel.asset, panel.period, panel.asset};
  std::mt19937 engine(17);
  for (int& code : codes[2]) code = static_cast<int>(engine() % 6);
  return codes;
}

Panel holed_panel(unsigned seed) {
  Panel panel = ragged_panel(14, 12, 3, seed);
  panel.y[4] = kNaN;
  panel.x[1][30] = kNaN;
  panel.w[50] = 0;
  return panel;
}

}  // namespace

TEST(Clusters, AnyNumberOfWaysAgreesWithAllPairsOfRows) {
  for (const bool intercept : {true, false}) {
    const Panel panel = holed_panel(201);
    const Codes all = crossing_codes(panel);
    const Design design = panel.design(intercept, true);
    const PooledFit fit = pooled(design, 1);
    for (const Codes& codes : {Codes{all[0]},
                               Codes{all[0], all[1]},
                               Codes{all[0], all[2]},
                               Codes{all[0], all[1], all[2]},
                               Codes{all[2], all[1], all[0]}}) {
      for (const SmallSample small :
           {SmallSample::each, SmallSample::min, SmallSample::none}) {
        const ClusterCovariance to = solve(design, fit, codes, small);
        expect_close(to.raw, spelled_out(design, fit, codes, small), 1e-12);
        EXPECT_EQ(to.nested_in, std::vector<int>(codes.size(), -1));
      }
    }
  }
}

// The sums run in tiles of two and three columns: every rank up to a few tiles.
TEST(Clusters, EveryRankAgreesWithAllPairsOfRows) {
  for (Index k = 1; k <= 12; ++k) {
    const Panel panel = ragged_panel(10, 8, k, 300 + static_cast<unsigned>(k));
    for (const bool intercept : {true, false}) {
      const Design design = panel.design(intercept, true);
      const PooledFit fit = pooled(design, 1);
      for (const Codes& codes : {Codes{panel.asset}, Codes{panel.asset, panel.period}}) {
        const ClusterCovariance to = solve(design, fit, codes, SmallSample::each);
        expect_close(to.raw, spelled_out(design, fit, codes, SmallSample::each), 1e-11);
      }
    }
  }
}

TEST(Clusters, WithoutFactorsTheSumIsTheUnionOfTheClusters) {
  const Panel panel = holed_panel(202);
  const Codes codes = crossing_codes(panel);
  const Design design = panel.design(true, true);
  const PooledFit fit = pooled(design, 1);
  const Matrix wanted =
      brute_force(spell(design, fit), [&](std::size_t i, std::size_t j) {
        return codes[0][i] == codes[0][j] || codes[1][i] == codes[1][j] ||
               codes[2][i] == codes[2][j];
      });
  expect_close(solve(design, fit, codes, SmallSample::none).raw, wanted, 1e-12);
}

TEST(Clusters, GroupsAreCountedOverCompleteRows) {
  Panel panel = ragged_panel(14, 12, 2, 203);
  // Asset 3 has no complete row left.
  for (std::size_t i = 0; i < panel.n(); ++i) {
    if (panel.asset[i] == 3) panel.y[i] = kNaN;
  }
  const Design design = panel.design();
  const PooledFit fit = pooled(design, 1);
  const ClusterCovariance to =
      solve(design, fit, {panel.asset, panel.period}, SmallSample::each);
  EXPECT_EQ(to.n_groups, (std::vector<Index>{13, 12}));
  EXPECT_EQ(to.n_groups_terms, (std::vector<Index>{13, 12, fit.n_used}));
}

TEST(Clusters, ADimensionInsideAnotherCancelsExactly) {
  const Panel panel = holed_panel(204);
  std::vector<int> industry = panel.asset;
  for (int& code : industry) code /= 3;
  const Design design = panel.design(true, true);
  const PooledFit fit = pooled(design, 1);
  for (const SmallSample small : {SmallSample::each, SmallSample::min}) {
    const ClusterCovariance two = solve(design, fit, {panel.asset, industry}, small);
    const ClusterCovariance one = solve(design, fit, {industry}, small);
    EXPECT_TRUE(two.raw == one.raw);
    EXPECT_EQ(two.nested_in, (std::vector<int>{1, -1}));
    EXPECT_EQ(two.n_groups_terms[2], two.n_groups[0]);
  }
  const ClusterCovariance three =
      solve(design, fit, {industry, panel.period, panel.asset}, SmallSample::each);
  expect_close(three.raw,
               spelled_out(design, fit, {industry, panel.period}, SmallSample::each),
               1e-12);
  EXPECT_EQ(three.nested_in, (std::vector<int>{-1, -1, 0}));
  const ClusterCovariance twice =
      solve(design, fit, {panel.asset, panel.asset}, SmallSample::each);
  EXPECT_EQ(twice.nested_in, (std::vector<int>{-1, 0}));
}

TEST(Clusters, SeveralRowsACellAndSingletons) {
  Panel panel = holed_panel(205);
  // Every third row repeats the period of its neighbour, so that cells hold several rows.
  for (std::size_t i = 1; i < panel.n(); i += 3) {
    panel.period[i] = panel.period[i - 1];
    panel.asset[i] = panel.asset[i - 1];
  }
  const Design design = panel.design(true, true);
  const PooledFit fit = pooled(design, 1);
  const Codes codes = {panel.asset, panel.period};
  const ClusterCovariance to = solve(design, fit, codes, SmallSample::each);
  EXPECT_LT(to.n_groups_terms[2], fit.n_used);
  expect_close(to.raw, spelled_out(design, fit, codes, SmallSample::each), 1e-12);

  std::vector<int> alone(panel.n());
  std::iota(alone.begin(), alone.end(), 0);
  const ClusterCovariance singletons = solve(design, fit, {alone}, SmallSample::each);
  expect_close(singletons.raw, heteroskedastic(design, fit, 1, 1), 1e-12);
}

TEST(Clusters, OrderOfRowsAndThreads) {
  const Panel panel = ragged_panel(300, 60, 3, 206);
  const Design design = panel.design(true, true);
  const PooledFit fit = pooled(design, 1);
  const Codes codes = crossing_codes(panel);
  const ClusterCovariance one = solve(design, fit, codes, SmallSample::each, 1);
  for (const int threads : {2, 5}) {
    const ClusterCovariance to = solve(design, fit, codes, SmallSample::each, threads);
    EXPECT_EQ(0, std::memcmp(to.vcov.data(), one.vcov.data(), 16 * sizeof(double)));
    const Matrix a = heteroskedastic(design, fit, 3, 1);
    const Matrix b = heteroskedastic(design, fit, 3, threads);
    EXPECT_EQ(0, std::memcmp(a.data(), b.data(), 16 * sizeof(double)));
  }
  // Codes ride along with the rows: asset and period from the panel, region by asset.
  Panel other = panel.shuffled(8);
  const auto region = [](const Panel& p) {
    std::vector<int> to = p.asset;
    for (std::size_t i = 0; i < to.size(); ++i)
      to[i] = (p.asset[i] + p.period[i] / 7) % 5;
    return to;
  };
  const Design other_design = other.design(true, true);
  const PooledFit other_fit = pooled(other_design, 1);
  expect_close(
      solve(other_design,
            other_fit,
            {other.asset, other.period, region(other)},
            SmallSample::each)
          .raw,
      solve(design, fit, {panel.asset, panel.period, region(panel)}, SmallSample::each)
          .raw,
      1e-11);
}

TEST(Clusters, NegativeEigenvaluesAreCutWhateverTheUnits) {
  // Few, small, crossing clusters: some draw is indefinite, and stays so in other units.
  int n_indefinite = 0;
  for (unsigned seed = 300; seed < 330; ++seed) {
    Panel panel = ragged_panel(6, 5, 3, seed);
    const Codes codes = crossing_codes(panel);
    const Design design = panel.design();
    const PooledFit fit = pooled(design, 1);
    const ClusterCovariance to = solve(design, fit, codes, SmallSample::each);
    const Eigen::SelfAdjointEigenSolver<Matrix> eigen(to.vcov);
    EXPECT_GT(eigen.eigenvalues()[0], -1e-12 * eigen.eigenvalues()[3]);
    if (to.n_clipped == 0) {
      EXPECT_TRUE(to.vcov == to.raw);
      continue;
    }
    ++n_indefinite;
    EXPECT_LT(to.min_eigen_relative, 0);
    // To cut is to add a positive semidefinite matrix.
    EXPECT_TRUE(((to.vcov - to.raw).diagonal().array() >= -1e-15).all());
    for (Index j = 0; j < 4; ++j) {
      EXPECT_EQ(to.not_positive[static_cast<std::size_t>(j)], to.raw(j, j) <= 0);
    }
    for (double& x : panel.x[1]) x *= 1024;
    const ClusterCovariance scaled =
        solve(design, pooled(design, 1), codes, SmallSample::each);
    Vector unit = Vector::Ones(4);
    unit[2] = 1024;
    const Matrix back = unit.asDiagonal() * scaled.vcov * unit.asDiagonal();
    EXPECT_EQ(scaled.n_clipped, to.n_clipped);
    expect_close(back, to.vcov, 1e-9);
  }
  EXPECT_GT(n_indefinite, 3);
}

TEST(Clusters, ErrorsNameDimensionAndRow) {
  const Panel panel = holed_panel(207);
  const Design design = panel.design(true, true);
  const PooledFit fit = pooled(design, 1);
  std::vector<int> holed = panel.period;
  holed[4] = -1;  // an incomplete row needs no cluster
  EXPECT_NO_THROW(solve(design, fit, {panel.asset, holed}, SmallSample::each));
  holed[20] = holed[61] = -1;
  try {
    solve(design, fit, {panel.asset, holed}, SmallSample::each);
    FAIL();
  } catch (const Error& error) {
    EXPECT_EQ(error.tag(), "cluster_id");
    const Error::Facts wanted = {{"dimension", 2}, {"row", 21}, {"count", 2}};
    EXPECT_EQ(error.facts(), wanted);
  }
  try {
    const std::vector<int> same(panel.n(), 0);
    solve(design, fit, {same, panel.asset}, SmallSample::each);
    FAIL();
  } catch (const Error& error) {
    EXPECT_EQ(error.tag(), "clusters");
    const Error::Facts wanted = {{"dimension", 1}};
    EXPECT_EQ(error.facts(), wanted);
  }
}

TEST(Heteroskedastic, TypesAgreeWithTheirFormulas) {
  for (const bool intercept : {true, false}) {
    const Panel panel = holed_panel(208);
    const Design design = panel.design(intercept, true);
    const PooledFit fit = pooled(design, 1);
    const Spelled rows = spell(design, fit);
    EXPECT_NEAR(rows.leverage.sum(), static_cast<double>(fit.rank), 1e-11);
    const auto wanted = [&](double power) {
      const Vector factor = (1 - rows.leverage.array()).pow(-power);
      return Matrix(rows.psi.transpose() * factor.asDiagonal() * rows.psi);
    };
    const double n = static_cast<double>(fit.n_used), r = static_cast<double>(fit.rank);
    expect_close(heteroskedastic(design, fit, 0, 1), wanted(0), 1e-12);
    expect_close(heteroskedastic(design, fit, 1, 1), wanted(0) * (n / (n - r)), 1e-12);
    expect_close(heteroskedastic(design, fit, 2, 1), wanted(1), 1e-12);
    expect_close(heteroskedastic(design, fit, 3, 1), wanted(2), 1e-12);
    EXPECT_THROW(heteroskedastic(design, fit, 4, 1), Error);
  }
}

TEST(Heteroskedastic, Hc3IsTheDeleteOneJackknife) {
  // (n - 1) / n HC3 around b, MacKinnon and White (1985).
  const Panel panel = ragged_panel(10, 6, 2, 209);
  const Design design = panel.design(true, true);
  const PooledFit fit = pooled(design, 1);
  Matrix jackknife = Matrix::Zero(3, 3);
  for (std::size_t i = 0; i < panel.n(); ++i) {
    Panel without = panel;
    without.y[i] = kNaN;
    const Vector shift = pooled(without.design(true, true), 1).coef - fit.coef;
    jackknife += shift * shift.transpose();
  }
  expect_close(heteroskedastic(design, fit, 3, 1), jackknife, 1e-11);
}

TEST(Heteroskedastic, AliasedTermsAreLeftOut) {
  Panel panel = holed_panel(210), kept = panel;
  for (std::size_t i = 0; i < panel.n(); ++i) panel.x[1][i] = 2 - panel.x[0][i];
  kept.x = {panel.x[0], panel.x[2]};
  const Design design = panel.design(true, true), small = kept.design(true, true);
  const PooledFit fit = pooled(design, 1);
  ASSERT_EQ(fit.rank, 3);
  // Row 30 misses the column that is aliased; it counts in neither fit after this.
  kept.y[30] = kNaN;
  panel.x[1][30] = kNaN;
  const PooledFit again = pooled(design, 1), wanted = pooled(small, 1);
  expect_close(
      heteroskedastic(design, again, 2, 1), heteroskedastic(small, wanted, 2, 1), 1e-11);
}

TEST(Heteroskedastic, ALeverageOfOneIsRefusedAndNamed) {
  Panel panel = ragged_panel(20, 5, 2, 211);
  for (std::size_t i = 0; i < panel.n(); ++i) panel.x[1][i] = i == 33;
  const Design design = panel.design();
  const PooledFit fit = pooled(design, 1);
  EXPECT_NO_THROW(heteroskedastic(design, fit, 1, 1));
  for (const int type : {2, 3}) {
    try {
      heteroskedastic(design, fit, type, 1);
      FAIL();
    } catch (const Error& error) {
      EXPECT_EQ(error.tag(), "leverage");
      EXPECT_EQ(error.facts()[0].second, 34);
    }
  }
}

TEST(Heteroskedastic, CertifiedDataUnderCollinearity) {
  // NIST StRD Longley; HC0 and HC1 from exact rational arithmetic, exact_robust.json.
  const std::string path = std::string(LAMBDABAR_FIXTURES) + "/strd/exact_robust.json";
  const CertifiedSet set = certified_set("Longley", 1);
  const Design design = set.panel.design();
  const PooledFit fit = pooled(design, 1);
  for (const int type : {0, 1}) {
    const Vector error = heteroskedastic(design, fit, type, 1).diagonal().cwiseSqrt();
    const std::string name = type == 0 ? "HC0" : "HC1";
    EXPECT_GE(digits(error, read_numbers(path, "Longley", name)), 11.5) << name;
  }
}
