// Squared Sharpe ratios of sets of traded factors, theta2 = mean f'V^-1 mean f, divisor
// T:
//   adjusted  theta2 (T - K - 2) / T - K / T, unbiased under normality
//   rows      (2 u_t - u_t^2 + theta2) / T, u_t = mean f'V^-1 (f_t - mean f)
// (Barillas and Shanken 2017, Review of Financial Studies 30, 1316-1338; Barillas, Kan,
// Robotti and Shanken 2020, Journal of Financial and Quantitative Analysis 55,
// 1840-1874).
//
// Is one model as good as each of J others? delta_j = theta2 less that of model j, V its
// covariance: LR = min_{d >= 0} (delta - d)'V^-1 (delta - d) against sum_{k >= 1} w_k
// P(chi2_k > LR), w_k the probability that the projection of N(0, V) on d >= 0 has k
// zeros, simulated from given draws. The projection goes through the 2^J faces.
#pragma once

#include "../passes/projection.hpp"
#include "weighted_chisq.hpp"

namespace lambdabar {

struct SharpeRatio {
  double squared = kNaN, adjusted = kNaN;
  Vector rows;  // T, summing
};

inline SharpeRatio squared_sharpe(const Eigen::Ref<const Matrix>& factors) {
  const double n = static_cast<double>(factors.rows()),
               K = static_cast<double>(factors.cols());
  const Vector mean = factors.colwise().mean();
  const Matrix D = factors.rowwise() - mean.transpose();
  const detail::Triangle triangle = detail::upper_triangle(D);
  if (triangle.spanned >= 0)
    throw Error("rank",
                "The factors are collinear.",
                {{"factor", static_cast<double>(triangle.spanned + 1)}});
  const Vector root = triangle.U.transpose().triangularView<Eigen::Lower>().solve(mean);
  SharpeRatio out;
  out.squared = n * root.squaredNorm();
  out.adjusted = out.squared * (n - K - 2.0) / n - K / n;
  const Vector u = D * (n * triangle.U.triangularView<Eigen::Upper>().solve(root));
  out.rows = (2.0 * u.array() - u.array().square() + out.squared) / n;
  return out;
}

namespace detail {

struct OrthantProjection {
  double distance = 0;
  int zeros = 0;
};

// Of x on d >= 0 in the metric V^-1: of all faces whose free coordinates come out
// positive and whose multipliers are not negative, there is one.
class Orthant {
 public:
  explicit Orthant(const Matrix& V) : V_(V), J_(V.rows()) {
    for (unsigned face = 0; face < (1u << J_); ++face) {
      std::vector<Index> zero;
      for (Index j = 0; j < J_; ++j)
        if (face >> j & 1u) zero.push_back(j);
      const auto m = static_cast<Index>(zero.size());
      Matrix block(m, m);
      for (Index a = 0; a < m; ++a)
        for (Index b = 0; b < m; ++b)
          block(a, b) =
              V(zero[static_cast<std::size_t>(a)], zero[static_cast<std::size_t>(b)]);
      inverse_.push_back(m > 0 ? Matrix(block.inverse()) : Matrix());
      zero_.push_back(std::move(zero));
    }
  }

  // With the coordinates of a face at zero, d = x - V_.z V_zz^-1 x_z, distance
  // x_z'V_zz^-1 x_z.
  OrthantProjection project(const Vector& x) const {
    OrthantProjection best{std::numeric_limits<double>::infinity(), 0};
    for (std::size_t face = 0; face < zero_.size(); ++face) {
      const auto& zero = zero_[face];
      const auto m = static_cast<Index>(zero.size());
      Vector at(m);
      for (Index a = 0; a < m; ++a) at(a) = x(zero[static_cast<std::size_t>(a)]);
      const Vector multiplier = m > 0 ? Vector(inverse_[face] * at) : Vector();
      Vector d = x;
      for (Index a = 0; a < m; ++a)
        d -= V_.col(zero[static_cast<std::size_t>(a)]) * multiplier(a);
      for (Index a = 0; a < m; ++a) d(zero[static_cast<std::size_t>(a)]) = 0.0;
      if (d.size() > 0 && d.minCoeff() < 0.0) continue;
      const double distance = m > 0 ? at.dot(multiplier) : 0.0;
      if (distance < best.distance) best = {distance, static_cast<int>(m)};
    }
    return best;
  }

 private:
  Matrix V_;
  Index J_;
  std::vector<std::vector<Index>> zero_;
  std::vector<Matrix> inverse_;
};

}  // namespace detail

struct BestModelTest {
  double statistic = kNaN, p = kNaN;
};

// normal: draws x J of independent standard normals.
inline BestModelTest best_model_test(const Vector& delta,
                                     const Matrix& V,
                                     const Eigen::Ref<const Matrix>& normal) {
  if (delta.size() > 12)
    throw Error("input",
                "At most twelve rivals can be tested at once.",
                {{"count", static_cast<double>(delta.size())}});
  const Eigen::LLT<Matrix> cholesky(V);
  if (cholesky.info() != Eigen::Success)
    throw Error("rank", "The covariance of the differences is singular.");
  const detail::Orthant orthant(V);
  BestModelTest out;
  out.statistic = orthant.project(delta).distance;
  if (out.statistic <= 0.0) {
    out.p = 1.0;
    return out;
  }
  Vector weight = Vector::Zero(delta.size() + 1);
  const Matrix L = cholesky.matrixL();
  for (Index draw = 0; draw < normal.rows(); ++draw)
    weight(orthant.project(L * normal.row(draw).transpose()).zeros) += 1.0;
  weight /= static_cast<double>(normal.rows());
  out.p = 0;
  for (Index k = 1; k < weight.size(); ++k)
    out.p += weight(k) * detail::chisq_tail(k, out.statistic);
  return out;
}

}  // namespace lambdabar
