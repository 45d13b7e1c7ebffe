// Sets of premia that are not rejected, whatever the strength of the betas (Kleibergen
// 2009, Journal of Econometrics 149, 149-173). See loadings.hpp for contrasts, Q, Sigma,
// n.
//   x(l) = a'Sigma^-1 a / (1 + l'Q^-1 l),  a = mean R - B l
// is, times (T - K - n) / n, the F test that the intercepts on f - mean f + l are zero:
// exact given the factors if errors are normal and independent. l is in the set iff x(l)
// <= x_c, that is (1, -l) H (1, -l)' <= 0 with
//   H = Y'Sigma^-1 Y - x_c diag(1, Q^-1),  Y = [mean R, B]
// All premia: bounded iff the block of B is positive definite; empty iff the smallest
// root of |Y'Sigma^-1 Y - x diag(1, Q^-1)|, the over-identification statistic, is above
// x_c. One premium, l_j: when the block of the others is not positive definite the set is
// the whole line; otherwise they are projected out and h22 l^2 - 2 h12 l + h11 <= 0
// decides.
//
// One factor also with rows that need no homoskedasticity: T a'S(l)^-1 a, S the long-run
// covariance of (R_t - mean R) - e_t (f_t'Q^-1 l), or e_t (1 - f_t'Q^-1 l) for the
// premium that the factor earned in the sample. l = s tan(angle) makes infinity a point
// like others; the circle is scanned and its sign changes bisected.
#pragma once

#include "loadings.hpp"

namespace lambdabar {

enum class SetShape { empty = 0, interval = 1, rays = 2, line = 3 };

struct PremiumSet {
  SetShape shape = SetShape::empty;
  std::vector<std::pair<double, double>> pieces;  // with infinities
};

namespace detail {

inline constexpr double kInfinity = std::numeric_limits<double>::infinity();

// h22 l^2 - 2 h12 l + h11 <= 0.
inline PremiumSet quadratic_set(double h11, double h12, double h22) {
  const double disc = h12 * h12 - h11 * h22;
  if (disc < 0.0 || h22 == 0.0) {
    if (h22 > 0.0 || (h22 == 0.0 && h12 == 0.0 && h11 > 0.0)) return {};
    if (h22 < 0.0 || h12 == 0.0) return {SetShape::line, {{-kInfinity, kInfinity}}};
    const double root = 0.5 * h11 / h12;
    return h12 > 0.0 ? PremiumSet{SetShape::rays, {{root, kInfinity}}}
                     : PremiumSet{SetShape::rays, {{-kInfinity, root}}};
  }
  // Neither root by a difference of close numbers.
  const double q = h12 + std::copysign(std::sqrt(disc), h12);
  double low = q / h22, high = q == 0.0 ? low : h11 / q;
  if (low > high) std::swap(low, high);
  if (h22 > 0.0) return {SetShape::interval, {{low, high}}};
  return {SetShape::rays, {{-kInfinity, low}, {high, kInfinity}}};
}

// Y'Sigma^-1 Y and diag(1, Q^-1), factors in units of their standard deviation.
struct SetForms {
  Matrix YY, one_Q;
  Vector unit;  // K
};

inline SetForms set_forms(const Loadings& x) {
  SetForms out;
  out.unit = x.Uf.colwise().norm() / std::sqrt(x.periods());
  Matrix Y(x.n, x.K + 1);
  Y << x.mean, x.beta * out.unit.asDiagonal();
  const Matrix W = x.whiten(Y);
  out.YY = W.transpose() * W;
  // Q = Uf'Uf / T, so Q^-1 = T Uf^-1 Uf'^-1.
  const Matrix inverse =
      out.unit.asDiagonal() * x.Uf.triangularView<Eigen::Upper>().solve(
                                  std::sqrt(x.periods()) * Matrix::Identity(x.K, x.K));
  out.one_Q = Matrix::Zero(x.K + 1, x.K + 1);
  out.one_Q(0, 0) = 1.0;
  out.one_Q.bottomRightCorner(x.K, x.K) = inverse * inverse.transpose();
  return out;
}

inline PremiumSet one_premium(const SetForms& forms, Index j, double critical) {
  const Index K = forms.unit.size();
  const Matrix H = forms.YY - critical * forms.one_Q;
  std::vector<Index> others;
  for (Index k = 1; k <= K; ++k)
    if (k != j + 1) others.push_back(k);
  const auto m = static_cast<Index>(others.size());
  Matrix h(2, 2);
  h << H(0, 0), H(0, j + 1), H(j + 1, 0), H(j + 1, j + 1);
  if (m > 0) {
    Matrix block(m, m), side(m, 2);
    for (Index a = 0; a < m; ++a) {
      const Index ka = others[static_cast<std::size_t>(a)];
      side(a, 0) = H(ka, 0);
      side(a, 1) = H(ka, j + 1);
      for (Index b = 0; b < m; ++b)
        block(a, b) = H(ka, others[static_cast<std::size_t>(b)]);
    }
    const Eigen::LLT<Matrix> cholesky(block);
    if (cholesky.info() != Eigen::Success)
      return {SetShape::line, {{-kInfinity, kInfinity}}};
    h -= side.transpose() * cholesky.solve(side);
  }
  PremiumSet out = quadratic_set(h(0, 0), h(0, 1), h(1, 1));
  for (auto& piece : out.pieces) {
    piece.first *= forms.unit(j);
    piece.second *= forms.unit(j);
  }
  return out;
}

}  // namespace detail

struct JointPremiumSet {
  SetShape shape = SetShape::empty;  // interval: bounded; rays: unbounded
  double smallest = kNaN;            // min x: T times it tests over-identification
  Vector estimate;                   // K, where x is smallest (limited information)
};

struct PremiumSets {
  JointPremiumSet joint;
  std::vector<PremiumSet> each;  // K
  Matrix YY, one_Q;              // (K + 1)^2, in units of the premia: x(l) at any l
  Index n = 0;
};

// critical: x_c of the joint set; critical_one: of single premia.
inline PremiumSets premium_sets(const Eigen::Ref<const Matrix>& returns,
                                const Eigen::Ref<const Matrix>& factors,
                                bool intercept,
                                double critical,
                                double critical_one) {
  const detail::Loadings x = detail::make_loadings(returns, factors, intercept);
  const detail::SetForms forms = detail::set_forms(x);
  PremiumSets out;
  out.n = x.n;
  const Eigen::GeneralizedSelfAdjointEigenSolver<Matrix> eigen(forms.YY, forms.one_Q);
  const Vector v = eigen.eigenvectors().col(0);
  out.joint.smallest = std::max(0.0, eigen.eigenvalues()(0));
  out.joint.estimate = -(v.tail(x.K) / v(0)).cwiseProduct(forms.unit);
  const Matrix block = (forms.YY - critical * forms.one_Q).bottomRightCorner(x.K, x.K);
  const bool bounded = Eigen::LLT<Matrix>(block).info() == Eigen::Success;
  out.joint.shape = out.joint.smallest > critical ? SetShape::empty
                    : bounded                     ? SetShape::interval
                                                  : SetShape::rays;
  for (Index j = 0; j < x.K; ++j)
    out.each.push_back(detail::one_premium(forms, j, critical_one));
  Vector scale(x.K + 1);
  scale << 1.0, forms.unit.cwiseInverse();
  out.YY = scale.asDiagonal() * forms.YY * scale.asDiagonal();
  out.one_Q = scale.asDiagonal() * forms.one_Q * scale.asDiagonal();
  return out;
}

namespace detail {

// T a'S^-1 a at the angle, one factor.
class AngleStatistic {
 public:
  AngleStatistic(const Loadings& x,
                 bool expected,
                 const SeriesOptions& series,
                 const std::vector<Index>& slot)
      : x_(x), series_(series), slot_(slot), expected_(expected) {
    unit_ = x.Uf.norm() / std::sqrt(x.periods());
    deviations_ = x.returns.rowwise() - x.mean.transpose();
    // f_t Q^-1 s, with s the standard deviation.
    tilted_ = (std::sqrt(x.periods()) * x.factor_part.col(0)).asDiagonal() * x.residuals;
    if (x.Uf(0, 0) < 0.0) tilted_ = -tilted_;
  }

  double unit() const { return unit_; }

  double operator()(double angle) const {
    const double c = std::cos(angle), s = std::sin(angle);
    const Vector a = c * x_.mean - s * unit_ * x_.beta.col(0);
    const Matrix rows =
        (c * (expected_ ? deviations_ : x_.residuals) - s * tilted_) / x_.periods();
    const Matrix S = sum_alike(rows, Matrix(), slot_, series_).S;
    const QuadraticForm form = quadratic_form(a, S);
    if (form.refusal != Refusal::none)
      throw Error("rank", "The covariance of the pricing errors is singular.");
    return form.value;
  }

 private:
  const Loadings& x_;
  const SeriesOptions& series_;
  const std::vector<Index>& slot_;
  bool expected_;
  double unit_;
  Matrix deviations_, tilted_;
};

inline double bisect(const AngleStatistic& statistic,
                     double inside,
                     double outside,
                     double critical) {
  for (int step = 0; step < 60; ++step) {
    const double middle = 0.5 * (inside + outside);
    (statistic(middle) <= critical ? inside : outside) = middle;
  }
  return 0.5 * (inside + outside);
}

}  // namespace detail

// One factor, any dependence that `series` allows. critical: of T a'S^-1 a.
inline PremiumSet premium_set_by_scan(const Eigen::Ref<const Matrix>& returns,
                                      const Eigen::Ref<const Matrix>& factors,
                                      bool intercept,
                                      bool expected,
                                      double critical,
                                      const SeriesOptions& series,
                                      const std::vector<Index>& slot) {
  const detail::Loadings x = detail::make_loadings(returns, factors, intercept);
  const detail::AngleStatistic statistic(x, expected, series, slot);
  constexpr int kAngles = 720;
  const double pi = std::acos(-1.0), step = pi / kAngles;
  // Angles from -pi/2, which is infinity, to +pi/2, the same point.
  auto angle = [&](int i) { return -0.5 * pi + step * i; };
  std::vector<char> in(kAngles + 1);
  for (int i = 0; i < kAngles; ++i)
    in[static_cast<std::size_t>(i)] = statistic(angle(i)) <= critical;
  in[kAngles] = in[0];
  PremiumSet out;
  double begin = -detail::kInfinity;
  auto value = [&](double at) { return statistic.unit() * std::tan(at); };
  for (int i = 1; i <= kAngles; ++i) {
    const bool before = in[static_cast<std::size_t>(i - 1)],
               now = in[static_cast<std::size_t>(i)];
    if (before == now) continue;
    if (now) {
      begin = value(detail::bisect(statistic, angle(i), angle(i - 1), critical));
    } else {
      out.pieces.emplace_back(
          begin, value(detail::bisect(statistic, angle(i - 1), angle(i), critical)));
    }
  }
  if (in[kAngles]) out.pieces.emplace_back(begin, detail::kInfinity);
  out.shape = out.pieces.empty() ? SetShape::empty
              : !in[0]           ? SetShape::interval
              : out.pieces.size() == 1 && out.pieces[0].first == -detail::kInfinity
                  ? SetShape::line
                  : SetShape::rays;
  return out;
}

}  // namespace lambdabar
