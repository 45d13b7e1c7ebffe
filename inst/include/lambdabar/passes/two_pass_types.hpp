// What goes into a two-pass estimate and what comes out of it.
// N assets, T periods, K factors, Q traits, P = [1] + K + Q terms in this order.
#pragma once

#include "period_status.hpp"
#include "projection.hpp"

namespace lambdabar {

// Views of the caller's memory, which must outlive the call.
struct TwoPassData {
  Eigen::Ref<const Matrix> returns;              // T x N, not finite where missing
  Eigen::Ref<const Matrix> factors;              // T x K, complete
  std::vector<Eigen::Map<const Matrix>> traits;  // Q of T x N, not finite where missing
};

struct TwoPassOptions {
  Weighting weighting = Weighting::ols;  // wls: 1 / residual variance; gls: V^-1
  bool intercept = true;
  Index min_obs = 0;     // periods a beta needs; 0 and less than K + 2 mean K + 2
  Index min_assets = 0;  // assets a period needs; 0: P + 1 with holes or traits, else P
  int threads = 1;
};

struct TwoPass {
  Weighting weighting = Weighting::ols;
  bool intercept = true;
  bool balanced = false;  // no hole and no trait: closed formulas, all tests available
  Index n_factors = 0;
  FirstPass first;

  Matrix period_premia;              // T x P, NaN unless estimated
  Matrix period_se;                  // T x P, classical
  Vector r_squared;                  // T
  std::vector<PeriodStatus> status;  // T
  std::vector<Index> culprit;        // T: term at fault, -1 otherwise
  std::vector<Index> n_assets;       // T
  std::vector<Index> used_periods;   // the Tu estimated ones, increasing
  Index n_left_out = 0;              // assets without betas

  Vector premia;  // P
  // Influence rows, summing (the 1/T inside).
  Matrix rows_series;        // Tu x P: exposures taken as known
  Matrix rows_estimated;     // T x P: with the first pass's own error
  Matrix rows_misspecified;  // T x P: also valid when no premium prices the assets

  // Averages over the estimated periods that hold the asset; NaN when none does.
  Vector mean_return, fitted, alpha;  // N
  std::vector<Index> n_priced;        // N

  // Balanced only.
  Matrix X;                  // N x P, [1 B]
  Matrix A;                  // P x N, premia of a period = A R_t
  Matrix H;                  // P x P, (X'WX)^-1
  double condition = kNaN;   // of X, columns at unit norm
  double c = kNaN;           // gamma_f' Vf^-1 gamma_f, without the constant
  Vector w;                  // T, gamma_f' Vf^-1 d_t
  Vector mean_factor;        // K
  Matrix factor_deviations;  // T x K, d_t
  Matrix Vf;                 // K x K, divisor T
  Matrix loading_rows;       // T x P, (A e_t)' / T

  Index n_terms() const { return premia.size(); }
  Index n_periods() const { return period_premia.rows(); }
  Index first_factor() const { return intercept ? 1 : 0; }
};

namespace detail {

inline TwoPass start_two_pass(const TwoPassData& data,
                              const TwoPassOptions& options,
                              FirstPass first) {
  TwoPass out;
  const Index n_periods = data.returns.rows();
  const Index n_terms = data.factors.cols() + static_cast<Index>(data.traits.size()) +
                        (options.intercept ? 1 : 0);
  const auto count = static_cast<std::size_t>(n_periods);
  out.weighting = options.weighting;
  out.intercept = options.intercept;
  out.n_factors = data.factors.cols();
  for (AssetStatus status : first.status)
    out.n_left_out += status != AssetStatus::estimated;
  out.first = std::move(first);
  out.period_premia = Matrix::Constant(n_periods, n_terms, kNaN);
  out.period_se = out.period_premia;
  out.r_squared = Vector::Constant(n_periods, kNaN);
  out.status.assign(count, PeriodStatus::empty);
  out.culprit.assign(count, -1);
  out.n_assets.assign(count, 0);
  return out;
}

// 1 / residual variance of each asset that has betas, zero for the others.
inline Vector asset_weights(const FirstPass& first) {
  Vector weights = Vector::Zero(first.resid_var.size());
  for (Index i = 0; i < weights.size(); ++i) {
    if (first.status[static_cast<std::size_t>(i)] != AssetStatus::estimated) continue;
    // An asset that is itself a factor leaves rounding, whose share of the total
    // vanishes beside one.
    if (!(first.resid_var(i) > 0.0) || first.r_squared(i) >= 1.0)
      throw Error("zero_residual",
                  "An asset without residual variance has no weight in WLS.",
                  {{"asset", static_cast<double>(i + 1)}});
    weights(i) = 1.0 / first.resid_var(i);
  }
  return weights;
}

}  // namespace detail
}  // namespace lambdabar
