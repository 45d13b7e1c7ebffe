// Efficient moments (Hansen 1982, Econometrica 50, 1029-1054) of a linear factor model on
// a complete panel: with eps_t = R_t - 1 gamma_0 - B (gamma_f + f_t - mu),
//   g_t = (eps_t, f_t (x) eps_t, f_t - mu),  theta = (gamma_0, gamma_f, vec B, mu)
// N (K + 1) + K moments, N - P of them over-identifying (P premia, gamma_0 only with an
// intercept). S: long-run covariance of g_t at the two-pass OLS estimates, held;
// Gauss-Newton on gbar'S^-1 gbar to convergence; J = T gbar'S^-1 gbar ~ chi2(N - P). Cost
// O((N K)^3); T must be larger than the number of moments.
#pragma once

#include "../passes/two_pass.hpp"
#include "alpha.hpp"

namespace lambdabar {

struct EfficientMoments {
  Vector premia;
  Matrix covariance;  // P x P
  double J = kNaN;
  Refusal refusal = Refusal::none;
};

namespace detail {

class MomentModel {
 public:
  MomentModel(const TwoPassData& data, bool intercept)
      : R_(data.returns),
        f_(data.factors),
        intercept_(intercept),
        N_(R_.cols()),
        K_(f_.cols()),
        P_(K_ + (intercept ? 1 : 0)) {
    const double n = static_cast<double>(R_.rows());
    mean_factor_ = f_.colwise().mean();
    square_ = f_.transpose() * f_ / n;
  }

  Index n_moments() const { return N_ * (K_ + 1) + K_; }
  Index n_parameters() const { return P_ + N_ * K_ + K_; }
  Index n_premia() const { return P_; }

  Vector start(const TwoPass& fit) const {
    Vector theta(n_parameters());
    theta << fit.premia, Eigen::Map<const Vector>(fit.first.beta.data(), N_ * K_),
        mean_factor_;
    return theta;
  }

  // T x moments, each over T.
  Matrix rows(const Vector& theta) const {
    const Index T = R_.rows();
    const Matrix B = loadings(theta);
    Matrix shifted = f_;
    shifted.rowwise() += (premia(theta) - theta.tail(K_)).transpose();
    Matrix eps = R_ - shifted * B.transpose();
    if (intercept_) eps.array() -= theta(0);
    Matrix out(T, n_moments());
    out.leftCols(N_) = eps;
    for (Index k = 0; k < K_; ++k)
      out.middleCols(N_ * (k + 1), N_) = f_.col(k).asDiagonal() * eps;
    out.rightCols(K_) = f_.rowwise() - theta.tail(K_).transpose();
    return out / static_cast<double>(T);
  }

  Vector mean(const Vector& theta) const { return rows(theta).colwise().sum(); }

  // d mean / d theta'.
  Matrix jacobian(const Vector& theta) const {
    const Matrix B = loadings(theta);
    const Vector shift = premia(theta) - theta.tail(K_);
    Matrix d = Matrix::Zero(n_moments(), n_parameters());
    const Index at_beta = P_, at_mu = P_ + N_ * K_;
    for (Index j = 0; j <= K_; ++j) {
      const double scale = j == 0 ? 1.0 : mean_factor_(j - 1);
      const Index row = N_ * j;
      if (intercept_) d.block(row, 0, N_, 1).setConstant(-scale);
      d.block(row, P_ - K_, N_, K_) = -scale * B;
      d.block(row, at_mu, N_, K_) = scale * B;
      for (Index k = 0; k < K_; ++k) {
        const double moment =
            scale * shift(k) + (j == 0 ? mean_factor_(k) : square_(j - 1, k));
        d.block(row, at_beta + N_ * k, N_, N_).diagonal().setConstant(-moment);
      }
    }
    d.bottomRightCorner(K_, K_).diagonal().setConstant(-1.0);
    return d;
  }

 private:
  Matrix loadings(const Vector& theta) const {
    return Eigen::Map<const Matrix>(theta.data() + P_, N_, K_);
  }
  Vector premia(const Vector& theta) const { return theta.segment(P_ - K_, K_); }

  Eigen::Ref<const Matrix> R_, f_;
  bool intercept_;
  Index N_, K_, P_;
  Vector mean_factor_;
  Matrix square_;
};

}  // namespace detail

// fit: the OLS two-pass estimate of the same data.
inline EfficientMoments efficient_moments(const TwoPassData& data,
                                          const TwoPass& fit,
                                          const SeriesOptions& series,
                                          const std::vector<Index>& slot) {
  detail::require_balanced(fit);
  const detail::MomentModel model(data, fit.intercept);
  const Index T = data.returns.rows(), P = model.n_premia();
  EfficientMoments out;
  if (data.returns.cols() == P) out.refusal = Refusal::just_identified;
  if (T <= model.n_moments()) out.refusal = Refusal::too_few_periods;
  if (out.refusal != Refusal::none) return out;
  Vector theta = model.start(fit);
  Matrix rows = model.rows(theta);
  rows.rowwise() -= (rows.colwise().sum() / static_cast<double>(T)).eval();
  const Matrix S =
      detail::sum_series_by(rows, slot, Matrix(), Vector::Ones(rows.cols()), series).S;
  const Vector scale = detail::usable_scale(S.diagonal().cwiseSqrt());
  const Eigen::LLT<Matrix> cholesky(detail::scaled_by_inverse(S, scale));
  if (cholesky.info() != Eigen::Success ||
      cholesky.matrixLLT().diagonal().cwiseAbs2().minCoeff() < detail::kCovariancePivot) {
    out.refusal = Refusal::singular;
    return out;
  }
  auto whiten = [&](const Matrix& M) -> Matrix {
    return cholesky.matrixL().solve(scale.cwiseInverse().asDiagonal() * M);
  };
  // Gauss-Newton with halved steps; done when a full step would lower the criterion by less
  // than a share of 1e-20.
  constexpr int kMostSteps = 200;
  Matrix W;
  Vector z = whiten(model.mean(theta));
  out.refusal = Refusal::no_convergence;
  for (int step = 0; step < kMostSteps && out.refusal != Refusal::none; ++step) {
    W = whiten(model.jacobian(theta));
    const Vector change = W.colPivHouseholderQr().solve(z);
    // The criterion itself is known to rounding only.
    const double now = z.squaredNorm(), most = now * (1.0 + 1e-12);
    if ((W * change).squaredNorm() <= 1e-20 * now) out.refusal = Refusal::none;
    double share = 1.0;
    Vector next = whiten(model.mean(theta - change));
    while (next.squaredNorm() > most && share > 1e-4) {
      share *= 0.5;
      next = whiten(model.mean(theta - share * change));
    }
    if (next.squaredNorm() > most) break;
    theta -= share * change;
    z = next;
  }
  if (out.refusal != Refusal::none) return out;
  W = whiten(model.jacobian(theta));
  out.premia = theta.head(P);
  out.covariance = (W.transpose() * W).inverse().topLeftCorner(P, P);
  out.J = whiten(model.mean(theta)).squaredNorm();
  return out;
}

}  // namespace lambdabar
