#include <gtest/gtest.h>

#include <lambdabar/passes/corrected_sections.hpp>
#include <lambdabar/passes/cross_sections.hpp>
#include <lambdabar/passes/instrument_sections.hpp>

#include <random>

using namespace lambdabar;

namespace {

// A panel of betas from two halves, one exact trait, and error variances of the first.
struct Sections {
  static constexpr int kAssets = 60, kPeriods = 8;
  std::vector<double> y, first, second, trait, weight, variance;
  std::vector<int> period, asset;

  Sections() {
    std::mt19937 random(17);
    std::normal_distribution<double> normal;
    for (int t = 0; t < kPeriods; ++t) {
      for (int i = 0; i < kAssets; ++i) {
        const double beta = 1.0 + 0.5 * normal(random);
        first.push_back(beta + 0.3 * normal(random));
        second.push_back(beta + 0.3 * normal(random));
        trait.push_back(0.5 * beta + normal(random));
        y.push_back(0.1 + 2.0 * beta - trait.back() + normal(random));
        weight.push_back(std::exp(0.2 * normal(random)));
        variance.push_back(0.09 * std::exp(0.1 * normal(random)));
        period.push_back(t);
        asset.push_back(i);
      }
    }
    y[3] = kNaN;
  }

  Design design() const {
    Design out;
    out.n_rows = static_cast<Index>(y.size());
    out.period = period.data();
    out.n_periods = kPeriods;
    out.y = column(y);
    out.x = {column(first), column(trait)};
    out.weight = {column(weight)};
    return out;
  }

  static Column column(const std::vector<double>& values) {
    Part part;
    part.real = values.data();
    Column out;
    out.parts.push_back(part);
    return out;
  }
};

}  // namespace

TEST(CorrectedSections, NothingSubtractedIsLeastSquares) {
  const Sections data;
  CorrectedOptions options;
  options.min_reliability = 1.0;
  const CorrectedSections got = corrected_sections(data.design(), {1, data.variance.data()}, options);
  const CrossSections want = cross_sections(data.design(), CrossSectionOptions());
  EXPECT_EQ(got.n_used, want.n_used);
  EXPECT_LT((got.coef - want.coef).cwiseAbs().maxCoeff(), 1e-12);
  EXPECT_LT((got.std_error - want.std_error).cwiseAbs().maxCoeff(), 1e-12);
  EXPECT_LT((got.r_squared - want.r_squared).cwiseAbs().maxCoeff(), 1e-12);
}

TEST(CorrectedSections, TheGuardLeavesAPositiveMatrixWhateverTheNoise) {
  Sections data;
  for (double& v : data.variance) v = 5.0;
  const CorrectedSections got =
      corrected_sections(data.design(), {1, data.variance.data()}, CorrectedOptions());
  for (Index t = 0; t < Sections::kPeriods; ++t) {
    EXPECT_LT(got.kappa(t), 1.0);
    EXPECT_NEAR(got.kappa(t), 0.9 * got.smallest_root(t), 1e-12);
    EXPECT_GT(got.coef(1, t), 0.0);
  }
}

TEST(PooledCorrected, RowsSumToZeroAndThePooledSlopeIsTheSectionsWhenExposuresRepeat) {
  Sections data;
  data.y[3] = 1.0;
  const std::size_t N = Sections::kAssets;
  for (std::size_t r = N; r < data.y.size(); ++r) {
    data.first[r] = data.first[r - N];
    data.trait[r] = data.trait[r - N];
    data.weight[r] = data.weight[r - N];
    data.variance[r] = data.variance[r - N];
  }
  const BetaErrors errors{1, data.variance.data()};
  const PooledCorrected pooled =
      pooled_corrected(data.design(), errors, data.asset.data(), N, CorrectedOptions());
  const CorrectedSections sections =
      corrected_sections(data.design(), errors, CorrectedOptions());
  EXPECT_LT((pooled.estimate - sections.coef.rowwise().mean()).cwiseAbs().maxCoeff(), 1e-12);
  EXPECT_LT(pooled.asset_rows.colwise().sum().cwiseAbs().maxCoeff(), 1e-12);
  EXPECT_EQ(pooled.n_assets, Sections::kAssets);
}

TEST(PooledCorrected, NamesATermWithoutVariation) {
  Sections data;
  std::fill(data.trait.begin(), data.trait.end(), 2.0);
  try {
    pooled_corrected(data.design(), {1, data.variance.data()}, data.asset.data(), 60, {});
    FAIL();
  } catch (const Error& error) {
    EXPECT_EQ(error.tag(), "no_variation");
    EXPECT_EQ(error.facts()[0].second, 3.0);
  }
}

TEST(InstrumentSections, BetasAsTheirOwnInstrumentsAreLeastSquares) {
  const Sections data;
  const std::vector<RegressorHalf> both(Sections::kPeriods, RegressorHalf::both);
  const InstrumentSections got =
      instrument_sections(data.design(), {Sections::column(data.first)}, both, {});
  const CrossSections want = cross_sections(data.design(), CrossSectionOptions());
  EXPECT_LT((got.coef - want.coef).cwiseAbs().maxCoeff(), 1e-12);
  EXPECT_LT((got.std_error - want.std_error).cwiseAbs().maxCoeff(), 1e-12);
  EXPECT_NEAR(got.strength.minCoeff(), 1.0, 1e-12);
}

TEST(InstrumentSections, EitherHalfByTwoStageLeastSquares) {
  const Sections data;
  for (const bool swapped : {false, true}) {
    const std::vector<RegressorHalf> half(Sections::kPeriods,
                                          swapped ? RegressorHalf::one : RegressorHalf::zero);
    const InstrumentSections got =
        instrument_sections(data.design(), {Sections::column(data.second)}, half, {});
    Matrix ZX = Matrix::Zero(3, 3);
    Vector Zy = Vector::Zero(3);
    for (std::size_t r = 120; r < 180; ++r) {
      Vector x(3), z(3);
      x << 1.0, (swapped ? data.second : data.first)[r], data.trait[r];
      z << 1.0, (swapped ? data.first : data.second)[r], data.trait[r];
      ZX += data.weight[r] * z * x.transpose();
      Zy += data.weight[r] * data.y[r] * z;
    }
    EXPECT_LT((got.coef.col(2) - ZX.partialPivLu().solve(Zy)).cwiseAbs().maxCoeff(), 1e-11);
  }
}

TEST(InstrumentSections, WeakInstrumentsAreTrimmedOnStrengthAlone) {
  const Sections data;
  InstrumentOptions options;
  options.min_strength = 0.999;
  const std::vector<RegressorHalf> half(Sections::kPeriods, RegressorHalf::both);
  const InstrumentSections got =
      instrument_sections(data.design(), {Sections::column(data.second)}, half, options);
  for (Index t = 0; t < Sections::kPeriods; ++t) {
    EXPECT_EQ(got.status[static_cast<std::size_t>(t)], PeriodStatus::weak_instruments);
    EXPECT_TRUE(std::isnan(got.coef(1, t)));
    EXPECT_GT(got.strength(t), 0.0);
  }
}
