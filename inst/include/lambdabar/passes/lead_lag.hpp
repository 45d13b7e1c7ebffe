// Betas over leads and lags of the factors, for assets that trade thinly (Dimson 1979,
// Journal of Financial Economics 7, 197-226): one regression on f_{t-lags} .. f_{t+leads},
// beta = sum_j c_j b_j with standard error sqrt(c'Vc), factor by factor.
//
//   sum            c_j = 1
//   fowler_rorke   c_j = (sum_{k=-L..L} rho_|k-j|) / (1 + 2 sum_{k=1..L} rho_k), rho_k = 0
//                  beyond L (Fowler and Rorke 1983, Journal of Financial Economics 12,
//                  279-283): the weights that make the sum consistent when the factor is a
//                  moving average of order L; as many leads as lags
// rho: autocorrelations of the factor over the window's calendar periods, mean and
// denominator of the whole window. Not defined when 1 + 2 sum rho <= 0.1.
#pragma once

#include "../base.hpp"

#include <algorithm>
#include <cmath>

namespace lambdabar {

enum class LeadLagForm { sum, fowler_rorke };

struct LeadLag {
  Index leads = 0, lags = 0;
  LeadLagForm form = LeadLagForm::sum;

  Index n_shifts() const { return leads + lags + 1; }
};

namespace detail {

// Slots x (shifts K), shift by shift from the longest lag to the longest lead; NaN where a
// shifted slot lies outside or is missing.
inline Matrix shifted_factors(const Eigen::Ref<const Matrix>& factors, const LeadLag& shape) {
  const Index T = factors.rows(), K = factors.cols();
  Matrix out = Matrix::Constant(T, shape.n_shifts() * K, kNaN);
  for (Index j = 0; j < shape.n_shifts(); ++j) {
    const Index ahead = j - shape.lags;
    for (Index t = std::max<Index>(0, -ahead); t < std::min(T, T - ahead); ++t)
      out.row(t).segment(j * K, K) = factors.row(t + ahead);
  }
  return out;
}

// rho_1 .. rho_L of one series with holes (NaN), on slots begin .. end.
inline Vector autocorrelations(const double* x, Index begin, Index end, Index L) {
  double sum = 0, n = 0;
  for (Index t = begin; t <= end; ++t)
    if (std::isfinite(x[t])) sum += x[t], n += 1;
  const double mean = sum / n;
  double total = 0;
  Vector rho = Vector::Zero(L);
  for (Index t = begin; t <= end; ++t) {
    if (!std::isfinite(x[t])) continue;
    total += (x[t] - mean) * (x[t] - mean);
    for (Index k = 1; k <= std::min(L, t - begin); ++k)
      if (std::isfinite(x[t - k])) rho(k - 1) += (x[t] - mean) * (x[t - k] - mean);
  }
  return rho / total;
}

// c_{-L} .. c_L; NaN when they are not defined.
inline Vector fowler_rorke_weights(const Vector& rho) {
  const Index L = rho.size();
  const double denominator = 1.0 + 2.0 * rho.sum();
  if (!(denominator > 0.1)) return Vector::Constant(2 * L + 1, kNaN);
  Vector weights(2 * L + 1);
  for (Index j = -L; j <= L; ++j) {
    double numerator = 0;
    for (Index k = -L; k <= L; ++k) {
      const Index distance = std::abs(k - j);
      if (distance <= L) numerator += distance == 0 ? 1.0 : rho(distance - 1);
    }
    weights(j + L) = numerator / denominator;
  }
  return weights;
}

}  // namespace detail
}  // namespace lambdabar
