#include "lambdabar/passes/corrected_sections.hpp"

#include "sample-panel.hpp"

#include <gtest/gtest.h>

#include <Eigen/Eigenvalues>

#include <cstring>

using namespace lambdabar;
using namespace lambdabar::sample;

namespace {

using Long = long double;
using LongMatrix = Eigen::Matrix<Long, Eigen::Dynamic, Eigen::Dynamic>;
using LongVector = Eigen::Matrix<Long, Eigen::Dynamic, 1>;

constexpr double kInf = std::numeric_limits<double>::infinity();

// A panel whose last columns are the packed error covariances of its first n_factors.
struct BetaPanel {
  Panel panel;  // without the covariances
  Index n_factors = 0;
  std::vector<double> covariance;

  BetaPanel(const Panel& columns, Index K)
      : panel(columns), n_factors(K), whole_(columns) {
    const std::size_t n_own =
        columns.x.size() - static_cast<std::size_t>(K * (K + 1) / 2);
    for (std::size_t j = n_own; j < columns.x.size(); ++j)
      covariance.insert(covariance.end(), columns.x[j].begin(), columns.x[j].end());
    panel.x.resize(n_own);
  }

  BetaErrors errors() const {
    BetaErrors out;
    out.n_factors = n_factors;
    out.covariance = covariance.data();
    return out;
  }
  Matrix V(Index row) const {
    const Index n = static_cast<Index>(panel.n());
    Vector packed(n_factors * (n_factors + 1) / 2);
    for (Index j = 0; j < packed.size(); ++j)
      packed[j] = covariance[static_cast<std::size_t>(j * n + row)];
    return detail::unpack(packed.data(), n_factors);
  }
  // As constructed, in another order.
  BetaPanel by_asset() const { return {whole_.by_asset(), n_factors}; }
  BetaPanel shuffled(unsigned seed) const { return {whole_.shuffled(seed), n_factors}; }
  const Panel& whole() const { return whole_; }

 private:
  Panel whole_;
};

// K betas of a spread of about one, then traits; positive definite V_i of unequal size,
// on average about `share` of the betas' variance.
BetaPanel beta_panel(
    int n_assets, int n_periods, int K, int n_traits, double share, unsigned seed) {
  Panel panel = ragged_panel(n_assets, n_periods, K + n_traits, seed);
  std::mt19937 engine(seed + 1000);
  std::normal_distribution<double> normal;
  std::uniform_real_distribution<double> uniform;
  const std::size_t first = panel.x.size();
  panel.x.resize(first + static_cast<std::size_t>(K * (K + 1) / 2));
  for (std::size_t i = 0; i < panel.n(); ++i) {
    Matrix root(K, K);
    for (Index j = 0; j < root.size(); ++j) root.data()[j] = normal(engine);
    const Matrix V = share * (0.5 + uniform(engine)) / (K + 1) *
                     (root * root.transpose() + Matrix::Identity(K, K));
    std::size_t column = first;
    for (Index b = 0; b < K; ++b)
      for (Index a = b; a < K; ++a) panel.x[column++].push_back(V(a, b));
  }
  return {panel, K};
}

CorrectedOptions options_of(double min_reliability, int threads = 1) {
  CorrectedOptions options;
  options.min_reliability = min_reliability;
  options.threads = threads;
  return options;
}

CorrectedSections solve(const BetaPanel& betas,
                        const Design& design,
                        double min_reliability = 0.1,
                        int threads = 1) {
  return corrected_sections(design, betas.errors(), options_of(min_reliability, threads));
}

PooledCorrected solve_pooled(const BetaPanel& betas,
                             const Design& design,
                             double min_reliability = 0.1,
                             int threads = 1) {
  const std::vector<int>& asset = betas.panel.asset;
  return pooled_corrected(design,
                          betas.errors(),
                          asset.data(),
                          *std::max_element(asset.begin(), asset.end()) + 1,
                          options_of(min_reliability, threads));
}

bool is_complete(const BetaPanel& betas, const Design& design, Index row) {
  detail::RowValues values;
  values.values.resize(design.x.size() + 1);
  return detail::read_row(design, row, values) && betas.V(row).allFinite();
}

LongVector terms_of(const Design& design, Index row) {
  const Index P = design.n_terms(), first = design.intercept ? 1 : 0;
  LongVector x = LongVector::Ones(P);
  for (Index j = first; j < P; ++j)
    x[j] = design.x[static_cast<std::size_t>(j - first)].at(row);
  return x;
}

Long weight_of(const Design& design, Index row) {
  return design.weight.empty() ? 1 : Long(design.weight[0].at(row));
}

// Raw sums, in extended precision, over complete rows for which `keep` holds.
struct Sums {
  LongMatrix A, C;
  LongVector Xy;
  std::vector<Index> rows;

  template <class Keep>
  Sums(const BetaPanel& betas, const Design& design, const Keep& keep) {
    const Index P = design.n_terms(), first = design.intercept ? 1 : 0;
    const Index K = betas.n_factors;
    A = C = LongMatrix::Zero(P, P);
    Xy = LongVector::Zero(P);
    for (Index i = 0; i < design.n_rows; ++i) {
      if (!keep(i) || !is_complete(betas, design, i)) continue;
      rows.push_back(i);
      const LongVector x = terms_of(design, i);
      const Long w = weight_of(design, i);
      A += w * x * x.transpose();
      Xy += w * Long(design.y.at(i)) * x;
      C.block(first, first, K, K) += w * betas.V(i).cast<Long>();
    }
  }
};

// Smallest root of |S - mu C|, S being A's block of betas less its projection on the
// rest.
double direct_root(const Sums& sums, Index first, Index K) {
  std::vector<Index> exact;
  for (Index j = 0; j < sums.A.rows(); ++j)
    if (j < first || j >= first + K) exact.push_back(j);
  const Index E = static_cast<Index>(exact.size());
  LongMatrix inner(E, E), cross(E, K);
  for (Index a = 0; a < E; ++a) {
    const Index row = exact[static_cast<std::size_t>(a)];
    cross.row(a) = sums.A.row(row).segment(first, K);
    for (Index b = 0; b < E; ++b)
      inner(a, b) = sums.A(row, exact[static_cast<std::size_t>(b)]);
  }
  LongMatrix S = sums.A.block(first, first, K, K);
  if (E > 0) S -= cross.transpose() * inner.fullPivLu().solve(cross);
  const LongMatrix C = sums.C.block(first, first, K, K);
  const Eigen::GeneralizedSelfAdjointEigenSolver<LongMatrix> roots(
      C, S, Eigen::EigenvaluesOnly);
  return static_cast<double>(1 / roots.eigenvalues()[K - 1]);
}

struct DirectFit {
  double smallest_root = kNaN, kappa = kNaN, r_squared = kNaN;
  LongVector coef;
  LongMatrix inverse;  // (A - kappa C)^-1
  Vector std_error;
};

DirectFit direct_fit(const BetaPanel& betas,
                     const Design& design,
                     const Sums& sums,
                     double min_reliability) {
  DirectFit out;
  out.smallest_root = direct_root(sums, design.intercept ? 1 : 0, betas.n_factors);
  out.kappa = std::min(1.0, (1 - min_reliability) * out.smallest_root);
  const LongMatrix left = sums.A - Long(out.kappa) * sums.C;
  out.inverse = left.fullPivLu().inverse();
  out.coef = out.inverse * sums.Xy;
  Long rss = 0, tss = 0, mean = 0, total = 0;
  for (const Index i : sums.rows) {
    total += weight_of(design, i);
    mean += weight_of(design, i) * Long(design.y.at(i));
  }
  mean = design.intercept ? mean / total : 0;
  for (const Index i : sums.rows) {
    const Long y = design.y.at(i), e = y - terms_of(design, i).dot(out.coef);
    rss += weight_of(design, i) * e * e;
    tss += weight_of(design, i) * (y - mean) * (y - mean);
  }
  const Long s2 = rss / Long(static_cast<Index>(sums.rows.size()) - design.n_terms());
  const LongVector variance = s2 * (out.inverse * sums.A * out.inverse).diagonal();
  out.std_error = variance.cwiseSqrt().cast<double>();
  out.r_squared = static_cast<double>(1 - rss / tss);
  return out;
}

void expect_close(double value, double wanted, double scale, double tolerance) {
  EXPECT_LE(std::abs(value - wanted), tolerance * scale) << value << " for " << wanted;
}

void expect_direct(const BetaPanel& betas,
                   const Design& design,
                   double min_reliability,
                   double tolerance) {
  const CorrectedSections fit = solve(betas, design, min_reliability);
  for (Index t = 0; t < design.n_periods; ++t) {
    const std::size_t at = static_cast<std::size_t>(t);
    const Sums sums(betas, design, [&](Index i) { return design.period[i] == t; });
    const DirectFit wanted = direct_fit(betas, design, sums, min_reliability);
    ASSERT_EQ(fit.status[at], PeriodStatus::estimated);
    EXPECT_EQ(fit.n_used[at], static_cast<Index>(sums.rows.size()));
    expect_close(
        fit.smallest_root[t], wanted.smallest_root, wanted.smallest_root, tolerance);
    expect_close(fit.kappa[t], wanted.kappa, 1, tolerance);
    for (Index j = 0; j < design.n_terms(); ++j) {
      const double coef = static_cast<double>(wanted.coef[j]);
      const double error = wanted.std_error[j];
      expect_close(fit.coef(j, t), coef, std::abs(coef) + error, tolerance);
      expect_close(fit.std_error(j, t), error, error, tolerance);
    }
    expect_close(fit.r_squared[t], wanted.r_squared, 1, tolerance);
  }
}

bool same_bits(const Matrix& a, const Matrix& b) {
  return a.rows() == b.rows() && a.cols() == b.cols() &&
         std::memcmp(a.data(), b.data(), sizeof(double) * std::size_t(a.size())) == 0;
}

double distance(const Matrix& a, const Matrix& b) {
  return (a - b).cwiseAbs().maxCoeff() / b.cwiseAbs().maxCoeff();
}

// The first beta in other units.
BetaPanel rescaled(const BetaPanel& betas, double factor) {
  BetaPanel out = betas;
  const std::size_t n = betas.panel.n();
  for (double& x : out.panel.x[0]) x *= factor;
  for (std::size_t j = 0; j < static_cast<std::size_t>(betas.n_factors); ++j)
    for (std::size_t i = 0; i < n; ++i)
      out.covariance[j * n + i] *= j == 0 ? factor * factor : factor;
  return out;
}

Panel twice_with_half_the_weight(Panel panel) {
  for (double& w : panel.w) w /= 2;
  const Panel half = panel;
  const auto append = [](auto& to, const auto& from) {
    to.insert(to.end(), from.begin(), from.end());
  };
  append(panel.period, half.period);
  append(panel.asset, half.asset);
  append(panel.y, half.y);
  append(panel.w, half.w);
  for (std::size_t j = 0; j < half.x.size(); ++j) append(panel.x[j], half.x[j]);
  return panel;
}

void add_to_columns(BetaPanel& betas, double value) {
  for (auto& column : betas.panel.x)
    for (double& x : column) x += value;
}

double t_statistic(const Vector& x, double mean) {
  const double n = static_cast<double>(x.size()), centre = x.mean();
  const double variance = (x.array() - centre).square().sum() / (n - 1);
  return (centre - mean) / std::sqrt(variance / n);
}

}  // namespace

TEST(CorrectedSections, AgreeWithTheFormulaSolvedDirectly) {
  for (int K = 1; K <= 3; ++K) {
    for (int n_traits = 0; n_traits <= 2; ++n_traits) {
      const unsigned seed = static_cast<unsigned>(10 * K + n_traits);
      const BetaPanel betas = beta_panel(70, 6, K, n_traits, 0.3, seed);
      for (const bool intercept : {true, false})
        for (const bool weighted : {true, false})
          expect_direct(betas, betas.panel.design(intercept, weighted), 0.1, 1e-11);
    }
  }
}

TEST(CorrectedSections, AGuardedPeriodAgreesWithTheFormulaToo) {
  const BetaPanel betas = beta_panel(70, 6, 2, 1, 3.0, 5);
  const Design design = betas.panel.design(true, true);
  EXPECT_LT(solve(betas, design).kappa.maxCoeff(), 1);
  for (const double min_reliability : {0.1, 0.5, 0.9})
    expect_direct(betas, design, min_reliability, 1e-11);
}

TEST(CorrectedSections, WithoutACorrectionAreLeastSquares) {
  const BetaPanel noisy = beta_panel(60, 8, 2, 2, 0.4, 21);
  BetaPanel exact = noisy;
  std::fill(exact.covariance.begin(), exact.covariance.end(), 0.0);
  for (const bool intercept : {true, false}) {
    for (const bool weighted : {true, false}) {
      const Design design = noisy.panel.design(intercept, weighted);
      const CrossSections wanted = cross_sections(design, CrossSectionOptions());
      const CorrectedSections kept = solve(noisy, design, 1.0);
      const CorrectedSections none = solve(exact, design);
      for (const CorrectedSections* fit : {&kept, &none}) {
        EXPECT_EQ(fit->status, wanted.status);
        EXPECT_EQ(fit->varies, wanted.varies);
        EXPECT_LT(distance(fit->coef, wanted.coef), 1e-12);
        EXPECT_LT(distance(fit->std_error, wanted.std_error), 1e-12);
        EXPECT_LT(distance(fit->r_squared, wanted.r_squared), 1e-12);
      }
      EXPECT_TRUE((kept.kappa.array() == 0).all());
      EXPECT_TRUE((none.kappa.array() == 1).all());
      EXPECT_TRUE((none.smallest_root.array() == kInf).all());
    }
  }
}

// One beta and a constant: b = Sxy / (Sxx - sum V), so OLS over the reliability.
TEST(CorrectedSections, OneBetaIsDividedByItsReliability) {
  const BetaPanel betas = beta_panel(80, 5, 1, 0, 0.4, 22);
  const Design design = betas.panel.design();
  const CrossSections naive = cross_sections(design, CrossSectionOptions());
  const CorrectedSections fit = solve(betas, design);
  for (Index t = 0; t < 5; ++t) {
    ASSERT_EQ(fit.kappa[t], 1);
    const double reliability = 1 - 1 / fit.smallest_root[t];
    EXPECT_GT(reliability, 0.3);
    EXPECT_LT(reliability, 0.9);
    expect_close(fit.coef(1, t) * reliability, naive.coef(1, t), 1, 1e-13);
    EXPECT_LT(fit.r_squared[t], naive.r_squared[t]);
  }
}

// w_i = 1 / s2_i and V_i = s2_i F, F the inverse of the factors' cross-products, make the
// sum of w V equal N F, the form of Litzenberger and Ramaswamy (1979, Journal of
// Financial Economics 7, 163-195).
TEST(CorrectedSections, WeightsOfOneOverTheVarianceGiveTheCommonForm) {
  Panel panel = ragged_panel(60, 4, 2, 23);
  const double inverse[3] = {0.3, -0.1, 0.2};
  panel.x.resize(5);
  for (std::size_t i = 0; i < panel.n(); ++i)
    for (std::size_t j = 0; j < 3; ++j) panel.x[2 + j].push_back(inverse[j] / panel.w[i]);
  const BetaPanel betas(panel, 2);
  const Design design = betas.panel.design(true, true);
  const CorrectedSections fit = solve(betas, design);
  for (Index t = 0; t < 4; ++t) {
    const Sums sums(betas, design, [&](Index i) { return design.period[i] == t; });
    LongMatrix C = LongMatrix::Zero(3, 3);
    C.block(1, 1, 2, 2) << inverse[0], inverse[1], inverse[1], inverse[2];
    C *= static_cast<Long>(sums.rows.size());
    ASSERT_EQ(fit.kappa[t], 1);
    const LongMatrix left = sums.A - C;
    const LongVector wanted = left.fullPivLu().solve(sums.Xy);
    EXPECT_LT(distance(fit.coef.col(t), wanted.cast<double>()), 1e-12);
  }
}

TEST(CorrectedSections, TheGuardKeepsTinySamplesPositiveDefinite) {
  int n_guarded = 0, n_indefinite = 0;
  for (unsigned seed = 1; seed <= 200; ++seed) {
    const BetaPanel betas = beta_panel(8, 1, 2, 0, 1.5, seed);
    const Design design = betas.panel.design();
    const CorrectedSections fit = solve(betas, design);
    if (fit.status[0] != PeriodStatus::estimated) continue;
    const Sums sums(betas, design, [](Index) { return true; });
    const auto smallest = [&](double kappa) {
      const LongMatrix left = sums.A - Long(kappa) * sums.C;
      return Eigen::SelfAdjointEigenSolver<LongMatrix>(left).eigenvalues()[0];
    };
    EXPECT_GT(smallest(fit.kappa[0]), 0);
    EXPECT_EQ(smallest(1) > 0, fit.smallest_root[0] > 1);
    n_indefinite += smallest(1) <= 0;
    if (fit.kappa[0] == 1) continue;
    ++n_guarded;
    expect_close(1 - fit.kappa[0] / fit.smallest_root[0], 0.1, 1, 1e-12);
  }
  // Both must be common, or the loop above shows nothing.
  EXPECT_GT(n_guarded, 50);
  EXPECT_GT(n_indefinite, 50);
}

TEST(CorrectedSections, TheGuardSetsInWithoutAJump) {
  const BetaPanel betas = beta_panel(60, 1, 2, 1, 0.4, 24);
  const Design design = betas.panel.design();
  const double edge = 0.9 * solve(betas, design).smallest_root[0];
  const auto with_error_times = [&](double factor) {
    BetaPanel other = betas;
    for (double& v : other.covariance) v *= factor;
    return solve(other, design);
  };
  const CorrectedSections before = with_error_times(edge * (1 - 1e-9));
  const CorrectedSections after = with_error_times(edge * (1 + 1e-9));
  EXPECT_EQ(before.kappa[0], 1);
  EXPECT_LT(after.kappa[0], 1);
  EXPECT_LT(distance(after.coef, before.coef), 1e-7);
  // Beyond the edge more error changes nothing: kappa C stays what it is.
  EXPECT_LT(distance(with_error_times(3 * edge).coef, after.coef), 1e-7);
}

TEST(CorrectedSections, ARowWithoutItsErrorIsNotComplete) {
  BetaPanel betas = beta_panel(40, 3, 2, 1, 0.3, 25);
  BetaPanel dropped = betas;
  const std::size_t n = betas.panel.n();
  betas.covariance[0] = kNaN;
  betas.covariance[n + 1] = kInf;
  betas.covariance[2 * n + 2] = kNaN;
  betas.panel.x[0][2] = kNaN;
  for (std::size_t i = 0; i < 3; ++i) dropped.panel.y[i] = kNaN;
  const CorrectedSections fit = solve(betas, betas.panel.design(true, true));
  const CorrectedSections wanted = solve(dropped, dropped.panel.design(true, true));
  EXPECT_EQ(fit.n_used, wanted.n_used);
  EXPECT_EQ(fit.n_used[0] + 3, fit.n_rows[0]);
  EXPECT_LT(distance(fit.coef, wanted.coef), 1e-12);
  EXPECT_LT(distance(fit.smallest_root, wanted.smallest_root), 1e-12);
}

TEST(CorrectedSections, RowOrderThreadsAndDuplicatesDoNotMatter) {
  const BetaPanel betas = beta_panel(200, 30, 2, 2, 0.4, 26);
  const CorrectedSections once = solve(betas, betas.panel.design(true, true));
  for (const BetaPanel& rows : {betas.by_asset(), betas.shuffled(7)}) {
    const Design design = rows.panel.design(true, true);
    const CorrectedSections fit = solve(rows, design);
    EXPECT_LT(distance(fit.coef, once.coef), 1e-12);
    EXPECT_LT(distance(fit.std_error, once.std_error), 1e-12);
    EXPECT_LT(distance(fit.smallest_root, once.smallest_root), 1e-12);
    for (const int threads : {2, 5}) {
      const CorrectedSections again = solve(rows, design, 0.1, threads);
      EXPECT_TRUE(same_bits(again.coef, fit.coef));
      EXPECT_TRUE(same_bits(again.std_error, fit.std_error));
      EXPECT_TRUE(same_bits(again.kappa, fit.kappa));
    }
  }
  const BetaPanel pair(twice_with_half_the_weight(betas.whole()), 2);
  const CorrectedSections both = solve(pair, pair.panel.design(true, true));
  EXPECT_LT(distance(both.coef, once.coef), 1e-12);
  EXPECT_LT(distance(both.smallest_root, once.smallest_root), 1e-12);
}

TEST(CorrectedSections, UnitsOnlyRescale) {
  const Vector units = (Vector(4) << 1, 1000, 1, 1).finished();
  for (const double share : {0.3, 3.0}) {
    const BetaPanel betas = beta_panel(60, 4, 2, 1, share, 27);
    const BetaPanel thousands = rescaled(betas, 1000);
    const CorrectedSections plain = solve(betas, betas.panel.design());
    const CorrectedSections fit = solve(thousands, thousands.panel.design());
    EXPECT_EQ(plain.kappa.maxCoeff() < 1, share > 1);
    EXPECT_LT(distance(units.asDiagonal() * fit.coef, plain.coef), 1e-12);
    EXPECT_LT(distance(units.asDiagonal() * fit.std_error, plain.std_error), 1e-12);
    EXPECT_LT(distance(fit.kappa, plain.kappa), 1e-12);
  }
}

// What adding 2^20 rounds away, subtracting it brings out: both panels hold the same
// spread.
TEST(CorrectedSections, AMeanFarFromZeroLosesNothing) {
  const double mean = 1 << 20;
  BetaPanel far = beta_panel(80, 4, 2, 1, 0.4, 28);
  add_to_columns(far, mean);
  BetaPanel near = far;
  add_to_columns(near, -mean);
  const CorrectedSections fit = solve(far, far.panel.design(true, true));
  const CorrectedSections wanted = solve(near, near.panel.design(true, true));
  EXPECT_LT(distance(fit.coef.bottomRows(3), wanted.coef.bottomRows(3)), 1e-12);
  EXPECT_LT(distance(fit.std_error.bottomRows(3), wanted.std_error.bottomRows(3)), 1e-12);
  EXPECT_LT(distance(fit.smallest_root, wanted.smallest_root), 1e-12);
  const Matrix constant =
      wanted.coef.row(0) - mean * wanted.coef.bottomRows(3).colwise().sum();
  EXPECT_LT(distance(fit.coef.row(0), constant), 1e-12);
}

// Betas that differ by a ten-thousandth of themselves cost eight digits in
// cross-products, so the period goes back to its rows. Errors differ as little, so that
// guard and correction are at work in the direction of the difference.
TEST(CorrectedSections, NearlyCollinearBetasGoBackToTheirRows) {
  const double gap = 1e-4;
  Panel panel = beta_panel(60, 3, 2, 1, 0.3, 29).whole();
  for (std::size_t i = 0; i < panel.n(); ++i) {
    const double v00 = panel.x[3][i], v10 = panel.x[4][i], v11 = panel.x[5][i];
    panel.x[1][i] = panel.x[0][i] + gap * panel.x[1][i];
    panel.x[4][i] = v00 + gap * v10;
    panel.x[5][i] = v00 + 2 * gap * v10 + gap * gap * v11;
  }
  panel.x[4][1] = panel.x[5][70] = kNaN;
  const BetaPanel betas(panel, 2);
  for (const BetaPanel& rows : {betas, betas.shuffled(3)}) {
    const Design design = rows.panel.design(true, true);
    for (Index t = 0; t < 3; ++t)
      EXPECT_FALSE(detail::solve_moments(period_moments(design, 1), t, true).trusted);
    // The difference stands in the last eight digits of a sum of V_i in doubles.
    expect_direct(rows, design, 0.1, 1e-6);
    expect_direct(rows, design, 0.8, 1e-6);
  }
  BetaPanel exact = betas;
  std::fill(exact.covariance.begin(), exact.covariance.end(), 0.0);
  const Design design = exact.panel.design(true, true);
  const CorrectedSections fit = solve(exact, design);
  for (Index t = 0; t < 3; ++t) {
    const Reference wanted =
        plain_qr(design, [&](Index row) { return design.period[row] == t; });
    EXPECT_LT(distance(fit.coef.col(t), wanted.coef), 1e-13);
  }
}

TEST(CorrectedSections, EveryPeriodHasItsStatus) {
  Panel panel = beta_panel(30, 6, 2, 1, 0.2, 31).whole();
  std::size_t seen = 0;
  for (std::size_t i = 0; i < panel.n(); ++i) {
    const int t = panel.period[i];
    if (t == 1 && ++seen > 4) panel.y[i] = kNaN;
    if (t == 2) panel.x[1][i] = 0.1 + 0.2;
    if (t == 3) panel.x[1][i] = 2 * panel.x[0][i] - 1;
    if (t == 4) panel.x[3][i] = kNaN;
    if (t == 5) panel.x[2][i] = panel.x[0][i] - panel.x[1][i];
  }
  const std::vector<PeriodStatus> wanted = {PeriodStatus::estimated,
                                            PeriodStatus::too_few_assets,
                                            PeriodStatus::no_variation,
                                            PeriodStatus::rank_deficient,
                                            PeriodStatus::empty,
                                            PeriodStatus::rank_deficient};
  const BetaPanel betas(panel, 2);
  for (const BetaPanel& rows : {betas, betas.by_asset(), betas.shuffled(2)}) {
    const CorrectedSections fit = solve(rows, rows.panel.design());
    EXPECT_EQ(fit.status, wanted);
    EXPECT_EQ(fit.culprit, (std::vector<Index>{-1, -1, 2, 2, -1, 3}));
    EXPECT_EQ(fit.n_used[1], 4);
    EXPECT_EQ(fit.n_used[4], 0);
    for (Index t = 0; t < 6; ++t) {
      const bool estimated = t == 0;
      EXPECT_EQ(fit.coef.col(t).allFinite(), estimated);
      EXPECT_EQ(fit.coef.col(t).array().isNaN().all(), !estimated);
      EXPECT_EQ(fit.std_error.col(t).array().isNaN().all(), !estimated);
      EXPECT_EQ(std::isfinite(fit.smallest_root[t]), estimated);
      EXPECT_EQ(std::isfinite(fit.kappa[t]), estimated);
      EXPECT_EQ(std::isfinite(fit.r_squared[t]), estimated);
    }
    // Plain cross-sections of the same complete rows say the same.
    Panel same = rows.panel;
    for (std::size_t i = 0; i < same.n(); ++i)
      if (same.period[i] == 4) same.y[i] = kNaN;
    const CrossSections plain = cross_sections(same.design(), CrossSectionOptions());
    EXPECT_EQ(fit.status, plain.status);
    EXPECT_EQ(fit.culprit, plain.culprit);
    EXPECT_EQ(fit.varies, plain.varies);
  }
  CorrectedOptions options;
  options.min_assets = 31;
  const CorrectedSections none =
      corrected_sections(betas.panel.design(), betas.errors(), options);
  EXPECT_EQ(none.status[0], PeriodStatus::too_few_assets);
}

TEST(CorrectedSections, ATermThatVariesOnlyOverTimeIsNamed) {
  BetaPanel betas = beta_panel(30, 4, 2, 0, 0.2, 32);
  for (std::size_t i = 0; i < betas.panel.n(); ++i)
    betas.panel.x[1][i] = 1 + betas.panel.period[i];
  const CorrectedSections fit = solve(betas, betas.panel.design());
  EXPECT_EQ(fit.varies, (std::vector<bool>{true, true, false}));
  EXPECT_EQ(fit.status[2], PeriodStatus::no_variation);
  EXPECT_EQ(fit.culprit[2], 2);
  const CorrectedSections through_zero = solve(betas, betas.panel.design(false));
  EXPECT_EQ(through_zero.varies, (std::vector<bool>{true, false}));
  EXPECT_EQ(through_zero.status[2], PeriodStatus::estimated);
}

TEST(CorrectedSections, RefuseWhatTheyCannotMeet) {
  const BetaPanel betas = beta_panel(30, 2, 1, 1, 0.2, 33);
  const auto expect_input_error = [](const auto& call, double fact) {
    try {
      call();
      ADD_FAILURE() << fact;
    } catch (const Error& error) {
      EXPECT_EQ(error.tag(), "input");
      EXPECT_EQ(error.facts().at(0).second, fact);
    }
  };
  const Design design = betas.panel.design(true, true);
  for (const double min_reliability : {0.0, -0.1, 1.1})
    expect_input_error([&] { solve(betas, design, min_reliability); }, min_reliability);
  EXPECT_THROW(solve(betas, design, kNaN), Error);
  for (const Index n_factors : {0, 3}) {
    BetaErrors errors = betas.errors();
    errors.n_factors = n_factors;
    expect_input_error([&] { corrected_sections(design, errors, options_of(0.1)); },
                       static_cast<double>(n_factors));
  }
  BetaPanel negative = betas;
  negative.panel.w[7] = -1;
  expect_input_error([&] { solve(negative, negative.panel.design(true, true)); }, 8);
  expect_input_error([&] { solve_pooled(negative, negative.panel.design(true, true)); },
                     8);
}

// True betas have variance 1 and go with a trait (correlation 0.6), their errors variance
// 0.2 or 0.6; premia are 1 and -0.5. OLS is attenuated by v / (v + 0.4), v = 1 - 0.36
// being what the trait leaves of the betas. Bounds: four standard errors of a mean over
// 200 periods; the biases are above twenty.
TEST(CorrectedSections, SimulatedPremiaComeBackWhereLeastSquaresIsAttenuated) {
  std::mt19937 engine(11);
  std::normal_distribution<double> normal;
  Panel panel;
  panel.n_periods = 200;
  panel.x.resize(3);
  for (int t = 0; t < 200; ++t) {
    for (int a = 0; a < 150; ++a) {
      const double V = a % 2 == 0 ? 0.2 : 0.6, beta = normal(engine);
      const double trait = 0.6 * beta + 0.8 * normal(engine);
      panel.period.push_back(t);
      panel.asset.push_back(a);
      panel.w.push_back(1);
      panel.y.push_back(beta - 0.5 * trait + normal(engine));
      panel.x[0].push_back(beta + std::sqrt(V) * normal(engine));
      panel.x[1].push_back(trait);
      panel.x[2].push_back(V);
    }
  }
  const BetaPanel betas(panel, 1);
  const Design design = betas.panel.design();
  const CrossSections naive = cross_sections(design, CrossSectionOptions());
  const CorrectedSections fit = solve(betas, design);
  EXPECT_LT(std::abs(t_statistic(fit.coef.row(0), 0.0)), 4);
  EXPECT_LT(std::abs(t_statistic(fit.coef.row(1), 1.0)), 4);
  EXPECT_LT(std::abs(t_statistic(fit.coef.row(2), -0.5)), 4);
  EXPECT_LT(std::abs(t_statistic(naive.coef.row(1), 0.64 / 1.04)), 4);
  EXPECT_LT(t_statistic(naive.coef.row(1), 1.0), -20);
  EXPECT_GT(t_statistic(naive.coef.row(2), -0.5), 20);
}

namespace {

// Influence rows of the pooled form by their definition.
Matrix direct_rows(const BetaPanel& betas,
                   const Design& design,
                   const Sums& sums,
                   const DirectFit& fit,
                   Index n_assets) {
  const Index first = design.intercept ? 1 : 0, K = betas.n_factors;
  LongMatrix scores = LongMatrix::Zero(n_assets, design.n_terms());
  for (const Index i : sums.rows) {
    const LongVector x = terms_of(design, i);
    LongVector score = x * (Long(design.y.at(i)) - x.dot(fit.coef));
    score.segment(first, K) +=
        Long(fit.kappa) * (betas.V(i).cast<Long>() * fit.coef.segment(first, K));
    scores.row(betas.panel.asset[static_cast<std::size_t>(i)]) +=
        weight_of(design, i) * score.transpose();
  }
  return (scores * fit.inverse.transpose()).cast<double>();
}

void expect_direct_pooled(const BetaPanel& betas,
                          const Design& design,
                          double min_reliability,
                          double tolerance) {
  const PooledCorrected fit = solve_pooled(betas, design, min_reliability);
  const Sums sums(betas, design, [](Index) { return true; });
  const DirectFit wanted = direct_fit(betas, design, sums, min_reliability);
  EXPECT_EQ(fit.n_used, static_cast<Index>(sums.rows.size()));
  expect_close(fit.smallest_root, wanted.smallest_root, wanted.smallest_root, tolerance);
  expect_close(fit.kappa, wanted.kappa, 1, tolerance);
  EXPECT_LT(distance(fit.estimate, wanted.coef.cast<double>()), tolerance);
  const Matrix rows = direct_rows(betas, design, sums, wanted, fit.asset_rows.rows());
  for (Index j = 0; j < rows.cols(); ++j) {
    EXPECT_LT(distance(fit.asset_rows.col(j), rows.col(j)), tolerance);
    const double sum = fit.asset_rows.col(j).sum();
    expect_close(sum, 0, fit.asset_rows.col(j).cwiseAbs().sum(), 1e-11);
  }
}

// Balanced returns and their full-sample betas with classical error covariances.
struct FullSample {
  Matrix returns, factors;  // T x N, T x K
  Matrix beta, inverse;     // N x K, (F'F)^-1 of centred factors
  Vector s2;                // N
  BetaPanel panel;
};

Panel spread_over_periods(const Matrix& returns,
                          const Matrix& beta,
                          const Vector& s2,
                          const Matrix& inverse) {
  const Index K = beta.cols();
  Panel panel;
  panel.n_periods = returns.rows();
  panel.x.resize(static_cast<std::size_t>(K + K * (K + 1) / 2));
  for (Index t = 0; t < returns.rows(); ++t) {
    for (Index i = 0; i < returns.cols(); ++i) {
      panel.period.push_back(static_cast<int>(t));
      panel.asset.push_back(static_cast<int>(i));
      panel.w.push_back(1);
      panel.y.push_back(returns(t, i));
      std::size_t column = 0;
      for (Index k = 0; k < K; ++k) panel.x[column++].push_back(beta(i, k));
      for (Index b = 0; b < K; ++b)
        for (Index a = b; a < K; ++a) panel.x[column++].push_back(s2[i] * inverse(a, b));
    }
  }
  return panel;
}

FullSample full_sample(Index T, Index N, Index K, double spread, unsigned seed) {
  std::mt19937 engine(seed);
  std::normal_distribution<double> normal;
  const auto draw = [&](Index rows, Index cols) {
    Matrix out(rows, cols);
    for (Index i = 0; i < out.size(); ++i) out.data()[i] = normal(engine);
    return out;
  };
  const Matrix factors = draw(T, K).array() + 0.3;
  const Matrix beta = (spread * draw(N, K)).array() + 1;
  const Vector sd = 1 + draw(N, 1).array().abs();
  const Matrix returns = factors * beta.transpose() + draw(T, N) * sd.asDiagonal();
  const Matrix F = factors.rowwise() - factors.colwise().mean();
  const Matrix R = returns.rowwise() - returns.colwise().mean();
  const Matrix inverse = (F.transpose() * F).inverse();
  const Matrix estimate = R.transpose() * F * inverse;
  const Vector s2 = (R - F * estimate.transpose()).colwise().squaredNorm() /
                    static_cast<double>(T - K - 1);
  const Panel panel = spread_over_periods(returns, estimate, s2, inverse);
  return {returns, factors, estimate, inverse, s2, BetaPanel(panel, K)};
}

}  // namespace

TEST(PooledCorrected, AgreesWithTheFormulaSolvedDirectly) {
  for (int K = 1; K <= 3; ++K) {
    for (int n_traits = 0; n_traits <= 2; ++n_traits) {
      const unsigned seed = static_cast<unsigned>(40 + 10 * K + n_traits);
      const BetaPanel betas = beta_panel(50, 7, K, n_traits, 0.3, seed);
      for (const bool intercept : {true, false}) {
        for (const bool weighted : {true, false}) {
          const Design design = betas.panel.design(intercept, weighted);
          expect_direct_pooled(betas, design, 0.1, 1e-11);
        }
      }
    }
  }
  const BetaPanel noisy = beta_panel(50, 7, 2, 1, 3.0, 81);
  const Design design = noisy.panel.design(true, true);
  EXPECT_LT(solve_pooled(noisy, design).kappa, 1);
  expect_direct_pooled(noisy, design, 0.1, 1e-11);
  expect_direct_pooled(noisy, design, 0.7, 1e-11);
}

// (X'X / N - s2 Lambda)^-1 X'rbar / N, s2 the mean of the s2_i (Shanken, 1992, Review of
// Financial Studies 5, 1-33; Raponi, Robotti and Zaffaroni, 2020, Review of Financial
// Studies 33, 2796-2842), and the sandwich of the assets' scores.
TEST(PooledCorrected, OnABalancedPanelIsTheClosedFormOfMeanReturns) {
  for (Index K = 1; K <= 2; ++K) {
    const Index T = 30, N = 80;
    const double n = static_cast<double>(N);
    const FullSample data = full_sample(T, N, K, 0.6, 90 + static_cast<unsigned>(K));
    const Design design = data.panel.panel.design();
    const PooledCorrected fit = solve_pooled(data.panel, design);
    Matrix X(N, K + 1);
    X << Vector::Ones(N), data.beta;
    const Vector mean = data.returns.colwise().mean();
    Matrix lambda = Matrix::Zero(K + 1, K + 1);
    lambda.bottomRightCorner(K, K) = data.inverse;
    const Matrix bread = (X.transpose() * X / n - data.s2.mean() * lambda).inverse();
    const Vector wanted = bread * (X.transpose() * mean / n);
    ASSERT_EQ(fit.kappa, 1);
    EXPECT_LT(distance(fit.estimate, wanted), 1e-12);

    Matrix scores(N, K + 1);
    for (Index i = 0; i < N; ++i) {
      const Vector x = X.row(i);
      scores.row(i) = x * (mean[i] - x.dot(wanted)) + data.s2[i] * (lambda * wanted);
    }
    const Matrix covariance = bread * (scores.transpose() * scores / n) * bread / n;
    EXPECT_LT(distance(fit.asset_rows.transpose() * fit.asset_rows, covariance), 1e-11);

    const CorrectedSections by_period = solve(data.panel, design);
    EXPECT_LT(distance(by_period.coef.rowwise().mean(), wanted), 1e-12);
    EXPECT_EQ(fit.n_used, N * T);
    EXPECT_EQ(fit.n_assets, N);
    EXPECT_EQ(fit.n_used_by_period, std::vector<Index>(static_cast<std::size_t>(T), N));
  }
}

// One matrix X, V and W in all periods: the pooled slopes are the mean of the periods'.
TEST(PooledCorrected, IsTheMeanOfThePeriodsWhenTheirExposuresRepeat) {
  const BetaPanel one = beta_panel(60, 1, 2, 1, 0.3, 50);
  const Panel& first = one.whole();
  std::mt19937 engine(50);
  std::normal_distribution<double> normal;
  Panel panel;
  panel.n_periods = 6;
  panel.x.resize(first.x.size());
  for (int t = 0; t < 6; ++t) {
    for (std::size_t i = 0; i < first.n(); ++i) {
      panel.period.push_back(t);
      panel.asset.push_back(first.asset[i]);
      panel.w.push_back(first.w[i]);
      panel.y.push_back(normal(engine));
      for (std::size_t j = 0; j < first.x.size(); ++j)
        panel.x[j].push_back(first.x[j][i]);
    }
  }
  const BetaPanel betas(panel, 2);
  for (const bool intercept : {true, false}) {
    for (const double min_reliability : {0.1, 0.95}) {
      const Design design = betas.panel.design(intercept, true);
      const PooledCorrected fit = solve_pooled(betas, design, min_reliability);
      const CorrectedSections sections = solve(betas, design, min_reliability);
      EXPECT_EQ(fit.kappa<1, min_reliability> 0.5);
      EXPECT_LT(distance(fit.estimate, sections.coef.rowwise().mean()), 1e-12);
    }
  }
}

TEST(PooledCorrected, CountsWhatItUses) {
  BetaPanel betas = beta_panel(40, 5, 2, 1, 0.3, 51);
  for (std::size_t i = 0; i < betas.panel.n(); ++i)
    if (betas.panel.asset[i] == 3) betas.covariance[i] = kNaN;
  betas.panel.y[0] = kNaN;
  const Design design = betas.panel.design(true, true);
  const PooledCorrected fit = solve_pooled(betas, design);
  EXPECT_EQ(fit.n_assets, 39);
  EXPECT_TRUE((fit.asset_rows.row(3).array() == 0).all());
  EXPECT_FALSE((fit.asset_rows.row(4).array() == 0).any());
  std::vector<Index> used(5, 0);
  for (Index i = 0; i < design.n_rows; ++i)
    if (is_complete(betas, design, i)) ++used[static_cast<std::size_t>(design.period[i])];
  EXPECT_EQ(fit.n_used_by_period, used);
  EXPECT_EQ(fit.n_used, std::accumulate(used.begin(), used.end(), Index(0)));
  expect_direct_pooled(betas, design, 0.1, 1e-11);
}

TEST(PooledCorrected, RowOrderThreadsAndUnitsDoNotMatter) {
  // Enough rows for several chunks.
  const BetaPanel betas = beta_panel(4000, 25, 2, 1, 0.4, 52);
  const PooledCorrected once = solve_pooled(betas, betas.panel.design(true, true));
  for (const BetaPanel& rows : {betas.by_asset(), betas.shuffled(7)}) {
    const Design design = rows.panel.design(true, true);
    const PooledCorrected fit = solve_pooled(rows, design);
    EXPECT_LT(distance(fit.estimate, once.estimate), 1e-12);
    EXPECT_LT(distance(fit.asset_rows, once.asset_rows), 1e-12);
    const PooledCorrected again = solve_pooled(rows, design, 0.1, 4);
    EXPECT_TRUE(same_bits(again.estimate, fit.estimate));
    EXPECT_TRUE(same_bits(again.asset_rows, fit.asset_rows));
  }
  const BetaPanel thousands = rescaled(betas, 1000);
  const PooledCorrected fit = solve_pooled(thousands, thousands.panel.design(true, true));
  const Vector units = (Vector(4) << 1, 1000, 1, 1).finished();
  EXPECT_LT(distance(units.asDiagonal() * fit.estimate, once.estimate), 1e-12);
  EXPECT_LT(distance(fit.asset_rows * units.asDiagonal(), once.asset_rows), 1e-12);
}

TEST(PooledCorrected, AMeanFarFromZeroLosesNothing) {
  const double mean = 1 << 20;
  BetaPanel far = beta_panel(60, 6, 2, 1, 0.4, 53);
  add_to_columns(far, mean);
  BetaPanel near = far;
  add_to_columns(near, -mean);
  const PooledCorrected fit = solve_pooled(far, far.panel.design(true, true));
  const PooledCorrected wanted = solve_pooled(near, near.panel.design(true, true));
  const Matrix rows = wanted.asset_rows.rightCols(3);
  EXPECT_LT(distance(fit.estimate.tail(3), wanted.estimate.tail(3)), 1e-12);
  EXPECT_LT(distance(fit.asset_rows.rightCols(3), rows), 1e-12);
  const Vector constant = wanted.asset_rows.col(0) - mean * rows.rowwise().sum();
  EXPECT_LT(distance(fit.asset_rows.col(0), constant), 1e-12);
}

TEST(PooledCorrected, NearlyCollinearTermsGoBackToTheirRows) {
  const double gap = 1e-4;
  const BetaPanel betas = beta_panel(50, 5, 1, 2, 0.3, 54);
  BetaPanel close = betas;
  close.covariance[3] = close.covariance[100] = kNaN;
  for (std::size_t i = 0; i < betas.panel.n(); ++i)
    close.panel.x[2][i] = betas.panel.x[1][i] + gap * betas.panel.x[2][i];
  for (const bool intercept : {true, false}) {
    const Design design = close.panel.design(intercept, true);
    ASSERT_FALSE(detail::solve_moments(panel_moments(design, 1), 0, intercept).trusted);
    // Raw sums of the direct solution lose ten digits and more.
    expect_direct_pooled(close, design, 0.1, 1e-8);
    for (const int threads : {2, 3}) {
      const PooledCorrected one = solve_pooled(close, design);
      EXPECT_TRUE(same_bits(solve_pooled(close, design, 0.1, threads).asset_rows,
                            one.asset_rows));
    }
  }
}

TEST(PooledCorrected, SaysWhyItCannotBeEstimated) {
  const auto expect_error = [](const BetaPanel& betas,
                               const std::string& tag,
                               const std::string& fact,
                               double value) {
    try {
      solve_pooled(betas, betas.panel.design());
      ADD_FAILURE() << tag;
    } catch (const Error& error) {
      EXPECT_EQ(error.tag(), tag);
      ASSERT_FALSE(error.facts().empty());
      EXPECT_EQ(error.facts()[0].first, fact);
      EXPECT_EQ(error.facts()[0].second, value);
    }
  };
  const BetaPanel start = beta_panel(30, 3, 2, 1, 0.3, 55);
  const std::size_t n = start.panel.n();
  BetaPanel betas = start;
  std::fill(betas.panel.x[1].begin(), betas.panel.x[1].end(), 0.7);
  expect_error(betas, "no_variation", "term", 3);
  betas = start;
  for (std::size_t i = 0; i < n; ++i)
    betas.panel.x[2][i] = betas.panel.x[0][i] + betas.panel.x[1][i];
  expect_error(betas, "rank", "term", 4);
  betas = start;
  std::fill(betas.panel.y.begin() + 4, betas.panel.y.end(), kNaN);
  expect_error(betas, "too_few", "n_used", 4);
  betas = start;
  for (std::size_t i = 0; i < n; ++i)
    if (betas.panel.asset[i] > 3) betas.panel.y[i] = kNaN;
  expect_error(betas, "too_few", "n_assets", 4);
}

// One factor, betas over the 24 periods of the sample itself: errors of variance 3.2 / 23
// on average beside a beta variance of 0.25. The target is the factor's mean. 300 panels:
// the mean error within four of its standard errors, the share of 95 % intervals that
// cover within four binomial standard errors.
TEST(PooledCorrected, SimulatedPremiaComeBackAndIntervalsCover) {
  const int n_panels = 300;
  Vector error(n_panels), naive(n_panels);
  int covered = 0;
  for (int s = 0; s < n_panels; ++s) {
    const FullSample data = full_sample(24, 200, 1, 0.5, 500 + static_cast<unsigned>(s));
    const Design design = data.panel.panel.design();
    const PooledCorrected fit = solve_pooled(data.panel, design);
    const double realised = data.factors.mean();
    error[s] = fit.estimate[1] - realised;
    naive[s] = solve_pooled(data.panel, design, 1.0).estimate[1] - realised;
    covered += std::abs(error[s]) < 1.96 * fit.asset_rows.col(1).norm();
  }
  EXPECT_LT(std::abs(t_statistic(error, 0)), 4);
  EXPECT_LT(t_statistic(naive, 0), -8);
  EXPECT_NEAR(static_cast<double>(covered) / n_panels,
              0.95,
              4 * std::sqrt(0.95 * 0.05 / n_panels));
}
