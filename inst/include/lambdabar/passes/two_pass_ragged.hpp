// Two passes with holes, or with traits beside the betas: one cross-section a period on
// the assets present, betas from each asset's own T_i periods.
//   X_s = [1 B Z_s],  W = I or diag(1 / residual variance),  s over the Tu usable periods
//   H_s = (X_s'W X_s)^-1,  A_s = H_s X_s'W,  gamma_s,  alpha_is = R_is - x_is' gamma_s
//   G_i = (1/Tu) sum_s A_s[, i] gamma_f,s'          P x K, gamma_f the factors' premia
//   L_i = (1/Tu) sum_s w_i alpha_is H_s[, f]        P x K
//   U_i = (1/Tu) sum_s A_s[, i] w_i alpha_is        P, WLS only
// Rows over all T periods, the 1/T inside, D_i = centred factors on the asset's sample:
//   estimated     1{t usable} (gamma_t - gamma) / Tu - sum_i e_it G_i (D_i'D_i)^-1 d_it
//   misspecified  estimated + sum_i e_it L_i (D_i'D_i)^-1 d_it
//                           - sum_i U_i (e_it^2 - resid_var_i) / T_i
// Traits are exact, so they enter X_s but no row of their own. The rows are the
// derivative of the premia in the weights of the periods; without holes and traits they
// are the closed formulas. They assume that absence is unrelated to returns.
//
// Two sweeps over the panel, O(N T P (P + K)) plus one QR a period; memory O(N P + T P)
// times a fixed number of blocks, no N x N, no T x N. Not handled: GLS.
#pragma once

#include "two_pass_types.hpp"

namespace lambdabar {
namespace detail {

// What an asset's second sweep needs of a period's cross-section.
struct PeriodFit {
  PeriodStatus status = PeriodStatus::empty;
  Index culprit = -1;
  Index n_assets = 0;
  Vector premia;  // P
  Matrix slopes;  // C of the projection without the constant
  Vector centre;  // as in the projection
  double constant_norm2 = 0;
  Matrix factor_H;  // P x K, columns of H for the factors
  PeriodQuality quality;
};

// Writes x = [b_i z_it] without the constant; false when the asset is absent at t.
inline bool read_exposures(
    const TwoPassData& data, const FirstPass& first, Index asset, Index t, double* x) {
  if (first.status[static_cast<std::size_t>(asset)] != AssetStatus::estimated ||
      !std::isfinite(data.returns(t, asset)))
    return false;
  const Index n_factors = first.beta.cols();
  for (std::size_t q = 0; q < data.traits.size(); ++q) {
    const double value = data.traits[q](t, asset);
    if (!std::isfinite(value)) return false;
    x[n_factors + static_cast<Index>(q)] = value;
  }
  for (Index k = 0; k < n_factors; ++k) x[k] = first.beta(asset, k);
  return true;
}

struct Gathered {
  Matrix X;  // n x P, whitened
  Vector y;  // n, whitened
  Index n_assets = 0;
};

// The cross-sections of a few neighbouring periods, gathered asset by asset so that each
// visit to the panel reads neighbouring numbers.
inline std::vector<Gathered> gather(const TwoPassData& data,
                                    const FirstPass& first,
                                    const Vector& root_weight,
                                    bool intercept,
                                    Index begin,
                                    Index count) {
  const Index n_assets = data.returns.cols();
  const Index size = first.beta.cols() + static_cast<Index>(data.traits.size());
  const Index shift = intercept ? 1 : 0;
  std::vector<Gathered> sections(static_cast<std::size_t>(count));
  for (Gathered& section : sections) {
    section.X.resize(n_assets, size + shift);
    section.y.resize(n_assets);
  }
  std::vector<double> x(static_cast<std::size_t>(size));
  for (Index i = 0; i < n_assets; ++i) {
    for (Index s = 0; s < count; ++s) {
      if (!read_exposures(data, first, i, begin + s, x.data())) continue;
      Gathered& section = sections[static_cast<std::size_t>(s)];
      const Index row = section.n_assets++;
      const double root = root_weight(i);
      if (intercept) section.X(row, 0) = root;
      for (Index j = 0; j < size; ++j)
        section.X(row, j + shift) = root * x[static_cast<std::size_t>(j)];
      section.y(row) = root * data.returns(begin + s, i);
    }
  }
  return sections;
}

inline PeriodFit fit_section(const Gathered& section,
                             bool intercept,
                             Index n_factors,
                             Index min_assets) {
  PeriodFit fit;
  fit.n_assets = section.n_assets;
  if (section.n_assets == 0) return fit;
  fit.status = PeriodStatus::too_few_assets;
  if (section.n_assets < min_assets) return fit;
  Projection projection = project(section.X.topRows(section.n_assets), intercept);
  fit.culprit = projection.culprit;
  fit.status = projection.usable()       ? PeriodStatus::estimated
               : projection.no_variation ? PeriodStatus::no_variation
                                         : PeriodStatus::rank_deficient;
  if (!projection.usable()) return fit;
  const Vector y = section.y.head(section.n_assets);
  fit.premia = projection.C * (projection.Q.transpose() * y);
  fit.quality = period_quality(projection, y, intercept);
  fit.factor_H =
      projection.C * projection.C.middleRows(intercept ? 1 : 0, n_factors).transpose();
  fit.slopes = std::move(projection.slopes);
  fit.centre = std::move(projection.centre);
  fit.constant_norm2 = projection.constant_norm2;
  return fit;
}

inline constexpr Index kPeriodsPerGather = 8;

inline std::vector<PeriodFit> fit_periods(const TwoPassData& data,
                                          const TwoPassOptions& options,
                                          const FirstPass& first,
                                          const Vector& root_weight) {
  const Index n_periods = data.returns.rows();
  const Index n_factors = data.factors.cols();
  const Index n_terms =
      n_factors + static_cast<Index>(data.traits.size()) + (options.intercept ? 1 : 0);
  const Index min_assets =
      options.min_assets > 0 ? std::max(options.min_assets, n_terms) : n_terms + 1;
  std::vector<PeriodFit> fits(static_cast<std::size_t>(n_periods));
  for_each_task((n_periods + kPeriodsPerGather - 1) / kPeriodsPerGather,
                options.threads,
                [&](Index task) {
                  const Index begin = task * kPeriodsPerGather;
                  const Index count = std::min(kPeriodsPerGather, n_periods - begin);
                  const std::vector<Gathered> sections =
                      gather(data, first, root_weight, options.intercept, begin, count);
                  for (Index s = 0; s < count; ++s)
                    fits[static_cast<std::size_t>(begin + s)] =
                        fit_section(sections[static_cast<std::size_t>(s)],
                                    options.intercept,
                                    n_factors,
                                    min_assets);
                });
  return fits;
}

// A[, i] of one period for the asset with exposures x and weight w, into out (P).
struct AssetColumn {
  Vector centred, root, step;  // work space

  void compute(
      const PeriodFit& fit, const double* x, double w, bool intercept, Vector& out) {
    const Index size = fit.slopes.rows();
    centred = Eigen::Map<const Vector>(x, size);
    if (intercept) centred -= fit.centre;
    root.noalias() = fit.slopes.transpose() * centred;
    step.noalias() = fit.slopes * root;
    out.tail(size) = w * step;
    if (intercept) out(0) = w * (1.0 / fit.constant_norm2 - fit.centre.dot(step));
  }
};

// Sums over the usable periods of one asset, still to be divided by Tu.
struct AssetLoads {
  Matrix G, L;  // P x K
  Vector U;     // P
  double return_sum = 0, fitted_sum = 0;
  Index n_priced = 0;

  AssetLoads(Index n_terms, Index n_factors)
      : G(n_terms, n_factors), L(n_terms, n_factors), U(n_terms) {}

  void reset() {
    G.setZero();
    L.setZero();
    U.setZero();
    return_sum = fitted_sum = 0;
    n_priced = 0;
  }
};

struct RaggedPass {
  const TwoPassData& data;
  const TwoPassOptions& options;
  const FactorBasis& full;
  const std::vector<PeriodFit>& fits;
  const Vector& weight;  // N
  TwoPass& out;

  struct Workspace {
    AssetColumn column;
    Vector a;  // P
    std::vector<double> x;
    AssetLoads loads;
    AssetSample sample;
  };

  void load_asset(Index i, Workspace& work) const {
    AssetLoads& loads = work.loads;
    loads.reset();
    const Index size = out.n_terms() - out.first_factor();
    for (Index s : out.used_periods) {
      if (!read_exposures(data, out.first, i, s, work.x.data())) continue;
      const PeriodFit& fit = fits[static_cast<std::size_t>(s)];
      work.column.compute(fit, work.x.data(), weight(i), options.intercept, work.a);
      double fitted =
          Eigen::Map<const Vector>(work.x.data(), size).dot(fit.premia.tail(size));
      if (options.intercept) fitted += fit.premia(0);
      const double alpha = data.returns(s, i) - fitted;
      for (Index k = 0; k < out.n_factors; ++k)
        loads.G.col(k) += fit.premia(out.first_factor() + k) * work.a;
      loads.L += (weight(i) * alpha) * fit.factor_H;
      loads.U += (weight(i) * alpha) * work.a;
      loads.return_sum += data.returns(s, i);
      loads.fitted_sum += fitted;
      ++loads.n_priced;
    }
  }

  void store_averages(Index i, const AssetLoads& loads) const {
    out.n_priced[static_cast<std::size_t>(i)] = loads.n_priced;
    if (loads.n_priced == 0) return;
    const double n = static_cast<double>(loads.n_priced);
    out.mean_return(i) = loads.return_sum / n;
    out.fitted(i) = loads.fitted_sum / n;
    out.alpha(i) = out.mean_return(i) - out.fitted(i);
  }

  // Adds the asset's first-pass error to both kinds of rows.
  void add_rows(Index i, Workspace& work, Matrix& estimated, Matrix& extra) const {
    read_asset(data.returns, data.factors, full, i, out.first.min_obs, work.sample);
    const FactorBasis& basis = *work.sample.basis;
    const AssetFit fit = fit_asset(basis, work.sample.returns);
    const double tu = static_cast<double>(out.used_periods.size());
    const double n = static_cast<double>(fit.residual.size());
    const Matrix by_G = basis.Q * (work.loads.G * basis.C / tu).transpose();
    const Matrix by_L = basis.Q * (work.loads.L * basis.C / tu).transpose();
    const bool weighted = options.weighting == Weighting::wls;
    const double variance = out.first.resid_var(i);
    for (Index row = 0; row < fit.residual.size(); ++row) {
      const Index t = work.sample.period[static_cast<std::size_t>(row)];
      const double e = fit.residual(row);
      estimated.row(t) -= e * by_G.row(row);
      extra.row(t) += e * by_L.row(row);
      if (weighted)
        extra.row(t) -= ((e * e - variance) / (n * tu)) * work.loads.U.transpose();
    }
  }

  // Blocks of assets are fixed by N alone and added in order: same bits on any number of
  // threads.
  void run() const {
    constexpr Index kMaxBlocks = 64;
    const Index n_assets = data.returns.cols(), n_periods = data.returns.rows();
    const Index per_block =
        std::max(kAssetsPerTask, (n_assets + kMaxBlocks - 1) / kMaxBlocks);
    const Index n_blocks = (n_assets + per_block - 1) / per_block;
    const Index n_terms = out.n_terms();
    std::vector<Matrix> estimated(static_cast<std::size_t>(n_blocks));
    std::vector<Matrix> extra(static_cast<std::size_t>(n_blocks));
    for_each_task(n_blocks, options.threads, [&](Index block) {
      const auto slot = static_cast<std::size_t>(block);
      estimated[slot] = extra[slot] = Matrix::Zero(n_periods, n_terms);
      Workspace work{{},
                     Vector(n_terms),
                     std::vector<double>(static_cast<std::size_t>(n_terms)),
                     AssetLoads(n_terms, out.n_factors),
                     {}};
      const Index end = std::min(n_assets, (block + 1) * per_block);
      for (Index i = block * per_block; i < end; ++i) {
        if (out.first.status[static_cast<std::size_t>(i)] != AssetStatus::estimated)
          continue;
        load_asset(i, work);
        store_averages(i, work.loads);
        if (work.loads.n_priced > 0) add_rows(i, work, estimated[slot], extra[slot]);
      }
    });
    out.rows_estimated = Matrix::Zero(n_periods, n_terms);
    out.rows_misspecified = Matrix::Zero(n_periods, n_terms);
    for (std::size_t block = 0; block < estimated.size(); ++block) {
      out.rows_estimated += estimated[block];
      out.rows_misspecified += extra[block];
    }
    for (std::size_t s = 0; s < out.used_periods.size(); ++s)
      out.rows_estimated.row(out.used_periods[s]) +=
          out.rows_series.row(static_cast<Index>(s));
    out.rows_misspecified += out.rows_estimated;
  }
};

inline void store_period(const PeriodFit& fit, Index t, TwoPass& out) {
  const auto slot = static_cast<std::size_t>(t);
  out.status[slot] = fit.status;
  out.culprit[slot] = fit.culprit;
  out.n_assets[slot] = fit.n_assets;
  if (fit.status != PeriodStatus::estimated) return;
  out.used_periods.push_back(t);
  out.period_premia.row(t) = fit.premia.transpose();
  out.period_se.row(t) = fit.quality.std_error.transpose();
  out.r_squared(t) = fit.quality.r_squared;
}

// No period could be estimated: the commonest reason is the error.
[[noreturn]] inline void throw_nothing_estimated(const TwoPass& out) {
  double n_too_few = 0, n_rank = 0, n_no_variation = 0;
  Index rank_culprit = -1, flat_culprit = -1;
  for (std::size_t t = 0; t < out.status.size(); ++t) {
    if (out.status[t] == PeriodStatus::no_variation) {
      ++n_no_variation;
      if (flat_culprit < 0) flat_culprit = out.culprit[t];
    } else if (out.status[t] == PeriodStatus::rank_deficient) {
      ++n_rank;
      if (rank_culprit < 0) rank_culprit = out.culprit[t];
    } else {
      ++n_too_few;
    }
  }
  const Error::Facts counts{{"n_too_few", n_too_few},
                            {"n_rank_deficient", n_rank},
                            {"n_no_variation", n_no_variation},
                            {"n_left_out", static_cast<double>(out.n_left_out)}};
  const auto with_term = [&](Index culprit) {
    Error::Facts facts{{"term", static_cast<double>(culprit + 1)}};
    facts.insert(facts.end(), counts.begin(), counts.end());
    return facts;
  };
  if (n_no_variation > 0 && n_no_variation >= n_rank)
    throw Error("no_variation",
                "A term does not vary across assets in any period.",
                with_term(flat_culprit));
  if (n_rank > 0)
    throw Error(
        "rank", "The terms are collinear in every period.", with_term(rank_culprit));
  throw Error("too_few", "No period has enough assets.", counts);
}

inline TwoPass ragged_two_pass(const TwoPassData& data,
                               const TwoPassOptions& options,
                               const FactorBasis& full,
                               FirstPass first) {
  if (options.weighting == Weighting::gls)
    throw Error("unsupported", "GLS needs a complete panel without traits.");
  TwoPass out = start_two_pass(data, options, std::move(first));
  const Index n_assets = data.returns.cols();
  const Vector weight = options.weighting == Weighting::wls ? asset_weights(out.first)
                                                            : Vector::Ones(n_assets);
  const std::vector<PeriodFit> fits =
      fit_periods(data, options, out.first, weight.cwiseSqrt());
  for (Index t = 0; t < data.returns.rows(); ++t)
    store_period(fits[static_cast<std::size_t>(t)], t, out);
  if (out.used_periods.empty()) throw_nothing_estimated(out);

  const Index n_used = static_cast<Index>(out.used_periods.size());
  out.rows_series.resize(n_used, out.period_premia.cols());
  for (Index s = 0; s < n_used; ++s)
    out.rows_series.row(s) =
        out.period_premia.row(out.used_periods[static_cast<std::size_t>(s)]);
  out.premia = out.rows_series.colwise().mean();
  out.rows_series.rowwise() -= out.premia.transpose();
  out.rows_series /= static_cast<double>(n_used);

  out.mean_return = out.fitted = out.alpha = Vector::Constant(n_assets, kNaN);
  out.n_priced.assign(static_cast<std::size_t>(n_assets), 0);
  RaggedPass{data, options, full, fits, weight, out}.run();
  return out;
}

}  // namespace detail
}  // namespace lambdabar
