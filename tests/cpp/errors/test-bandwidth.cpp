#include <gtest/gtest.h>

#include <lambdabar/errors/bandwidth.hpp>

using namespace lambdabar;

namespace {

// 1, 2, 4, 7, 11 less its mean. By hand its lagged products are 66, 25, -8, -26, -24 and
// its first-order coefficient without constant 25 / 30.
Matrix hand_series() {
  Matrix x(5, 1);
  x << -4, -3, -1, 2, 6;
  return x;
}

SeriesOptions with(Kernel kernel, LagRule rule, double lags = 0) {
  SeriesOptions options;
  options.kernel = kernel;
  options.rule = rule;
  options.lags = lags;
  return options;
}

Bandwidth choose(const Matrix& x, const SeriesOptions& options) {
  return choose_bandwidth(x, Vector::Ones(x.cols()), x.rows(), x.rows() - 1, options);
}

TEST(Bandwidth, rule_of_thumb) {
  // 4 (T/100)^(2/9), Newey and West (1994), floors worked out by hand.
  const Matrix none = Matrix::Zero(2000, 1);
  const SeriesOptions rule = with(Kernel::bartlett, LagRule::rule_of_thumb);
  const std::vector<std::pair<Index, double>> table{
      {50, 3}, {100, 4}, {202, 4}, {600, 5}, {1000, 6}};
  for (const auto& [n, lags] : table) {
    const Bandwidth b =
        choose_bandwidth(none.topRows(n), Vector::Ones(1), n, n - 1, rule);
    EXPECT_EQ(b.lags, lags) << n;
    EXPECT_EQ(b.divisor, lags + 1) << n;
  }
}

TEST(Bandwidth, newey_west_by_hand) {
  const Matrix x = hand_series();
  // Two pilot lags (4 * 0.05^(2/9) = 2.06): s(0) = 100, s(1) = 18.
  const Bandwidth bartlett = choose(x, with(Kernel::bartlett, LagRule::newey_west));
  const double real_bartlett = 1.1447 * std::cbrt(0.18 * 0.18 * 5.0);
  EXPECT_EQ(bartlett.lags, std::floor(real_bartlett));
  EXPECT_EQ(detail::newey_west_pilot(Kernel::bartlett, false, 5), 2);
  EXPECT_EQ(detail::newey_west_pilot(Kernel::bartlett, true, 5), 1);
  // Two pilot lags (4 * 0.05^(4/25) = 2.48): s(0) = 100, s(2) = -14.
  const Bandwidth parzen = choose(x, with(Kernel::parzen, LagRule::newey_west));
  EXPECT_EQ(parzen.lags, std::floor(2.6614 * std::pow(0.14 * 0.14 * 5.0, 0.2)));
  EXPECT_EQ(parzen.divisor, parzen.lags + 1.0);
  // Three pilot lags (4 * 0.05^(2/25) = 3.15): s(0) = 48, s(2) = -482.
  const auto qs =
      detail::newey_west_bandwidth(x.col(0), 5, with(Kernel::qs, LagRule::newey_west));
  const double ratio = 482.0 / 48.0;
  EXPECT_NEAR(qs.value, 1.3221 * std::pow(ratio * ratio * 5.0, 0.2), 1e-13);
  EXPECT_FALSE(qs.negative_s0);
}

TEST(Bandwidth, andrews_by_hand) {
  const Matrix x = hand_series();
  const Vector one = Vector::Ones(1);
  const double rho = 25.0 / 30.0;
  const double alpha1 =
      4.0 * rho * rho / ((1.0 - rho) * (1.0 - rho) * (1.0 + rho) * (1.0 + rho));
  const double alpha2 = 4.0 * rho * rho / std::pow(1.0 - rho, 4);
  EXPECT_NEAR(detail::andrews_bandwidth(x, one, Kernel::bartlett),
              1.1447 * std::cbrt(alpha1 * 5.0),
              1e-12);
  EXPECT_NEAR(detail::andrews_bandwidth(x, one, Kernel::parzen),
              2.6614 * std::pow(alpha2 * 5.0, 0.2),
              1e-12);
  EXPECT_NEAR(detail::andrews_bandwidth(x, one, Kernel::qs),
              1.3221 * std::pow(alpha2 * 5.0, 0.2),
              1e-12);
  EXPECT_NEAR(detail::andrews_bandwidth(x, one, Kernel::truncated),
              0.6611 * std::pow(alpha2 * 5.0, 0.2),
              1e-12);
  const Bandwidth capped = choose(x, with(Kernel::bartlett, LagRule::andrews));
  EXPECT_TRUE(capped.capped);
  EXPECT_EQ(capped.divisor, 5.0);
}

TEST(Bandwidth, andrews_weighs_columns_by_their_variance_and_weight) {
  Matrix x(5, 2);
  x.col(0) = hand_series();
  x.col(1) << 1, -2, 3, 1, -1;
  const double rho[] = {25.0 / 30.0, (-2.0 - 6.0 + 3.0 - 1.0) / 15.0};
  double numerator = 0, denominator = 0;
  const double weight[] = {1.0, 3.0};
  for (int a = 0; a < 2; ++a) {
    const Vector lag = x.col(a).head(4), lead = x.col(a).tail(4);
    const double s2 = (lead - rho[a] * lag).squaredNorm();
    numerator += weight[a] * 4.0 * rho[a] * rho[a] * s2 * s2 / std::pow(1.0 - rho[a], 8);
    denominator += weight[a] * s2 * s2 / std::pow(1.0 - rho[a], 4);
  }
  Vector weights(2);
  weights << 1.0, 3.0;
  EXPECT_NEAR(detail::andrews_bandwidth(x, weights, Kernel::qs),
              1.3221 * std::pow(numerator / denominator * 5.0, 0.2),
              1e-12);
  weights << 1.0, 0.0;
  EXPECT_EQ(detail::andrews_bandwidth(x, weights, Kernel::qs),
            detail::andrews_bandwidth(x.col(0), Vector::Ones(1), Kernel::qs));
}

TEST(Bandwidth, does_not_depend_on_the_scale_of_the_rows) {
  const Matrix x = hand_series();
  for (Kernel kernel : {Kernel::bartlett, Kernel::parzen, Kernel::qs})
    for (LagRule rule : {LagRule::newey_west, LagRule::andrews})
      EXPECT_NEAR(choose(x, with(kernel, rule)).divisor,
                  choose(x / 512.0, with(kernel, rule)).divisor,
                  1e-13);
}

TEST(Bandwidth, persistence_is_kept_from_one) {
  Matrix x(6, 1);
  x << 1, 2, 4, 8, 16, 32;  // a coefficient of two
  const double rho = 0.97;
  EXPECT_NEAR(detail::andrews_bandwidth(
                  x + 1e-3 * Matrix::Ones(6, 1), Vector::Ones(1), Kernel::qs),
              1.3221 * std::pow(4.0 * rho * rho / std::pow(1.0 - rho, 4) * 6.0, 0.2),
              1e-6);
}

TEST(Bandwidth, negative_spectrum_at_zero_is_told) {
  Matrix x(12, 1);
  for (Index t = 0; t < 12; ++t) x(t, 0) = t % 2 ? -1.0 : 1.0;
  const Bandwidth b = choose(x, with(Kernel::parzen, LagRule::newey_west));
  // s(0) = 12 + 2 (-11 + 10) > 0 for two pilot lags, below zero for one (12 - 22).
  EXPECT_EQ(detail::newey_west_pilot(Kernel::parzen, false, 12), 2);
  EXPECT_FALSE(b.negative_s0);
  SeriesOptions prewhitened = with(Kernel::bartlett, LagRule::newey_west);
  prewhitened.prewhiten = true;
  ASSERT_EQ(detail::newey_west_pilot(Kernel::bartlett, true, 12), 1);
  EXPECT_TRUE(choose(x, prewhitened).negative_s0);
}

TEST(Bandwidth, silent_series_have_no_lags) {
  const Matrix x = Matrix::Zero(30, 1);
  EXPECT_EQ(choose(x, with(Kernel::bartlett, LagRule::newey_west)).divisor, 0.0);
  EXPECT_EQ(choose(x, with(Kernel::qs, LagRule::andrews)).divisor, 0.0);
}

TEST(Bandwidth, more_lags_than_periods_are_capped) {
  const Matrix x = hand_series();
  const Bandwidth b = choose(x, with(Kernel::bartlett, LagRule::fixed, 9));
  EXPECT_TRUE(b.capped);
  EXPECT_EQ(b.lags, 4.0);
  EXPECT_EQ(b.divisor, 5.0);
  EXPECT_FALSE(choose(x, with(Kernel::bartlett, LagRule::fixed, 4)).capped);
}

std::string tag_of(const Matrix& x, const Vector& weights, const SeriesOptions& options) {
  try {
    choose_bandwidth(x, weights, x.rows(), x.rows() - 1, options);
  } catch (const Error& error) {
    return error.tag();
  }
  return "none";
}

TEST(Bandwidth, refuses_what_has_no_meaning) {
  const Matrix x = hand_series();
  const Vector one = Vector::Ones(1);
  EXPECT_EQ(tag_of(x, one, with(Kernel::bartlett, LagRule::fixed, -1)), "input");
  EXPECT_EQ(tag_of(x, one, with(Kernel::bartlett, LagRule::fixed, kNaN)), "input");
  EXPECT_EQ(tag_of(x, one, with(Kernel::truncated, LagRule::newey_west)), "unsupported");
  EXPECT_EQ(tag_of(x, Vector::Zero(1), with(Kernel::qs, LagRule::andrews)), "input");
  EXPECT_EQ(tag_of(x, Vector::Ones(2), with(Kernel::qs, LagRule::andrews)), "input");
}

}  // namespace
