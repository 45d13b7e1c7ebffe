// Weighted moments of z = (f_1 .. f_K, y) that grow by one row or by another aggregate and
// never shrink: weight W, means m, centred cross-products S.
//   row:    d = z - m,    m += d w / (W + w),       S += d d' w W / (W + w)
//   merge:  d = mb - ma,  m = ma + d Wb / (Wa + Wb), S = Sa + Sb + d d' Wa Wb / (Wa + Wb)
// (Chan, Golub and LeVeque 1983, American Statistician 37, 242-247). Nothing is subtracted
// from S, so a row of any size that is not in an aggregate has left no trace in it.
//
// Values are taken from an anchor, a row of the aggregate itself: with a mean of a million
// times the spread the differences keep the digits that the values have.
//
// An aggregate is an array: W, m (K + 1), S (lower triangle by rows, y in the last one).
// `Fixed` is K when the compiler may know it, 0 for any K. Cost (K + 1)(K + 2) / 2 multiply-
// adds a row or merge.
#pragma once

#include "../base.hpp"

#include <algorithm>
#include <array>
#include <cmath>
#include <type_traits>

namespace lambdabar {
namespace detail {

constexpr int packed_size(int n) { return n * (n + 1) / 2; }
// Position of (i, j), j <= i, in a lower triangle by rows.
constexpr int packed_at(int i, int j) { return i * (i + 1) / 2 + j; }

template <int Fixed>
class Aggregates {
 public:
  explicit Aggregates(int n_factors) : n_factors_(n_factors) {}

  int n_factors() const { return Fixed > 0 ? Fixed : n_factors_; }
  int n_variables() const { return n_factors() + 1; }
  int size() const { return 1 + n_variables() + packed_size(n_variables()); }
  static constexpr int kFixedSize = 2 + Fixed + packed_size(Fixed + 1);

  double weight(const double* a) const { return a[0]; }
  const double* mean(const double* a) const { return a + 1; }
  const double* products(const double* a) const { return a + 1 + n_variables(); }

  void clear(double* a) const { std::fill(a, a + size(), 0.0); }

  void scale(double* a, double factor) const {
    double* S = a + 1 + n_variables();
    a[0] *= factor;
    for (int i = 0; i < packed_size(n_variables()); ++i) S[i] *= factor;
  }

  // z is taken from the anchor already.
  void push(double* a, const double* z, double w) const {
    const int n = n_variables();
    double* m = a + 1;
    double* S = m + n;
    const double total = a[0] + w, share = w / total, factor = share * a[0];
    a[0] = total;
    for (int i = 0, at = 0; i < n; ++i) {
      const double d = z[i] - m[i];
      for (int j = 0; j < i; ++j, ++at) S[at] += factor * d * (z[j] - m[j]);
      S[at++] += factor * d * d;
    }
    for (int i = 0; i < n; ++i) m[i] += share * (z[i] - m[i]);
  }

  // shift: anchor of b less anchor of a. The result has the anchor of a.
  void merge(const double* a, const double* b, const double* shift, double* out) const {
    const int n = n_variables();
    const double total = a[0] + b[0], share = b[0] / total, factor = share * a[0];
    const double *ma = a + 1, *mb = b + 1, *Sa = ma + n, *Sb = mb + n;
    double *m = out + 1, *S = m + n;
    out[0] = total;
    // m holds the difference of the means until S is done.
    for (int i = 0; i < n; ++i) m[i] = (mb[i] + shift[i]) - ma[i];
    for (int i = 0, at = 0; i < n; ++i)
      for (int j = 0; j <= i; ++j, ++at) S[at] = (Sa[at] + Sb[at]) + factor * m[i] * m[j];
    for (int i = 0; i < n; ++i) m[i] = ma[i] + share * m[i];
  }

 private:
  int n_factors_;
};

// Room for some doubles: on the stack when the number is known to the compiler.
template <int Fixed, int Size>
class Scratch {
 public:
  explicit Scratch(int size) : values_(make(size)) {}
  double* data() { return values_.data(); }
  const double* data() const { return values_.data(); }

 private:
  using Values = std::conditional_t<(Fixed > 0),
                                    std::array<double, static_cast<std::size_t>(Size)>,
                                    std::vector<double>>;
  static Values make(int size) {
    if constexpr (Fixed > 0) {
      (void)size;
      return {};
    } else {
      return std::vector<double>(static_cast<std::size_t>(size), 0.0);
    }
  }
  Values values_;
};

}  // namespace detail
}  // namespace lambdabar
