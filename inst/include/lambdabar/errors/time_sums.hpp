// Other ways to sum influence rows h_t over periods, T x P, taken as equally spaced (a
// gap in the calendar is closed).
//   cosine    sum_{j<=B} L_j L_j' / B, L_j = sqrt(2) sum_t cos(pi j (t - 1/2) / T) h_t
//             (Lazarus, Lewis, Stock and Watson 2018, Journal of Business & Economic
//             Statistics 36, 541-559): t with B degrees of freedom; B = T - 1 gives
//             independent periods times T/(T-1)
//   blocks    q/(q-1) sum over q runs of periods of (sum of rows)(sum of rows)', runs end
//             at floor(j T / q) (Ibragimov and Mueller 2010, Journal of Business & Economic
//             Statistics 28, 453-468): t with q - 1
//   geometric sum_l k(l) sum_t h_t h_{t+l}', k(l) = (1 - l/T) r^l + (l/T) r^(T-l): the exact
//             variance of the stationary bootstrap with blocks of mean length 1 / (1 - r)
//             (Politis and Romano 1994, Journal of the American Statistical Association 89,
//             1303-1313); nothing is drawn
// Cost O(T B P + B P^2), O(T P + q P^2), O(T^2 P).
#pragma once

#include "../parallel.hpp"
#include "series_sum.hpp"

#include <cmath>

namespace lambdabar {

inline Matrix cosine_sum(const Eigen::Ref<const Matrix>& rows, Index n_terms) {
  const Index T = rows.rows();
  if (n_terms < 1 || n_terms > T - 1)
    throw Error(
        "too_few",
        "The number of cosines must lie between 1 and the number of periods less one.",
        {{"n_terms", static_cast<double>(n_terms)},
         {"n_periods", static_cast<double>(T)}});
  const double pi = std::acos(-1.0), n = static_cast<double>(T);
  Matrix waves(n_terms, T);
  for (Index j = 0; j < n_terms; ++j)
    for (Index t = 0; t < T; ++t)
      waves(j, t) = std::sqrt(2.0) * std::cos(pi * static_cast<double>(j + 1) *
                                              (static_cast<double>(t) + 0.5) / n);
  return outer_sum(waves * rows) / static_cast<double>(n_terms);
}

inline Matrix block_sum(const Eigen::Ref<const Matrix>& rows, Index n_blocks) {
  const Index T = rows.rows();
  if (n_blocks < 2 || n_blocks > T)
    throw Error("too_few",
                "There must be at least two groups and a period in each.",
                {{"n_groups", static_cast<double>(n_blocks)},
                 {"n_periods", static_cast<double>(T)}});
  Matrix sums(n_blocks, rows.cols());
  for (Index j = 0; j < n_blocks; ++j) {
    const Index begin = j * T / n_blocks, end = (j + 1) * T / n_blocks;
    sums.row(j) = rows.middleRows(begin, end - begin).colwise().sum();
  }
  const double q = static_cast<double>(n_blocks);
  return outer_sum(sums) * (q / (q - 1.0));
}

namespace detail {

// Weights of lags 0 .. T - 1.
inline Vector geometric_weights(Index T, double length) {
  const double n = static_cast<double>(T), r = 1.0 - 1.0 / length;
  Vector weights(T);
  for (Index l = 0; l < T; ++l) {
    const double lag = static_cast<double>(l);
    weights(l) = (1.0 - lag / n) * std::pow(r, lag) + lag / n * std::pow(r, n - lag);
  }
  weights(0) = 1.0;
  return weights;
}

}  // namespace detail

inline Matrix geometric_sum(const Eigen::Ref<const Matrix>& rows, double length) {
  const Index T = rows.rows();
  const Vector weights = detail::geometric_weights(T, length);
  Matrix past = Matrix::Zero(T, rows.cols());
  for (Index l = 1; l < T; ++l)
    past.bottomRows(T - l) += weights(l) * rows.topRows(T - l);
  const Matrix one_sided = rows.transpose() * past;
  return outer_sum(rows) + one_sided + one_sided.transpose();
}

// Mean block length for the stationary bootstrap of a mean (Politis and White 2004,
// Econometric Reviews 23, 53-70; corrected by Patton, Politis and White 2009, ibid. 28,
// 372-375): (2 G^2 / D)^(1/3) T^(1/3), D = 2 g^2, g = sum lambda R, G = sum lambda |k| R,
// R autocovariances, lambda a flat top of width M = min(2 m, ceil(sqrt T) + K), m the
// first lag after which K = max(5, ceil(sqrt(log10 T))) autocorrelations stay below 2
// sqrt(log10(T) / T). Between 1 and ceil(min(3 sqrt T, T / 3)).
inline double block_length(const Eigen::Ref<const Vector>& series) {
  const Index T = series.size();
  const double n = static_cast<double>(T);
  const Vector x = series.array() - series.mean();
  auto covariance = [&](Index k) {
    return k < T ? x.head(T - k).dot(x.tail(T - k)) / n : 0.0;
  };
  const double variance = covariance(0);
  if (!(variance > 0.0)) return 1.0;
  const Index quiet =
      std::max<Index>(5, static_cast<Index>(std::ceil(std::sqrt(std::log10(n)))));
  const Index most = static_cast<Index>(std::ceil(std::sqrt(n))) + quiet;
  const double bound = 2.0 * std::sqrt(std::log10(n) / n);
  Index m = most;
  for (Index candidate = 0, run = 0, k = 1; k <= most + quiet; ++k) {
    run = std::abs(covariance(k)) / variance < bound ? run + 1 : 0;
    if (run == 0) candidate = k;
    if (run == quiet) {
      m = candidate;
      break;
    }
  }
  const Index M = std::min(2 * std::max<Index>(m, 1), most);
  double g = variance, G = 0;
  for (Index k = 1; k <= M; ++k) {
    const double at = static_cast<double>(k) / static_cast<double>(M);
    const double flat = at <= 0.5 ? 1.0 : 2.0 * (1.0 - at);
    g += 2.0 * flat * covariance(k);
    G += 2.0 * flat * static_cast<double>(k) * covariance(k);
  }
  const double length = std::cbrt(2.0 * G * G / (2.0 * g * g)) * std::cbrt(n);
  const double longest = std::ceil(std::min(3.0 * std::sqrt(n), n / 3.0));
  return std::isfinite(length) ? std::min(std::max(length, 1.0), longest) : longest;
}

// t statistics of resampled means, P a draw: sum of the drawn rows over the root of their
// own geometric_sum() about their mean. index: T x draws, 0-based.
inline Matrix resampled_t(const Eigen::Ref<const Matrix>& rows,
                          const std::vector<int>& index,
                          double length,
                          int threads) {
  const Index T = rows.rows(), P = rows.cols();
  const Index draws = static_cast<Index>(index.size()) / T;
  const Vector weights = detail::geometric_weights(T, length);
  // Weights that can no longer be seen beside the first are left out.
  Index reach = 1, back = T - 1;
  while (reach < T && weights(reach) > 1e-12) ++reach;
  while (back >= reach && weights(back) > 1e-12) --back;
  Matrix out(draws, P);
  for_each_task(draws, threads, [&](Index draw) {
    Matrix drawn(T, P);
    for (Index t = 0; t < T; ++t)
      drawn.row(t) = rows.row(index[static_cast<std::size_t>(draw * T + t)]);
    const Vector sum = drawn.colwise().sum();
    drawn.rowwise() -= sum.transpose() / static_cast<double>(T);
    for (Index p = 0; p < P; ++p) {
      const auto x = drawn.col(p);
      double variance = x.squaredNorm();
      for (Index l = 1; l < T; ++l) {
        if (l >= reach && l <= back) {
          l = back;
          continue;
        }
        variance += 2.0 * weights(l) * x.head(T - l).dot(x.tail(T - l));
      }
      out(draw, p) = sum(p) / std::sqrt(variance);
    }
  });
  return out;
}

}  // namespace lambdabar
