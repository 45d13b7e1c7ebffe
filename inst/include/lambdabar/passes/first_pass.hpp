// First pass: one time-series regression an asset, each on the periods it has.
//   r_it = alpha_i + beta_i' f_t + e_it,    t in the T_i periods where r_it is finite
//
// returns T x N (not finite where missing), factors T x K, complete. Standard errors are
// the classical ones, s2 = rss / (T_i - K - 1); resid_var has divisor T_i.
//
// Factors are centred on the asset's own sample, scaled to unit norm and factored by a
// column-pivoted QR, with one step of refinement; no cross-products are formed. Assets
// that are complete share one factorisation. Cost O(N T K^2), or O(N T K) for complete
// assets; memory O(N K + T K) a thread, never a copy of the returns.
//
// An asset with fewer than min_obs periods, or whose own sample leaves the factors
// collinear, gets NaN and a status. Factors that are constant or collinear over all
// periods are errors. Not handled: missing factors, weights.
#pragma once

#include "../base.hpp"
#include "../parallel.hpp"

#include <algorithm>
#include <cmath>

namespace lambdabar {

enum class AssetStatus {
  estimated = 0,
  too_few_periods = 1,
  rank_deficient = 2,  // the factors are constant or collinear on the asset's periods
  empty = 3            // no return at all
};

struct FirstPass {
  Matrix beta, beta_se;             // N x K
  Vector alpha, alpha_se;           // N
  Vector resid_var, r_squared;      // N
  std::vector<Index> n_obs;         // N
  std::vector<AssetStatus> status;  // N
  Index min_obs = 0;                // as applied
};

namespace detail {

// Smallest pivot of unit-norm columns that still counts: rounding in a column is
// epsilon x its norm before centring, so relative to the centred column it is larger by
// that ratio. 64 covers the accumulation in columns of some thousand rows and keeps the
// certified NIST polynomial of degree 10 (Filip) at full rank.
inline double pivot_tolerance(double raw_over_centred) {
  return 64.0 * std::numeric_limits<double>::epsilon() * raw_over_centred;
}

inline bool is_constant(double centred_norm, double raw_norm) {
  return !(centred_norm > 8.0 * std::numeric_limits<double>::epsilon() * raw_norm);
}

// Centred factors D of one sample and what a regression on them needs:
// slopes = C Q'r for any r, (D'D)^-1 = C C'.
struct FactorBasis {
  Vector mean;  // K
  Matrix D;     // T x K, centred
  Matrix Q;     // T x K, orthonormal
  Matrix C;     // K x K
  Index rank = 0;
  Index constant = -1;    // first factor without variation
  Index last_pivot = -1;  // a factor in the span of the others when rank < K

  bool usable() const { return constant < 0 && rank == D.cols(); }
};

inline FactorBasis factor_basis(const Matrix& factors) {
  FactorBasis basis;
  const Index n_factors = factors.cols();
  basis.mean = factors.colwise().mean();
  basis.D = factors.rowwise() - basis.mean.transpose();
  // A second centring removes the rounding of the first mean.
  const Vector rest = basis.D.colwise().mean();
  basis.D.rowwise() -= rest.transpose();
  basis.mean += rest;
  const Vector raw = factors.colwise().norm();
  const Vector scale = basis.D.colwise().norm();
  for (Index k = 0; k < n_factors; ++k) {
    if (!is_constant(scale(k), raw(k))) continue;
    basis.constant = k;
    return basis;
  }
  const Matrix unit = basis.D * scale.cwiseInverse().asDiagonal();
  Eigen::ColPivHouseholderQR<Matrix> qr(unit);
  qr.setThreshold(pivot_tolerance((raw.array() / scale.array()).maxCoeff()));
  basis.rank = qr.rank();
  basis.last_pivot = qr.colsPermutation().indices()(n_factors - 1);
  if (!basis.usable()) return basis;
  basis.Q = qr.householderQ() * Matrix::Identity(unit.rows(), n_factors);
  const Matrix root = qr.matrixR()
                          .topLeftCorner(n_factors, n_factors)
                          .triangularView<Eigen::Upper>()
                          .solve(Matrix::Identity(n_factors, n_factors));
  basis.C = scale.cwiseInverse().asDiagonal() * (qr.colsPermutation() * root);
  return basis;
}

struct AssetFit {
  double mean = kNaN;  // of the return
  Vector beta;         // K
  Vector residual;     // on the asset's own periods
  double tss = kNaN;
};

inline AssetFit fit_asset(const FactorBasis& basis, const Vector& returns) {
  AssetFit fit;
  fit.mean = returns.mean();
  const Vector centred = returns.array() - fit.mean;
  fit.tss = centred.squaredNorm();
  fit.beta = basis.C * (basis.Q.transpose() * centred);
  fit.residual = centred - basis.D * fit.beta;
  const Vector step = basis.C * (basis.Q.transpose() * fit.residual);
  fit.beta += step;
  fit.residual -= basis.D * step;
  return fit;
}

// One asset's periods, its returns there and the basis of the factors on them.
struct AssetSample {
  std::vector<Index> period;
  Vector returns;
  FactorBasis own;  // used when the asset has holes
  const FactorBasis* basis = nullptr;
};

// Fills `sample`; its basis is null when the asset has fewer than min_obs periods.
inline void read_asset(const Eigen::Ref<const Matrix>& returns,
                       const Eigen::Ref<const Matrix>& factors,
                       const FactorBasis& full,
                       Index asset,
                       Index min_obs,
                       AssetSample& sample) {
  const Index n_periods = returns.rows();
  sample.period.clear();
  for (Index t = 0; t < n_periods; ++t)
    if (std::isfinite(returns(t, asset))) sample.period.push_back(t);
  sample.basis = nullptr;
  const Index n = static_cast<Index>(sample.period.size());
  if (n < min_obs || n == 0) return;
  if (n == n_periods) {
    sample.returns = returns.col(asset);
    sample.basis = &full;
    return;
  }
  sample.returns.resize(n);
  Matrix present(n, factors.cols());
  for (Index row = 0; row < n; ++row) {
    const Index t = sample.period[static_cast<std::size_t>(row)];
    sample.returns(row) = returns(t, asset);
    present.row(row) = factors.row(t);
  }
  sample.own = factor_basis(present);
  sample.basis = &sample.own;
}

inline void check_factors(const FactorBasis& basis) {
  if (basis.constant >= 0)
    throw Error("constant_factor",
                "A factor does not vary over time.",
                {{"factor", static_cast<double>(basis.constant + 1)}});
  if (!basis.usable())
    throw Error("rank",
                "The factors are collinear over time.",
                {{"rank", static_cast<double>(basis.rank)},
                 {"n_factors", static_cast<double>(basis.D.cols())},
                 {"factor", static_cast<double>(basis.last_pivot + 1)}});
}

inline void check_panel(const Eigen::Ref<const Matrix>& returns,
                        const Eigen::Ref<const Matrix>& factors) {
  if (returns.rows() != factors.rows() || returns.cols() == 0 || factors.cols() == 0)
    throw Error("input",
                "Returns and factors need one row a period and a column at least.",
                {{"n_periods_returns", static_cast<double>(returns.rows())},
                 {"n_periods_factors", static_cast<double>(factors.rows())},
                 {"n_assets", static_cast<double>(returns.cols())},
                 {"n_factors", static_cast<double>(factors.cols())}});
  for (Index k = 0; k < factors.cols(); ++k)
    for (Index t = 0; t < factors.rows(); ++t)
      if (!std::isfinite(factors(t, k)))
        throw Error("input",
                    "Factors must be complete.",
                    {{"factor", static_cast<double>(k + 1)},
                     {"row", static_cast<double>(t + 1)}});
}

inline FirstPass empty_first_pass(Index n_assets, Index n_factors) {
  const auto count = static_cast<std::size_t>(n_assets);
  const Vector none = Vector::Constant(n_assets, kNaN);
  const Matrix none_each = Matrix::Constant(n_assets, n_factors, kNaN);
  return {none_each,
          none_each,
          none,
          none,
          none,
          none,
          std::vector<Index>(count, 0),
          std::vector<AssetStatus>(count, AssetStatus::empty),
          0};
}

inline void store_asset(const AssetSample& sample, Index asset, FirstPass& out) {
  const FactorBasis& basis = *sample.basis;
  const AssetFit fit = fit_asset(basis, sample.returns);
  const double n = static_cast<double>(sample.returns.size());
  const double rss = fit.residual.squaredNorm();
  const double s2 = rss / (n - 1.0 - static_cast<double>(fit.beta.size()));
  out.beta.row(asset) = fit.beta.transpose();
  out.beta_se.row(asset) = std::sqrt(s2) * basis.C.rowwise().norm().transpose();
  out.alpha(asset) = fit.mean - basis.mean.dot(fit.beta);
  out.alpha_se(asset) =
      std::sqrt(s2 * (1.0 / n + (basis.C.transpose() * basis.mean).squaredNorm()));
  out.resid_var(asset) = rss / n;
  out.r_squared(asset) = fit.tss > 0.0 ? 1.0 - rss / fit.tss : kNaN;
}

inline constexpr Index kAssetsPerTask = 64;

inline Index n_asset_tasks(Index n_assets) {
  return (n_assets + kAssetsPerTask - 1) / kAssetsPerTask;
}

inline FirstPass first_pass_on(const FactorBasis& full,
                               const Eigen::Ref<const Matrix>& returns,
                               const Eigen::Ref<const Matrix>& factors,
                               Index min_obs,
                               int threads) {
  const Index n_assets = returns.cols();
  FirstPass out = empty_first_pass(n_assets, factors.cols());
  out.min_obs = min_obs;
  for_each_task(n_asset_tasks(n_assets), threads, [&](Index task) {
    AssetSample sample;
    const Index end = std::min(n_assets, (task + 1) * kAssetsPerTask);
    for (Index i = task * kAssetsPerTask; i < end; ++i) {
      read_asset(returns, factors, full, i, min_obs, sample);
      const auto slot = static_cast<std::size_t>(i);
      out.n_obs[slot] = static_cast<Index>(sample.period.size());
      if (out.n_obs[slot] == 0) continue;
      if (!sample.basis) {
        out.status[slot] = AssetStatus::too_few_periods;
      } else if (!sample.basis->usable()) {
        out.status[slot] = AssetStatus::rank_deficient;
      } else {
        out.status[slot] = AssetStatus::estimated;
        store_asset(sample, i, out);
      }
    }
  });
  return out;
}

// A regression needs K + 2 periods to leave a residual degree of freedom.
inline Index applied_min_obs(Index min_obs, Index n_factors) {
  return std::max(min_obs, n_factors + 2);
}

// The shared factorisation of all periods, after the checks that every pass needs.
inline FactorBasis checked_basis(const Eigen::Ref<const Matrix>& returns,
                                 const Eigen::Ref<const Matrix>& factors) {
  check_panel(returns, factors);
  if (factors.rows() < applied_min_obs(0, factors.cols()))
    throw Error("too_few",
                "Too few periods for a time-series regression.",
                {{"n_periods", static_cast<double>(factors.rows())},
                 {"n_factors", static_cast<double>(factors.cols())}});
  FactorBasis basis = factor_basis(factors);
  check_factors(basis);
  return basis;
}

}  // namespace detail

// min_obs: fewest periods a beta may rest on; never below K + 2, which is also the
// default.
inline FirstPass first_pass(const Eigen::Ref<const Matrix>& returns,
                            const Eigen::Ref<const Matrix>& factors,
                            Index min_obs = 0,
                            int threads = 1) {
  const detail::FactorBasis full = detail::checked_basis(returns, factors);
  return detail::first_pass_on(
      full, returns, factors, detail::applied_min_obs(min_obs, factors.cols()), threads);
}

}  // namespace lambdabar
