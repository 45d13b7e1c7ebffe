// The average of per-period slopes and its influence rows.
//
//   theta_j = sum_t omega_tj b_tj,   row_tj = omega_tj (b_tj - theta_j)       Tu x P
//
// over the Tu estimated periods (Fama and MacBeth 1973). omega is 1/Tu, proportional to the
// number of assets, or to the precision 1/se^2 of each slope. `small_sample` is the factor
// that makes sum_t row^2 unbiased for independent slopes of equal variance,
//   sum w^2 / (sum w^2 - 2 sum w^3 + (sum w^2)^2),   Tu/(Tu - 1) for equal weights.
#pragma once

#include "../base.hpp"

namespace lambdabar {

enum class Average { equal, assets, precision };

struct AveragedPremia {
  Vector estimate;      // P
  Matrix rows;          // Tu x P
  Matrix weights;       // Tu x P, columns sum to one
  Vector small_sample;  // P
};

// slopes, std_error: Tu x P; n_assets: Tu. A standard error of zero (an exact fit) has no
// finite precision: such a period throws with its row in the facts.
inline AveragedPremia average_premia(const Matrix& slopes,
                                     const Matrix& std_error,
                                     const Vector& n_assets,
                                     Average average) {
  AveragedPremia out;
  const Index T = slopes.rows(), P = slopes.cols();
  switch (average) {
    case Average::equal:
      out.weights = Matrix::Constant(T, P, 1.0);
      break;
    case Average::assets:
      out.weights = n_assets.replicate(1, P);
      break;
    case Average::precision:
      for (Index t = 0; t < T; ++t) {
        if (!(std_error.row(t).array() > 0).all()) {
          throw Error("input",
                      "A period fits its returns exactly, so that its slopes have no finite "
                      "precision to weigh them by.",
                      {{"used_period", static_cast<double>(t + 1)}});
        }
      }
      out.weights = std_error.array().square().inverse();
      break;
  }
  for (Index j = 0; j < P; ++j) out.weights.col(j) /= out.weights.col(j).sum();
  out.estimate = (out.weights.array() * slopes.array()).colwise().sum().matrix();
  out.rows = out.weights.array() * (slopes.rowwise() - out.estimate.transpose()).array();
  out.small_sample = Vector(P);
  for (Index j = 0; j < P; ++j) {
    if (average == Average::equal) {
      out.small_sample(j) = static_cast<double>(T) / static_cast<double>(T - 1);
      continue;
    }
    const auto w = out.weights.col(j).array();
    const double w2 = w.square().sum(), w3 = w.cube().sum();
    out.small_sample(j) = w2 / (w2 - 2.0 * w3 + w2 * w2);
  }
  return out;
}

}  // namespace lambdabar
