#include <gtest/gtest.h>

#include <lambdabar/errors/series_sum.hpp>

#include "../simulated_panel.hpp"

using namespace lambdabar;

namespace {

SeriesOptions fixed(Kernel kernel, double lags, bool prewhiten = false) {
  SeriesOptions options;
  options.kernel = kernel;
  options.lags = lags;
  options.prewhiten = prewhiten;
  return options;
}

const Kernel kAll[] = {Kernel::bartlett, Kernel::parzen, Kernel::qs, Kernel::truncated};

SeriesSum sum(const Matrix& rows,
              const SeriesOptions& options,
              const std::vector<Index>& slot = {}) {
  return sum_series(rows, slot, Vector::Ones(rows.cols()), options);
}

// The definition, pair by pair.
Matrix pair_by_pair(const Matrix& h,
                    const std::vector<Index>& slot,
                    Kernel kernel,
                    double divisor) {
  Matrix S = Matrix::Zero(h.cols(), h.cols());
  for (Index t = 0; t < h.rows(); ++t)
    for (Index s = 0; s < h.rows(); ++s) {
      const Index lag =
          slot[static_cast<std::size_t>(t)] - slot[static_cast<std::size_t>(s)];
      if (divisor == 0.0 && lag != 0) continue;
      const double weight =
          lag == 0 ? 1.0 : kernel_weight(kernel, static_cast<double>(lag) / divisor);
      S += weight * h.row(t).transpose() * h.row(s);
    }
  return S;
}

TEST(SeriesSum, newey_west_of_a_mean_by_hand) {
  // The series 1, 2, 4, 7, 11: autocovariance sums 66, 25, -8, -26 over 5, worked by
  // hand; standard errors sqrt(66), sqrt(91), sqrt(94), sqrt(82.5) over 5.
  Matrix rows(5, 1);
  rows << -4, -3, -1, 2, 6;
  rows /= 5.0;
  const double printed[] = {
      1.6248076809271921, 1.9078784028338913, 1.9390719429665317, 1.8165902124584950};
  for (int lags = 0; lags < 4; ++lags) {
    const SeriesSum s = sum(rows, fixed(Kernel::bartlett, lags));
    EXPECT_NEAR(std::sqrt(s.S(0, 0)) / printed[lags], 1.0, 1e-14);
    EXPECT_EQ(s.lags, lags);
    EXPECT_EQ(s.bandwidth, lags == 0 ? 0 : lags + 1);
  }
}

TEST(SeriesSum, without_lags_is_the_plain_sum_to_the_last_bit) {
  std::mt19937 engine(1);
  const Matrix rows = simulated::normals(engine, 61, 4);
  const Matrix plain = outer_sum(rows);
  EXPECT_LT(simulated::distance(plain, rows.transpose() * rows), 1e-14);
  for (Kernel kernel : kAll)
    EXPECT_TRUE((sum(rows, fixed(kernel, 0)).S.array() == plain.array()).all());
  // A divisor below one reaches no lag either.
  EXPECT_TRUE(
      (detail::kernel_sum(rows, detail::consecutive(61), Kernel::bartlett, 0.7).array() ==
       plain.array())
          .all());
}

TEST(SeriesSum, follows_its_definition_with_and_without_gaps) {
  std::mt19937 engine(2);
  const Matrix rows = simulated::normals(engine, 40, 3);
  std::vector<Index> gapped;
  for (Index t = 0; t < 40; ++t) gapped.push_back(t + t / 7 + (t > 20 ? 5 : 0));
  for (Kernel kernel : kAll)
    for (const auto& slot : {detail::consecutive(40), gapped}) {
      const SeriesSum s = sum(rows, fixed(kernel, 5), slot);
      EXPECT_LT(simulated::distance(s.S, pair_by_pair(rows, slot, kernel, s.bandwidth)),
                1e-13);
      EXPECT_FALSE(s.closed_gaps);
      EXPECT_TRUE((s.S.array() == s.S.transpose().array()).all());
    }
}

TEST(SeriesSum, a_missing_slot_is_a_zero_row) {
  std::mt19937 engine(3);
  Matrix rows = simulated::normals(engine, 20, 2);
  Matrix filled = Matrix::Zero(23, 2);
  std::vector<Index> slot;
  for (Index t = 0, to = 0; t < 20; ++t, ++to) {
    if (t == 4) to += 1;
    if (t == 11) to += 2;
    slot.push_back(to + 7);  // where counting starts does not matter
    filled.row(to) = rows.row(t);
  }
  for (Kernel kernel : kAll)
    EXPECT_LT(simulated::distance(sum(rows, fixed(kernel, 3), slot).S,
                                  sum(filled, fixed(kernel, 3)).S),
              1e-14);
}

TEST(SeriesSum, does_not_depend_on_the_direction_of_time) {
  std::mt19937 engine(4);
  const Matrix rows = simulated::normals(engine, 50, 3);
  const Matrix reversed = rows.colwise().reverse();
  for (Kernel kernel : kAll)
    EXPECT_LT(simulated::distance(sum(reversed, fixed(kernel, 6)).S,
                                  sum(rows, fixed(kernel, 6)).S),
              1e-13);
}

TEST(SeriesSum, positive_kernels_stay_positive_and_truncated_tells) {
  Matrix rows(10, 1);
  for (Index t = 0; t < 10; ++t) rows(t, 0) = t % 2 ? -1.0 : 1.0;
  for (Kernel kernel : {Kernel::bartlett, Kernel::parzen, Kernel::qs})
    EXPECT_GE(sum(rows, fixed(kernel, 1)).min_eigen_relative, 0.0);
  const SeriesSum negative = sum(rows, fixed(Kernel::truncated, 1));
  EXPECT_EQ(negative.S(0, 0), 10.0 - 2.0 * 9.0);
  EXPECT_EQ(negative.min_eigen_relative, -1.0);
}

TEST(SeriesSum, prewhitening_one_series_by_hand) {
  std::mt19937 engine(5);
  Matrix h = simulated::normals(engine, 80, 1);
  for (Index t = 1; t < 80; ++t) h(t, 0) += 0.5 * h(t - 1, 0);
  const Vector lag = h.col(0).head(79), lead = h.col(0).tail(79);
  const double phi = lag.dot(lead) / lag.squaredNorm();
  const Matrix v = lead - phi * lag;
  const double expected =
      pair_by_pair(v, detail::consecutive(79), Kernel::bartlett, 3)(0, 0) /
      ((1.0 - phi) * (1.0 - phi));
  const SeriesSum s = sum(h, fixed(Kernel::bartlett, 2, true));
  EXPECT_NEAR(s.S(0, 0) / expected, 1.0, 1e-13);
  EXPECT_FALSE(s.capped_prewhitening);
}

TEST(SeriesSum, prewhitening_several_series_by_normal_equations) {
  std::mt19937 engine(6);
  Matrix h = simulated::normals(engine, 120, 3);
  for (Index t = 1; t < 120; ++t) h.row(t) += 0.3 * h.row(t - 1).reverse();
  const Matrix lag = h.topRows(119), lead = h.bottomRows(119);
  const Matrix phi =
      (lag.transpose() * lag).inverse().eval() * (lag.transpose() * lead);  // transposed
  const Matrix D = (Matrix::Identity(3, 3) - phi.transpose()).inverse();
  const Matrix inner =
      pair_by_pair(lead - lag * phi, detail::consecutive(119), Kernel::qs, 2.5);
  EXPECT_LT(simulated::distance(sum(h, fixed(Kernel::qs, 2.5, true)).S,
                                D * inner * D.transpose()),
            1e-12);
}

TEST(SeriesSum, persistent_series_are_capped_whatever_their_units) {
  std::mt19937 engine(7);
  Matrix h = simulated::normals(engine, 60, 2);
  for (Index t = 1; t < 60; ++t) h(t, 0) += h(t - 1, 0);
  h.col(0) *= 40.0;
  for (Index t = 1; t < 60; ++t) h(t, 0) = 1.001 * h(t - 1, 0);  // explosive
  const SeriesSum s = sum(h, fixed(Kernel::bartlett, 3, true));
  EXPECT_TRUE(s.capped_prewhitening);
  EXPECT_GT(s.min_eigen_relative, -1e-12);
  Vector units(2);
  units << 1e3, 1e-4;
  const Matrix rescaled = sum(h * units.asDiagonal(), fixed(Kernel::bartlett, 3, true)).S;
  const Matrix back = units.asDiagonal() * s.S * units.asDiagonal();
  for (Index i = 0; i < 2; ++i)
    for (Index j = 0; j < 2; ++j) EXPECT_NEAR(rescaled(i, j) / back(i, j), 1.0, 1e-9);
}

TEST(SeriesSum, rules_that_need_equal_spacing_close_gaps_and_say_so) {
  std::mt19937 engine(8);
  Matrix h = simulated::normals(engine, 50, 2);
  for (Index t = 1; t < 50; ++t) h.row(t) += 0.6 * h.row(t - 1);
  std::vector<Index> slot;
  for (Index t = 0; t < 50; ++t) slot.push_back(t < 25 ? t : t + 3);
  SeriesOptions andrews;
  andrews.rule = LagRule::andrews;
  const SeriesSum gapped = sum(h, andrews, slot), closed = sum(h, andrews);
  EXPECT_TRUE(gapped.closed_gaps);
  EXPECT_FALSE(closed.closed_gaps);
  // The rule sees closed gaps, the sum does not.
  EXPECT_EQ(gapped.bandwidth, closed.bandwidth);
  EXPECT_LT(simulated::distance(
                gapped.S, pair_by_pair(h, slot, Kernel::bartlett, gapped.bandwidth)),
            1e-13);
  const SeriesSum white = sum(h, fixed(Kernel::bartlett, 2, true), slot);
  EXPECT_TRUE(white.closed_gaps);
  EXPECT_TRUE(
      (white.S.array() == sum(h, fixed(Kernel::bartlett, 2, true)).S.array()).all());
}

TEST(SeriesSum, lags_beyond_the_calendar_are_capped) {
  std::mt19937 engine(9);
  const Matrix h = simulated::normals(engine, 6, 1);
  const std::vector<Index> slot{0, 1, 2, 5, 6, 9};
  EXPECT_FALSE(sum(h, fixed(Kernel::bartlett, 9), slot).capped);
  const SeriesSum s = sum(h, fixed(Kernel::bartlett, 10), slot);
  EXPECT_TRUE(s.capped);
  EXPECT_EQ(s.lags, 9.0);
}

std::string tag_of(const Matrix& h,
                   const SeriesOptions& options,
                   const std::vector<Index>& slot) {
  try {
    sum(h, options, slot);
  } catch (const Error& error) {
    return error.tag();
  }
  return "none";
}

TEST(SeriesSum, refuses_what_has_no_meaning) {
  const Matrix h = Matrix::Ones(3, 2);
  EXPECT_EQ(tag_of(h, fixed(Kernel::bartlett, 1), {0, 1}), "input");
  EXPECT_EQ(tag_of(h, fixed(Kernel::bartlett, 1), {0, 2, 2}), "input");
  EXPECT_EQ(tag_of(h, fixed(Kernel::bartlett, 1, true), {}), "too_few");
}

}  // namespace
