// Cross-sections on estimated betas, with the betas of a disjoint half of the periods as
// instruments (Jegadeesh, Noh, Pukthuanthong, Roll and Wang, 2019, Journal of Financial
// Economics 133, 273-298):
//
//   b_t = (Z_t'W X_t)^-1 Z_t'W y_t
//
// X has the betas of one half, Z those of the other; constant and traits stand in both.
// The errors of the two are unrelated, so the slopes are not attenuated.
//
// With X = Qx Cx^-1 and Z = Qz Cz^-1 (projection.hpp: centred, scaled, pivoted QR) and
// G = (Qz'Qx)^-1 the map from y to b is Cx G Qz', fitted values are Qx G Qz'y, and the
// smallest singular value of Qz'Qx is the smallest canonical correlation of the two sets
// of betas after the exact columns: the strength. Just identified, b has no moments and a
// few weak periods can rule an average, so a period whose strength is below min_strength
// is trimmed. The slope is never looked at for that.
//
// Which half? The instrument must not have seen the return. For betas of the whole sample
// it is the half without the period, so the period's own half gives the regressors. For
// betas from before the period either will do, and `both` averages the two slopes.
//
// Errors within a period are s2 M M' for the map b = M y, s2 = rss / (n - P); for `both`,
// M is the average of the two maps and residuals are the average of the two fits'. One
// fit: s2 (Z'WX)^-1 Z'WZ (X'WZ)^-1. R2 = 1 - rss / tss may be below zero.
//
// Shapes: n rows, T periods, P terms (the constant first), K betas. Cost: one read of the
// columns, two QRs a period: n P^2. Same bits for any number of threads and any order of
// rows. A term varies when it does so in both halves, R2 is NaN where y does not vary.
// Weighted columns with a mean of m spreads lose the digits that m has.
// Not handled: values whose squares overflow.
#pragma once

#include "cross_sections.hpp"
#include "period_rows.hpp"
#include "projection.hpp"

#include <Eigen/SVD>

namespace lambdabar {

// Whose betas are the regressors. `both`: the two slopes are averaged.
enum class RegressorHalf : char { zero = 0, one = 1, both = 2 };

struct InstrumentOptions {
  // Periods below this strength are trimmed. 0 stands for 2 / sqrt(n_t), two standard
  // errors of the correlation of unrelated betas.
  double min_strength = 0;
  // Complete rows a period needs; never fewer than P + 1, which 0 stands for.
  Index min_assets = 0;
  int threads = 1;
};

struct InstrumentSections : SectionResults {
  Vector strength;  // T: smallest canonical correlation, also of trimmed periods
};

namespace detail {

// One period, whitened: rows times the root of their weight.
struct TwoHalves {
  Matrix X, Z;  // n x P, of half zero and of half one
  Vector y;
  std::vector<char> varies;  // number of x, in both halves
  bool y_varies = false;
};

// Where y, x, the other half's betas and the weight stand among a period's values.
struct HalfColumns {
  Index n_x, n_other;
  bool weighted, intercept;

  Index n_terms() const { return n_x + (intercept ? 1 : 0); }
  Index x(Index j) const { return 1 + j; }
  Index other(Index j) const { return j < n_other ? 1 + n_x + j : x(j); }
  Index weight() const { return 1 + n_x + n_other; }
};

inline bool has_spread(const Eigen::Ref<const Vector>& column) {
  return column.maxCoeff() - column.minCoeff() >
         kExposureTolerance * column.cwiseAbs().maxCoeff();
}

inline TwoHalves whiten_halves(const Matrix& values, const HalfColumns& at) {
  TwoHalves out;
  const Index n = values.rows(), first = at.intercept ? 1 : 0;
  Vector root = Vector::Ones(n);
  if (at.weighted) root = values.col(at.weight()).cwiseSqrt();
  out.y = root.cwiseProduct(values.col(0));
  out.y_varies = n > 1 && has_spread(values.col(0));
  out.X.resize(n, at.n_terms());
  out.Z.resize(n, at.n_terms());
  if (at.intercept) out.X.col(0) = out.Z.col(0) = root;
  for (Index j = 0; j < at.n_x; ++j) {
    const auto x = values.col(at.x(j)), z = values.col(at.other(j));
    out.X.col(first + j) = root.cwiseProduct(x);
    out.Z.col(first + j) = root.cwiseProduct(z);
    out.varies.push_back(n > 1 && has_spread(x) && has_spread(z));
  }
  return out;
}

// b = map Q_z'y and X b, for y less its mean.
struct OneWay {
  Matrix map;  // P x P
  Vector coef, fitted;
};

inline OneWay regress(const Projection& regressors,
                      const Projection& instruments,
                      const Matrix& inverse_overlap,
                      const Vector& y) {
  OneWay out;
  const Vector g = inverse_overlap * (instruments.Q.transpose() * y);
  out.map = regressors.C * inverse_overlap;
  out.coef = regressors.C * g;
  out.fitted = regressors.Q * g;
  return out;
}

struct InstrumentFit {
  Vector coef, std_error;
  double rss = kNaN, tss = kNaN;
};

// overlap: U D V' = Qz'Qx.
inline InstrumentFit fit_instruments(const Projection& px,
                                     const Projection& pz,
                                     const Eigen::JacobiSVD<Matrix>& overlap,
                                     const Vector& y,
                                     bool average,
                                     bool intercept) {
  const Matrix inverse = overlap.matrixV() *
                         overlap.singularValues().cwiseInverse().asDiagonal() *
                         overlap.matrixU().transpose();
  // The mean is taken out first: it would cost digits, and belongs to the constant alone.
  const double along = intercept ? px.Q.col(0).dot(y) : 0;
  Vector centred = y;
  if (intercept) centred -= along * px.Q.col(0);
  OneWay fit = regress(px, pz, inverse, centred);
  Vector variance = fit.map.rowwise().squaredNorm();
  if (average) {
    const OneWay back = regress(pz, px, inverse.transpose(), centred);
    // (Cx G Qz')(Cz G'Qx')' = Cx G Cz'.
    const Vector joint = fit.map.cwiseProduct(pz.C).rowwise().sum();
    variance = (variance + back.map.rowwise().squaredNorm() + 2 * joint) / 4;
    fit.coef = (fit.coef + back.coef) / 2;
    fit.fitted = (fit.fitted + back.fitted) / 2;
  }
  if (intercept) fit.coef[0] += along / std::sqrt(px.constant_norm2);
  InstrumentFit out;
  out.coef = fit.coef;
  out.rss = (centred - fit.fitted).squaredNorm();
  out.tss = centred.squaredNorm();
  const double df = static_cast<double>(y.size() - fit.coef.size());
  out.std_error = (variance * (out.rss / df)).cwiseSqrt();
  return out;
}

class InstrumentSolver {
 public:
  InstrumentSolver(const Design& design,
                   const std::vector<Column>& other,
                   const std::vector<RegressorHalf>& half,
                   const InstrumentOptions& options)
      : half_(half),
        options_(options),
        needed_(std::max(options.min_assets, design.n_terms() + 1)),
        at_{static_cast<Index>(design.x.size()),
            static_cast<Index>(other.size()),
            !design.weight.empty(),
            design.intercept},
        rows_(design),
        reader_(rows_, columns_of(design, other), at_.weighted) {
    const std::size_t size = static_cast<std::size_t>(design.n_periods);
    out_.prepare(design.n_terms(), design.n_periods);
    out_.strength = Vector::Constant(design.n_periods, kNaN);
    varies_.resize(size);
    negative_row_.assign(size, -1);
  }

  InstrumentSections solve() {
    for_each_task(reader_.n_tasks(), options_.threads, [&](Index task) {
      const std::vector<PeriodValues> periods = reader_.read(task);
      for (std::size_t i = 0; i < periods.size(); ++i)
        solve_period(reader_.first_period(task) + static_cast<Index>(i), periods[i]);
    });
    refuse_negative_weights();
    find_variation();
    return std::move(out_);
  }

 private:
  static std::vector<const Column*> columns_of(const Design& design,
                                               const std::vector<Column>& other) {
    std::vector<const Column*> columns{&design.y};
    for (const auto* group : {&design.x, &other, &design.weight})
      for (const Column& column : *group) columns.push_back(&column);
    return columns;
  }

  void solve_period(Index t, const PeriodValues& period) {
    const std::size_t at = static_cast<std::size_t>(t);
    const Index n = period.values.rows();
    out_.n_rows[at] = period.n_rows;
    out_.n_used[at] = n;
    negative_row_[at] = period.negative_row;
    if (n == 0) return;
    TwoHalves halves = whiten_halves(period.values, at_);
    varies_[at] = std::move(halves.varies);
    out_.status[at] = PeriodStatus::too_few_assets;
    if (n < needed_) return;
    if (half_[at] == RegressorHalf::one) std::swap(halves.X, halves.Z);
    const Projection px = project(std::move(halves.X), at_.intercept);
    if (!px.usable()) return refuse(at, px);
    const Projection pz = project(std::move(halves.Z), at_.intercept);
    if (!pz.usable()) return refuse(at, pz);
    store(t, px, pz, halves);
  }

  // Without a constant only a column of zeros has no spread, which the others span.
  void refuse(std::size_t at, const Projection& projection) {
    out_.status[at] = projection.no_variation && at_.intercept
                          ? PeriodStatus::no_variation
                          : PeriodStatus::rank_deficient;
    out_.culprit[at] = projection.culprit;
  }

  void store(Index t,
             const Projection& px,
             const Projection& pz,
             const TwoHalves& halves) {
    const std::size_t at = static_cast<std::size_t>(t);
    const Matrix product = pz.Q.transpose() * px.Q;
    const Eigen::JacobiSVD<Matrix> overlap(product,
                                           Eigen::ComputeFullU | Eigen::ComputeFullV);
    out_.strength[t] = std::min(1.0, overlap.singularValues().tail(1)[0]);
    const double least = options_.min_strength > 0
                             ? options_.min_strength
                             : 2 / std::sqrt(static_cast<double>(halves.y.size()));
    out_.status[at] = PeriodStatus::weak_instruments;
    if (!(out_.strength[t] >= std::max(least, kExposureTolerance))) return;
    out_.status[at] = PeriodStatus::estimated;
    const bool average = half_[at] == RegressorHalf::both;
    const InstrumentFit fit =
        fit_instruments(px, pz, overlap, halves.y, average, at_.intercept);
    out_.coef.col(t) = fit.coef;
    out_.std_error.col(t) = fit.std_error;
    const bool y_varies = at_.intercept ? halves.y_varies : fit.tss > 0;
    if (y_varies) out_.r_squared[t] = 1 - fit.rss / fit.tss;
  }

  void refuse_negative_weights() const {
    Index first = -1;
    for (const Index row : negative_row_)
      if (row >= 0 && (first < 0 || row < first)) first = row;
    if (first < 0) return;
    throw Error(
        "input", "a weight is negative", {{"row", static_cast<double>(first + 1)}});
  }

  void find_variation() {
    if (at_.intercept) out_.varies.push_back(true);
    for (std::size_t j = 0; j < static_cast<std::size_t>(at_.n_x); ++j)
      out_.varies.push_back(
          std::any_of(varies_.begin(), varies_.end(), [&](const std::vector<char>& v) {
            return !v.empty() && v[j];
          }));
  }

  const std::vector<RegressorHalf>& half_;
  const InstrumentOptions& options_;
  Index needed_;
  HalfColumns at_;
  RowsByPeriod rows_;
  PeriodReader reader_;
  std::vector<std::vector<char>> varies_;  // T; empty without complete rows
  std::vector<Index> negative_row_;        // T
  InstrumentSections out_;
};

}  // namespace detail

// design.x: the K betas of half zero, then the traits. other: the K betas of half one, in
// the same order. half: length T.
inline InstrumentSections instrument_sections(const Design& design,
                                              const std::vector<Column>& other,
                                              const std::vector<RegressorHalf>& half,
                                              const InstrumentOptions& options) {
  if (other.empty() || other.size() > design.x.size())
    throw Error("input",
                "the other half's betas must match some of the columns",
                {{"n_other", static_cast<double>(other.size())}});
  if (static_cast<Index>(half.size()) != design.n_periods)
    throw Error("input",
                "every period needs a half whose betas are the regressors",
                {{"n_half", static_cast<double>(half.size())}});
  return detail::InstrumentSolver(design, other, half, options).solve();
}

}  // namespace lambdabar
