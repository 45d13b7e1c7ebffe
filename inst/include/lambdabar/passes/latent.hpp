// Premia of observed factors when factors are missing from the model: three passes
// (Giglio and Xiu 2021, Journal of Political Economy 129, 1947-1990). Complete panel of N
// assets and T periods; G: T x d observed factors.
//   1  R~ = U D W' (less means), V = sqrt(T) U_p, so V'V/T = I; beta = R~'V/T
//   2  gamma = (X'X)^-1 X' mean R, X = beta or [1, beta]
//   3  eta = G~'V/T; premium of g = eta gamma_v
// Rows (z_t (v_t'gamma) + eta v_t) / T, z_t = g_t - eta v_t. Neither signs nor a rotation
// of V matter. Strength: eta'S^-1 eta against chi2(p), S the sum of rows v_t z_t / T: the
// robust Wald test of the regression of g on V. Cost: one eigen-decomposition of the
// smaller of R~'R~ and R~R~', O(N T min(N, T)).
//
// Number of factors, from the eigenvalues e_j of R~'R~ / (N T), up to p_max:
//   penalised     argmin_j e_j + j pen, less one; pen = median(e_1 .. e_pmax) / 2
//                 (log N + log T)(N^-1/2 + T^-1/2)
//   eigen_ratio   argmax e_j / e_j+1; growth_ratio: argmax of the ratio of growth rates
//                 log(S_j-1 / S_j) / log(S_j / S_j+1), S_j = sum_{i > j} e_i
//                 (Ahn and Horenstein 2013, Econometrica 81, 1203-1227)
//   ic_p2         argmin_j log S_j + j (N + T) / (N T) log min(N, T)
//                 (Bai and Ng 2002, Econometrica 70, 191-221)
#pragma once

#include "../errors/series_sum.hpp"
#include "../tests/quadratic_forms.hpp"

namespace lambdabar {

enum class CountRule { penalised, eigen_ratio, growth_ratio, ic_p2 };

struct LatentBasis {
  Vector eigenvalues;  // min(N, T) of R~'R~ / (N T), falling
  Matrix V;            // T x p_max, V'V = T I
  Matrix beta;         // N x p_max
  Vector mean_return;  // N
};

struct LatentFit {
  Vector premium;      // d
  Matrix rows;         // T x d, summing
  Vector gamma;        // premia of the constant, if any, and of the p components
  Vector strength;     // d, Wald statistics against chi2(p); NaN: singular
  Vector r_squared;    // d, of g on the components
  double mean_r2 = 0;  // share of the returns' variance that p components have
};

inline LatentBasis latent_basis(const Eigen::Ref<const Matrix>& returns, Index most) {
  const Index T = returns.rows(), N = returns.cols();
  const double size = static_cast<double>(T) * static_cast<double>(N);
  LatentBasis out;
  out.mean_return = returns.colwise().mean();
  const Matrix R = returns.rowwise() - out.mean_return.transpose();
  const bool wide = N > T;
  const Matrix gram = wide ? Matrix(R * R.transpose()) : Matrix(R.transpose() * R);
  const Eigen::SelfAdjointEigenSolver<Matrix> eigen(gram);
  if (eigen.info() != Eigen::Success)
    throw Error("input", "The eigenvalues of the returns did not converge.");
  out.eigenvalues = eigen.eigenvalues().reverse().cwiseMax(0.0) / size;
  Index rank = 0;
  while (rank < out.eigenvalues.size() &&
         out.eigenvalues(rank) > 1e-13 * out.eigenvalues(0))
    ++rank;
  most = std::min(most, rank);
  const Matrix leading = eigen.eigenvectors().rightCols(most).rowwise().reverse();
  const double root = std::sqrt(static_cast<double>(T));
  if (wide) {
    out.V = root * leading;
  } else {
    const Matrix scores = R * leading;
    const Vector norm = scores.colwise().norm();
    out.V = root * (scores * norm.cwiseInverse().asDiagonal());
  }
  out.beta = R.transpose() * out.V / static_cast<double>(T);
  return out;
}

inline Index count_factors(
    const Vector& e, Index N, Index T, Index most, CountRule rule) {
  const double n = static_cast<double>(N), t = static_cast<double>(T);
  most = std::min<Index>(most, e.size() - 2);
  auto rest = [&](Index j) { return e.tail(e.size() - j).sum(); };
  Index best = 1;
  double value = 0;
  if (rule == CountRule::penalised) {
    std::vector<double> sorted(e.data(), e.data() + most);
    std::sort(sorted.begin(), sorted.end());
    const auto half = static_cast<std::size_t>(most / 2);
    const double median =
        most % 2 ? sorted[half] : 0.5 * (sorted[half - 1] + sorted[half]);
    const double penalty = 0.5 * median * (std::log(n) + std::log(t)) *
                           (1.0 / std::sqrt(n) + 1.0 / std::sqrt(t));
    for (Index j = 1; j <= most; ++j) {
      const double objective = e(j - 1) + static_cast<double>(j) * penalty;
      if (j == 1 || objective < value) value = objective, best = j;
    }
    return best - 1;
  }
  if (rule == CountRule::ic_p2) {
    const double penalty = (n + t) / (n * t) * std::log(std::min(n, t));
    for (Index j = 0; j <= most; ++j) {
      const double objective = std::log(rest(j)) + static_cast<double>(j) * penalty;
      if (j == 0 || objective < value) value = objective, best = j;
    }
    return best;
  }
  for (Index j = 1; j <= most; ++j) {
    const double ratio =
        rule == CountRule::eigen_ratio
            ? e(j - 1) / e(j)
            : std::log(rest(j - 1) / rest(j)) / std::log(rest(j) / rest(j + 1));
    if (j == 1 || ratio > value) value = ratio, best = j;
  }
  return best;
}

inline LatentFit latent_fit(const LatentBasis& basis,
                            const Eigen::Ref<const Matrix>& observed,
                            Index p,
                            bool intercept) {
  const Index T = basis.V.rows(), N = basis.beta.rows(), d = observed.cols();
  const double n = static_cast<double>(T);
  const Matrix V = basis.V.leftCols(p);
  const Matrix G = observed.rowwise() - observed.colwise().mean();
  Matrix X(N, p + (intercept ? 1 : 0));
  if (intercept) X.col(0).setOnes();
  X.rightCols(p) = basis.beta.leftCols(p);
  const detail::Projection projection = detail::project(X, intercept);
  if (!projection.usable())
    throw Error("rank",
                "The loadings on the components are collinear with the constant.");
  LatentFit out;
  out.gamma = projection.C * (projection.Q.transpose() * basis.mean_return);
  const Vector gamma = out.gamma.tail(p);
  const Matrix eta = G.transpose() * V / n;  // d x p
  out.premium = eta * gamma;
  const Matrix explained = V * eta.transpose();
  const Matrix rest = G - explained;
  const Vector earned = V * gamma;
  out.rows = (earned.asDiagonal() * rest + explained) / n;
  out.strength.resize(d);
  out.r_squared.resize(d);
  for (Index k = 0; k < d; ++k) {
    const Matrix S = outer_sum(rest.col(k).asDiagonal() * V / n);
    out.strength(k) = detail::quadratic_form(eta.row(k).transpose(), S).value;
    out.r_squared(k) = explained.col(k).squaredNorm() / G.col(k).squaredNorm();
  }
  out.mean_r2 = basis.eigenvalues.head(p).sum() / basis.eigenvalues.sum();
  return out;
}

}  // namespace lambdabar
