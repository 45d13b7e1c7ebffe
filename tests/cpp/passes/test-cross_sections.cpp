#include "sample-panel.hpp"

#include <gtest/gtest.h>

#include <cstring>

using namespace lambdabar;
using namespace lambdabar::sample;

namespace {

constexpr double kInf = std::numeric_limits<double>::infinity();

CrossSections solve(const Design& design, int threads = 1, Index min_assets = 0) {
  CrossSectionOptions options;
  options.threads = threads;
  options.min_assets = min_assets;
  return cross_sections(design, options);
}

void expect_close(double value, double wanted, double scale, double tolerance) {
  EXPECT_LE(std::abs(value - wanted), tolerance * scale) << value << " for " << wanted;
}

void expect_reference(const Design& design, const CrossSections& fit, double tolerance) {
  for (Index t = 0; t < design.n_periods; ++t) {
    const Reference wanted =
        plain_qr(design, [&](Index row) { return design.period[row] == t; });
    ASSERT_EQ(fit.status[static_cast<std::size_t>(t)], PeriodStatus::estimated) << t;
    EXPECT_EQ(fit.n_used[static_cast<std::size_t>(t)], wanted.n);
    for (Index j = 0; j < wanted.coef.size(); ++j) {
      const double scale = std::abs(wanted.coef[j]) + wanted.std_error[j];
      expect_close(fit.coef(j, t), wanted.coef[j], scale, tolerance);
      expect_close(
          fit.std_error(j, t), wanted.std_error[j], wanted.std_error[j], tolerance);
    }
    expect_close(fit.rss[t], wanted.rss, wanted.rss, tolerance);
    expect_close(fit.tss[t], wanted.tss, wanted.tss, tolerance);
    expect_close(fit.r_squared[t], 1 - wanted.rss / wanted.tss, 1, tolerance);
  }
}

bool same_bits(const Matrix& a, const Matrix& b) {
  return a.size() == b.size() &&
         std::memcmp(a.data(), b.data(), sizeof(double) * std::size_t(a.size())) == 0;
}

void expect_same_bits(const CrossSections& a, const CrossSections& b) {
  EXPECT_TRUE(same_bits(a.coef, b.coef));
  EXPECT_TRUE(same_bits(a.std_error, b.std_error));
  EXPECT_TRUE(same_bits(a.r_squared, b.r_squared));
  EXPECT_TRUE(same_bits(a.rss, b.rss));
  EXPECT_TRUE(same_bits(a.tss, b.tss));
  EXPECT_EQ(a.from_rows, b.from_rows);
  EXPECT_EQ(a.culprit, b.culprit);
  EXPECT_EQ(a.n_used, b.n_used);
}

void expect_same_fit(const CrossSections& a, const CrossSections& b, double tolerance) {
  ASSERT_EQ(a.status, b.status);
  EXPECT_EQ(a.n_rows, b.n_rows);
  EXPECT_EQ(a.n_used, b.n_used);
  EXPECT_EQ(a.culprit, b.culprit);
  EXPECT_EQ(a.varies, b.varies);
  EXPECT_TRUE(a.missing == b.missing);
  for (Index t = 0; t < a.coef.cols(); ++t) {
    if (a.status[static_cast<std::size_t>(t)] != PeriodStatus::estimated) continue;
    for (Index j = 0; j < a.coef.rows(); ++j) {
      const double scale = std::abs(a.coef(j, t)) + a.std_error(j, t);
      expect_close(b.coef(j, t), a.coef(j, t), scale, tolerance);
      expect_close(b.std_error(j, t), a.std_error(j, t), a.std_error(j, t), tolerance);
    }
    expect_close(b.r_squared[t], a.r_squared[t], 1, tolerance);
  }
}

}  // namespace

TEST(CrossSections, RaggedPanelsAgreeWithAPlainQr) {
  for (int n_x = 1; n_x <= 7; ++n_x) {
    const Panel panel = ragged_panel(60, 9, n_x, 10 + static_cast<unsigned>(n_x));
    for (const bool intercept : {true, false}) {
      for (const bool weighted : {true, false}) {
        const Design design = panel.design(intercept, weighted);
        expect_reference(design, solve(design), 1e-12);
      }
    }
  }
}

TEST(CrossSections, PeriodsLongerThanABlockAgreeWithAPlainQr) {
  const Panel panel = ragged_panel(7000, 2, 4, 3);
  for (const Panel& rows : {panel, panel.by_asset()}) {
    const Design design = rows.design(true, true);
    expect_reference(design, solve(design), 1e-12);
  }
}

TEST(CrossSections, ConstantAlone) {
  Panel panel = ragged_panel(30, 4, 1, 5);
  panel.x.clear();
  const Design design = panel.design();
  expect_reference(design, solve(design), 1e-12);
}

TEST(CrossSections, RowOrderDoesNotMatter) {
  Panel panel = ragged_panel(300, 40, 5, 21);
  panel.x[2][7] = kNaN;
  panel.y[900] = kInf;
  const CrossSections sorted = solve(panel.design(true, true));
  const Panel by_asset = panel.by_asset(), shuffled = panel.shuffled(4);
  expect_same_fit(sorted, solve(by_asset.design(true, true)), 1e-12);
  expect_same_fit(sorted, solve(shuffled.design(true, true)), 1e-12);
}

TEST(CrossSections, ManyThinPeriodsInAnyOrder) {
  Panel panel = ragged_panel(8, 20000, 1, 23);
  panel.x[0][700] = kNaN;
  const Panel shuffled = panel.shuffled(5);
  const CrossSections sorted = solve(panel.design(true, true));
  // Three or four rows can leave a residual of a thousandth, and so three digits fewer.
  expect_same_fit(sorted, solve(shuffled.design(true, true)), 1e-9);
  const auto n_estimated =
      std::count(sorted.status.begin(), sorted.status.end(), PeriodStatus::estimated);
  EXPECT_GT(n_estimated, 19000);
}

TEST(CrossSections, ThreadsDoNotChangeABit) {
  Panel panel = ragged_panel(5000, 60, 3, 22);
  // Some periods go back to their rows, some need another shift.
  for (std::size_t i = 0; i < panel.n(); ++i) {
    if (panel.period[i] % 7 == 3) panel.x[1][i] = panel.x[0][i] * (1 + 1e-3 * panel.w[i]);
  }
  panel.x[0][0] = 1e9;
  for (const Panel& rows : {panel, panel.by_asset()}) {
    const Design design = rows.design();
    const CrossSections one = solve(design, 1);
    EXPECT_TRUE(one.from_rows[3]);
    EXPECT_FALSE(one.from_rows[4]);
    for (const int threads : {2, 5}) expect_same_bits(one, solve(design, threads));
  }
}

TEST(CrossSections, DuplicatedRowsWithHalfTheWeight) {
  const Panel panel = ragged_panel(80, 12, 3, 31);
  Panel doubled = panel;
  for (double& w : doubled.w) w /= 2;
  const Panel half = doubled;
  doubled.period.insert(doubled.period.end(), half.period.begin(), half.period.end());
  doubled.asset.insert(doubled.asset.end(), half.asset.begin(), half.asset.end());
  doubled.y.insert(doubled.y.end(), half.y.begin(), half.y.end());
  doubled.w.insert(doubled.w.end(), half.w.begin(), half.w.end());
  for (std::size_t j = 0; j < half.x.size(); ++j) {
    doubled.x[j].insert(doubled.x[j].end(), half.x[j].begin(), half.x[j].end());
  }
  const CrossSections once = solve(panel.design(true, true));
  const CrossSections twice = solve(doubled.design(true, true));
  EXPECT_LT((once.coef - twice.coef).cwiseAbs().maxCoeff(), 1e-12);
  EXPECT_LT((once.r_squared - twice.r_squared).cwiseAbs().maxCoeff(), 1e-12);
  EXPECT_LT((once.rss - twice.rss).cwiseAbs().maxCoeff(), 1e-12 * once.rss.maxCoeff());
}

// Fits data whose y and first x have a large mean and compares with the reference on the
// same doubles less that mean: the subtraction is exact, so both see the same spread.
void expect_shifted_reference(const Panel& rows, double mean, double tolerance) {
  Panel shifted = rows;
  for (double& x : shifted.x[0]) x -= mean;
  for (double& y : shifted.y) y += mean;
  const Design design = rows.design(true, true);
  const Design reference_design = shifted.design(true, true);
  const CrossSections fit = solve(design);
  for (Index t = 0; t < design.n_periods; ++t) {
    const Reference wanted =
        plain_qr(reference_design, [&](Index row) { return design.period[row] == t; });
    for (Index j = 1; j < wanted.coef.size(); ++j) {
      const double scale = std::abs(wanted.coef[j]) + wanted.std_error[j];
      expect_close(fit.coef(j, t), wanted.coef[j], scale, tolerance);
      expect_close(
          fit.std_error(j, t), wanted.std_error[j], wanted.std_error[j], tolerance);
    }
    const double constant = wanted.coef[0] - mean - wanted.coef[1] * mean;
    expect_close(fit.coef(0, t), constant, mean, tolerance);
    expect_close(fit.rss[t], wanted.rss, wanted.rss, tolerance);
    expect_close(fit.tss[t], wanted.tss, wanted.tss, tolerance);
  }
}

TEST(CrossSections, AMeanFarFromZeroLosesNothing) {
  for (const double mean : {1e6, 1e8}) {
    Panel panel = ragged_panel(400, 6, 3, 41);
    for (double& x : panel.x[0]) x += mean;
    for (double& y : panel.y) y -= mean;
    expect_shifted_reference(panel, mean, 1e-12);
    expect_shifted_reference(panel.by_asset(), mean, 1e-12);
    expect_shifted_reference(panel.shuffled(6), mean, 1e-12);
  }
}

TEST(CrossSections, AMeanFarFromZeroCutByChunks) {
  // One period of 140,000 rows is cut into chunks whose means differ by little.
  Panel panel = ragged_panel(175000, 1, 2, 42);
  for (double& x : panel.x[0]) x += 1e8;
  for (double& y : panel.y) y -= 1e8;
  expect_shifted_reference(panel, 1e8, 1e-12);
}

TEST(CrossSections, AnOutlierInTheFirstRowIsNoShift) {
  for (const bool weighted : {false, true}) {
    Panel panel = ragged_panel(3000, 3, 2, 51);
    const std::size_t row = static_cast<std::size_t>(
        std::find(panel.period.begin(), panel.period.end(), 1) - panel.period.begin());
    panel.x[0][row] = 1e7;
    panel.w[row] = 1e-9;
    panel.y[row] = -4e6;
    const Design design = panel.design(true, weighted);
    expect_reference(design, solve(design), 2e-12);
    const Panel shuffled = panel.by_asset();
    const Design other = shuffled.design(true, weighted);
    expect_reference(other, solve(other), 2e-12);
  }
}

TEST(CrossSections, IntegersFactorsAndProducts) {
  Panel panel = ragged_panel(90, 8, 2, 61);
  const std::size_t n = panel.n();
  std::vector<int> group(n), count(n);
  std::mt19937 engine(3);
  for (std::size_t i = 0; i < n; ++i) {
    group[i] = 1 + static_cast<int>(engine() % 3);
    count[i] = static_cast<int>(engine() % 50);
  }
  count[5] = kMissingInt;
  group[n - 1] = kMissingInt;
  const std::vector<double> second = {0, 1, 0}, third = {0, 0, 1};
  const Part x0{panel.x[0].data(), nullptr, nullptr};
  const Part is_second{nullptr, group.data(), second.data()};
  Design design = panel.design();
  design.x = {Column{{x0}},
              Column{{Part{nullptr, count.data(), nullptr}}},
              Column{{is_second}},
              Column{{Part{nullptr, group.data(), third.data()}}},
              Column{{x0, is_second}}};

  Panel spelled = panel;
  spelled.x.assign(5, std::vector<double>(n));
  for (std::size_t i = 0; i < n; ++i) {
    spelled.x[0][i] = panel.x[0][i];
    spelled.x[1][i] = count[i] == kMissingInt ? kNaN : count[i];
    const bool known = group[i] != kMissingInt;
    spelled.x[2][i] = known ? group[i] == 2 : kNaN;
    spelled.x[3][i] = known ? group[i] == 3 : kNaN;
    spelled.x[4][i] = spelled.x[2][i] * panel.x[0][i];
  }
  const CrossSections coded = solve(design), plain = solve(spelled.design());
  expect_same_bits(plain, coded);
  EXPECT_EQ(coded.missing(2, 0), 1);
  EXPECT_EQ(coded.missing(3, 7), 1);
  expect_reference(spelled.design(), coded, 1e-12);
}

TEST(CrossSections, IncompleteRowsAreCountedByTheFirstOffender) {
  Panel panel = ragged_panel(50, 3, 2, 71);
  const Panel whole = panel;
  panel.y[0] = kNaN;
  panel.x[0][0] = kNaN;  // the same row: y comes first
  panel.x[1][1] = -kInf;
  panel.w[2] = 0;
  panel.w[3] = kNaN;
  panel.w[4] = kInf;
  panel.x[0][5] = kNaN;
  const CrossSections fit = solve(panel.design(true, true));
  EXPECT_EQ(fit.missing(0, 0), 1);
  EXPECT_EQ(fit.missing(1, 0), 1);
  EXPECT_EQ(fit.missing(2, 0), 1);
  EXPECT_EQ(fit.missing(3, 0), 3);
  EXPECT_EQ(fit.missing.rightCols(2).sum(), 0);
  EXPECT_EQ(fit.n_used[0] + 6, fit.n_rows[0]);

  Panel cut = whole;
  const auto drop = [](auto& values) {
    values.erase(values.begin(), values.begin() + 6);
  };
  drop(cut.period);
  drop(cut.asset);
  drop(cut.y);
  drop(cut.w);
  for (auto& column : cut.x) drop(column);
  const CrossSections without = solve(cut.design(true, true));
  EXPECT_LT((fit.coef - without.coef).cwiseAbs().maxCoeff(), 1e-13);
  const Panel other = panel.by_asset();
  expect_same_fit(fit, solve(other.design(true, true)), 1e-12);
}

TEST(CrossSections, SumsThatOverflowLoseNoRows) {
  Panel plain = ragged_panel(60, 2, 1, 72);
  for (std::size_t i = 0; i < plain.n(); ++i) {
    // Far below the others, so that distances from the first row all add up.
    const bool first = i == 0 || plain.period[i] != plain.period[i - 1];
    plain.x[0][i] = first ? -8 : plain.x[0][i] + 4;
  }
  Panel panel = plain;
  for (double& x : panel.x[0]) x *= 1e307;
  for (double& y : panel.y) y *= 1e100;
  const CrossSections wanted = solve(plain.design()), fit = solve(panel.design());
  EXPECT_EQ(fit.missing.sum(), 0);
  for (Index t = 0; t < 2; ++t) {
    ASSERT_EQ(fit.status[static_cast<std::size_t>(t)], PeriodStatus::estimated);
    expect_close(fit.coef(1, t) * 1e207, wanted.coef(1, t), 1, 1e-12);
    expect_close(fit.coef(0, t) * 1e-100, wanted.coef(0, t), 1, 1e-12);
  }
}

TEST(CrossSections, ANegativeWeightIsRefusedAndNamed) {
  for (const bool by_asset : {false, true}) {
    Panel panel = ragged_panel(50, 30, 2, 73);
    if (by_asset) panel = panel.by_asset();
    panel.w[700] = -1;
    panel.w[301] = -0.5;
    panel.y[301] = kNaN;
    try {
      solve(panel.design(true, true));
      FAIL();
    } catch (const Error& error) {
      EXPECT_EQ(error.tag(), "input");
      ASSERT_EQ(error.facts().size(), 1U);
      EXPECT_EQ(error.facts()[0].first, "row");
      EXPECT_EQ(error.facts()[0].second, 302);
    }
  }
}

TEST(CrossSections, EveryPeriodHasItsStatus) {
  // Twelve rows a period; period 4 has no row at all, the others by design below.
  Panel panel;
  std::mt19937 engine(8);
  std::normal_distribution<double> normal;
  panel.n_periods = 7;
  panel.x.resize(3);
  for (const int t : {0, 1, 2, 3, 5, 6}) {
    for (int a = 0; a < 12; ++a) {
      panel.period.push_back(t);
      panel.asset.push_back(a);
      panel.w.push_back(1);
      panel.y.push_back(t == 6 || (t == 1 && a >= 4) ? kNaN : normal(engine));
      const double x0 = normal(engine), x1 = normal(engine);
      panel.x[0].push_back(x0);
      panel.x[1].push_back(t == 2 ? 0.1 + 0.2 : x1);
      panel.x[2].push_back(t == 3 ? x0 + x1 : normal(engine));
    }
  }
  const std::vector<PeriodStatus> wanted = {PeriodStatus::estimated,
                                            PeriodStatus::too_few_assets,
                                            PeriodStatus::no_variation,
                                            PeriodStatus::rank_deficient,
                                            PeriodStatus::empty,
                                            PeriodStatus::estimated,
                                            PeriodStatus::empty};
  for (const Panel& rows : {panel, panel.by_asset(), panel.shuffled(2)}) {
    const CrossSections fit = solve(rows.design());
    EXPECT_EQ(fit.status, wanted);
    EXPECT_EQ(fit.culprit, (std::vector<Index>{-1, -1, 2, 3, -1, -1, -1}));
    EXPECT_EQ(fit.n_rows, (std::vector<Index>{12, 12, 12, 12, 0, 12, 12}));
    EXPECT_EQ(fit.n_used, (std::vector<Index>{12, 4, 12, 12, 0, 12, 0}));
    for (Index t = 0; t < 7; ++t) {
      const bool estimated =
          wanted[static_cast<std::size_t>(t)] == PeriodStatus::estimated;
      EXPECT_EQ(fit.coef.col(t).allFinite(), estimated);
      EXPECT_EQ(fit.coef.col(t).array().isNaN().all(), !estimated);
      EXPECT_EQ(std::isfinite(fit.r_squared[t]), estimated);
    }
  }
  // Four terms: five rows are the least, whatever the option asks for.
  EXPECT_EQ(solve(panel.design(), 1, 2).status, wanted);
  EXPECT_EQ(solve(panel.design(), 1, 12).status, wanted);
  EXPECT_EQ(solve(panel.design(), 1, 13).status[0], PeriodStatus::too_few_assets);
}

TEST(CrossSections, AsManyRowsAsTermsAreTooFew) {
  Panel panel = ragged_panel(40, 2, 3, 75);
  std::size_t seen = 0;
  for (std::size_t i = 0; i < panel.n(); ++i) {
    if (panel.period[i] == 0 && ++seen > 4) panel.y[i] = kNaN;
  }
  const CrossSections fit = solve(panel.design());
  EXPECT_EQ(fit.n_used[0], 4);
  EXPECT_EQ(fit.status[0], PeriodStatus::too_few_assets);
  EXPECT_EQ(fit.status[1], PeriodStatus::estimated);
}

TEST(CrossSections, TermsThatVaryOnlyOverTimeAreNamed) {
  Panel panel = ragged_panel(40, 5, 3, 76);
  for (std::size_t i = 0; i < panel.n(); ++i) panel.x[1][i] = 0.1 * panel.period[i];
  const CrossSections fit = solve(panel.design());
  EXPECT_EQ(fit.varies, (std::vector<bool>{true, true, false, true}));
  for (std::size_t t = 0; t < 5; ++t) {
    EXPECT_EQ(fit.status[t], PeriodStatus::no_variation);
    EXPECT_EQ(fit.culprit[t], 2);
  }
  // Without a constant it stands in for one.
  const CrossSections through_zero = solve(panel.design(false));
  EXPECT_EQ(through_zero.status[0], PeriodStatus::rank_deficient);  // all zeros there
  EXPECT_EQ(through_zero.culprit[0], 1);
  for (std::size_t t = 1; t < 5; ++t) {
    EXPECT_EQ(through_zero.status[t], PeriodStatus::estimated);
  }
  EXPECT_EQ(through_zero.varies, (std::vector<bool>{true, false, true}));
}

TEST(CrossSections, NearlyConstantIsNotConstant) {
  Panel panel = ragged_panel(40, 2, 2, 77);
  for (std::size_t i = 0; i < panel.n(); ++i) panel.x[1][i] = 1e9 + (panel.asset[i] % 5);
  const Design design = panel.design();
  expect_reference(design, solve(design), 1e-9);
  // The same spread is rounding when the mean is 1e17: neighbours are 16 apart.
  for (std::size_t i = 0; i < panel.n(); ++i) {
    panel.x[1][i] = 1e17 + 16 * (panel.asset[i] % 2);
  }
  const CrossSections fit = solve(panel.design());
  EXPECT_EQ(fit.status[0], PeriodStatus::no_variation);
  EXPECT_EQ(fit.culprit[0], 2);
}

TEST(CrossSections, ASumOfColumnsIsFoundWhereTheMeanIsAMillionSpreads) {
  for (const double mean : {0.0, 1e6}) {
    Panel panel = ragged_panel(200, 4, 3, 78);
    for (std::size_t i = 0; i < panel.n(); ++i) {
      panel.x[0][i] += mean;
      panel.x[2][i] = panel.x[0][i] + panel.x[1][i];
    }
    for (const Panel& rows : {panel, panel.by_asset()}) {
      const CrossSections fit = solve(rows.design());
      for (std::size_t t = 0; t < 4; ++t) {
        EXPECT_EQ(fit.status[t], PeriodStatus::rank_deficient);
        EXPECT_EQ(fit.culprit[t], 3);
        EXPECT_TRUE(fit.from_rows[t]);
      }
    }
    // A part in a million of the spread beyond rounding is information.
    for (std::size_t i = 0; i < panel.n(); ++i) panel.x[2][i] += 1e-6 * panel.w[i];
    const CrossSections fit = solve(panel.design());
    for (std::size_t t = 0; t < 4; ++t) {
      EXPECT_EQ(fit.status[t], PeriodStatus::estimated);
    }
  }
}

TEST(CrossSections, TheLastDependentTermIsNamed) {
  Panel panel = ragged_panel(100, 2, 5, 79);
  for (std::size_t i = 0; i < panel.n(); ++i) {
    panel.x[1][i] = -2 * panel.x[0][i];
    panel.x[3][i] = panel.x[2][i] - panel.x[0][i] + 4;
  }
  const CrossSections fit = solve(panel.design());
  EXPECT_EQ(fit.culprit[0], 4);
  EXPECT_EQ(solve(panel.design(false)).culprit[0], 1);
}

TEST(CrossSections, YWithoutVariationHasNoRSquared) {
  Panel panel = ragged_panel(30, 2, 2, 80);
  for (double& y : panel.y) y = 0.3;
  const CrossSections fit = solve(panel.design());
  EXPECT_EQ(fit.status[0], PeriodStatus::estimated);
  EXPECT_TRUE(std::isnan(fit.r_squared[0]));
  EXPECT_DOUBLE_EQ(fit.coef(0, 0), 0.3);
  EXPECT_EQ(fit.coef(1, 0), 0);
}

TEST(CrossSections, CertifiedSetsReachTheDigitsOfAQr) {
  for (const Attainable& wanted : attainable_sets()) {
    const CertifiedSet set = certified_set(wanted.name, wanted.degree);
    const CrossSections fit = solve(set.panel.design(set.intercept));
    ASSERT_EQ(fit.status[0], PeriodStatus::estimated) << wanted.name;
    EXPECT_GE(digits(fit.coef.col(0), set.estimate), wanted.beta) << wanted.name;
    if (!std::isnan(wanted.sd)) {
      EXPECT_GE(digits(fit.std_error.col(0), set.sd), wanted.sd) << wanted.name;
    }
  }
}

TEST(CrossSections, CertifiedSetsAsPeriodsOfOnePanelInAnyOrder) {
  // Wampler1, 3 and 5 share x; their certified coefficients are all one.
  Panel panel;
  panel.n_periods = 3;
  panel.x.resize(5);
  int t = 0;
  for (const char* name : {"Wampler1", "Wampler3", "Wampler5"}) {
    const CertifiedSet set = certified_set(name, 5);
    for (std::size_t i = 0; i < set.panel.n(); ++i) {
      panel.period.push_back(t);
      panel.asset.push_back(static_cast<int>(i));
      panel.y.push_back(set.panel.y[i]);
      panel.w.push_back(1);
      for (std::size_t j = 0; j < 5; ++j) panel.x[j].push_back(set.panel.x[j][i]);
    }
    ++t;
  }
  const Panel shuffled = panel.shuffled(9);
  const CrossSections fit = solve(shuffled.design());
  const std::vector<long double> ones(6, 1.0L);
  EXPECT_GE(digits(fit.coef.col(0), ones), 9.8);
  EXPECT_GE(digits(fit.coef.col(1), ones), 9.3);
  EXPECT_GE(digits(fit.coef.col(2), ones), 5.5);
}

TEST(CrossSections, NoRowsAndNoTerms) {
  Panel panel;
  panel.n_periods = 3;
  panel.x.resize(2);
  const CrossSections fit = solve(panel.design());
  EXPECT_EQ(fit.status, std::vector<PeriodStatus>(3, PeriodStatus::empty));
  panel.x.clear();
  EXPECT_THROW(solve(panel.design(false)), Error);
}
