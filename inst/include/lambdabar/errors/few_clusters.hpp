// Few clusters, one way: everything from S_g = X_g'W X_g and s_g = X_g'W e_g, taken once
// in coordinates where the sum of S_g is the identity (u = whitened terms). G r^2
// numbers.
//   CR2  psi_g = (I - S_g)^-1/2 s_g (Bell and McCaffrey 2002, Survey Methodology 28,
//        169-181; Pustejovsky and Tipton 2018, Journal of Business & Economic Statistics
//        36, 672-683), with Satterthwaite degrees of freedom for a contrast v under
//        independent errors: with F = (I - S_g)^-1/2, d_g = v'F S_g F v, r_g = F S_g v,
//        tr B = sum (d_g - r_g'r_g),
//        tr B^2 = sum d_g^2 - 2 sum d_g r_g'r_g + |sum r_g r_g'|^2,  df = (tr B)^2 / tr B^2
//   CR3  psi_g = (I - S_g)^-1 s_g, the change of the estimate without the cluster;
//        V = (G - 1) / G sum psi_g psi_g', the cluster jackknife about the estimate
//   wild cluster bootstrap of a contrast (Cameron, Gelbach and Miller 2008, Review of
//        Economics and Statistics 90, 414-427; fast form of Roodman, Nielsen, MacKinnon and
//        Webb 2019, Stata Journal 19, 4-60): with x = theta - r, s~_g = s_g + S_g v x / v'v
//        (the scores of the fit under the null) and a draw w,
//        d = sum w_g s~_g,  z_g = w_g v's~_g - v'S_g d,  t* = v'd / sqrt(m sum z_g^2).
//        Numerator and z_g are linear in x, so a draw is five numbers and any other null
//        costs O(1).
// With weights that vary inside a cluster CR2 is that of the data scaled by their roots.
// Not handled: absorbed effects; more than one way.
#pragma once

#include "clusters.hpp"

namespace lambdabar {

inline constexpr double kInfinite = std::numeric_limits<double>::infinity();

struct ClusterMoments {
  std::vector<Matrix> S;  // G, r x r
  Matrix s;               // r x G
  Matrix back;            // r x r: theta = back' u for estimates in whitened coordinates
  Index n_groups() const { return s.cols(); }
};

inline ClusterMoments cluster_moments(const Design& design,
                                      const PooledFit& fit,
                                      const int* code,
                                      Index n_codes) {
  const detail::UsedRows used = detail::used_rows(design, fit);
  const detail::Grouping grouping = detail::single_dimension(used, code, n_codes, 0);
  std::vector<Matrix> S(static_cast<std::size_t>(n_codes));
  Matrix s = Matrix::Zero(fit.rank, n_codes);
  detail::PanelReader reader(design, fit);
  for (Index begin = 0; begin < design.n_rows; begin += detail::kBlockRows) {
    reader.load(begin, std::min(detail::kBlockRows, design.n_rows - begin));
    const auto& block = reader.block();
    const Matrix u = reader.whitened();
    const Vector e = reader.residuals();
    for (Index i = 0; i < block.n_used(); ++i) {
      const int g = code[block.row(i)];
      Matrix& at = S[static_cast<std::size_t>(g)];
      if (at.size() == 0) at = Matrix::Zero(fit.rank, fit.rank);
      at.selfadjointView<Eigen::Lower>().rankUpdate(u.col(i), block.weight(i));
      s.col(g) += u.col(i) * (block.weight(i) * e[i]);
    }
  }
  ClusterMoments out;
  out.s.resize(fit.rank, grouping.n_groups);
  for (Index g = 0; g < n_codes; ++g) {
    if (S[static_cast<std::size_t>(g)].size() == 0) continue;
    out.s.col(static_cast<Index>(out.S.size())) = s.col(g);
    out.S.push_back(S[static_cast<std::size_t>(g)].selfadjointView<Eigen::Lower>());
  }
  out.back = detail::back_to_terms(design, fit);
  return out;
}

struct FewClusters {
  Matrix vcov;  // r x r
  Vector df;    // r, CR2; G - 1 for CR3
  Index n_groups = 0;
  Index undecided = -1;  // CR3: a cluster without which a coefficient is not identified
};

// power: 0.5 for CR2, 1 for CR3.
inline FewClusters few_clusters(const ClusterMoments& m, double power) {
  const Index r = m.s.rows(), G = m.n_groups();
  FewClusters out;
  out.n_groups = G;
  Matrix meat = Matrix::Zero(r, r), cross = Matrix::Zero(r, r);
  std::vector<Matrix> spread(static_cast<std::size_t>(r), Matrix::Zero(r, r));
  Vector one = Vector::Zero(r), two = Vector::Zero(r);
  const Matrix v = m.back;  // column j: the contrast of term j
  for (Index g = 0; g < G; ++g) {
    const Matrix& S = m.S[static_cast<std::size_t>(g)];
    const Eigen::SelfAdjointEigenSolver<Matrix> eigen(Matrix::Identity(r, r) - S);
    Vector root = eigen.eigenvalues();
    for (Index j = 0; j < r; ++j) {
      // The cluster alone identifies this direction: a pseudo-inverse for CR2.
      const bool alone = root(j) < 1e-10;
      if (alone && power == 1.0 && out.undecided < 0) out.undecided = g;
      root(j) = alone ? 0.0 : std::pow(root(j), -power);
    }
    const Matrix F =
        eigen.eigenvectors() * root.asDiagonal() * eigen.eigenvectors().transpose();
    const Vector psi = F * m.s.col(g);
    meat.selfadjointView<Eigen::Lower>().rankUpdate(psi);
    const Matrix FS = F * S;
    for (Index j = 0; j < r; ++j) {
      const Vector a = FS * v.col(j);
      const double d = v.col(j).dot(FS * (F * v.col(j))), length = a.squaredNorm();
      one(j) += d - length;
      two(j) += d * d - 2.0 * d * length;
      spread[static_cast<std::size_t>(j)].selfadjointView<Eigen::Lower>().rankUpdate(a);
    }
  }
  const double g = static_cast<double>(G);
  const Matrix full = meat.selfadjointView<Eigen::Lower>();
  const Matrix V =
      m.back.transpose() * full * m.back * (power == 1.0 ? (g - 1.0) / g : 1.0);
  out.vcov = 0.5 * (V + V.transpose());
  out.df = Vector::Constant(r, g - 1.0);
  if (power == 1.0) return out;
  for (Index j = 0; j < r; ++j) {
    const Matrix sum =
        spread[static_cast<std::size_t>(j)].selfadjointView<Eigen::Lower>();
    out.df(j) = one(j) * one(j) / (two(j) + sum.squaredNorm());
  }
  return out;
}

// What a draw needs for t* under any null: numerator n0 + x n1, sum of squares a + 2 x b
// + x^2 c (times m, which cancels against t0). The sample itself: x / sqrt(scale).
struct WildDraws {
  Vector n0, n1, a, b, c;
  double scale = 0;  // sum (v's_g)^2
};

// signs: G x draws; term: which coefficient. Restricted draws; without the null they are
// those of x = 0.
inline WildDraws wild_draws(const ClusterMoments& m,
                            Index term,
                            const Eigen::Ref<const Matrix>& signs) {
  const Index G = m.n_groups(), r = m.s.rows();
  const Vector v = m.back.col(term);
  Matrix Sv(r, G);  // S_g v
  for (Index g = 0; g < G; ++g) Sv.col(g) = m.S[static_cast<std::size_t>(g)] * v;
  const Matrix tilt = Sv / v.squaredNorm();
  const Vector score = m.s.transpose() * v, lean = tilt.transpose() * v;
  const Matrix D0 = m.s * signs, D1 = tilt * signs;  // r x draws
  WildDraws out;
  out.scale = score.squaredNorm();
  out.n0 = D0.transpose() * v;
  out.n1 = D1.transpose() * v;
  const Index B = signs.cols();
  out.a.resize(B);
  out.b.resize(B);
  out.c.resize(B);
  constexpr Index kBlock = 256;
  for (Index begin = 0; begin < B; begin += kBlock) {
    const Index n = std::min(kBlock, B - begin);
    const auto w = signs.middleCols(begin, n);
    const Matrix Z0 = score.asDiagonal() * w - Sv.transpose() * D0.middleCols(begin, n);
    const Matrix Z1 = lean.asDiagonal() * w - Sv.transpose() * D1.middleCols(begin, n);
    out.a.segment(begin, n) = Z0.colwise().squaredNorm();
    out.b.segment(begin, n) = Z0.cwiseProduct(Z1).colwise().sum();
    out.c.segment(begin, n) = Z1.colwise().squaredNorm();
  }
  return out;
}

// Share of draws with |t*| at least |t0| at x = theta - r, ties within 1e-9 counted.
inline double wild_share(const WildDraws& draws, double x, bool restricted) {
  const double t0 = std::abs(x) / std::sqrt(draws.scale);
  const double at = restricted ? x : 0.0;
  Index count = 0;
  for (Index i = 0; i < draws.n0.size(); ++i) {
    const double squares = draws.a(i) + at * (2.0 * draws.b(i) + at * draws.c(i));
    const double t = std::abs(draws.n0(i) + at * draws.n1(i)) / std::sqrt(squares);
    count += !(t < t0 * (1.0 - 1e-9));
  }
  return static_cast<double>(count) / static_cast<double>(draws.n0.size());
}

// How far from the estimate a null is still not rejected, walking in one direction (sign
// of step) in standard errors, then halving: the connected piece about the estimate.
// Infinite when ten million standard errors are not enough. p: of x.
template <class P>
double wild_reach(const P& p, double step, double alpha) {
  double inside = 0.0, outside = step;
  for (double limit = std::abs(step) * 1e7; p(outside) > alpha; outside *= 1.5) {
    if (std::abs(outside) > limit) return step > 0 ? kInfinite : -kInfinite;
    inside = outside;
  }
  for (int i = 0; i < 50; ++i) {
    const double middle = 0.5 * (inside + outside);
    (p(middle) > alpha ? inside : outside) = middle;
  }
  return 0.5 * (inside + outside);
}

}  // namespace lambdabar
