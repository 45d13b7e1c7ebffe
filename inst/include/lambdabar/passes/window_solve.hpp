// The normal equations of a window from the centred cross-products S of (f_1 .. f_K, y):
//   S_ff = L L',  u = L^-1 S_fy,  b = L'^-1 u,  rss = S_yy - u'u,  S_ff^-1 = L'^-1 L^-1
// Real is a double, or WindowLanes: as many windows as there are lanes, one in each. A
// window waits for its own square roots and divisions; side by side they do not wait for
// each other. Each lane does what a double alone would do, to the bit.
//
// No row is looked at: where `trusted` is false, a pivot or the residual sum is so small
// against what it came from that its digits are gone, and the window needs
// window_fit.hpp. Cost O(K^3) a window.
#pragma once

#include "aggregates.hpp"

namespace lambdabar {
namespace detail {

inline constexpr int kWindowLanes = 8;
using WindowLanes = Eigen::Array<double, kWindowLanes, 1>;

// Below this share of a variable's own sum of squares a pivot has lost five digits.
inline constexpr double kWindowPivot = 1e-5;

template <typename Real, int Fixed>
class WindowSolver {
 public:
  using Mask = std::conditional_t<std::is_same_v<Real, double>,
                                  bool,
                                  Eigen::Array<bool, kWindowLanes, 1>>;

  explicit WindowSolver(int n_factors)
      : n_factors_(n_factors),
        triangle_(packed_size(n_factors)),
        inverse_(packed_size(n_factors)),
        u_(n_factors),
        beta_(n_factors) {}

  // S packed as in aggregates.hpp, mean: K + 1.
  void solve(const Real* S, const Real* mean) {
    factorise(S);
    const int K = n_factors();
    const Real& tss = S[packed_at(K, K)];
    for (int i = 0; i < K; ++i) {
      Real value = S[packed_at(K, i)];
      for (int l = 0; l < i; ++l) value -= L(i, l) * u_.data()[l];
      u_.data()[i] = value * L(i, i);
    }
    rss_ = tss;
    for (int i = 0; i < K; ++i) rss_ -= u_.data()[i] * u_.data()[i];
    trusted_ = trusted_ && (rss_ > tss * kWindowPivot || tss <= 0.0);
    r_squared_ = 1.0 - rss_ / tss;
    alpha_ = mean[K];
    for (int i = K - 1; i >= 0; --i) {
      Real value = u_.data()[i];
      for (int l = i + 1; l < K; ++l) value -= L(l, i) * beta_.data()[l];
      beta_.data()[i] = value * L(i, i);
      alpha_ -= beta_.data()[i] * mean[i];
    }
    invert();
  }

  int n_factors() const { return Fixed > 0 ? Fixed : n_factors_; }
  const Mask& trusted() const { return trusted_; }
  const Real& rss() const { return rss_; }
  const Real& alpha() const { return alpha_; }
  const Real& r_squared() const { return r_squared_; }  // NaN when y does not vary
  const Real& beta(int k) const { return beta_.data()[k]; }

  // (S_ff^-1)_ij.
  Real inverse_at(int i, int j) const {
    Real value = M(n_factors() - 1, i) * M(n_factors() - 1, j);
    for (int l = n_factors() - 2; l >= std::max(i, j); --l) value += M(l, i) * M(l, j);
    return value;
  }

 private:
  // The diagonal of L is kept inverted.
  const Real& L(int i, int j) const { return triangle_.data()[packed_at(i, j)]; }
  const Real& M(int i, int j) const { return inverse_.data()[packed_at(i, j)]; }

  void factorise(const Real* S) {
    using std::sqrt;
    for (int i = 0; i < n_factors(); ++i) {
      for (int j = 0; j <= i; ++j) {
        Real value = S[packed_at(i, j)];
        for (int l = 0; l < j; ++l) value -= L(i, l) * L(j, l);
        if (j < i) {
          triangle_.data()[packed_at(i, j)] = value * L(j, j);
        } else {
          const Mask large = value > S[packed_at(i, i)] * kWindowPivot;
          trusted_ = i == 0 ? large : Mask(trusted_ && large);
          triangle_.data()[packed_at(i, i)] = 1.0 / sqrt(value);
        }
      }
    }
  }

  // L^-1.
  void invert() {
    for (int i = 0; i < n_factors(); ++i) {
      inverse_.data()[packed_at(i, i)] = L(i, i);
      for (int j = 0; j < i; ++j) {
        Real value = L(i, j) * M(j, j);
        for (int l = j + 1; l < i; ++l) value += L(i, l) * M(l, j);
        inverse_.data()[packed_at(i, j)] = -value * L(i, i);
      }
    }
  }

  int n_factors_;
  Scratch<Real, Fixed, packed_size(Fixed)> triangle_, inverse_;
  Scratch<Real, Fixed, Fixed> u_, beta_;
  Real rss_, alpha_, r_squared_;
  Mask trusted_;
};

}  // namespace detail
}  // namespace lambdabar
