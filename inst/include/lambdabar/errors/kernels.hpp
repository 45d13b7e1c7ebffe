// Lag windows k(x), x = lag / divisor, with k(0) = 1:
//   bartlett   1 - |x| up to 1 (Newey and West 1987)
//   parzen     1 - 6 x^2 + 6 |x|^3 up to 1/2, 2 (1 - |x|)^3 up to 1
//   qs         3 / y^2 (sin y / y - cos y), y = 6 pi x / 5, all lags (Andrews 1991)
//   truncated  1 up to 1 (Hansen and Hodrick 1980); the sum need not be positive
//
// "L lags" as a user counts them means divisor L + 1 for bartlett and parzen, whose
// weight at the divisor itself is zero, and divisor L for qs and truncated. Divisor 0: no
// lags.
#pragma once

#include "../base.hpp"

#include <algorithm>
#include <cmath>

namespace lambdabar {

enum class Kernel { bartlett, parzen, qs, truncated };

namespace detail {

inline double qs_weight(double x) {
  constexpr double kPi = 3.141592653589793238462643383279502884;
  const double y = 6.0 * kPi * x / 5.0;
  if (y > 0.5) return 3.0 / (y * y) * (std::sin(y) / y - std::cos(y));
  // Near zero the two terms cancel; the power series sum of
  // (-1)^(n+1) 6 n y^(2n-2) / (2n+1)! does not.
  double sum = 0.0;
  double power_over_factorial = 1.0 / 6.0;
  for (int n = 1; n <= 8; ++n) {
    sum += (n % 2 ? 6.0 : -6.0) * n * power_over_factorial;
    power_over_factorial *= y * y / ((2.0 * n + 2.0) * (2.0 * n + 3.0));
  }
  return sum;
}

inline double parzen_weight(double x) {
  if (x > 1.0) return 0.0;
  const double rest = 1.0 - x;
  return x <= 0.5 ? 1.0 - 6.0 * x * x * rest : 2.0 * rest * rest * rest;
}

// True where divisor = lags + 1.
inline bool counts_one_less(Kernel kernel) {
  return kernel == Kernel::bartlett || kernel == Kernel::parzen;
}

}  // namespace detail

inline double kernel_weight(Kernel kernel, double x) {
  x = std::abs(x);
  switch (kernel) {
    case Kernel::bartlett:
      return x < 1.0 ? 1.0 - x : 0.0;
    case Kernel::parzen:
      return detail::parzen_weight(x);
    case Kernel::qs:
      return detail::qs_weight(x);
    case Kernel::truncated:
      return x <= 1.0 ? 1.0 : 0.0;
  }
  return kNaN;
}

// The divisor that gives `lags` lags; 0 when there are none.
inline double kernel_divisor(Kernel kernel, double lags) {
  if (lags <= 0.0) return 0.0;
  return detail::counts_one_less(kernel) ? lags + 1.0 : lags;
}

}  // namespace lambdabar
