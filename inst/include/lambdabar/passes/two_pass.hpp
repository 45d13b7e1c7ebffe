// Two-pass estimate of factor premia: betas over the full sample, one cross-section of
// returns on betas a period, the average of its coefficients (Fama and MacBeth 1973).
//
// A complete panel without traits takes the closed formulas of two_pass_balanced.hpp
// (OLS, WLS, GLS); holes or traits take two_pass_ragged.hpp (OLS, WLS). Rows of the
// estimate sum.
//
// Errors: "input" (shapes, missing factors), "constant_factor", "rank", "too_few",
// "no_variation", "zero_residual" (WLS), "unsupported" (GLS with holes or traits; Shanken
// and alpha rows on a panel that is not complete).
#pragma once

#include "two_pass_balanced.hpp"
#include "two_pass_ragged.hpp"

namespace lambdabar {

// Which influence rows of the averaged pricing errors.
enum class AlphaRows { series, estimated, misspecified };

namespace detail {

inline void check_traits(const TwoPassData& data) {
  for (std::size_t q = 0; q < data.traits.size(); ++q)
    if (data.traits[q].rows() != data.returns.rows() ||
        data.traits[q].cols() != data.returns.cols())
      throw Error("input",
                  "A trait must have the shape of the returns.",
                  {{"trait", static_cast<double>(q + 1)}});
}

inline void require_balanced(const TwoPass& fit) {
  if (!fit.balanced)
    throw Error("unsupported", "This needs a complete panel without traits.");
}

}  // namespace detail

inline TwoPass two_pass(const TwoPassData& data, const TwoPassOptions& options) {
  const detail::FactorBasis basis = detail::checked_basis(data.returns, data.factors);
  detail::check_traits(data);
  FirstPass first =
      detail::first_pass_on(basis,
                            data.returns,
                            data.factors,
                            detail::applied_min_obs(options.min_obs, data.factors.cols()),
                            options.threads);
  const bool complete = std::all_of(first.n_obs.begin(),
                                    first.n_obs.end(),
                                    [&](Index n) { return n == data.returns.rows(); }) &&
                        first.min_obs <= data.returns.rows();
  if (complete && data.traits.empty())
    return detail::balanced_two_pass(data, options, basis, std::move(first));
  return detail::ragged_two_pass(data, options, basis, std::move(first));
}

// The closed form of Shanken (1992): ((1 + c) A Sigma A' + Df LRV_f Df') / T, where Df
// puts the factors' long-run covariance (under `factor_series`) into their own block. c
// rests on their contemporaneous covariance and on the factors' premia alone. Before any
// small-sample factor. slot empty: consecutive periods.
inline Matrix shanken(const TwoPass& fit,
                      const SeriesOptions& factor_series,
                      const std::vector<Index>& slot = {}) {
  detail::require_balanced(fit);
  const double n = static_cast<double>(fit.n_periods());
  Matrix V = (1.0 + fit.c) * outer_sum(fit.loading_rows);
  const Matrix rows = fit.factor_deviations / n;
  V.block(fit.first_factor(), fit.first_factor(), fit.n_factors, fit.n_factors) +=
      sum_series(rows, slot, Vector::Ones(fit.n_factors), factor_series).S;
  return V;
}

// Influence rows of the averaged pricing errors, T x N, summing:
//   (r_t - e_t w_t) / T - X h_t for the rows h_t of the premia (w_t = 0 for `series`).
inline Matrix alpha_rows(const TwoPassData& data, const TwoPass& fit, AlphaRows kind) {
  detail::require_balanced(fit);
  const Index n_periods = fit.n_periods(), n_assets = fit.X.rows();
  if (n_assets == fit.n_terms()) return Matrix::Zero(n_periods, n_assets);
  const Matrix& premia_rows = kind == AlphaRows::series      ? fit.rows_series
                              : kind == AlphaRows::estimated ? fit.rows_estimated
                                                             : fit.rows_misspecified;
  Matrix rows = data.returns.rowwise() - fit.mean_return.transpose();
  if (kind != AlphaRows::series) {
    const Matrix e = rows - fit.factor_deviations * fit.first.beta.transpose();
    rows -= fit.w.asDiagonal() * e;
  }
  rows /= static_cast<double>(n_periods);
  rows -= premia_rows * fit.X.transpose();
  return rows;
}

// Shanken's covariance of the averaged pricing errors, (1 + c) M Sigma M' / T, N x N.
// No factor part, hence no long-run version under its assumptions.
inline Matrix shanken_alpha(const TwoPassData& data, const TwoPass& fit) {
  return (1.0 + fit.c) * outer_sum(alpha_rows(data, fit, AlphaRows::series));
}

}  // namespace lambdabar
