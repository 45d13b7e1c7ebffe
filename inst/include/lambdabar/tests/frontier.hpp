// The mean-variance frontier of n returns over T periods (Merton 1972, Journal of
// Financial and Quantitative Analysis 7, 1851-1872): variance of the best portfolio of
// mean m, weights adding up to one, is  least + curvature (m - m0)^2. With A = 1'V^-1 1,
// B = 1'V^-1 mu, C = mu'V^-1 mu,
//   least = 1 / A at m0 = B / A, weights V^-1 1 / A;  curvature = A / (A C - B^2)
//   highest Sharpe ratio sqrt(C), weights V^-1 mu / B. From a QR: V is not formed.
#pragma once

#include "../passes/projection.hpp"

namespace lambdabar {

struct Frontier {
  double least_variance = kNaN, least_mean = kNaN, curvature = kNaN, sharpe = kNaN;
  Vector least, tangency;
};

// divisor: of the covariance, T or T - 1.
inline Frontier mean_variance_frontier(const Eigen::Ref<const Matrix>& returns,
                                       double divisor) {
  const Vector mean = returns.colwise().mean();
  const detail::Triangle triangle =
      detail::upper_triangle(returns.rowwise() - mean.transpose());
  if (triangle.spanned >= 0)
    throw Error("rank",
                "The returns are collinear.",
                {{"asset", static_cast<double>(triangle.spanned + 1)}});
  Matrix sides(returns.cols(), 2);
  sides << Vector::Ones(returns.cols()), mean;
  const Matrix root = std::sqrt(divisor) *
                      triangle.U.transpose().triangularView<Eigen::Lower>().solve(sides);
  const Matrix weights =
      std::sqrt(divisor) * triangle.U.triangularView<Eigen::Upper>().solve(root);
  const double A = root.col(0).squaredNorm(), B = root.col(0).dot(root.col(1)),
               C = root.col(1).squaredNorm();
  Frontier out;
  out.least_variance = 1.0 / A;
  out.least_mean = B / A;
  // A C - B^2 is A times what is left of the means beside the constant.
  out.curvature = 1.0 / (root.col(1) - root.col(0) * (B / A)).squaredNorm();
  out.sharpe = std::sqrt(C);
  out.least = weights.col(0) / A;
  out.tangency = weights.col(1) / B;
  return out;
}

}  // namespace lambdabar
