// Clusters for averaged cross-sections: their estimate has a row for each observation too,
//   slopes    psi_it = omega_t S_t^-1 (x_it - mean_t x) w_it u_it
//   constant  psi_it = omega_t w_it v_it / W_t - mean_t x' (the slopes' row)
// with v the residual at the averaged coefficients, u less its mean in the period, S_t and
// W_t the period's centred cross-products and weight. Inside a period they add up to the
// period's influence row, omega_t (b_t - b). Residuals at the period's own slopes would add
// up to zero, and without taking the mean out a common shock would enter the sums of an
// asset. Inclusion and exclusion as in clusters.hpp, each term times G / (G - 1): clusters
// of periods give the usual error. Without a constant in the design nothing is centred.
// Cost: three reads of the columns, one thread; memory T P^2 and P numbers a group.
#pragma once

#include "clusters.hpp"

namespace lambdabar {
namespace detail {

class ObservationRows {
 public:
  // omega: n_periods, 0 where the period was not used; theta: P.
  ObservationRows(const Design& design, const Vector& omega, const Vector& theta)
      : design_(design),
        omega_(omega),
        theta_(theta),
        K_(static_cast<Index>(design.x.size())),
        T_(design.n_periods),
        z_(K_ + 1) {
    used_.n_rows = design.n_rows;
    used_.flags.assign(static_cast<std::size_t>(design.n_rows), 0);
    weight_ = Vector::Zero(T_);
    mean_ = Matrix::Zero(K_ + 1, T_);
    each([&](Index row, Index t, double w) {
      used_.flags[static_cast<std::size_t>(row)] = 1;
      ++used_.n_used;
      weight_(t) += w;
      if (design_.intercept) mean_.col(t) += w / weight_(t) * (z_ - mean_.col(t));
    });
    inverse_.assign(static_cast<std::size_t>(T_), Matrix());
    std::vector<Matrix> S(static_cast<std::size_t>(T_));
    each([&](Index, Index t, double w) {
      Matrix& at = S[static_cast<std::size_t>(t)];
      if (at.size() == 0) at = Matrix::Zero(K_, K_);
      const Vector d = (z_ - mean_.col(t)).tail(K_);
      at.selfadjointView<Eigen::Lower>().rankUpdate(d, w);
    });
    for (Index t = 0; t < T_; ++t) invert(S[static_cast<std::size_t>(t)], t);
  }

  const UsedRows& used() const { return used_; }
  Index n_terms() const { return K_ + (design_.intercept ? 1 : 0); }

  // visit(row, psi).
  template <class Visit>
  void visit(const Visit& visit) {
    Vector psi(n_terms());
    const Index first = design_.intercept ? 1 : 0;
    each([&](Index row, Index t, double w) {
      const Vector d = z_ - mean_.col(t);
      const double u = d(0) - d.tail(K_).dot(theta_.tail(K_));
      psi.tail(K_) =
          inverse_[static_cast<std::size_t>(t)] * d.tail(K_) * (omega_(t) * w * u);
      if (first == 1) {
        const double level =
            mean_(0, t) - theta_(0) - mean_.col(t).tail(K_).dot(theta_.tail(K_));
        psi(0) = omega_(t) * w * (u + level) / weight_(t) -
                 mean_.col(t).tail(K_).dot(psi.tail(K_));
      }
      visit(row, psi);
    });
  }

 private:
  // Complete rows of used periods, with (y, x) in z_.
  template <class Body>
  void each(const Body& body) {
    for (Index row = 0; row < design_.n_rows; ++row) {
      const Index t = design_.period[row];
      if (omega_(t) == 0.0) continue;
      const double w = design_.weight.empty() ? 1.0 : design_.weight[0].at(row);
      if (!std::isfinite(w) || !(w > 0.0)) continue;
      z_(0) = design_.y.at(row);
      for (Index k = 0; k < K_; ++k)
        z_(k + 1) = design_.x[static_cast<std::size_t>(k)].at(row);
      if (z_.allFinite()) body(row, t, w);
    }
  }

  void invert(const Matrix& S, Index t) {
    if (S.size() == 0) return;
    const Matrix full = S.selfadjointView<Eigen::Lower>();
    const Vector scale = usable_scale(full.diagonal().cwiseSqrt());
    const Matrix inverse =
        scaled_by_inverse(full, scale).ldlt().solve(Matrix::Identity(K_, K_));
    inverse_[static_cast<std::size_t>(t)] = scaled_by_inverse(inverse, scale);
  }

  const Design& design_;
  const Vector omega_, theta_;
  Index K_, T_;
  Vector z_, weight_;
  Matrix mean_;
  std::vector<Matrix> inverse_;
  UsedRows used_;
};

inline std::vector<ClusterSums> sum_observation_rows(
    ObservationRows& rows, const std::vector<Grouping>& groupings) {
  const Index P = rows.n_terms();
  std::vector<Matrix> sums;
  for (const Grouping& grouping : groupings)
    sums.push_back(Matrix::Zero(P, grouping.code ? grouping.n_codes : P));
  rows.visit([&](Index row, const Vector& psi) {
    for (std::size_t g = 0; g < groupings.size(); ++g) {
      if (groupings[g].code)
        sums[g].col(groupings[g].code[row]) += psi;
      else
        sums[g].selfadjointView<Eigen::Lower>().rankUpdate(psi);
    }
  });
  std::vector<ClusterSums> out;
  for (std::size_t g = 0; g < groupings.size(); ++g) {
    Matrix meat = sums[g];
    if (groupings[g].code) {
      meat = Matrix::Zero(P, P);
      meat.selfadjointView<Eigen::Lower>().rankUpdate(sums[g]);
    }
    out.push_back({Matrix(meat.selfadjointView<Eigen::Lower>()), groupings[g].n_groups});
  }
  return out;
}

}  // namespace detail

// omega: n_periods, the weight of each period in the average, 0 where it was not used;
// theta: the averaged coefficients, the constant first. codes as in clustered().
inline ClusterCovariance clustered_average(const Design& design,
                                           const Vector& omega,
                                           const Vector& theta,
                                           const std::vector<const int*>& codes,
                                           const std::vector<Index>& n_codes,
                                           SmallSample small) {
  if (codes.empty()) throw Error("input", "clusters need at least one dimension");
  detail::ObservationRows rows(design, omega, theta);
  const detail::Intersections sets(rows.used(), codes, n_codes);
  const std::vector<detail::Grouping> groupings =
      detail::with_rows_alone(rows.used(), sets);
  const std::vector<ClusterSums> sums = detail::sum_observation_rows(rows, groupings);
  return detail::combine_groupings(
      rows.used(),
      sets,
      groupings,
      sums,
      [&](Index n_groups) {
        const double g = static_cast<double>(n_groups);
        return small == SmallSample::none ? 1.0 : g / (g - 1.0);
      },
      small);
}

}  // namespace lambdabar
