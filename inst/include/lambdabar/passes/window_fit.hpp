// One regression on the rows of one window, from the rows themselves:
//   y_s = a + b'f_s + e_s,  weights w_s = a_s d_s
// a_s: analytic weight, variance of e_s proportional to 1 / a_s;  d_s: how much the window
// wants of row s (1, or the decay). With D = f centred at its w-mean, S = D'WD,
//   b = S^-1 D'Wy,  C = sum a d^2 (f - fbar)(f - fbar)',
//   s2 = rss / (sum d - sum a d^2 / sum a d - tr(S^-1 C)),  Var(b) = s2 S^-1 C S^-1
// The divisor makes s2 unbiased when errors are independent; d = 1 gives n - K - 1 and
// s2 S^-1.
//
// Centred twice, scaled to unit norm, column-pivoted QR, one step of refinement: O(n K^2).
// The fallback of exposures.hpp for windows that cross-products cannot carry.
#pragma once

#include "first_pass.hpp"

namespace lambdabar {

enum class WindowStatus {
  estimated = 0,
  too_few_rows = 1,
  rank_deficient = 2,    // factors constant or collinear in the window
  undefined_weights = 3  // see lead_lag.hpp
};

namespace detail {

// Covariances are packed: lower triangle by columns, 11 21 .. K1 22 ..
struct WindowEstimate {
  WindowStatus status = WindowStatus::too_few_rows;
  Index n_rows = 0;
  double alpha = kNaN, resid_var = kNaN, r_squared = kNaN;
  std::vector<double> beta, covariance;
};

struct WindowRows {
  Matrix factors;    // n x K
  Vector y;          // n
  Vector weight;     // n, a_s d_s
  Vector wanted;     // n, d_s
  bool decays = false;
};

inline void fit_window(const WindowRows& rows, WindowEstimate& out) {
  const Index n = rows.y.size(), K = rows.factors.cols();
  out.status = WindowStatus::rank_deficient;
  const double total = rows.weight.sum();
  const Vector root = rows.weight.cwiseSqrt();
  Vector mean = rows.factors.transpose() * rows.weight / total;
  Matrix D = rows.factors.rowwise() - mean.transpose();
  const Vector rest = D.transpose() * rows.weight / total;
  D.rowwise() -= rest.transpose();
  mean += rest;
  D = root.asDiagonal() * D;
  double y_mean = rows.y.dot(rows.weight) / total;
  Vector y = rows.y.array() - y_mean;
  const double y_rest = y.dot(rows.weight) / total;
  y.array() -= y_rest;
  y_mean += y_rest;
  y = y.cwiseProduct(root);

  const Vector raw = (root.asDiagonal() * rows.factors).colwise().norm();
  const Vector scale = D.colwise().norm();
  for (Index k = 0; k < K; ++k)
    if (is_constant(scale(k), raw(k))) return;
  Eigen::ColPivHouseholderQR<Matrix> qr(D * scale.cwiseInverse().asDiagonal());
  qr.setThreshold(pivot_tolerance((raw.array() / scale.array()).maxCoeff()));
  if (qr.rank() < K) return;
  const Matrix Q = qr.householderQ() * Matrix::Identity(n, K);
  const Matrix inverse = qr.matrixR().topLeftCorner(K, K).triangularView<Eigen::Upper>().solve(
      Matrix::Identity(K, K));
  const Matrix C = scale.cwiseInverse().asDiagonal() * (qr.colsPermutation() * inverse);

  Vector beta = C * (Q.transpose() * y);
  Vector residual = y - D * beta;
  const Vector step = C * (Q.transpose() * residual);
  beta += step;
  residual -= D * step;

  const double rss = residual.squaredNorm(), tss = y.squaredNorm();
  Matrix middle = Matrix::Identity(K, K);
  double divisor = static_cast<double>(n - 1 - K);
  if (rows.decays) {
    middle = Q.transpose() * rows.wanted.asDiagonal() * Q;
    divisor = rows.wanted.sum() - rows.weight.dot(rows.wanted) / total - middle.trace();
  }
  out.status = WindowStatus::estimated;
  out.resid_var = rss / divisor;
  out.r_squared = tss > 0.0 ? 1.0 - rss / tss : kNaN;
  out.alpha = y_mean - mean.dot(beta);
  const Matrix V = out.resid_var * C * middle * C.transpose();
  std::size_t at = 0;
  for (Index j = 0; j < K; ++j) {
    out.beta[static_cast<std::size_t>(j)] = beta(j);
    for (Index i = j; i < K; ++i) out.covariance[at++] = V(i, j);
  }
}

}  // namespace detail
}  // namespace lambdabar
