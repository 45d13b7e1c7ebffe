// Influence rows of a series summed under autocorrelation:
//   S = sum_t h_t h_t' + sum_{j>=1} k(j / divisor) sum_t (h_t h_{t-j}' + h_{t-j} h_t')
//
// rows h: T x P, the 1/T already inside, so S is a covariance before any small-sample
// factor. slot: calendar position of each row, increasing; a missing slot is a zero row,
// so lags count calendar time. Data-driven lags and prewhitening need equal spacing: they
// work on the rows as they stand and report `closed_gaps`.
//
// Prewhitening (Andrews and Monahan 1992): VAR(1) without constant, h_t = Phi h_{t-1} +
// v_t, kernel sum S_v on v, S = (I - Phi)^-1 S_v (I - Phi)^-T. If an eigenvalue of Phi
// has a modulus above 0.97, its singular values are capped at 0.97, in columns scaled to
// unit norm so that units do not matter (a choice).
//
// Without lags S is `outer_sum(rows)` to the last bit. With the truncated kernel S may
// have negative eigenvalues; they are reported, never clipped. Cost O(T L P + T P^2);
// memory O(T P).
#pragma once

#include "bandwidth.hpp"
#include "positive.hpp"

#include <Eigen/Eigenvalues>

namespace lambdabar {

struct SeriesSum {
  Matrix S;              // P x P
  double bandwidth = 0;  // divisor inside the kernel, 0: no lags
  double lags = 0;       // as a user counts them
  bool capped = false;   // asked for more lags than the sample has
  bool negative_s0 = false;
  bool closed_gaps = false;
  bool capped_prewhitening = false;
  double min_eigen_relative = kNaN;
};

// The plain sum of outer products, exactly symmetric.
inline Matrix outer_sum(const Matrix& rows) {
  Matrix S = Matrix::Zero(rows.cols(), rows.cols());
  S.selfadjointView<Eigen::Lower>().rankUpdate(rows.transpose());
  S.triangularView<Eigen::StrictlyUpper>() = S.transpose();
  return S;
}

namespace detail {

inline std::vector<Index> consecutive(Index n) {
  std::vector<Index> slot(static_cast<std::size_t>(n));
  for (Index t = 0; t < n; ++t) slot[static_cast<std::size_t>(t)] = t;
  return slot;
}

inline void check_slots(const std::vector<Index>& slot, Index n_rows) {
  if (static_cast<Index>(slot.size()) != n_rows)
    throw Error("input",
                "One calendar slot is needed for each row.",
                {{"n_rows", static_cast<double>(n_rows)},
                 {"n_slots", static_cast<double>(slot.size())}});
  for (std::size_t t = 1; t < slot.size(); ++t)
    if (slot[t] <= slot[t - 1])
      throw Error("input",
                  "Calendar slots must increase.",
                  {{"row", static_cast<double>(t + 1)}});
}

inline Index span_of(const std::vector<Index>& slot) {
  return slot.empty() ? 0 : slot.back() - slot.front();
}

// Weights of lags 0 .. the last that counts, none beyond `longest`.
inline std::vector<double> lag_weights(Kernel kernel, double divisor, Index longest) {
  const double reach = kernel == Kernel::qs
                           ? static_cast<double>(longest)
                           : std::min(divisor, static_cast<double>(longest));
  std::vector<double> weights{1.0};
  for (Index j = 1; static_cast<double>(j) <= reach; ++j)
    weights.push_back(kernel_weight(kernel, static_cast<double>(j) / divisor));
  return weights;
}

inline Matrix kernel_sum(const Matrix& rows,
                         const std::vector<Index>& slot,
                         Kernel kernel,
                         double divisor) {
  Matrix S = outer_sum(rows);
  if (divisor <= 0.0) return S;
  const std::vector<double> weights = lag_weights(kernel, divisor, span_of(slot));
  const Matrix H = rows.transpose();
  Matrix past = Matrix::Zero(H.rows(), H.cols());
  for (Index t = 1; t < H.cols(); ++t) {
    for (Index s = t - 1; s >= 0; --s) {
      const auto lag = static_cast<std::size_t>(slot[static_cast<std::size_t>(t)] -
                                                slot[static_cast<std::size_t>(s)]);
      if (lag >= weights.size()) break;
      past.col(t) += weights[lag] * H.col(s);
    }
  }
  const Matrix one_sided = H * past.transpose();
  S += one_sided + one_sided.transpose();
  return S;
}

struct Prewhitened {
  Matrix residuals;  // (T - 1) x P
  Matrix recolour;   // P x P, (I - Phi)^-1
  bool capped = false;
};

inline Prewhitened prewhiten(const Matrix& rows) {
  const Index n = rows.rows(), size = rows.cols();
  if (n - 1 <= size)
    throw Error(
        "too_few",
        "Too few periods to prewhiten.",
        {{"n_periods", static_cast<double>(n)}, {"n_terms", static_cast<double>(size)}});
  const Vector scale = usable_scale(rows.colwise().norm().transpose());
  const Matrix scaled = rows * scale.cwiseInverse().asDiagonal();
  const auto lag = scaled.topRows(n - 1);
  const auto lead = scaled.bottomRows(n - 1);
  Matrix phi = lag.completeOrthogonalDecomposition().solve(lead).transpose();
  Prewhitened result;
  result.capped =
      Eigen::EigenSolver<Matrix>(phi, false).eigenvalues().cwiseAbs().maxCoeff() >
      kMaxPersistence;
  if (result.capped) {
    const Eigen::JacobiSVD<Matrix> svd(phi, Eigen::ComputeFullU | Eigen::ComputeFullV);
    phi = svd.matrixU() * svd.singularValues().cwiseMin(kMaxPersistence).asDiagonal() *
          svd.matrixV().transpose();
  }
  const Matrix inverse = (Matrix::Identity(size, size) - phi).partialPivLu().inverse();
  result.residuals = (lead - lag * phi.transpose()) * scale.asDiagonal();
  result.recolour = scale.asDiagonal() * inverse * scale.cwiseInverse().asDiagonal();
  return result;
}

// rule_map: P x R; a data-driven rule sees rows * rule_map with R weights. Empty: the
// rows. It lets a sum over rotated rows take its lags from the columns they came from.
inline SeriesSum sum_series_by(const Matrix& rows,
                               const std::vector<Index>& slot_or_none,
                               const Matrix& rule_map,
                               const Vector& weights,
                               const SeriesOptions& options) {
  const std::vector<Index> given =
      slot_or_none.empty() ? consecutive(rows.rows()) : slot_or_none;
  check_slots(given, rows.rows());
  const bool automatic =
      options.rule == LagRule::newey_west || options.rule == LagRule::andrews;
  const bool gaps = span_of(given) + 1 > rows.rows();
  Prewhitened white;
  if (options.prewhiten) white = prewhiten(rows);
  const Matrix& series = options.prewhiten ? white.residuals : rows;
  const std::vector<Index> slot = options.prewhiten ? consecutive(series.rows()) : given;
  const Bandwidth chosen =
      automatic && rule_map.size() > 0
          ? choose_bandwidth(
                series * rule_map, weights, rows.rows(), span_of(slot), options)
          : choose_bandwidth(series, weights, rows.rows(), span_of(slot), options);
  SeriesSum result;
  result.S = kernel_sum(series, slot, options.kernel, chosen.divisor);
  if (options.prewhiten) {
    const Matrix half = white.recolour * result.S;
    const Matrix full = half * white.recolour.transpose();
    result.S = 0.5 * (full + full.transpose());
  }
  result.bandwidth = chosen.divisor;
  result.lags = chosen.lags;
  result.capped = chosen.capped;
  result.negative_s0 = chosen.negative_s0;
  result.closed_gaps = gaps && (automatic || options.prewhiten);
  result.capped_prewhitening = white.capped;
  return result;
}

// A data-driven rule sees all columns alike, each at unit norm. `back` (N x P) returns rows
// that were taken to a basis to the columns that they came from: the lags do not depend on the
// basis then. Empty: the rows as they are.
inline SeriesSum sum_alike(const Matrix& rows,
                           const Matrix& back,
                           const std::vector<Index>& slot,
                           const SeriesOptions& options) {
  const Matrix seen = back.size() > 0 ? Matrix(rows * back.transpose()) : rows;
  const Vector inverse = usable_scale(seen.colwise().norm()).cwiseInverse();
  const Matrix rule_map = back.size() > 0
                              ? Matrix(back.transpose() * inverse.asDiagonal())
                              : Matrix(inverse.asDiagonal());
  return sum_series_by(rows, slot, rule_map, Vector::Ones(rule_map.cols()), options);
}

}  // namespace detail

// slot empty: consecutive periods. bandwidth_weights: P, read by data-driven rules only.
inline SeriesSum sum_series(const Matrix& rows,
                            const std::vector<Index>& slot,
                            const Vector& bandwidth_weights,
                            const SeriesOptions& options) {
  SeriesSum result =
      detail::sum_series_by(rows, slot, Matrix(), bandwidth_weights, options);
  result.min_eigen_relative =
      min_eigen_relative(result.S, rows.colwise().norm().transpose());
  return result;
}

}  // namespace lambdabar
