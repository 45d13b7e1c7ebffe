#include <gtest/gtest.h>

#include <lambdabar/errors/kernels.hpp>

#include <cmath>

using namespace lambdabar;

namespace {

constexpr double kPi = 3.141592653589793238462643383279502884;

// Andrews (1991, Econometrica 59), the formula itself in extended precision.
double qs_in_long_double(double x) {
  const long double y = 6.0L * 3.14159265358979323846264338327950288L * x / 5.0L;
  return static_cast<double>(3.0L / (y * y) * (std::sin(y) / y - std::cos(y)));
}

TEST(Kernels, are_one_at_zero_and_even) {
  for (Kernel k : {Kernel::bartlett, Kernel::parzen, Kernel::qs, Kernel::truncated}) {
    EXPECT_EQ(kernel_weight(k, 0.0), 1.0);
    EXPECT_EQ(kernel_weight(k, -0.3), kernel_weight(k, 0.3));
  }
}

TEST(Kernels, have_the_weights_of_their_definitions) {
  EXPECT_DOUBLE_EQ(kernel_weight(Kernel::bartlett, 0.25), 0.75);
  EXPECT_EQ(kernel_weight(Kernel::bartlett, 1.0), 0.0);
  EXPECT_EQ(kernel_weight(Kernel::bartlett, 1.5), 0.0);
  // Both branches of Parzen's window meet at 1/2 with value 1/4.
  EXPECT_DOUBLE_EQ(kernel_weight(Kernel::parzen, 0.5), 0.25);
  EXPECT_NEAR(kernel_weight(Kernel::parzen, std::nextafter(0.5, 1.0)), 0.25, 1e-15);
  EXPECT_DOUBLE_EQ(kernel_weight(Kernel::parzen, 0.25), 1.0 - 6.0 / 16 + 6.0 / 64);
  EXPECT_DOUBLE_EQ(kernel_weight(Kernel::parzen, 0.75), 2.0 / 64);
  EXPECT_EQ(kernel_weight(Kernel::parzen, 1.2), 0.0);
  EXPECT_EQ(kernel_weight(Kernel::truncated, 1.0), 1.0);
  EXPECT_EQ(kernel_weight(Kernel::truncated, std::nextafter(1.0, 2.0)), 0.0);
  // At y = pi the sine is zero: 3 / pi^2.
  EXPECT_NEAR(kernel_weight(Kernel::qs, 5.0 / 6.0), 3.0 / (kPi * kPi), 1e-15);
}

TEST(Kernels, quadratic_spectral_loses_no_digits_near_zero) {
  for (double x : {0.02, 0.05, 0.1, 0.1326, 0.1327, 0.14, 0.3, 1.0, 7.5})
    EXPECT_NEAR(kernel_weight(Kernel::qs, x), qs_in_long_double(x), 2e-15) << x;
  // 1 - y^2 / 10 to first order.
  const double y = 6.0 * kPi * 1e-5 / 5.0;
  EXPECT_NEAR(kernel_weight(Kernel::qs, 1e-5), 1.0 - y * y / 10.0, 1e-16);
}

TEST(Kernels, divisor_counts_lags_as_users_do) {
  EXPECT_EQ(kernel_divisor(Kernel::bartlett, 4), 5.0);
  EXPECT_EQ(kernel_divisor(Kernel::parzen, 4), 5.0);
  EXPECT_EQ(kernel_divisor(Kernel::truncated, 4), 4.0);
  EXPECT_EQ(kernel_divisor(Kernel::qs, 4), 4.0);
  for (Kernel k : {Kernel::bartlett, Kernel::parzen, Kernel::qs, Kernel::truncated})
    EXPECT_EQ(kernel_divisor(k, 0), 0.0);
}

}  // namespace
