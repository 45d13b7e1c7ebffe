// Tests that the betas have rank q < K only: some combination of the factors, or one of
// them, is useless for premia. See loadings.hpp for theta, d, n.
//   cragg_donald     T sum_{j>q} d_j                                    homoskedastic
//                    (Cragg and Donald 1997, Journal of Econometrics 76, 223-250)
//   bartlett         (T - 1 - (n + K + 1) / 2) sum_{j>q} log(1 + d_j); better size
//   kleibergen_paap  T l'Omega^-1 l, l = vec(U2' theta V2), U2, V2 the trailing singular
//                    vectors (all n - q of the left ones), Omega the long-run covariance
//                    of (V2'L^-1 f_t) (x) (U2'G e_t)
//                    (Kleibergen and Paap 2006, Journal of Econometrics 133, 97-126)
// All against chi2((n - q)(K - q)). The last rejects too often unless T is large against
// its degrees of freedom; a wild bootstrap that imposes rank q, one sign a period, mends
// that. Cost O(T n^2) and O(T (n - q)^2 (K - q)^2) for the last, for each draw again.
#pragma once

#include "loadings.hpp"

namespace lambdabar {

enum class RankKind { cragg_donald, bartlett, kleibergen_paap };

struct RankTest {
  double statistic = kNaN, df = kNaN;
  double p_bootstrap = kNaN;  // NaN: none asked for
  Refusal refusal = Refusal::none;
};

namespace detail {

inline QuadraticForm robust_rank(const Loadings& x,
                                 const Eigen::JacobiSVD<Matrix>& svd,
                                 Index q,
                                 const SeriesOptions& series,
                                 const std::vector<Index>& slot) {
  const Index rows = x.n - q, columns = x.K - q;
  if (x.T <= rows * columns) return {kNaN, Refusal::too_few_periods};
  const Matrix U2 = svd.matrixU().rightCols(rows), V2 = svd.matrixV().rightCols(columns);
  const Matrix e = x.standard_residuals() * U2, f = x.factor_part * V2;
  const Matrix middle = U2.transpose() * x.theta * V2;
  // f and e are over sqrt(T): their product is a row that sums.
  Matrix h(x.T, rows * columns);
  for (Index j = 0; j < columns; ++j)
    h.middleCols(j * rows, rows) = f.col(j).asDiagonal() * e;
  const Matrix S = sum_alike(h, Matrix(), slot, series).S;
  return quadratic_form(Eigen::Map<const Vector>(middle.data(), middle.size()), S);
}

inline QuadraticForm rank_statistic(const Loadings& x,
                                    Index q,
                                    RankKind kind,
                                    const SeriesOptions& series,
                                    const std::vector<Index>& slot) {
  const Eigen::JacobiSVD<Matrix> svd(x.theta, Eigen::ComputeFullU | Eigen::ComputeFullV);
  if (kind == RankKind::kleibergen_paap) return robust_rank(x, svd, q, series, slot);
  const auto d = svd.singularValues().tail(x.K - q).array().square();
  if (kind == RankKind::cragg_donald) return {x.periods() * d.sum(), Refusal::none};
  const double factor = x.periods() - 1.0 - 0.5 * static_cast<double>(x.n + x.K + 1);
  return {factor * d.log1p().sum(), Refusal::none};
}

// Share of draws, the sample included, with a statistic as large.
inline double bootstrap_rank(const Loadings& x,
                             Index q,
                             RankKind kind,
                             double statistic,
                             const SeriesOptions& series,
                             const std::vector<Index>& slot,
                             const Eigen::Ref<const Matrix>& signs) {
  const Eigen::JacobiSVD<Matrix> svd(x.theta, Eigen::ComputeThinU | Eigen::ComputeThinV);
  const Matrix theta_q = svd.matrixU().leftCols(q) *
                         svd.singularValues().head(q).asDiagonal() *
                         svd.matrixV().leftCols(q).transpose();
  // factor_part * (theta_q' Ue) are the returns' deviations that factors of rank q
  // explain.
  const Matrix explained = x.factor_part * (theta_q.transpose() * x.Ue);
  const Matrix rest = (x.returns.rowwise() - x.mean.transpose()) - explained;
  Index as_large = 0;
  for (Index draw = 0; draw < signs.cols(); ++draw) {
    Loadings drawn = x;
    drawn.returns = explained + signs.col(draw).asDiagonal() * rest;
    regress(drawn);
    const QuadraticForm form = rank_statistic(drawn, q, kind, series, slot);
    as_large += !(form.value < statistic);
  }
  return static_cast<double>(as_large + 1) / static_cast<double>(signs.cols() + 1);
}

}  // namespace detail

// signs: T x draws of -1 and 1, no columns: no bootstrap.
inline RankTest rank_test(const Eigen::Ref<const Matrix>& returns,
                          const Eigen::Ref<const Matrix>& factors,
                          bool intercept,
                          Index rank,
                          RankKind kind,
                          const SeriesOptions& series,
                          const std::vector<Index>& slot,
                          const Eigen::Ref<const Matrix>& signs) {
  const detail::Loadings x = detail::make_loadings(returns, factors, intercept);
  const auto form = detail::rank_statistic(x, rank, kind, series, slot);
  RankTest out;
  out.statistic = form.value;
  out.refusal = form.refusal;
  out.df = static_cast<double>((x.n - rank) * (x.K - rank));
  if (signs.cols() > 0 && form.refusal == Refusal::none)
    out.p_bootstrap =
        detail::bootstrap_rank(x, rank, kind, form.value, series, slot, signs);
  return out;
}

}  // namespace lambdabar
