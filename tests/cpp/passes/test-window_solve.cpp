#include <gtest/gtest.h>

#include <lambdabar/passes/window_solve.hpp>

#include <random>

using namespace lambdabar;
using detail::kWindowLanes;
using detail::packed_at;
using detail::packed_size;
using detail::WindowLanes;
using detail::WindowSolver;

namespace {

// Products and means of eight windows, each with its own rows.
struct Windows {
  int K;
  std::vector<WindowLanes> S, mean;

  explicit Windows(int n_factors)
      : K(n_factors),
        S(static_cast<std::size_t>(packed_size(K + 1))),
        mean(static_cast<std::size_t>(K + 1)) {
    std::mt19937 random(7);
    std::normal_distribution<double> normal;
    for (int lane = 0; lane < kWindowLanes; ++lane) {
      Matrix z(30, K + 1);
      for (Index i = 0; i < z.size(); ++i) z.data()[i] = normal(random);
      const Vector m = z.colwise().mean();
      const Matrix C =
          (z.rowwise() - m.transpose()).transpose() * (z.rowwise() - m.transpose());
      for (int i = 0; i <= K; ++i) {
        mean[static_cast<std::size_t>(i)](lane) = m(i);
        for (int j = 0; j <= i; ++j)
          S[static_cast<std::size_t>(packed_at(i, j))](lane) = C(i, j);
      }
    }
  }

  std::vector<double> lane(const std::vector<WindowLanes>& from, int which) const {
    std::vector<double> out;
    for (const WindowLanes& value : from) out.push_back(value(which));
    return out;
  }
};

template <int Fixed>
void expect_lanes_equal_doubles(int K) {
  const Windows windows(K);
  WindowSolver<WindowLanes, Fixed> lanes(K);
  lanes.solve(windows.S.data(), windows.mean.data());
  for (int lane = 0; lane < kWindowLanes; ++lane) {
    WindowSolver<double, Fixed> one(K);
    const auto S = windows.lane(windows.S, lane), mean = windows.lane(windows.mean, lane);
    one.solve(S.data(), mean.data());
    EXPECT_TRUE(one.trusted());
    EXPECT_TRUE(lanes.trusted()(lane));
    EXPECT_EQ(lanes.rss()(lane), one.rss());
    EXPECT_EQ(lanes.alpha()(lane), one.alpha());
    EXPECT_EQ(lanes.r_squared()(lane), one.r_squared());
    for (int i = 0; i < K; ++i) {
      EXPECT_EQ(lanes.beta(i)(lane), one.beta(i));
      for (int j = 0; j <= i; ++j)
        EXPECT_EQ(lanes.inverse_at(i, j)(lane), one.inverse_at(i, j));
    }
  }
}

}  // namespace

TEST(WindowSolve, ALaneDoesWhatADoubleAloneDoes) {
  expect_lanes_equal_doubles<1>(1);
  expect_lanes_equal_doubles<3>(3);
  expect_lanes_equal_doubles<0>(7);
}

TEST(WindowSolve, AgreesWithEigensInverse) {
  const int K = 4;
  const Windows windows(K);
  const auto S = windows.lane(windows.S, 3), mean = windows.lane(windows.mean, 3);
  Matrix full(K + 1, K + 1);
  for (int i = 0; i <= K; ++i)
    for (int j = 0; j <= i; ++j)
      full(i, j) = full(j, i) = S[static_cast<std::size_t>(packed_at(i, j))];
  const Matrix inverse = full.topLeftCorner(K, K).inverse();
  const Vector S_fy = full.col(K).head(K), beta = inverse * S_fy;
  WindowSolver<double, 4> solver(K);
  solver.solve(S.data(), mean.data());
  for (int i = 0; i < K; ++i) {
    EXPECT_NEAR(solver.beta(i), beta(i), 1e-13);
    for (int j = 0; j < K; ++j)
      EXPECT_NEAR(solver.inverse_at(i, j), inverse(i, j), 1e-13);
  }
  EXPECT_NEAR(solver.rss(), full(K, K) - beta.dot(S_fy), 1e-12);
}

TEST(WindowSolve, DoesNotTrustAPivotOrAResidualWithoutDigits) {
  // Two factors that are one up to 1e-7 in the second lane, an exact fit in the third.
  Windows windows(2);
  auto at = [&](int i, int j) -> WindowLanes& {
    return windows.S[static_cast<std::size_t>(packed_at(i, j))];
  };
  at(1, 0)(1) = at(0, 0)(1);
  at(1, 1)(1) = at(0, 0)(1) * (1 + 1e-7);
  at(2, 0)(2) = at(0, 0)(2);
  at(2, 1)(2) = at(1, 0)(2);
  at(2, 2)(2) = at(0, 0)(2);
  WindowSolver<WindowLanes, 2> solver(2);
  solver.solve(windows.S.data(), windows.mean.data());
  for (int lane = 0; lane < kWindowLanes; ++lane)
    EXPECT_EQ(solver.trusted()(lane), lane != 1 && lane != 2) << lane;
}

TEST(WindowSolve, ReturnsThatDoNotVaryHaveNoR2) {
  const double S[] = {2.0, 0.0, 0.0}, mean[] = {0.5, 3.0};
  WindowSolver<double, 1> solver(1);
  solver.solve(S, mean);
  EXPECT_TRUE(solver.trusted());
  EXPECT_EQ(solver.beta(0), 0.0);
  EXPECT_EQ(solver.alpha(), 3.0);
  EXPECT_TRUE(std::isnan(solver.r_squared()));
}
