// Fitted values of all rows at given coefficients: O(n P), one vector of length n.
#pragma once

#include "../panel/design.hpp"

namespace lambdabar {

// coef: n_terms, the constant first if the design has one; terms whose coefficient is NaN
// (collinear ones) do not enter. A row with a missing regressor gives NaN.
inline Vector linear_predictor(const Design& design, const Vector& coef) {
  const Index shift = design.intercept ? 1 : 0;
  Vector fitted = Vector::Constant(design.n_rows, design.intercept ? coef(0) : 0.0);
  constexpr Index kBlock = 2048;
  std::vector<double> buffer(static_cast<std::size_t>(kBlock));
  for (Index begin = 0; begin < design.n_rows; begin += kBlock) {
    const Index n = std::min(kBlock, design.n_rows - begin);
    for (std::size_t j = 0; j < design.x.size(); ++j) {
      const double slope = coef(static_cast<Index>(j) + shift);
      if (slope != slope) continue;
      design.x[j].read(begin, n, buffer.data());
      for (Index i = 0; i < n; ++i) fitted(begin + i) += slope * buffer[static_cast<std::size_t>(i)];
    }
  }
  return fitted;
}

}  // namespace lambdabar
