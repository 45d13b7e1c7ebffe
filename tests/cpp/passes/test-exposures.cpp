#include <gtest/gtest.h>

#include <lambdabar/passes/exposures.hpp>
#include <lambdabar/passes/shrink.hpp>

#include <random>

using namespace lambdabar;

namespace {

// Long rows with holes, three assets, `K` factors.
struct Rows {
  std::vector<double> y, weight;
  std::vector<int> asset, period, slot;
  Matrix factors;

  Rows(int T, int K, unsigned seed) : factors(T, K) {
    std::mt19937 random(seed);
    std::normal_distribution<double> normal;
    for (int t = 0; t < T; ++t) {
      slot.push_back(t);
      for (int k = 0; k < K; ++k) factors(t, k) = normal(random);
    }
    for (int i = 0; i < 3; ++i) {
      for (int t = 0; t < T; ++t) {
        if (i > 0 && normal(random) < -1.0) continue;
        asset.push_back(i);
        period.push_back(t);
        y.push_back(factors.row(t).sum() + normal(random));
        weight.push_back(std::exp(0.3 * normal(random)));
      }
    }
    if (T > 20) y[7] = kNaN;
  }

  ExposureData view() const {
    ExposureData data{{}, {}, nullptr, nullptr, 0, 3, slot, factors};
    Part part;
    part.real = y.data();
    data.returns.parts.push_back(part);
    Part weights;
    weights.real = weight.data();
    data.weight.emplace_back();
    data.weight[0].parts.push_back(weights);
    data.asset = asset.data();
    data.period = period.data();
    data.n_rows = static_cast<Index>(y.size());
    return data;
  }

  ExposureQueries queries() const {
    return {asset.data(), period.data(), static_cast<Index>(y.size()), {0, 1, 2}, slot};
  }
};

struct Answer {
  std::vector<double> beta, covariance, resid_var;
  std::vector<int> n_obs, status;
  ExposureColumns columns;

  Answer(std::size_t n, std::size_t K)
      : beta(n * K), covariance(n * K * (K + 1) / 2), resid_var(n), n_obs(n), status(n) {
    columns.beta = beta.data();
    columns.covariance = covariance.data();
    columns.resid_var = resid_var.data();
    columns.n_obs = n_obs.data();
    columns.status = status.data();
  }
};

// Weighted normal equations on the rows of a window, straight from the definition.
Vector regress(const Rows& rows, std::size_t row, int length, double decay, Index* n) {
  const Index K = rows.factors.cols();
  Matrix A = Matrix::Zero(K + 1, K + 1);
  Vector b = Vector::Zero(K + 1);
  *n = 0;
  for (std::size_t i = 0; i < rows.y.size(); ++i) {
    const int age = rows.period[row] - rows.period[i];
    if (rows.asset[i] != rows.asset[row] || age < 0 || age >= length || !std::isfinite(rows.y[i]))
      continue;
    Vector x(K + 1);
    x << 1.0, rows.factors.row(rows.period[i]).transpose();
    const double w = rows.weight[i] * std::pow(decay, age);
    A += w * x * x.transpose();
    b += w * rows.y[i] * x;
    ++*n;
  }
  return A.ldlt().solve(b);
}

void expect_windows(int K, ExposureOptions options, int length, double decay) {
  const Rows rows(90, K, 5u + static_cast<unsigned>(K));
  Answer answer(rows.y.size(), static_cast<std::size_t>(K));
  exposures(rows.view(), rows.queries(), options, answer.columns);
  int checked = 0;
  for (std::size_t row = 0; row < rows.y.size(); ++row) {
    Index n = 0;
    const Vector want = regress(rows, row, length, decay, &n);
    ASSERT_EQ(answer.n_obs[row], n);
    if (n < std::max<Index>(options.min_obs, K + 2)) {
      EXPECT_EQ(answer.status[row], 1);
      continue;
    }
    ASSERT_EQ(answer.status[row], 0);
    ++checked;
    for (int k = 0; k < K; ++k)
      EXPECT_NEAR(answer.beta[static_cast<std::size_t>(k) * rows.y.size() + row], want(k + 1), 1e-10);
  }
  EXPECT_GT(checked, 100);
}

}  // namespace

TEST(Exposures, RollingWindowsOfAnyNumberOfFactors) {
  for (int K : {1, 2, 3, 4, 5, 7}) {
    ExposureOptions options;
    options.window = WindowKind::rolling;
    options.length = 25;
    options.min_obs = 12;
    options.threads = 2;
    expect_windows(K, options, 25, 1.0);
  }
}

TEST(Exposures, ExpandingAndDecayingWindows) {
  ExposureOptions options;
  options.min_obs = 10;
  options.window = WindowKind::expanding;
  expect_windows(2, options, 1000, 1.0);
  options.window = WindowKind::decay;
  options.half_life = 9.0;
  expect_windows(2, options, 1000, std::exp2(-1.0 / 9.0));
}

TEST(Exposures, AggregatesAndRowsGiveTheSameCovariance) {
  const Rows rows(80, 3, 31);
  ExposureOptions options;
  options.min_obs = 20;
  options.window = WindowKind::expanding;
  Answer moving(rows.y.size(), 3);
  exposures(rows.view(), rows.queries(), options, moving.columns);
  // Full windows are solved from the rows; here each ends where the expanding one does.
  options.window = WindowKind::full;
  Answer whole(rows.y.size(), 3);
  exposures(rows.view(), rows.queries(), options, whole.columns);
  for (std::size_t i = 0; i < moving.covariance.size(); ++i) {
    if (std::isnan(moving.covariance[i])) {
      EXPECT_TRUE(std::isnan(whole.covariance[i]));
    } else {
      EXPECT_NEAR(moving.covariance[i], whole.covariance[i], 1e-12);
    }
  }
}

TEST(Exposures, AssetsThatAreNotThereAndEarlySlotsHaveNoBeta) {
  const Rows rows(40, 1, 3);
  const std::vector<int> asset = {0, 1, 1}, time = {1, 0, 1};
  const ExposureQueries queries{asset.data(), time.data(), 3, {-1, 0}, {-5, 39}};
  ExposureOptions options;
  options.window = WindowKind::rolling;
  options.length = 30;
  Answer answer(3, 1);
  exposures(rows.view(), queries, options, answer.columns);
  EXPECT_EQ(answer.n_obs[0], 0);
  EXPECT_EQ(answer.n_obs[1], 0);
  EXPECT_EQ(answer.status[1], 1);
  EXPECT_EQ(answer.status[2], 0);
}

TEST(Exposures, AWindowShorterThanItsNeedIsRefused) {
  const Rows rows(40, 2, 3);
  ExposureOptions options;
  options.window = WindowKind::rolling;
  options.length = 6;
  options.lead_lag.lags = 2;
  Answer answer(rows.y.size(), 2);
  EXPECT_THROW(exposures(rows.view(), rows.queries(), options, answer.columns), Error);
}

TEST(LeadLag, FowlerRorkeWeights) {
  Vector rho(2);
  rho << 0.3, 0.1;
  const Vector c = detail::fowler_rorke_weights(rho);
  const double denominator = 1 + 2 * 0.4;
  EXPECT_NEAR(c(2), 1.0, 1e-15);
  EXPECT_NEAR(c(1), (1 + 2 * 0.3 + 0.1) / denominator, 1e-15);
  EXPECT_NEAR(c(0), (1 + 0.3 + 0.1) / denominator, 1e-15);
  EXPECT_NEAR(c(0), c(4), 1e-15);
  rho << -0.4, -0.1;
  EXPECT_TRUE(std::isnan(detail::fowler_rorke_weights(rho)(0)));
}

TEST(Shrink, ASingleBetaHasNoPriorAndNoSpreadGivesTheMean) {
  std::vector<double> beta = {1.0, 1.1, 0.9, 2.0}, se = {1.0, 1.0, 1.0, 1.0};
  const std::vector<int> date = {0, 0, 0, 1};
  const auto priors = shrink_betas(beta.data(), se.data(), date.data(), 4, 2, PriorVariance::net);
  EXPECT_EQ(priors[0].variance, 0.0);
  for (int i = 0; i < 3; ++i) EXPECT_NEAR(beta[static_cast<std::size_t>(i)], 1.0, 1e-15);
  EXPECT_TRUE(std::isnan(beta[3]));
}
