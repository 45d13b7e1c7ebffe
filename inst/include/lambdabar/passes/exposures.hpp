// First pass over moving windows: for each (asset, slot) asked for, the regression of the
// asset's returns on the factors over the rows that a window ending at that slot holds.
//
//   full       all rows up to the slot        rolling    the last `length` calendar slots
//   expanding  the same, updated               decay      weights 2^-(age / half_life)
//
// Slots are calendar positions, so a gap shortens a rolling sample and ages a decaying one.
// A row counts when the return is finite, its weight is positive and every factor (at every
// lead and lag) is known. Rows with leads are complete only after the last lead, so a window
// ending at t holds rows lags .. leads slots inside it, and nothing from after t.
//
// Classical errors s2 = rss / (n - K - 1) and s2 S^-1; decaying weights as in
// window_fit.hpp. An asset's result never depends on its later rows, not even in the last
// bit, and is the same on any number of threads and for any order of rows.
//
// Cost: three merges a slot whatever the window's length. Rolling windows use blocks of
// `length` slots: aggregates from the left and from the right inside each, any window is the
// tail of one merged with the head of the next. Nothing is ever subtracted. A window whose
// cross-products are close to singular, or whose fit is close to exact, is solved from its
// rows. Memory: O(length K^2) a thread, and 4 bytes a row when rows are not by asset.
#pragma once

#include "../panel/asset_rows.hpp"
#include "../panel/design.hpp"
#include "../parallel.hpp"
#include "aggregates.hpp"
#include "lead_lag.hpp"
#include "window_fit.hpp"

#include <optional>

namespace lambdabar {

enum class WindowKind { full, rolling, expanding, decay };

struct ExposureOptions {
  WindowKind window = WindowKind::full;
  Index length = 0;      // slots, rolling
  double half_life = 0;  // slots, decay
  Index min_obs = 0;     // rows a beta needs; never fewer than K (leads + lags + 1) + 2
  LeadLag lead_lag;
  // Only rows of slots whose mark equals `half`: disjoint subsamples. Null: all slots.
  const int* half_of_slot = nullptr;
  int half = 0;
  int threads = 1;
};

struct ExposureData {
  Column returns;
  std::vector<Column> weight;   // empty or one
  const int* asset = nullptr;   // n, 0 .. n_assets - 1
  const int* period = nullptr;  // n, 0 .. n_periods - 1
  Index n_rows = 0, n_assets = 0;
  std::vector<int> slot;        // n_periods, calendar position of a period, increasing
  Eigen::Ref<const Matrix> factors;  // slots x K, NaN where unknown
};

// What is asked: m pairs of an asset and a time, by small codes. Several times may end at
// one slot (a full window has one end for all of them).
struct ExposureQueries {
  const int* asset = nullptr;   // m, 0 .. data_asset.size() - 1
  const int* time = nullptr;    // m, 0 .. last_slot.size() - 1; a pair occurs once
  Index n = 0;
  std::vector<int> data_asset;  // the asset in the data, -1: not there
  std::vector<int> last_slot;   // never falling; before the first slot: an empty window
};

// Where the answers go: arrays of m, or m x K by columns, `missing` where not estimated.
// Those that are null are not written.
struct ExposureColumns {
  double missing = kNaN;
  double *beta = nullptr, *std_error = nullptr;
  double* covariance = nullptr;  // m x K(K+1)/2, lower triangle by columns
  double *alpha = nullptr, *resid_var = nullptr, *r_squared = nullptr;
  int *n_obs = nullptr, *status = nullptr;  // status as WindowStatus
};

namespace detail {

// Below this share of a variable's own sum of squares a pivot has lost five digits.
inline constexpr double kWindowPivot = 1e-5;

// The usable rows of one asset, in the order of time.
struct AssetSeries {
  std::vector<int> slot;
  std::vector<double> y, weight;

  std::size_t size() const { return slot.size(); }
};

struct WindowPlan {
  ExposureOptions options;
  Index n_factors = 0;  // K of the question, without leads and lags
  std::vector<double> factor_rows;  // slots x regressors, by rows
  std::vector<char> known;          // slots: every regressor is there
  int n_slots = 0, n_regressors = 0;
  int min_obs = 0, length = 0, leads = 0;
  double decay = 1.0;  // a slot
  Matrix shift_weights;  // slots x (shifts K), fowler_rorke only

  const double* factors_at(int slot) const {
    return factor_rows.data() + static_cast<std::size_t>(slot) * static_cast<std::size_t>(n_regressors);
  }
};

inline void fill_shift_weights(const Eigen::Ref<const Matrix>& factors, WindowPlan& plan) {
  const LeadLag& shape = plan.options.lead_lag;
  const Index T = factors.rows(), K = factors.cols(), L = shape.lags;
  plan.shift_weights = Matrix::Constant(T, shape.n_shifts() * K, kNaN);
  for (Index k = 0; k < K; ++k) {
    const Vector x = factors.col(k);
    for (Index t = 0; t < T; ++t) {
      const Index begin = plan.options.window == WindowKind::rolling
                              ? std::max<Index>(0, t - plan.options.length + 1)
                              : 0;
      const Vector c = fowler_rorke_weights(autocorrelations(x.data(), begin, t, L));
      for (Index j = 0; j < shape.n_shifts(); ++j) plan.shift_weights(t, j * K + k) = c(j);
    }
  }
}

inline WindowPlan plan_windows(const ExposureData& data, const ExposureOptions& options) {
  WindowPlan plan;
  plan.options = options;
  plan.n_factors = data.factors.cols();
  plan.n_slots = static_cast<int>(data.factors.rows());
  const LeadLag& shape = options.lead_lag;
  plan.n_regressors = static_cast<int>(plan.n_factors * shape.n_shifts());
  plan.min_obs = std::max(static_cast<int>(options.min_obs), plan.n_regressors + 2);
  plan.leads = static_cast<int>(shape.leads);
  plan.length = static_cast<int>(options.length - shape.leads - shape.lags);
  if (options.window == WindowKind::rolling && plan.length < plan.min_obs)
    throw Error("short_window",
                "The window holds fewer periods than a beta needs.",
                {{"length", static_cast<double>(options.length)},
                 {"usable", static_cast<double>(plan.length)},
                 {"min_obs", static_cast<double>(plan.min_obs)}});
  if (options.window == WindowKind::decay) plan.decay = std::exp2(-1.0 / options.half_life);
  if (shape.form == LeadLagForm::fowler_rorke) {
    if (shape.leads != shape.lags || options.window == WindowKind::decay)
      throw Error("unsupported",
                  "Weights of leads and lags from autocorrelations need as many leads as lags "
                  "and a window without decay.");
    fill_shift_weights(data.factors, plan);
  }
  const Matrix regressors = shifted_factors(data.factors, shape);
  const auto columns = static_cast<std::size_t>(plan.n_regressors);
  plan.factor_rows.resize(static_cast<std::size_t>(plan.n_slots) * columns);
  plan.known.assign(static_cast<std::size_t>(plan.n_slots), 1);
  for (Index t = 0; t < regressors.rows(); ++t) {
    for (Index k = 0; k < regressors.cols(); ++k) {
      const auto at = static_cast<std::size_t>(t);
      plan.factor_rows[at * columns + static_cast<std::size_t>(k)] = regressors(t, k);
      plan.known[at] = plan.known[at] && std::isfinite(regressors(t, k));
    }
    if (options.half_of_slot && options.half_of_slot[t] != options.half)
      plan.known[static_cast<std::size_t>(t)] = 0;
  }
  return plan;
}

// The windows of one asset, one query after the other in the order of time.
template <int Fixed>
class WindowWalk {
 public:
  WindowWalk(const WindowPlan& plan, const ExposureColumns& out, Index n_out)
      : plan_(plan),
        out_(out),
        n_out_(n_out),
        shape_(plan.n_regressors),
        row_(shape_.n_variables()),
        head_anchor_(shape_.n_variables()),
        tail_anchor_(shape_.n_variables()),
        shift_(shape_.n_variables()),
        head_(shape_.size()),
        squares_(shape_.size()),
        window_(shape_.size()),
        triangle_(packed_size(shape_.n_factors())),
        inverse_(packed_size(shape_.n_factors())) {
    const auto K = static_cast<std::size_t>(shape_.n_factors());
    estimate_.beta.resize(K);
    estimate_.covariance.resize(K * (K + 1) / 2);
  }

  void start(const AssetSeries& series) {
    series_ = &series;
    next_ = first_ = tail_begin_ = tail_end_ = 0;
    block_ = -1;
    last_end_ = -1;
    wanted_ = 0;
    shape_.clear(head_.data());
    shape_.clear(squares_.data());
    // A full window is solved when its end is reached, not slot by slot.
    answered_ = false;
  }

  // Ends never fall from one call to the next.
  void answer(int last_slot, Index row) {
    const int end = std::min(last_slot, plan_.n_slots - 1) - plan_.leads;
    if (!answered_ || end != last_end_) {
      advance(end);
      last_end_ = end;
      answered_ = true;
      solve();
      combine(std::min(last_slot, plan_.n_slots - 1));
    }
    store(row);
  }

 private:
  const AssetSeries& series() const { return *series_; }

  void read(std::size_t i, const double* anchor, double* z) const {
    const double* f = plan_.factors_at(series().slot[i]);
    const int K = shape_.n_factors();
    for (int k = 0; k < K; ++k) z[k] = f[k] - anchor[k];
    z[K] = series().y[i] - anchor[K];
  }

  void set_anchor(std::size_t i, double* anchor) const {
    const double* f = plan_.factors_at(series().slot[i]);
    std::copy(f, f + shape_.n_factors(), anchor);
    anchor[shape_.n_factors()] = series().y[i];
  }

  void advance(int end) {
    switch (plan_.options.window) {
      case WindowKind::rolling: advance_rolling(end); break;
      case WindowKind::expanding: advance_expanding(end); break;
      case WindowKind::decay: advance_decay(end); break;
      case WindowKind::full:
        while (next_ < series().size() && series().slot[next_] <= end) ++next_;
        break;
    }
  }

  void push_head(double w) {
    if (shape_.weight(head_.data()) == 0.0) set_anchor(next_, head_anchor_.data());
    read(next_, head_anchor_.data(), row_.data());
    shape_.push(head_.data(), row_.data(), w);
  }

  void advance_expanding(int end) {
    for (; next_ < series().size() && series().slot[next_] <= end; ++next_)
      push_head(series().weight[next_]);
  }

  // head_ has weights a d, squares_ a d^2, wanted_ is the sum of d; all of them as seen from
  // the last row, since a common factor cancels.
  void advance_decay(int end) {
    for (; next_ < series().size() && series().slot[next_] <= end; ++next_) {
      if (next_ == 0) {
        set_anchor(0, head_anchor_.data());
      } else {
        const double kept =
            std::pow(plan_.decay, series().slot[next_] - series().slot[next_ - 1]);
        shape_.scale(head_.data(), kept);
        shape_.scale(squares_.data(), kept * kept);
        wanted_ *= kept;
        // The anchor follows the series, else one far row would cost digits for ever.
        if (next_ % 64 == 0) move_anchor();
      }
      read(next_, head_anchor_.data(), row_.data());
      shape_.push(head_.data(), row_.data(), series().weight[next_]);
      shape_.push(squares_.data(), row_.data(), series().weight[next_]);
      wanted_ += 1.0;
    }
  }

  void move_anchor() {
    std::copy(head_anchor_.data(), head_anchor_.data() + shape_.n_variables(), shift_.data());
    set_anchor(next_, head_anchor_.data());
    for (int i = 0; i < shape_.n_variables(); ++i) {
      const double moved = head_anchor_.data()[i] - shift_.data()[i];
      head_.data()[1 + i] -= moved;
      squares_.data()[1 + i] -= moved;
    }
  }

  void advance_rolling(int end) {
    if (end < 0) return;
    if (end / plan_.length != block_) enter_block(end / plan_.length);
    for (; next_ < series().size() && series().slot[next_] <= end; ++next_)
      push_head(series().weight[next_]);
    const int begin = end - plan_.length + 1;
    while (first_ < next_ && series().slot[first_] < begin) ++first_;
  }

  // Aggregates of the block before, from each of its rows to its end.
  void enter_block(int block) {
    const int begin = block * plan_.length;
    while (next_ < series().size() && series().slot[next_] < begin) ++next_;
    tail_end_ = next_;
    tail_begin_ = first_;
    while (tail_begin_ < tail_end_ && series().slot[tail_begin_] < begin - plan_.length)
      ++tail_begin_;
    const auto size = static_cast<std::size_t>(shape_.size());
    tails_.resize((tail_end_ - tail_begin_) * size);
    for (std::size_t i = tail_end_; i > tail_begin_; --i) {
      double* tail = tail_at(i - 1);
      if (i == tail_end_) {
        set_anchor(i - 1, tail_anchor_.data());
        shape_.clear(tail);
      } else {
        std::copy(tail_at(i), tail_at(i) + size, tail);
      }
      read(i - 1, tail_anchor_.data(), row_.data());
      shape_.push(tail, row_.data(), series().weight[i - 1]);
    }
    shape_.clear(head_.data());
    block_ = block;
  }

  double* tail_at(std::size_t i) {
    return tails_.data() + (i - tail_begin_) * static_cast<std::size_t>(shape_.size());
  }

  void solve() {
    estimate_.n_rows = static_cast<Index>(next_ - first_);
    estimate_.status = WindowStatus::too_few_rows;
    if (estimate_.n_rows < plan_.min_obs) return;
    const bool solved = plan_.options.window == WindowKind::full ? false
                        : plan_.options.window == WindowKind::rolling
                            ? solve_rolling()
                            : solve_aggregate(head_.data(), head_anchor_.data());
    if (!solved) solve_rows();
  }

  bool solve_rolling() {
    if (first_ >= tail_end_) return solve_aggregate(head_.data(), head_anchor_.data());
    double* tail = tail_at(first_);
    if (next_ == tail_end_) return solve_aggregate(tail, tail_anchor_.data());
    for (int i = 0; i < shape_.n_variables(); ++i)
      shift_.data()[i] = head_anchor_.data()[i] - tail_anchor_.data()[i];
    shape_.merge(tail, head_.data(), shift_.data(), window_.data());
    return solve_aggregate(window_.data(), tail_anchor_.data());
  }

  // S_ff = L L', u = L^-1 S_fy, b = L'^-1 u, rss = S_yy - u'u. False when a pivot is too
  // small against what it came from.
  bool solve_aggregate(const double* aggregate, const double* anchor) {
    const int K = shape_.n_factors();
    const double* S = shape_.products(aggregate);
    double *L = triangle_.data(), *u = row_.data();
    for (int i = 0; i < K; ++i) {
      for (int j = 0; j <= i; ++j) {
        double value = S[packed_at(i, j)];
        for (int l = 0; l < j; ++l) value -= L[packed_at(i, l)] * L[packed_at(j, l)];
        if (j < i) {
          L[packed_at(i, j)] = value * L[packed_at(j, j)];
        } else {
          if (!(value > kWindowPivot * S[packed_at(i, i)])) return false;
          L[packed_at(i, i)] = 1.0 / std::sqrt(value);  // the diagonal is kept inverted
        }
      }
    }
    const double tss = S[packed_at(K, K)];
    double rss = tss;
    for (int i = 0; i < K; ++i) {
      double value = S[packed_at(K, i)];
      for (int l = 0; l < i; ++l) value -= L[packed_at(i, l)] * u[l];
      u[i] = value * L[packed_at(i, i)];
      rss -= u[i] * u[i];
    }
    if (!(rss > kWindowPivot * tss) && tss > 0.0) return false;
    double* b = estimate_.beta.data();
    for (int i = K - 1; i >= 0; --i) {
      double value = u[i];
      for (int l = i + 1; l < K; ++l) value -= L[packed_at(l, i)] * b[l];
      b[i] = value * L[packed_at(i, i)];
    }
    invert_triangle();
    const double* mean = shape_.mean(aggregate);
    double alpha = mean[K] + anchor[K];
    for (int k = 0; k < K; ++k) alpha -= b[k] * (mean[k] + anchor[k]);
    estimate_.status = WindowStatus::estimated;
    estimate_.alpha = alpha;
    estimate_.r_squared = tss > 0.0 ? 1.0 - rss / tss : kNaN;
    if (plan_.options.window == WindowKind::decay) {
      fill_decayed_covariance(aggregate, rss);
    } else {
      estimate_.resid_var = rss / static_cast<double>(estimate_.n_rows - 1 - K);
      fill_covariance(estimate_.resid_var);
    }
    return true;
  }

  // L^-1, lower triangle by rows.
  void invert_triangle() {
    const int K = shape_.n_factors();
    const double* L = triangle_.data();
    double* M = inverse_.data();
    for (int i = 0; i < K; ++i) {
      M[packed_at(i, i)] = L[packed_at(i, i)];
      for (int j = 0; j < i; ++j) {
        double value = 0;
        for (int l = j; l < i; ++l) value -= L[packed_at(i, l)] * M[packed_at(l, j)];
        M[packed_at(i, j)] = value * L[packed_at(i, i)];
      }
    }
  }

  // (S^-1)_ij = sum_l M_li M_lj.
  double inverse_at(int i, int j) const {
    const double* M = inverse_.data();
    double value = 0;
    for (int l = std::max(i, j); l < shape_.n_factors(); ++l)
      value += M[packed_at(l, i)] * M[packed_at(l, j)];
    return value;
  }

  void fill_covariance(double s2) {
    double* V = estimate_.covariance.data();
    for (int j = 0; j < shape_.n_factors(); ++j)
      for (int i = j; i < shape_.n_factors(); ++i) *V++ = s2 * inverse_at(i, j);
  }

  // C = S2 + W2 (m2 - m)(m2 - m)': the squared weights have a mean of their own.
  void fill_decayed_covariance(const double* aggregate, double rss) {
    const int K = shape_.n_factors();
    const double *m = shape_.mean(aggregate), *m2 = shape_.mean(squares_.data());
    const double* S2 = shape_.products(squares_.data());
    const double w2 = shape_.weight(squares_.data());
    Matrix C(K, K), inverse(K, K);
    for (int i = 0; i < K; ++i) {
      for (int j = 0; j <= i; ++j) {
        C(i, j) = C(j, i) = S2[packed_at(i, j)] + w2 * (m2[i] - m[i]) * (m2[j] - m[j]);
        inverse(i, j) = inverse(j, i) = inverse_at(i, j);
      }
    }
    const Matrix half = inverse * C;
    estimate_.resid_var =
        rss / (wanted_ - w2 / shape_.weight(aggregate) - half.trace());
    const Matrix V = estimate_.resid_var * half * inverse;
    double* packed = estimate_.covariance.data();
    for (int j = 0; j < K; ++j)
      for (int i = j; i < K; ++i) *packed++ = V(i, j);
  }

  void solve_rows() {
    const Index n = estimate_.n_rows, K = shape_.n_factors();
    WindowRows rows{Matrix(n, K), Vector(n), Vector(n), Vector::Ones(n), false};
    rows.decays = plan_.options.window == WindowKind::decay;
    for (Index r = 0; r < n; ++r) {
      const std::size_t i = first_ + static_cast<std::size_t>(r);
      rows.factors.row(r) =
          Eigen::Map<const Eigen::RowVectorXd>(plan_.factors_at(series().slot[i]), K);
      rows.y(r) = series().y[i];
      if (rows.decays)
        rows.wanted(r) =
            std::pow(plan_.decay, series().slot[next_ - 1] - series().slot[i]);
      rows.weight(r) = series().weight[i] * rows.wanted(r);
    }
    fit_window(rows, estimate_);
  }

  // With leads and lags: beta = sum_j c_j b_j and c'Vc, in place.
  void combine(int slot) {
    const int K = static_cast<int>(plan_.n_factors), all = shape_.n_factors();
    if (K == all || estimate_.status != WindowStatus::estimated) return;
    Matrix V(all, all);
    std::size_t at = 0;
    for (int j = 0; j < all; ++j)
      for (int i = j; i < all; ++i) V(i, j) = V(j, i) = estimate_.covariance[at++];
    Matrix c = Matrix::Zero(all, K);
    for (int i = 0; i < all; ++i)
      c(i, i % K) = plan_.shift_weights.size() ? plan_.shift_weights(slot, i) : 1.0;
    if (!c.allFinite()) {
      estimate_.status = WindowStatus::undefined_weights;
      return;
    }
    const Vector beta = c.transpose() * Eigen::Map<const Vector>(estimate_.beta.data(), all);
    const Matrix summed = c.transpose() * V * c;
    at = 0;
    for (int j = 0; j < K; ++j) {
      estimate_.beta[static_cast<std::size_t>(j)] = beta(j);
      for (int i = j; i < K; ++i) estimate_.covariance[at++] = summed(i, j);
    }
  }

  void store(Index row) const {
    const bool fine = estimate_.status == WindowStatus::estimated;
    const int K = static_cast<int>(plan_.n_factors);
    const double *b = estimate_.beta.data(), *V = estimate_.covariance.data();
    for (int k = 0; k < K; ++k) {
      if (out_.beta) out_.beta[k * n_out_ + row] = fine ? b[k] : out_.missing;
      if (out_.std_error) out_.std_error[k * n_out_ + row] = fine ? std::sqrt(*V) : out_.missing;
      V += K - k;
    }
    V = estimate_.covariance.data();
    if (out_.covariance)
      for (int j = 0; j < packed_size(K); ++j)
        out_.covariance[j * n_out_ + row] = fine ? V[j] : out_.missing;
    if (out_.alpha) out_.alpha[row] = fine ? estimate_.alpha : out_.missing;
    if (out_.resid_var) out_.resid_var[row] = fine ? estimate_.resid_var : out_.missing;
    if (out_.r_squared) out_.r_squared[row] = fine ? estimate_.r_squared : out_.missing;
    if (out_.n_obs) out_.n_obs[row] = static_cast<int>(estimate_.n_rows);
    if (out_.status) out_.status[row] = static_cast<int>(estimate_.status);
  }

  const WindowPlan& plan_;
  const ExposureColumns& out_;
  const Index n_out_;
  const Aggregates<Fixed> shape_;
  template <int Size>
  using Room = Scratch<Fixed, Size>;
  static constexpr int kVariables = Fixed + 1, kTriangle = packed_size(Fixed);
  Room<kVariables> row_, head_anchor_, tail_anchor_, shift_;
  Room<Aggregates<Fixed>::kFixedSize> head_, squares_, window_;
  Room<kTriangle> triangle_, inverse_;
  std::vector<double> tails_;
  WindowEstimate estimate_;

  const AssetSeries* series_ = nullptr;
  // Rows first_ .. next_ - 1 are in the window; those of tails_ end at tail_end_ - 1.
  std::size_t next_ = 0, first_ = 0, tail_begin_ = 0, tail_end_ = 0;
  int block_ = -1, last_end_ = -1;
  bool answered_ = false;
  double wanted_ = 0;
};

inline void read_series(const ExposureData& data,
                        const AssetRows& rows,
                        const WindowPlan& plan,
                        Index asset,
                        AssetSeries& out) {
  out.slot.clear();
  out.y.clear();
  out.weight.clear();
  if (asset < 0) return;
  for (Index i = rows.begin(asset); i < rows.end(asset); ++i) {
    const Index row = rows.row(i);
    const int slot = data.slot[static_cast<std::size_t>(data.period[row])];
    if (!plan.known[static_cast<std::size_t>(slot)]) continue;
    const double y = data.returns.at(row);
    const double weight = data.weight.empty() ? 1.0 : data.weight[0].at(row);
    if (!std::isfinite(y) || !std::isfinite(weight) || !(weight > 0.0)) continue;
    out.slot.push_back(slot);
    out.y.push_back(y);
    out.weight.push_back(weight);
  }
}

template <int Fixed>
void walk_assets(const ExposureData& data,
                 const WindowPlan& plan,
                 const AssetRows& rows,
                 const AssetRows& asked,
                 const ExposureQueries& queries,
                 const ExposureColumns& out) {
  const Index n_assets = asked.n_assets();
  for_each_task(n_asset_tasks(n_assets), plan.options.threads, [&](Index task) {
    WindowWalk<Fixed> walk(plan, out, queries.n);
    AssetSeries series;
    const Index end = std::min(n_assets, (task + 1) * kAssetsPerTask);
    for (Index asset = task * kAssetsPerTask; asset < end; ++asset) {
      const int source = queries.data_asset[static_cast<std::size_t>(asset)];
      read_series(data, rows, plan, source, series);
      walk.start(series);
      for (Index i = asked.begin(asset); i < asked.end(asset); ++i) {
        const Index query = asked.row(i);
        walk.answer(queries.last_slot[static_cast<std::size_t>(queries.time[query])], query);
      }
    }
  });
}

inline void check_weights(const ExposureData& data) {
  if (data.weight.empty()) return;
  for (Index row = 0; row < data.n_rows; ++row)
    if (data.weight[0].at(row) < 0.0)
      throw Error("negative_weight",
                  "A weight is negative.",
                  {{"row", static_cast<double>(row + 1)}});
}

}  // namespace detail

inline void exposures(const ExposureData& data,
                      const ExposureQueries& queries,
                      const ExposureOptions& options,
                      const ExposureColumns& out) {
  detail::check_weights(data);
  const detail::WindowPlan plan = detail::plan_windows(data, options);
  const AssetRows rows(data.asset,
                       data.period,
                       data.n_rows,
                       data.n_assets,
                       static_cast<Index>(data.slot.size()));
  // Asked for the data's own rows, the same order serves twice.
  const bool own = queries.asset == data.asset && queries.time == data.period;
  std::optional<AssetRows> others;
  if (!own)
    others.emplace(queries.asset,
                   queries.time,
                   queries.n,
                   static_cast<Index>(queries.data_asset.size()),
                   static_cast<Index>(queries.last_slot.size()));
  const AssetRows& asked = own ? rows : *others;
  switch (plan.n_regressors) {
    case 1: return detail::walk_assets<1>(data, plan, rows, asked, queries, out);
    case 2: return detail::walk_assets<2>(data, plan, rows, asked, queries, out);
    case 3: return detail::walk_assets<3>(data, plan, rows, asked, queries, out);
    case 4: return detail::walk_assets<4>(data, plan, rows, asked, queries, out);
    case 5: return detail::walk_assets<5>(data, plan, rows, asked, queries, out);
    default: return detail::walk_assets<0>(data, plan, rows, asked, queries, out);
  }
}

}  // namespace lambdabar
