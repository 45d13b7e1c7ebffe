// Weighted moments of z = (f_1 .. f_K, y) that grow by one row or by another aggregate
// and never shrink: weight W, means m, centred cross-products S.
//   row:    d = z - m,    m += d w / (W + w),       S += d d' w W / (W + w)
//   merge:  d = mb - ma,  m = ma + d Wb / (Wa + Wb), S = Sa + Sb + d d' Wa Wb / (Wa + Wb)
// (Chan, Golub and LeVeque 1983, American Statistician 37, 242-247). Nothing is
// subtracted from S, so a row of any size that is not in an aggregate has left no trace
// in it.
//
// Values are taken from an anchor, a row of the aggregate itself: with a mean of a
// million times the spread the differences keep the digits that the values have.
//
// An aggregate is an array: W, m (K + 1), S (lower triangle by rows, y in the last one).
// `Fixed` is K when the compiler may know it, 0 for any K. Cost (K + 1)(K + 2) / 2
// multiply- adds a row or merge.
#pragma once

#include "../base.hpp"

#include <algorithm>
#include <array>
#include <cmath>
#include <type_traits>
#include <utility>

// The loop bodies below are written out once an index: a call each would cost more than
// what it does.
#if defined(__GNUC__)
#define LAMBDABAR_INLINE __attribute__((always_inline))
#else
#define LAMBDABAR_INLINE
#endif

namespace lambdabar {
namespace detail {

constexpr int packed_size(int n) { return n * (n + 1) / 2; }
// Position of (i, j), j <= i, in a lower triangle by rows.
constexpr int packed_at(int i, int j) { return i * (i + 1) / 2 + j; }

constexpr int packed_row(int at) {
  int i = 0;
  while (packed_size(i + 1) <= at) ++i;
  return i;
}

template <typename F, int... I>
void call_each(const F& f, std::integer_sequence<int, I...>) {
  (f(I), ...);
}

template <typename F, int... At>
void call_triangle(const F& f, std::integer_sequence<int, At...>) {
  constexpr int row[] = {packed_row(At)...};
  (f(row[At], At - packed_size(row[At]), At), ...);
}

// f(0) .. f(n - 1), and f(i, j, packed_at(i, j)) for j <= i < n. Written out, with no
// loop, when the compiler is told n (N > 0): at -O2 that halves the time of a push.
template <int N, typename F>
void for_each_below(int n, const F& f) {
  if constexpr (N > 0) {
    (void)n;
    call_each(f, std::make_integer_sequence<int, N>());
  } else {
    for (int i = 0; i < n; ++i) f(i);
  }
}

template <int N, typename F>
void for_triangle(int n, const F& f) {
  if constexpr (N > 0) {
    (void)n;
    call_triangle(f, std::make_integer_sequence<int, packed_size(N)>());
  } else {
    for (int i = 0, at = 0; i < n; ++i)
      for (int j = 0; j <= i; ++j, ++at) f(i, j, at);
  }
}

template <int Fixed>
class Aggregates {
 public:
  explicit Aggregates(int n_factors) : n_factors_(n_factors) {}

  int n_factors() const { return Fixed > 0 ? Fixed : n_factors_; }
  int n_variables() const { return n_factors() + 1; }
  int size() const { return 1 + n_variables() + packed_size(n_variables()); }
  static constexpr int kFixedSize = 2 + Fixed + packed_size(Fixed + 1);
  static constexpr int kVariables = Fixed > 0 ? Fixed + 1 : 0;

  double weight(const double* a) const { return a[0]; }
  const double* mean(const double* a) const { return a + 1; }
  const double* products(const double* a) const { return a + 1 + n_variables(); }

  void clear(double* a) const { std::fill(a, a + size(), 0.0); }

  void scale(double* a, double factor) const {
    double* S = a + 1 + n_variables();
    a[0] *= factor;
    for (int i = 0; i < packed_size(n_variables()); ++i) S[i] *= factor;
  }

  // `from` and one more row, into `to`, which may be `from`. z is taken from the anchor
  // already and is used up.
  void push(const double* from, double* z, double w, double* to) const {
    const int n = n_variables();
    const double total = from[0] + w, share = w / total, factor = share * from[0];
    const double *m = from + 1, *S = m + n;
    double *m_to = to + 1, *S_to = m_to + n;
    to[0] = total;
    for_each_below<kVariables>(n, [&](int i) LAMBDABAR_INLINE { z[i] -= m[i]; });
    for_triangle<kVariables>(n, [&](int i, int j, int at) LAMBDABAR_INLINE {
      S_to[at] = S[at] + (factor * z[i]) * z[j];
    });
    for_each_below<kVariables>(
        n, [&](int i) LAMBDABAR_INLINE { m_to[i] = m[i] + share * z[i]; });
  }

  // The merged mean and products go to mean(i, value) and product(position, value), with
  // the anchor of a. shift: anchor of b less anchor of a; used up.
  template <typename MeanTo, typename ProductTo>
  void merge(const double* a,
             const double* b,
             double* shift,
             const MeanTo& mean,
             const ProductTo& product) const {
    const int n = n_variables();
    const double share = b[0] / (a[0] + b[0]), factor = share * a[0];
    const double *ma = a + 1, *mb = b + 1, *Sa = ma + n, *Sb = mb + n;
    for_each_below<kVariables>(n, [&](int i) LAMBDABAR_INLINE {
      shift[i] = (mb[i] + shift[i]) - ma[i];
      mean(i, ma[i] + share * shift[i]);
    });
    for_triangle<kVariables>(n, [&](int i, int j, int at) LAMBDABAR_INLINE {
      product(at, (Sa[at] + Sb[at]) + (factor * shift[i]) * shift[j]);
    });
  }

 private:
  int n_factors_;
};

// Room for some numbers: on the stack when the compiler knows how many.
template <typename Real, int Fixed, int Size>
class Scratch {
 public:
  explicit Scratch(int size) : values_(make(size)) {}
  Real* data() { return values_.data(); }
  const Real* data() const { return values_.data(); }

 private:
  using Values = std::conditional_t<(Fixed > 0),
                                    std::array<Real, static_cast<std::size_t>(Size)>,
                                    std::vector<Real>>;
  static Values make(int size) {
    if constexpr (Fixed > 0) {
      (void)size;
      return {};
    } else {
      return std::vector<Real>(static_cast<std::size_t>(size));
    }
  }
  Values values_;
};

}  // namespace detail
}  // namespace lambdabar
