// First pass over moving windows: for each (asset, slot) asked for, the regression of the
// asset's returns on the factors over the rows that a window ending at that slot holds.
//
//   full       all rows up to the slot        rolling    the last `length` calendar slots
//   expanding  the same, updated               decay      weights 2^-(age / half_life)
//
// Slots are calendar positions, so a gap shortens a rolling sample and ages a decaying
// one. A row counts when the return is finite, its weight is positive and every factor
// (at every lead and lag) is known. Rows with leads are complete only after the last
// lead, so a window ending at t holds rows lags .. leads slots inside it, and nothing
// from after t.
//
// Classical errors s2 = rss / (n - K - 1) and s2 S^-1; decaying weights as in
// window_fit.hpp. An asset's result never depends on its later rows, not even in the last
// bit, and is the same on any number of threads and for any order of rows.
//
// Cost: three merges a slot whatever the window's length. Rolling windows use blocks of
// `length` slots: aggregates from the left and from the right inside each, any window is
// the tail of one merged with the head of the next. Nothing is ever subtracted. A window
// whose cross-products are close to singular, or whose fit is close to exact, is solved
// from its rows; all others are solved side by side (window_solve.hpp). Memory: O(length
// K^2) a thread, and 4 bytes a row when rows are not by asset.
#pragma once

#include "../panel/asset_rows.hpp"
#include "../panel/design.hpp"
#include "../parallel.hpp"
#include "lead_lag.hpp"
#include "window_fit.hpp"
#include "window_solve.hpp"

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
  std::vector<int> slot;  // n_periods, calendar position of a period, increasing
  Eigen::Ref<const Matrix> factors;  // slots x K, NaN where unknown
};

// What is asked: m pairs of an asset and a time, by small codes. Several times may end at
// one slot (a full window has one end for all of them).
struct ExposureQueries {
  const int* asset = nullptr;  // m, 0 .. data_asset.size() - 1
  const int* time = nullptr;   // m, 0 .. last_slot.size() - 1; a pair occurs once
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

// The usable rows of one asset, in the order of time.
struct AssetSeries {
  std::vector<int> slot;
  std::vector<double> y, weight;

  std::size_t size() const { return slot.size(); }
};

struct WindowPlan {
  ExposureOptions options;
  Index n_factors = 0;              // K of the question, without leads and lags
  std::vector<double> factor_rows;  // slots x regressors, by rows
  std::vector<char> known;          // slots: every regressor is there
  int n_slots = 0, n_regressors = 0;
  int min_obs = 0, length = 0, leads = 0;
  double decay = 1.0;    // a slot
  Matrix shift_weights;  // slots x (shifts K), fowler_rorke only

  const double* factors_at(int slot) const {
    return factor_rows.data() +
           static_cast<std::size_t>(slot) * static_cast<std::size_t>(n_regressors);
  }
};

inline void fill_shift_weights(const Eigen::Ref<const Matrix>& factors,
                               WindowPlan& plan) {
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
      for (Index j = 0; j < shape.n_shifts(); ++j)
        plan.shift_weights(t, j * K + k) = c(j);
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
  if (options.window == WindowKind::decay)
    plan.decay = std::exp2(-1.0 / options.half_life);
  if (shape.form == LeadLagForm::fowler_rorke) {
    if (shape.leads != shape.lags || options.window == WindowKind::decay)
      throw Error(
          "unsupported",
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
        mean_(shape_.n_variables()),
        products_(packed_size(shape_.n_variables())),
        solver_(shape_.n_factors()),
        lane_products_(packed_size(shape_.n_variables())),
        lane_means_(shape_.n_variables()),
        lane_solver_(shape_.n_factors()) {
    const auto K = static_cast<std::size_t>(shape_.n_factors());
    estimate_.beta.resize(K);
    estimate_.covariance.resize(K * (K + 1) / 2);
    const WindowKind kind = plan.options.window;
    in_lanes_ = (kind == WindowKind::rolling || kind == WindowKind::expanding) &&
                plan.n_factors == plan.n_regressors;
    std::fill_n(
        lane_products_.data(), packed_size(shape_.n_variables()), WindowLanes(0.0));
    std::fill_n(lane_means_.data(), shape_.n_variables(), WindowLanes(0.0));
    lane_n_.setZero();
  }

  void start(const AssetSeries& series) {
    series_ = &series;
    next_ = first_ = tail_begin_ = tail_end_ = 0;
    block_end_ = 0;
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
    if (in_lanes_) {
      advance(end);
      stage(row);
      return;
    }
    if (!answered_ || end != last_end_) {
      advance(end);
      last_end_ = end;
      answered_ = true;
      solve();
      combine(std::min(last_slot, plan_.n_slots - 1));
    }
    store(row);
  }

  // After the last query of the asset.
  void finish() {
    if (staged_ > 0) solve_staged();
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
      case WindowKind::rolling:
        advance_rolling(end);
        break;
      case WindowKind::expanding:
        advance_expanding(end);
        break;
      case WindowKind::decay:
        advance_decay(end);
        break;
      case WindowKind::full:
        while (next_ < series().size() && series().slot[next_] <= end) ++next_;
        break;
    }
  }

  void push_head(double w) {
    if (shape_.weight(head_.data()) == 0.0) set_anchor(next_, head_anchor_.data());
    read(next_, head_anchor_.data(), row_.data());
    shape_.push(head_.data(), row_.data(), w, head_.data());
  }

  void advance_expanding(int end) {
    for (; next_ < series().size() && series().slot[next_] <= end; ++next_)
      push_head(series().weight[next_]);
  }

  // head_ has weights a d, squares_ a d^2, wanted_ is the sum of d; all of them as seen
  // from the last row, since a common factor cancels.
  void advance_decay(int end) {
    for (; next_ < series().size() && series().slot[next_] <= end; ++next_) {
      if (next_ > 0) {
        const double kept =
            std::pow(plan_.decay, series().slot[next_] - series().slot[next_ - 1]);
        shape_.scale(head_.data(), kept);
        shape_.scale(squares_.data(), kept * kept);
        wanted_ *= kept;
        // The anchor follows the series, else one far row would cost digits for ever.
        if (next_ % 64 == 0) move_anchor();
      }
      push_head(series().weight[next_]);
      read(next_, head_anchor_.data(), row_.data());
      shape_.push(squares_.data(), row_.data(), series().weight[next_], squares_.data());
      wanted_ += 1.0;
    }
  }

  void move_anchor() {
    std::copy(
        head_anchor_.data(), head_anchor_.data() + shape_.n_variables(), shift_.data());
    set_anchor(next_, head_anchor_.data());
    for (int i = 0; i < shape_.n_variables(); ++i) {
      const double moved = head_anchor_.data()[i] - shift_.data()[i];
      head_.data()[1 + i] -= moved;
      squares_.data()[1 + i] -= moved;
    }
  }

  void advance_rolling(int end) {
    if (end < 0) return;
    if (end >= block_end_) enter_block(end / plan_.length);
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
      const double* later = tail;
      if (i == tail_end_) {
        set_anchor(i - 1, tail_anchor_.data());
        shape_.clear(tail);
      } else {
        later = tail_at(i);
      }
      read(i - 1, tail_anchor_.data(), row_.data());
      shape_.push(later, row_.data(), series().weight[i - 1], tail);
    }
    shape_.clear(head_.data());
    block_end_ = begin + plan_.length;
  }

  double* tail_at(std::size_t i) {
    return tails_.data() + (i - tail_begin_) * static_cast<std::size_t>(shape_.size());
  }

  void solve() {
    estimate_.n_rows = static_cast<Index>(next_ - first_);
    estimate_.status = WindowStatus::too_few_rows;
    if (estimate_.n_rows < plan_.min_obs) return;
    const bool solved = plan_.options.window != WindowKind::full && solve_aggregate();
    if (!solved) solve_rows(first_, next_);
  }

  // Means and products of the rows in the window, to mean(i, value), product(position,
  // value).
  template <typename MeanTo, typename ProductTo>
  void gather(const MeanTo& mean, const ProductTo& product) {
    const bool has_tail =
        plan_.options.window == WindowKind::rolling && first_ < tail_end_;
    const bool has_head = !has_tail || next_ > tail_end_;
    if (has_tail && has_head) {
      const double* anchor = tail_anchor_.data();
      for (int i = 0; i < shape_.n_variables(); ++i)
        shift_.data()[i] = head_anchor_.data()[i] - anchor[i];
      shape_.merge(
          tail_at(first_),
          head_.data(),
          shift_.data(),
          [&](int i, double value) LAMBDABAR_INLINE { mean(i, value + anchor[i]); },
          product);
      return;
    }
    const double* from = has_head ? head_.data() : tail_at(first_);
    const double* anchor = has_head ? head_anchor_.data() : tail_anchor_.data();
    for (int i = 0; i < shape_.n_variables(); ++i)
      mean(i, shape_.mean(from)[i] + anchor[i]);
    for (int i = 0; i < packed_size(shape_.n_variables()); ++i)
      product(i, shape_.products(from)[i]);
  }

  bool solve_aggregate() {
    gather([&](int i, double value) { mean_.data()[i] = value; },
           [&](int at, double value) { products_.data()[at] = value; });
    solver_.solve(products_.data(), mean_.data());
    if (!solver_.trusted()) return false;
    const int K = shape_.n_factors();
    estimate_.status = WindowStatus::estimated;
    for (int k = 0; k < K; ++k)
      estimate_.beta[static_cast<std::size_t>(k)] = solver_.beta(k);
    estimate_.alpha = solver_.alpha();
    estimate_.r_squared = solver_.r_squared();
    if (plan_.options.window == WindowKind::decay) {
      fill_decayed_covariance(head_.data());
      return true;
    }
    estimate_.resid_var = solver_.rss() / static_cast<double>(estimate_.n_rows - 1 - K);
    double* V = estimate_.covariance.data();
    for (int j = 0; j < K; ++j)
      for (int i = j; i < K; ++i) *V++ = estimate_.resid_var * solver_.inverse_at(i, j);
    return true;
  }

  // Puts the window into a lane; the lanes are solved when all are taken.
  void stage(Index row) {
    estimate_.n_rows = static_cast<Index>(next_ - first_);
    if (estimate_.n_rows < plan_.min_obs) {
      estimate_.status = WindowStatus::too_few_rows;
      store(row);
      return;
    }
    const int lane = staged_++;
    gather([&](int i, double value)
               LAMBDABAR_INLINE { lane_means_.data()[i](lane) = value; },
           [&](int at, double value)
               LAMBDABAR_INLINE { lane_products_.data()[at](lane) = value; });
    lane_n_(lane) = static_cast<double>(estimate_.n_rows);
    waiting_[static_cast<std::size_t>(lane)] = {row, first_, next_};
    if (staged_ == kWindowLanes) solve_staged();
  }

  void solve_staged() {
    lane_solver_.solve(lane_products_.data(), lane_means_.data());
    const int K = shape_.n_factors();
    const WindowLanes s2 = lane_solver_.rss() / (lane_n_ - (1.0 + K));
    for (int k = 0; k < K; ++k) {
      put(out_.beta, k, lane_solver_.beta(k));
      if (out_.std_error)
        put(out_.std_error, k, (s2 * lane_solver_.inverse_at(k, k)).sqrt());
    }
    if (out_.covariance)
      for (int j = 0, at = 0; j < K; ++j)
        for (int i = j; i < K; ++i, ++at)
          put(out_.covariance, at, s2 * lane_solver_.inverse_at(i, j));
    put(out_.alpha, 0, lane_solver_.alpha());
    put(out_.resid_var, 0, s2);
    put(out_.r_squared, 0, lane_solver_.r_squared());
    for (int lane = 0; lane < staged_; ++lane) {
      const Waiting& window = waiting_[static_cast<std::size_t>(lane)];
      const auto n = static_cast<int>(window.next - window.first);
      if (out_.n_obs) out_.n_obs[window.row] = n;
      if (out_.status)
        out_.status[window.row] = static_cast<int>(WindowStatus::estimated);
      if (lane_solver_.trusted()(lane)) continue;
      estimate_.n_rows = n;
      solve_rows(window.first, window.next);
      store(window.row);
    }
    staged_ = 0;
  }

  // One value for each staged window, into a column of the result.
  void put(double* result, int column, const WindowLanes& values) const {
    if (!result) return;
    double* to = result + column * n_out_;
    for (int lane = 0; lane < staged_; ++lane)
      to[waiting_[static_cast<std::size_t>(lane)].row] = values(lane);
  }

  // C = S2 + W2 (m2 - m)(m2 - m)': the squared weights have a mean of their own.
  void fill_decayed_covariance(const double* aggregate) {
    const int K = shape_.n_factors();
    const double *m = shape_.mean(aggregate), *m2 = shape_.mean(squares_.data());
    const double* S2 = shape_.products(squares_.data());
    const double w2 = shape_.weight(squares_.data());
    Matrix C(K, K), inverse(K, K);
    for (int i = 0; i < K; ++i) {
      for (int j = 0; j <= i; ++j) {
        C(i, j) = C(j, i) = S2[packed_at(i, j)] + w2 * (m2[i] - m[i]) * (m2[j] - m[j]);
        inverse(i, j) = inverse(j, i) = solver_.inverse_at(i, j);
      }
    }
    const Matrix half = inverse * C;
    estimate_.resid_var =
        solver_.rss() / (wanted_ - w2 / shape_.weight(aggregate) - half.trace());
    const Matrix V = estimate_.resid_var * half * inverse;
    double* packed = estimate_.covariance.data();
    for (int j = 0; j < K; ++j)
      for (int i = j; i < K; ++i) *packed++ = V(i, j);
  }

  void solve_rows(std::size_t first, std::size_t next) {
    const Index n = static_cast<Index>(next - first), K = shape_.n_factors();
    WindowRows rows{Matrix(n, K), Vector(n), Vector(n), Vector::Ones(n), false};
    rows.decays = plan_.options.window == WindowKind::decay;
    for (Index r = 0; r < n; ++r) {
      const std::size_t i = first + static_cast<std::size_t>(r);
      rows.factors.row(r) =
          Eigen::Map<const Eigen::RowVectorXd>(plan_.factors_at(series().slot[i]), K);
      rows.y(r) = series().y[i];
      if (rows.decays)
        rows.wanted(r) =
            std::pow(plan_.decay, series().slot[next - 1] - series().slot[i]);
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
    const Vector beta =
        c.transpose() * Eigen::Map<const Vector>(estimate_.beta.data(), all);
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
      if (out_.std_error)
        out_.std_error[k * n_out_ + row] = fine ? std::sqrt(*V) : out_.missing;
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
  static constexpr int kVariables = Fixed + 1, kProducts = packed_size(Fixed + 1);
  template <int Size>
  using Room = Scratch<double, Fixed, Size>;
  Room<kVariables> row_, head_anchor_, tail_anchor_, shift_;
  Room<Aggregates<Fixed>::kFixedSize> head_, squares_;
  Room<kVariables> mean_;
  Room<kProducts> products_;
  WindowSolver<double, Fixed> solver_;

  // Windows that wait to be solved side by side: rows first .. next - 1 of the series.
  struct Waiting {
    Index row;
    std::size_t first, next;
  };
  bool in_lanes_ = false;
  int staged_ = 0;
  std::array<Waiting, kWindowLanes> waiting_;
  Scratch<WindowLanes, Fixed, kProducts> lane_products_;
  Scratch<WindowLanes, Fixed, kVariables> lane_means_;
  WindowLanes lane_n_;
  WindowSolver<WindowLanes, Fixed> lane_solver_;

  std::vector<double> tails_;
  WindowEstimate estimate_;

  const AssetSeries* series_ = nullptr;
  // Rows first_ .. next_ - 1 are in the window; those of tails_ end at tail_end_ - 1.
  std::size_t next_ = 0, first_ = 0, tail_begin_ = 0, tail_end_ = 0;
  int block_end_ = 0, last_end_ = -1;
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
        walk.answer(queries.last_slot[static_cast<std::size_t>(queries.time[query])],
                    query);
      }
      walk.finish();
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
    case 1:
      return detail::walk_assets<1>(data, plan, rows, asked, queries, out);
    case 2:
      return detail::walk_assets<2>(data, plan, rows, asked, queries, out);
    case 3:
      return detail::walk_assets<3>(data, plan, rows, asked, queries, out);
    case 4:
      return detail::walk_assets<4>(data, plan, rows, asked, queries, out);
    case 5:
      return detail::walk_assets<5>(data, plan, rows, asked, queries, out);
    default:
      return detail::walk_assets<0>(data, plan, rows, asked, queries, out);
  }
}

}  // namespace lambdabar
