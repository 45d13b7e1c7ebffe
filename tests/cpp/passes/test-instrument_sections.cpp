#include "lambdabar/passes/instrument_sections.hpp"

#include "sample-panel.hpp"

#include <gtest/gtest.h>

#include <cstring>

using namespace lambdabar;
using namespace lambdabar::sample;

namespace {

using Long = long double;
using LongMatrix = Eigen::Matrix<Long, Eigen::Dynamic, Eigen::Dynamic>;
using LongVector = Eigen::Matrix<Long, Eigen::Dynamic, 1>;

// A panel whose last columns are the other half's K betas.
struct HalvesPanel {
  Panel panel;  // without them
  std::vector<std::vector<double>> second;

  HalvesPanel(const Panel& columns, std::size_t K)
      : panel(columns),
        second(columns.x.end() - static_cast<Index>(K), columns.x.end()),
        whole_(columns) {
    panel.x.resize(columns.x.size() - K);
  }

  std::vector<Column> other() const {
    std::vector<Column> out;
    for (const auto& column : second) out.push_back(real_column(column));
    return out;
  }
  // As constructed, in another order.
  HalvesPanel by_asset() const { return {whole_.by_asset(), second.size()}; }
  HalvesPanel shuffled(unsigned seed) const {
    return {whole_.shuffled(seed), second.size()};
  }
  const Panel& whole() const { return whole_; }

 private:
  Panel whole_;
};

// The second half's betas are the first half's plus noise of their own.
HalvesPanel halves_panel(
    int n_assets, int n_periods, int K, int n_traits, double noise, unsigned seed) {
  Panel panel = ragged_panel(n_assets, n_periods, K + n_traits, seed);
  std::mt19937 engine(seed + 1000);
  std::normal_distribution<double> normal;
  for (int k = 0; k < K; ++k) {
    std::vector<double> column = panel.x[static_cast<std::size_t>(k)];
    for (double& beta : column) beta += 0.2 + noise * normal(engine);
    panel.x.push_back(column);
  }
  return {panel, static_cast<std::size_t>(K)};
}

InstrumentSections solve(const HalvesPanel& halves,
                         const Design& design,
                         RegressorHalf half,
                         int threads = 1,
                         double min_strength = 0) {
  InstrumentOptions options;
  options.threads = threads;
  options.min_strength = min_strength;
  const std::vector<RegressorHalf> all(static_cast<std::size_t>(design.n_periods), half);
  return instrument_sections(design, halves.other(), all, options);
}

// One period's whitened rows, in extended precision.
struct PeriodRowsOf {
  LongMatrix X, Z;
  LongVector y, constant;

  PeriodRowsOf(const HalvesPanel& halves, const Design& design, Index t) {
    const Index P = design.n_terms(), first = design.intercept ? 1 : 0;
    const std::vector<Column> other = halves.other();
    const Index K = static_cast<Index>(other.size());
    X = Z = LongMatrix(design.n_rows, P);
    y = constant = LongVector(design.n_rows);
    Index n = 0;
    for (Index i = 0; i < design.n_rows; ++i) {
      if (design.period[i] != t || !is_complete(design, other, i)) continue;
      const Long root =
          design.weight.empty() ? 1 : std::sqrt(Long(design.weight[0].at(i)));
      constant[n] = root;
      if (design.intercept) X(n, 0) = Z(n, 0) = root;
      for (Index j = first; j < P; ++j) {
        const std::size_t column = static_cast<std::size_t>(j - first);
        X(n, j) = root * Long(design.x[column].at(i));
        Z(n, j) = j - first < K ? root * Long(other[column].at(i)) : X(n, j);
      }
      y[n++] = root * Long(design.y.at(i));
    }
    for (LongMatrix* rows : {&X, &Z}) rows->conservativeResize(n, Eigen::NoChange);
    for (LongVector* rows : {&y, &constant}) rows->conservativeResize(n);
  }

  static bool is_complete(const Design& design,
                          const std::vector<Column>& other,
                          Index row) {
    detail::RowValues values;
    values.values.resize(design.x.size() + 1);
    bool complete = detail::read_row(design, row, values);
    for (const Column& column : other)
      complete = complete && std::isfinite(column.at(row));
    return complete;
  }
};

// Two stages, each by QR: the map from y to the slopes of `regressors`.
LongMatrix two_stage_map(const LongMatrix& regressors, const LongMatrix& instruments) {
  const Eigen::HouseholderQR<LongMatrix> first(instruments);
  const LongMatrix fitted = instruments * first.solve(regressors);
  const Eigen::HouseholderQR<LongMatrix> second(fitted);
  const LongMatrix identity = LongMatrix::Identity(fitted.rows(), fitted.rows());
  return second.solve(identity);
}

struct DirectFit {
  Vector coef, std_error;
  double r_squared = kNaN;
};

DirectFit direct_fit(const PeriodRowsOf& rows, bool intercept, RegressorHalf half) {
  const LongMatrix forward = two_stage_map(rows.X, rows.Z);
  const LongMatrix back = two_stage_map(rows.Z, rows.X);
  LongMatrix map = (forward + back) / 2;
  LongVector fitted = (rows.X * (forward * rows.y) + rows.Z * (back * rows.y)) / 2;
  if (half != RegressorHalf::both) {
    const bool zero = half == RegressorHalf::zero;
    map = zero ? forward : back;
    fitted =
        zero ? LongVector(rows.X * (map * rows.y)) : LongVector(rows.Z * (map * rows.y));
  }
  const Long mean =
      intercept ? rows.constant.dot(rows.y) / rows.constant.squaredNorm() : 0;
  const Long rss = (rows.y - fitted).squaredNorm();
  const Long tss = (rows.y - mean * rows.constant).squaredNorm();
  const LongVector variance =
      map.rowwise().squaredNorm() * (rss / Long(rows.X.rows() - rows.X.cols()));
  DirectFit out;
  out.coef = (map * rows.y).cast<double>();
  out.std_error = variance.cwiseSqrt().cast<double>();
  out.r_squared = static_cast<double>(1 - rss / tss);
  return out;
}

LongMatrix residuals(const LongMatrix& on, const LongMatrix& of) {
  if (on.cols() == 0) return of;
  return of - on * Eigen::HouseholderQR<LongMatrix>(on).solve(of);
}

double distance(const Matrix& a, const Matrix& b) {
  return (a - b).cwiseAbs().maxCoeff() / b.cwiseAbs().maxCoeff();
}

void expect_direct(const HalvesPanel& halves,
                   const Design& design,
                   RegressorHalf half,
                   double tolerance) {
  const InstrumentSections fit = solve(halves, design, half);
  for (Index t = 0; t < design.n_periods; ++t) {
    const PeriodRowsOf rows(halves, design, t);
    const DirectFit wanted = direct_fit(rows, design.intercept, half);
    ASSERT_EQ(fit.status[static_cast<std::size_t>(t)], PeriodStatus::estimated);
    EXPECT_EQ(fit.n_used[static_cast<std::size_t>(t)], rows.X.rows());
    EXPECT_LT(distance(fit.coef.col(t), wanted.coef), tolerance);
    for (Index j = 0; j < wanted.std_error.size(); ++j)
      EXPECT_NEAR(fit.std_error(j, t) / wanted.std_error[j], 1, tolerance);
    EXPECT_NEAR(fit.r_squared[t], wanted.r_squared, tolerance);
  }
}

bool same_bits(const Matrix& a, const Matrix& b) {
  return a.rows() == b.rows() && a.cols() == b.cols() &&
         std::memcmp(a.data(), b.data(), sizeof(double) * std::size_t(a.size())) == 0;
}

void expect_same_bits(const InstrumentSections& a, const InstrumentSections& b) {
  EXPECT_TRUE(same_bits(a.coef, b.coef));
  EXPECT_TRUE(same_bits(a.std_error, b.std_error));
  EXPECT_TRUE(same_bits(a.r_squared, b.r_squared));
  EXPECT_TRUE(same_bits(a.strength, b.strength));
  EXPECT_EQ(a.status, b.status);
  EXPECT_EQ(a.culprit, b.culprit);
  EXPECT_EQ(a.n_rows, b.n_rows);
  EXPECT_EQ(a.n_used, b.n_used);
  EXPECT_EQ(a.varies, b.varies);
}

constexpr RegressorHalf kHalves[] = {
    RegressorHalf::zero, RegressorHalf::one, RegressorHalf::both};

}  // namespace

TEST(InstrumentSections, AreTwoStageLeastSquares) {
  for (int K = 1; K <= 3; ++K) {
    for (int n_traits = 0; n_traits <= 2; ++n_traits) {
      const unsigned seed = static_cast<unsigned>(10 * K + n_traits);
      const HalvesPanel halves = halves_panel(80, 5, K, n_traits, 0.5, seed);
      for (const bool intercept : {true, false})
        for (const bool weighted : {true, false})
          for (const RegressorHalf half : kHalves)
            expect_direct(halves, halves.panel.design(intercept, weighted), half, 1e-12);
    }
  }
}

TEST(InstrumentSections, AHalfAPeriod) {
  const HalvesPanel halves = halves_panel(60, 6, 2, 1, 0.5, 40);
  const Design design = halves.panel.design(true, true);
  std::vector<RegressorHalf> half;
  for (int t = 0; t < 6; ++t) half.push_back(kHalves[t % 3]);
  const InstrumentSections mixed =
      instrument_sections(design, halves.other(), half, InstrumentOptions());
  for (const RegressorHalf only : kHalves) {
    const InstrumentSections same = solve(halves, design, only);
    for (Index t = 0; t < 6; ++t) {
      const bool equal = same_bits(mixed.coef.col(t), same.coef.col(t));
      EXPECT_EQ(equal, half[static_cast<std::size_t>(t)] == only);
    }
  }
}

TEST(InstrumentSections, BetasAsTheirOwnInstrumentsAreLeastSquares) {
  const Panel panel = ragged_panel(60, 6, 3, 41);
  Panel doubled = panel;
  doubled.x.push_back(panel.x[0]);
  doubled.x.push_back(panel.x[1]);
  const HalvesPanel halves(doubled, 2);
  for (const bool intercept : {true, false}) {
    for (const bool weighted : {true, false}) {
      const Design design = halves.panel.design(intercept, weighted);
      const CrossSections wanted = cross_sections(design, CrossSectionOptions());
      for (const RegressorHalf half : kHalves) {
        const InstrumentSections fit = solve(halves, design, half);
        EXPECT_LT(distance(fit.coef, wanted.coef), 1e-12);
        EXPECT_LT(distance(fit.std_error, wanted.std_error), 1e-12);
        EXPECT_LT(distance(fit.r_squared, wanted.r_squared), 1e-12);
        EXPECT_GT(fit.strength.minCoeff(), 1 - 1e-12);
        EXPECT_LE(fit.strength.maxCoeff(), 1);
        EXPECT_EQ(fit.varies, wanted.varies);
      }
    }
  }
}

// The smallest canonical correlation: the root of the smallest eigenvalue of
// (X'X)^-1 X'Z (Z'Z)^-1 Z'X for betas less their projection on the exact columns.
TEST(InstrumentSections, StrengthIsTheSmallestPartialCanonicalCorrelation) {
  for (int K = 1; K <= 3; ++K) {
    const HalvesPanel halves =
        halves_panel(80, 4, K, 1, 1.0, static_cast<unsigned>(42 + K));
    for (const bool intercept : {true, false}) {
      const Design design = halves.panel.design(intercept, true);
      const InstrumentSections fit = solve(halves, design, RegressorHalf::zero);
      const InstrumentSections back = solve(halves, design, RegressorHalf::one);
      const Index first = intercept ? 1 : 0;
      for (Index t = 0; t < 4; ++t) {
        const PeriodRowsOf rows(halves, design, t);
        LongMatrix exact(rows.X.rows(), first + 1);
        exact << rows.X.leftCols(first), rows.X.rightCols(1);
        const LongMatrix x = residuals(exact, rows.X.middleCols(first, K));
        const LongMatrix z = residuals(exact, rows.Z.middleCols(first, K));
        const LongMatrix xz = x.transpose() * z, xx = x.transpose() * x;
        const LongMatrix zz = z.transpose() * z;
        const LongMatrix middle = xz * zz.inverse() * xz.transpose();
        const Eigen::GeneralizedSelfAdjointEigenSolver<LongMatrix> squares(middle, xx);
        const double wanted = static_cast<double>(std::sqrt(squares.eigenvalues()[0]));
        EXPECT_NEAR(fit.strength[t], wanted, 1e-12);
        EXPECT_NEAR(back.strength[t], wanted, 1e-12);
      }
    }
  }
}

TEST(InstrumentSections, ABetaInOtherUnitsRescalesItsSlope) {
  const HalvesPanel halves = halves_panel(60, 5, 2, 1, 0.5, 46);
  const Vector units = (Vector(4) << 1, 1000, 1, 1).finished();
  HalvesPanel thousands = halves;
  for (double& x : thousands.panel.x[0]) x *= 1000;
  for (double& x : thousands.second[0]) x *= 1000;
  HalvesPanel mixed = halves;
  for (double& x : mixed.panel.x[0]) x *= 1000;
  for (const RegressorHalf half : kHalves) {
    const InstrumentSections plain = solve(halves, halves.panel.design(true, true), half);
    const InstrumentSections fit =
        solve(thousands, thousands.panel.design(true, true), half);
    EXPECT_LT(distance(units.asDiagonal() * fit.coef, plain.coef), 1e-12);
    EXPECT_LT(distance(units.asDiagonal() * fit.std_error, plain.std_error), 1e-12);
    EXPECT_LT(distance(fit.strength, plain.strength), 1e-12);
    // Units of the instruments alone do nothing.
    if (half != RegressorHalf::one) continue;
    const InstrumentSections same = solve(mixed, mixed.panel.design(true, true), half);
    EXPECT_LT(distance(same.coef, plain.coef), 1e-12);
    EXPECT_LT(distance(same.std_error, plain.std_error), 1e-12);
  }
}

TEST(InstrumentSections, RowOrderAndThreadsDoNotChangeABit) {
  Panel panel = halves_panel(200, 30, 2, 2, 0.5, 47).whole();
  // Ties in y, and some incomplete rows.
  for (std::size_t i = 0; i < panel.n(); ++i)
    if (i % 3 == 0) panel.y[i] = 0;
  panel.x[1][5] = kNaN;
  panel.x[4][700] = kNaN;
  panel.w[33] = 0;
  const HalvesPanel halves(panel, 2);
  for (const RegressorHalf half : kHalves) {
    const InstrumentSections once = solve(halves, halves.panel.design(true, true), half);
    EXPECT_EQ(once.n_used[0] + 2, once.n_rows[0]);
    for (const HalvesPanel& rows :
         {halves, halves.by_asset(), halves.shuffled(3), halves.shuffled(4)}) {
      const Design design = rows.panel.design(true, true);
      expect_same_bits(solve(rows, design, half), once);
      for (const int threads : {2, 5})
        expect_same_bits(solve(rows, design, half, threads), once);
    }
  }
}

TEST(InstrumentSections, AWholeNumberAsWeightIsThatManyRows) {
  Panel panel = halves_panel(50, 4, 2, 1, 0.5, 48).whole();
  for (std::size_t i = 0; i < panel.n(); ++i) panel.w[i] = 1 + static_cast<double>(i % 3);
  Panel repeated = panel;
  for (std::size_t i = 0; i < panel.n(); ++i) {
    for (int copy = 1; copy < static_cast<int>(panel.w[i]); ++copy) {
      repeated.period.push_back(panel.period[i]);
      repeated.asset.push_back(panel.asset[i]);
      repeated.y.push_back(panel.y[i]);
      repeated.w.push_back(1);
      for (std::size_t j = 0; j < panel.x.size(); ++j)
        repeated.x[j].push_back(panel.x[j][i]);
    }
  }
  const HalvesPanel weighted(panel, 2), rows(repeated, 2);
  for (const RegressorHalf half : kHalves) {
    const InstrumentSections a = solve(weighted, weighted.panel.design(true, true), half);
    const InstrumentSections b = solve(rows, rows.panel.design(true, false), half);
    EXPECT_LT(distance(a.coef, b.coef), 1e-12);
    EXPECT_LT(distance(a.strength, b.strength), 1e-12);
    EXPECT_LT(distance(a.r_squared, b.r_squared), 1e-12);
  }
}

// What adding 2^20 rounds away, subtracting it brings out: both panels hold the same
// spread. A root of a weight times 2^20 is rounded before it is centred: six digits.
TEST(InstrumentSections, AMeanFarFromZeroLosesNoMoreThanItsWeighing) {
  const double mean = 1 << 20;
  HalvesPanel far = halves_panel(80, 4, 2, 1, 0.5, 49);
  const auto add = [](HalvesPanel& to, double value) {
    for (auto* group : {&to.panel.x, &to.second})
      for (auto& column : *group)
        for (double& x : column) x += value;
    for (double& y : to.panel.y) y -= value;
  };
  add(far, mean);
  HalvesPanel near = far;
  add(near, -mean);
  for (const bool weighted : {false, true}) {
    const double tolerance = weighted ? 1e-9 : 1e-14;
    for (const RegressorHalf half : kHalves) {
      const InstrumentSections fit = solve(far, far.panel.design(true, weighted), half);
      const InstrumentSections wanted =
          solve(near, near.panel.design(true, weighted), half);
      const Matrix slopes = wanted.coef.bottomRows(3);
      EXPECT_LT(distance(fit.coef.bottomRows(3), slopes), tolerance);
      EXPECT_LT(distance(fit.strength, wanted.strength), tolerance);
      EXPECT_LT(distance(fit.r_squared, wanted.r_squared), tolerance);
      const Matrix constant =
          wanted.coef.row(0).array() - mean - mean * slopes.colwise().sum().array();
      EXPECT_LT(distance(fit.coef.row(0), constant), tolerance);
    }
  }
}

TEST(InstrumentSections, WeakPeriodsAreTrimmedOnStrengthAlone) {
  const HalvesPanel halves = halves_panel(60, 40, 1, 1, 4.0, 50);
  const Design design = halves.panel.design();
  const InstrumentSections fit = solve(halves, design, RegressorHalf::zero);
  const InstrumentSections all = solve(halves, design, RegressorHalf::zero, 1, 1e-6);
  const double cut = all.strength[7];
  const InstrumentSections some = solve(halves, design, RegressorHalf::zero, 1, cut);
  Index n_weak = 0;
  for (Index t = 0; t < 40; ++t) {
    const std::size_t at = static_cast<std::size_t>(t);
    EXPECT_EQ(all.status[at], PeriodStatus::estimated);
    EXPECT_EQ(fit.strength[t], all.strength[t]);
    const bool weak =
        fit.strength[t] < 2 / std::sqrt(static_cast<double>(fit.n_used[at]));
    n_weak += weak;
    EXPECT_EQ(fit.status[at],
              weak ? PeriodStatus::weak_instruments : PeriodStatus::estimated);
    EXPECT_EQ(fit.coef.col(t).array().isNaN().all(), weak);
    EXPECT_EQ(fit.std_error.col(t).array().isNaN().all(), weak);
    EXPECT_EQ(std::isnan(fit.r_squared[t]), weak);
    EXPECT_EQ(fit.culprit[at], -1);
    EXPECT_EQ(same_bits(fit.coef.col(t), all.coef.col(t)), !weak);
    // A period at the bound stays in.
    EXPECT_EQ(some.status[at] == PeriodStatus::estimated, all.strength[t] >= cut);
  }
  EXPECT_GT(n_weak, 5);
  EXPECT_LT(n_weak, 35);

  // Other returns, same choice.
  HalvesPanel other = halves;
  for (double& y : other.panel.y) y = 1 - y * y;
  EXPECT_EQ(solve(other, other.panel.design(), RegressorHalf::zero).status, fit.status);
}

TEST(InstrumentSections, UnrelatedBetasAreWeakHoweverLowTheBound) {
  // Exactly orthogonal after the constant.
  Panel panel;
  panel.n_periods = 1;
  panel.x.resize(2);
  for (int i = 0; i < 16; ++i) {
    panel.period.push_back(0);
    panel.asset.push_back(i);
    panel.w.push_back(1);
    panel.y.push_back(0.1 * i * i);
    panel.x[0].push_back(i % 2 == 0 ? 1 : -1);
    panel.x[1].push_back(i < 8 ? 1 : -1);
  }
  const HalvesPanel halves(panel, 1);
  for (const RegressorHalf half : kHalves) {
    const InstrumentSections fit = solve(halves, halves.panel.design(), half, 1, 1e-300);
    EXPECT_EQ(fit.status[0], PeriodStatus::weak_instruments);
    EXPECT_LT(fit.strength[0], 1e-14);
    EXPECT_TRUE(fit.coef.array().isNaN().all());
  }
}

TEST(InstrumentSections, EveryPeriodHasItsStatus) {
  Panel panel = halves_panel(30, 8, 2, 1, 0.3, 51).whole();
  std::size_t seen = 0;
  for (std::size_t i = 0; i < panel.n(); ++i) {
    const int t = panel.period[i];
    if (t == 1 && ++seen > 4) panel.x[3][i] = kNaN;
    if (t == 2) panel.x[4][i] = 0.1 + 0.2;
    if (t == 3) panel.x[3][i] = 2 * panel.x[4][i] - 1;
    if (t == 4) panel.x[4][i] = kNaN;
    if (t == 5) panel.x[2][i] = panel.x[0][i] - panel.x[1][i];
    if (t == 6) panel.x[2][i] = 0.7;
  }
  const std::vector<PeriodStatus> wanted = {PeriodStatus::estimated,
                                            PeriodStatus::too_few_assets,
                                            PeriodStatus::no_variation,
                                            PeriodStatus::rank_deficient,
                                            PeriodStatus::empty,
                                            PeriodStatus::rank_deficient,
                                            PeriodStatus::no_variation,
                                            PeriodStatus::estimated};
  const HalvesPanel halves(panel, 2);
  for (const HalvesPanel& rows : {halves, halves.by_asset(), halves.shuffled(2)}) {
    for (const RegressorHalf half : kHalves) {
      const InstrumentSections fit = solve(rows, rows.panel.design(), half);
      EXPECT_EQ(fit.status, wanted);
      EXPECT_EQ(fit.culprit, (std::vector<Index>{-1, -1, 2, 2, -1, 3, 3, -1}));
      EXPECT_EQ(fit.n_used[1], 4);
      EXPECT_EQ(fit.n_used[4], 0);
      for (Index t = 0; t < 8; ++t) {
        const bool estimated = t == 0 || t == 7;
        EXPECT_EQ(fit.coef.col(t).allFinite(), estimated);
        EXPECT_EQ(fit.coef.col(t).array().isNaN().all(), !estimated);
        EXPECT_EQ(std::isfinite(fit.std_error(0, t)), estimated);
        EXPECT_EQ(std::isfinite(fit.strength[t]), estimated);
      }
    }
  }
  InstrumentOptions options;
  options.min_assets = 31;
  const std::vector<RegressorHalf> both(8, RegressorHalf::both);
  const InstrumentSections none =
      instrument_sections(halves.panel.design(), halves.other(), both, options);
  EXPECT_EQ(none.status[0], PeriodStatus::too_few_assets);
}

TEST(InstrumentSections, WithoutAConstantOnlyZerosHaveNoRank) {
  HalvesPanel halves = halves_panel(30, 2, 2, 0, 0.3, 52);
  for (std::size_t i = 0; i < halves.panel.n(); ++i) {
    const double value = halves.panel.period[i];
    halves.panel.x[1][i] = halves.second[1][i] = value;
  }
  const InstrumentSections fit =
      solve(halves, halves.panel.design(false), RegressorHalf::both);
  EXPECT_EQ(fit.status[0], PeriodStatus::rank_deficient);
  EXPECT_EQ(fit.culprit[0], 1);
  EXPECT_EQ(fit.status[1], PeriodStatus::estimated);
  EXPECT_EQ(fit.varies, (std::vector<bool>{true, false}));
}

TEST(InstrumentSections, ATermVariesWhenItDoesInBothHalves) {
  HalvesPanel halves = halves_panel(30, 3, 2, 1, 0.3, 53);
  for (std::size_t i = 0; i < halves.panel.n(); ++i)
    halves.second[1][i] = halves.panel.period[i];
  const InstrumentSections fit =
      solve(halves, halves.panel.design(), RegressorHalf::zero);
  EXPECT_EQ(fit.varies, (std::vector<bool>{true, true, false, true}));
  EXPECT_EQ(fit.status[1], PeriodStatus::no_variation);
  EXPECT_EQ(fit.culprit[1], 2);
}

TEST(InstrumentSections, ReturnsThatDoNotVaryHaveNoRSquared) {
  HalvesPanel halves = halves_panel(30, 1, 1, 1, 0.3, 54);
  std::fill(halves.panel.y.begin(), halves.panel.y.end(), 0.25);
  const InstrumentSections fit =
      solve(halves, halves.panel.design(), RegressorHalf::both);
  EXPECT_NEAR(fit.coef(0, 0), 0.25, 1e-14);
  EXPECT_NEAR(fit.coef(1, 0), 0, 1e-14);
  EXPECT_TRUE(std::isnan(fit.r_squared[0]));
}

TEST(InstrumentSections, RefuseWhatTheyCannotMeet) {
  HalvesPanel halves = halves_panel(30, 4, 2, 0, 0.3, 55);
  const std::vector<RegressorHalf> half(4, RegressorHalf::zero);
  const auto expect_input_error = [](const auto& call, double fact) {
    try {
      call();
      ADD_FAILURE() << fact;
    } catch (const Error& error) {
      EXPECT_EQ(error.tag(), "input");
      EXPECT_EQ(error.facts().at(0).second, fact);
    }
  };
  const Design design = halves.panel.design();
  std::vector<Column> three = halves.other();
  three.push_back(three[0]);
  expect_input_error([&] { instrument_sections(design, {}, half, {}); }, 0);
  expect_input_error([&] { instrument_sections(design, three, half, {}); }, 3);
  const std::vector<RegressorHalf> short_by_one(3, RegressorHalf::zero);
  expect_input_error(
      [&] { instrument_sections(design, halves.other(), short_by_one, {}); }, 3);
  for (const bool by_asset : {false, true}) {
    HalvesPanel negative = by_asset ? halves.by_asset() : halves;
    negative.panel.w[60] = -1;
    negative.panel.w[31] = -0.5;
    negative.panel.y[31] = kNaN;
    const Design weighted = negative.panel.design(true, true);
    expect_input_error([&] { solve(negative, weighted, RegressorHalf::zero); }, 32);
  }
}

// True betas of variance 1 that go with a trait (correlation 0.6), each half's error of
// variance 0.4; premia are 1 and -0.5. OLS on one half is attenuated by v / (v + 0.4),
// v = 0.64 being what the trait leaves of the betas. Bounds: four standard errors of a
// mean over 200 periods; the bias is above twenty.
TEST(InstrumentSections, SimulatedPremiaComeBackWhereLeastSquaresIsAttenuated) {
  std::mt19937 engine(12);
  std::normal_distribution<double> normal;
  Panel panel;
  panel.n_periods = 200;
  panel.x.resize(3);
  for (int t = 0; t < 200; ++t) {
    for (int a = 0; a < 150; ++a) {
      const double beta = normal(engine), trait = 0.6 * beta + 0.8 * normal(engine);
      panel.period.push_back(t);
      panel.asset.push_back(a);
      panel.w.push_back(1);
      panel.y.push_back(beta - 0.5 * trait + normal(engine));
      panel.x[0].push_back(beta + std::sqrt(0.4) * normal(engine));
      panel.x[1].push_back(trait);
      panel.x[2].push_back(beta + std::sqrt(0.4) * normal(engine));
    }
  }
  const HalvesPanel halves(panel, 1);
  const Design design = halves.panel.design();
  const auto t_statistic = [](const Vector& x, double mean) {
    const double n = static_cast<double>(x.size());
    const double variance = (x.array() - x.mean()).square().sum() / (n - 1);
    return (x.mean() - mean) / std::sqrt(variance / n);
  };
  const CrossSections naive = cross_sections(design, CrossSectionOptions());
  EXPECT_LT(std::abs(t_statistic(naive.coef.row(1), 0.64 / 1.04)), 4);
  EXPECT_LT(t_statistic(naive.coef.row(1), 1.0), -20);
  for (const RegressorHalf half : kHalves) {
    const InstrumentSections fit = solve(halves, design, half);
    ASSERT_TRUE(fit.coef.allFinite());
    EXPECT_LT(std::abs(t_statistic(fit.coef.row(0), 0.0)), 4);
    EXPECT_LT(std::abs(t_statistic(fit.coef.row(1), 1.0)), 4);
    EXPECT_LT(std::abs(t_statistic(fit.coef.row(2), -0.5)), 4);
  }
}
