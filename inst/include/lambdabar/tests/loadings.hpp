// The betas of a complete panel, ready for questions on their rank. N assets, T periods,
// K factors, divisor T. With a free constant in the second pass only differences between
// assets count: returns are taken to n = N - 1 orthonormal contrasts (an equal beta for
// all assets is useless then); without one n = N. Which contrasts plays no part.
//   Q = Cov f = L L',  Sigma = Cov e,  G'G = Sigma^-1
//   theta = G B L (n x K), whose squared singular values are d_1 >= .. >= d_K
// from two QRs: neither Q nor Sigma is formed. d = rho^2 / (1 - rho^2), rho the canonical
// correlations of returns and factors.
#pragma once

#include "../passes/two_pass.hpp"
#include "alpha.hpp"

namespace lambdabar {
namespace detail {

struct Loadings {
  Index n = 0, K = 0, T = 0;
  Matrix returns;      // T x n, contrasts, raw
  Vector mean;         // n
  Matrix residuals;    // T x n
  Matrix factor_part;  // T x K, orthonormal: f - mean f = factor_part * Uf
  Matrix Uf, Ue;       // upper triangles of the factors' deviations and of the residuals
  Matrix beta;         // n x K
  Matrix theta;        // n x K

  double periods() const { return static_cast<double>(T); }
  // Rows L^-1 f_t and G e_t over sqrt(T): columns of unit length.
  Matrix standard_residuals() const {
    return Ue.transpose()
        .triangularView<Eigen::Lower>()
        .solve(residuals.transpose())
        .transpose();
  }
  // G y.
  Matrix whiten(const Matrix& y) const {
    return std::sqrt(periods()) * Ue.transpose().triangularView<Eigen::Lower>().solve(y);
  }
};

inline Matrix contrasts(Index n_assets) { return complement(Matrix::Ones(n_assets, 1)); }

// factor_part and Uf are given; fills what depends on the returns.
inline void regress(Loadings& out) {
  out.mean = out.returns.colwise().mean();
  const Matrix deviations = out.returns.rowwise() - out.mean.transpose();
  const Matrix part = out.factor_part.transpose() * deviations;  // K x n
  out.residuals = deviations - out.factor_part * part;
  out.beta = out.Uf.triangularView<Eigen::Upper>().solve(part).transpose();
  const Triangle triangle = upper_triangle(out.residuals);
  if (triangle.spanned >= 0)
    throw Error("rank",
                "The covariance of the residuals is singular.",
                {{"asset", static_cast<double>(triangle.spanned + 1)}});
  out.Ue = triangle.U;
  out.theta = out.Ue.transpose().triangularView<Eigen::Lower>().solve(part.transpose());
}

inline Loadings make_loadings(const Eigen::Ref<const Matrix>& returns,
                              const Eigen::Ref<const Matrix>& factors,
                              bool intercept) {
  Loadings out;
  out.T = returns.rows();
  out.K = factors.cols();
  out.n = returns.cols() - (intercept ? 1 : 0);
  if (out.n < out.K)
    throw Error("too_few",
                "Too few assets: the betas cannot have the rank that the premia need.",
                {{"n_assets", static_cast<double>(returns.cols())},
                 {"n_factors", static_cast<double>(out.K)}});
  if (out.T - 1 - out.K < out.n)
    throw Error("too_few",
                "Too few periods for the covariance of the residuals.",
                {{"n_periods", out.periods()},
                 {"n_assets", static_cast<double>(returns.cols())}});
  const Matrix deviations = factors.rowwise() - factors.colwise().mean();
  const Triangle triangle = upper_triangle(deviations);
  if (triangle.spanned >= 0)
    throw Error("rank",
                "The factors are collinear.",
                {{"factor", static_cast<double>(triangle.spanned + 1)}});
  out.Uf = triangle.U;
  out.factor_part = out.Uf.transpose()
                        .triangularView<Eigen::Lower>()
                        .solve(deviations.transpose())
                        .transpose();
  out.returns = intercept ? Matrix(returns * contrasts(returns.cols())) : Matrix(returns);
  regress(out);
  return out;
}

}  // namespace detail
}  // namespace lambdabar
