// Small invented panels for identities: nothing in a test rests on the numbers
// themselves.
#pragma once

#include <lambdabar/base.hpp>

#include <random>

namespace simulated {

using lambdabar::Index;
using lambdabar::Matrix;
using lambdabar::Vector;

inline Matrix normals(std::mt19937& engine, Index rows, Index cols) {
  std::normal_distribution<double> draw;
  Matrix out(rows, cols);
  for (Index j = 0; j < cols; ++j)
    for (Index i = 0; i < rows; ++i) out(i, j) = draw(engine);
  return out;
}

struct Panel {
  Matrix returns;  // T x N
  Matrix factors;  // T x K
};

// Pricing errors and unequal residual variances, so that no term of a formula vanishes.
inline Panel panel(Index n_periods, Index n_assets, Index n_factors, unsigned seed) {
  std::mt19937 engine(seed);
  Panel out;
  out.factors = 0.8 * normals(engine, n_periods, n_factors);
  out.factors.array() += 0.4;
  const Matrix beta = (0.5 * normals(engine, n_assets, n_factors)).array() + 1.0;
  const Vector alpha = 0.3 * normals(engine, n_assets, 1);
  const Vector spread = normals(engine, n_assets, 1).array().abs() + 0.3;
  out.returns = out.factors * beta.transpose() +
                normals(engine, n_periods, n_assets) * spread.asDiagonal();
  out.returns.rowwise() += alpha.transpose();
  return out;
}

inline void punch_holes(Matrix& values, double share, unsigned seed) {
  std::mt19937 engine(seed);
  std::uniform_real_distribution<double> draw;
  for (Index j = 0; j < values.cols(); ++j)
    for (Index i = 0; i < values.rows(); ++i)
      if (draw(engine) < share) values(i, j) = lambdabar::kNaN;
}

// Largest difference relative to the largest entry.
inline double distance(const Matrix& a, const Matrix& b) {
  if (a.rows() != b.rows() || a.cols() != b.cols()) return lambdabar::kNaN;
  return (a - b).cwiseAbs().maxCoeff() / b.cwiseAbs().maxCoeff();
}

}  // namespace simulated
