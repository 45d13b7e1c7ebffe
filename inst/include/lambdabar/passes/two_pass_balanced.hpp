// Two passes on a complete panel without traits: closed formulas.
//   X = [1 B],  H = (X'WX)^-1,  A = H X'W,  M = I - X A,  gamma_t = A R_t,
//   W = I (OLS), diag(Sigma)^-1 (WLS), V^-1 (GLS; premia and pricing errors are those of
//   Sigma^-1, and a factor may be among the assets)
// With d_t = f_t - mean f, w_t = gamma_f' Vf^-1 d_t, a = pricing errors, u_t = e_t' W a,
// z_t = [0; Vf^-1 d_t], rows of the premia, over T:
//   series         h1 = gamma_t - gamma
//   estimated      h2 = h1 - A e_t w_t                    (Jagannathan and Wang 1998)
//   misspecified   h3 = h2 + H z_t u_t + weight term      (Kan, Robotti and Shanken 2013)
//   weight term    OLS 0;  WLS -A (e_t^2 * W a);  GLS -A r_t u_t
// The WLS weight term is derived, and confirmed by differentiation.
//
// A e_t = (gamma_t - gamma) - [0; d_t], so neither residuals nor any N x N matrix is
// formed for OLS and WLS; GLS factors the T x N centred returns. All moments have
// divisor T. Cost O(N T P), GLS O(T N^2).
#pragma once

#include "two_pass_types.hpp"
#include "../errors/series_sum.hpp"

namespace lambdabar {
namespace detail {

// F with F'F = W.
struct Whitening {
  Weighting kind = Weighting::ols;
  Vector root;       // WLS: square roots of the weights
  Matrix U;          // GLS: upper triangle, V = U'U / T
  double scale = 1;  // GLS: sqrt(T)

  Matrix apply(const Matrix& M) const {
    if (kind == Weighting::ols) return M;
    if (kind == Weighting::wls) return root.asDiagonal() * M;
    return scale * U.transpose().triangularView<Eigen::Lower>().solve(M);
  }
  Matrix apply_transposed(const Matrix& M) const {
    if (kind == Weighting::ols) return M;
    if (kind == Weighting::wls) return root.asDiagonal() * M;
    return scale * U.triangularView<Eigen::Upper>().solve(M);
  }
};

inline Whitening gls_whitening(const Eigen::Ref<const Matrix>& returns) {
  const Index n_periods = returns.rows(), n_assets = returns.cols();
  if (n_periods - 1 < n_assets)
    throw Error("too_few",
                "GLS needs more periods than assets.",
                {{"n_periods", static_cast<double>(n_periods)},
                 {"n_assets", static_cast<double>(n_assets)}});
  const Vector mean = returns.colwise().mean();
  Triangle triangle = upper_triangle(returns.rowwise() - mean.transpose());
  if (triangle.spanned >= 0)
    throw Error("rank",
                "The covariance of the returns is singular.",
                {{"asset", static_cast<double>(triangle.spanned + 1)}});
  Whitening out;
  out.kind = Weighting::gls;
  out.U = std::move(triangle.U);
  out.scale = std::sqrt(static_cast<double>(n_periods));
  return out;
}

inline Whitening make_whitening(const TwoPassData& data,
                                const TwoPassOptions& options,
                                const FirstPass& first) {
  if (options.weighting == Weighting::gls) return gls_whitening(data.returns);
  Whitening out;
  out.kind = options.weighting;
  if (options.weighting == Weighting::wls) out.root = asset_weights(first).cwiseSqrt();
  return out;
}

inline Matrix exposures_with_constant(const FirstPass& first, bool intercept) {
  if (!intercept) return first.beta;
  Matrix X(first.beta.rows(), first.beta.cols() + 1);
  X.col(0).setOnes();
  X.rightCols(first.beta.cols()) = first.beta;
  return X;
}

inline Projection project_exposures(const Matrix& whitened, bool intercept) {
  Projection projection = project(whitened, intercept);
  if (!projection.usable())
    throw Error("rank",
                "The betas do not identify the premia.",
                {{"rank", static_cast<double>(projection.rank)},
                 {"n_terms", static_cast<double>(whitened.cols())},
                 {"term", static_cast<double>(projection.culprit + 1)},
                 {"no_variation", projection.no_variation ? 1.0 : 0.0}});
  return projection;
}

inline constexpr Index kPeriodsPerBlock = 64;

inline void fill_period_quality(const TwoPassData& data,
                                const Whitening& whitening,
                                const Projection& projection,
                                int threads,
                                TwoPass& out) {
  const Index n_periods = data.returns.rows();
  const Index n_tasks = (n_periods + kPeriodsPerBlock - 1) / kPeriodsPerBlock;
  for_each_task(n_tasks, threads, [&](Index task) {
    const Index begin = task * kPeriodsPerBlock;
    const Index count = std::min(kPeriodsPerBlock, n_periods - begin);
    const Matrix block =
        whitening.apply(data.returns.middleRows(begin, count).transpose());
    for (Index s = 0; s < count; ++s) {
      const PeriodQuality quality =
          period_quality(projection, block.col(s), out.intercept);
      out.r_squared(begin + s) = quality.r_squared;
      out.period_se.row(begin + s) = quality.std_error.transpose();
    }
  });
}

inline void fill_factor_part(const FactorBasis& basis, TwoPass& out) {
  const double n = static_cast<double>(basis.D.rows());
  const Vector root =
      basis.C.transpose() * out.premia.segment(out.first_factor(), out.n_factors);
  out.c = n * root.squaredNorm();
  out.w = n * (basis.Q * root);
  out.mean_factor = basis.mean;
  out.factor_deviations = basis.D;
  out.Vf = outer_sum(basis.D) / n;
}

// sum over assets of A[, i] e_it^2 (W a)_i, T x P, a block of assets at a time.
inline Matrix squared_residual_term(const TwoPassData& data,
                                    const Vector& weighted_alpha,
                                    const TwoPass& out) {
  const Index n_assets = data.returns.cols();
  Matrix sum = Matrix::Zero(data.returns.rows(), out.n_terms());
  for (Index begin = 0; begin < n_assets; begin += kAssetsPerTask) {
    const Index count = std::min(kAssetsPerTask, n_assets - begin);
    Matrix e = data.returns.middleCols(begin, count);
    e.rowwise() -= out.mean_return.segment(begin, count).transpose();
    e -= out.factor_deviations * out.first.beta.middleRows(begin, count).transpose();
    const Matrix load = out.A.middleCols(begin, count) *
                        weighted_alpha.segment(begin, count).asDiagonal();
    sum += e.cwiseAbs2() * load.transpose();
  }
  return sum;
}

inline void fill_rows(const TwoPassData& data,
                      const Whitening& whitening,
                      const FactorBasis& basis,
                      TwoPass& out) {
  const double n = static_cast<double>(data.returns.rows());
  const Index first = out.first_factor();
  const Matrix deviations = out.period_premia.rowwise() - out.premia.transpose();
  Matrix residual_part = deviations;
  residual_part.middleCols(first, out.n_factors) -= basis.D;
  out.rows_series = deviations / n;
  out.loading_rows = residual_part / n;
  out.rows_estimated = out.rows_series - out.w.asDiagonal() * out.loading_rows;

  const Vector weighted_alpha = whitening.apply_transposed(whitening.apply(out.alpha));
  Vector u = data.returns * weighted_alpha;
  u.array() -= u.mean();
  // Vf^-1 d_t = T C Q_t, so the 1/T of a summing row cancels.
  const Matrix bend =
      basis.Q * (basis.C.transpose() * out.H.middleRows(first, out.n_factors));
  out.rows_misspecified = out.rows_estimated + u.asDiagonal() * bend;
  if (out.weighting == Weighting::wls)
    out.rows_misspecified -= squared_residual_term(data, weighted_alpha, out) / n;
  if (out.weighting == Weighting::gls)
    out.rows_misspecified -= u.asDiagonal() * out.rows_series;
}

inline void check_n_assets(const TwoPassData& data,
                           const TwoPassOptions& options,
                           Index n_terms) {
  const Index needed = std::max(n_terms, options.min_assets);
  if (data.returns.cols() < needed)
    throw Error("too_few",
                "Too few assets for this many premia.",
                {{"n_assets", static_cast<double>(data.returns.cols())},
                 {"n_terms", static_cast<double>(n_terms)},
                 {"min_assets", static_cast<double>(needed)}});
}

inline TwoPass balanced_two_pass(const TwoPassData& data,
                                 const TwoPassOptions& options,
                                 const FactorBasis& basis,
                                 FirstPass first) {
  TwoPass out = start_two_pass(data, options, std::move(first));
  const Index n_assets = data.returns.cols(), n_periods = data.returns.rows();
  const Index n_terms = out.period_premia.cols();
  check_n_assets(data, options, n_terms);
  out.balanced = true;
  out.X = exposures_with_constant(out.first, options.intercept);
  const Whitening whitening = make_whitening(data, options, out.first);
  const Matrix whitened = whitening.apply(out.X);
  const Projection projection = project_exposures(whitened, options.intercept);
  out.condition = scaled_condition(projection, whitened);
  out.A = whitening.apply_transposed(projection.Q * projection.C.transpose()).transpose();
  out.H = projection.C * projection.C.transpose();

  out.period_premia = data.returns * out.A.transpose();
  out.premia = out.period_premia.colwise().mean();
  out.mean_return = data.returns.colwise().mean();
  out.fitted = out.X * out.premia;
  out.alpha = out.mean_return - out.fitted;
  // As many premia as assets: the pricing errors are zero, not rounding.
  if (n_assets == n_terms) out.alpha.setZero();

  out.status.assign(out.status.size(), PeriodStatus::estimated);
  out.n_assets.assign(out.n_assets.size(), n_assets);
  out.n_priced.assign(static_cast<std::size_t>(n_assets), n_periods);
  for (Index t = 0; t < n_periods; ++t) out.used_periods.push_back(t);
  fill_period_quality(data, whitening, projection, options.threads, out);
  fill_factor_part(basis, out);
  fill_rows(data, whitening, basis, out);
  return out;
}

}  // namespace detail
}  // namespace lambdabar
