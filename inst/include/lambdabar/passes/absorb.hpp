// Columns less the effects of groups, in any number of dimensions: residuals of the weighted
// regression on all dummies (Frisch and Waugh 1933, Econometrica 1, 387-401; Lovell 1963,
// Journal of the American Statistical Association 58, 993-1010).
//
// M_d subtracts weighted means of dimension d. S = M_1 .. M_D .. M_1 is self-adjoint in the
// weighted inner product and its fixed space is what is wanted: (I - S) z = (I - S) x by
// conjugate gradients from zero, the answer x - z. One dimension needs no iteration. The end
// is certified: no weighted group mean, in any dimension, is larger than a share of the
// column's own spread; without that an error, never a number.
//
// The dummies' rank is G_1 for one dimension, G_1 + G_2 less the connected components for two,
// and an upper bound for more: G_d less the most components that it shares with an earlier one.
// Rows alone in a group say nothing about slopes and can be left out, again and again.
// Cost O(n D) a step and column; memory n (K + 6) numbers a thread. Columns are independent:
// same bits on any number of threads.
#pragma once

#include "../panel/design.hpp"
#include "../parallel.hpp"

#include <algorithm>
#include <cmath>
#include <numeric>

namespace lambdabar {

struct AbsorbOptions {
  bool drop_singletons = true;
  double tolerance =
      1e-10;  // largest group mean left, in standard deviations of the column
  int most_steps = 20000;
  int threads = 1;
};

struct Absorbed {
  Matrix columns;             // n_rows x (1 + K): y, x; NaN where a row does not enter
  Vector kept_share;          // 1 + K: norm after over norm about the mean before
  std::vector<Index> levels;  // D, groups with rows
  Index rank = 0;             // of the dummies
  bool exact_rank = true;
  Index n_used = 0, n_singletons = 0;
  int steps = 0;     // most of any column
  double worst = 0;  // largest group mean left, relative
};

namespace detail {

class GroupMeans {
 public:
  // codes of the used rows, 0 .. n_codes - 1.
  GroupMeans(std::vector<int> codes, Index n_codes, const std::vector<double>& weight)
      : codes_(std::move(codes)), total_(static_cast<std::size_t>(n_codes), 0.0) {
    for (std::size_t i = 0; i < codes_.size(); ++i) total_[at(i)] += weight[i];
  }

  // x less its group means; `sums` is room for the groups.
  void subtract(Vector& x,
                const std::vector<double>& weight,
                std::vector<double>& sums) const {
    means(x, weight, sums);
    for (std::size_t i = 0; i < codes_.size(); ++i)
      x(static_cast<Index>(i)) -= sums[at(i)];
  }

  double largest(const Vector& x,
                 const std::vector<double>& weight,
                 std::vector<double>& sums) const {
    means(x, weight, sums);
    double largest = 0;
    for (double mean : sums) largest = std::max(largest, std::abs(mean));
    return largest;
  }

  const std::vector<int>& codes() const { return codes_; }
  int n_codes() const { return static_cast<int>(total_.size()); }
  Index n_present() const {
    return std::count_if(total_.begin(), total_.end(), [](double w) { return w > 0.0; });
  }

 private:
  std::size_t at(std::size_t i) const { return static_cast<std::size_t>(codes_[i]); }

  void means(const Vector& x,
             const std::vector<double>& weight,
             std::vector<double>& sums) const {
    sums.assign(total_.size(), 0.0);
    for (std::size_t i = 0; i < codes_.size(); ++i)
      sums[at(i)] += weight[i] * x(static_cast<Index>(i));
    for (std::size_t g = 0; g < sums.size(); ++g)
      if (total_[g] > 0.0) sums[g] /= total_[g];
  }

  std::vector<int> codes_;
  std::vector<double> total_;
};

// Connected components of the groups of two dimensions, joined by the rows.
inline Index count_components(const GroupMeans& a, const GroupMeans& b) {
  const int n_a = a.n_codes(), n_b = b.n_codes();
  std::vector<int> parent(static_cast<std::size_t>(n_a + n_b));
  std::iota(parent.begin(), parent.end(), 0);
  auto root = [&](int g) {
    while (parent[static_cast<std::size_t>(g)] != g) {
      int& up = parent[static_cast<std::size_t>(g)];
      up = parent[static_cast<std::size_t>(up)];
      g = up;
    }
    return g;
  };
  Index components = a.n_present() + b.n_present();
  for (std::size_t i = 0; i < a.codes().size(); ++i) {
    const int left = root(a.codes()[i]), right = root(n_a + b.codes()[i]);
    if (left == right) continue;
    parent[static_cast<std::size_t>(left)] = right;
    --components;
  }
  return components;
}

class Absorber {
 public:
  Absorber(const std::vector<GroupMeans>& groups,
           const std::vector<double>& weight,
           const AbsorbOptions& options)
      : groups_(groups), weight_(weight), options_(options) {}

  // x: a column of the used rows, replaced by what the effects leave. Tasks must not throw:
  // whether that was done is certified().
  void absorb(Vector& x) {
    double sum = 0, total = 0;
    for (std::size_t i = 0; i < weight_.size(); ++i) {
      sum += weight_[i] * x(static_cast<Index>(i));
      total += weight_[i];
    }
    x.array() -= sum / total;
    before_ = std::sqrt(dot(x, x));
    if (!(before_ > 0.0)) return;
    const double spread = before_ / std::sqrt(total);
    if (groups_.size() == 1) {
      // Twice: the second pass takes out what rounding left.
      groups_[0].subtract(x, weight_, sums_);
      groups_[0].subtract(x, weight_, sums_);
    } else {
      iterate(x, spread);
    }
    worst_ = largest_mean(x) / spread;
    after_ = std::sqrt(dot(x, x));
  }

  double kept_share() const { return before_ > 0.0 ? after_ / before_ : 0.0; }
  int steps() const { return steps_; }
  double worst() const { return worst_; }
  bool certified() const { return !(before_ > 0.0) || worst_ <= options_.tolerance; }

 private:
  double dot(const Vector& a, const Vector& b) const {
    double sum = 0;
    for (Index i = 0; i < a.size(); ++i)
      sum += weight_[static_cast<std::size_t>(i)] * a(i) * b(i);
    return sum;
  }

  // v - S v.
  Vector moved(const Vector& v) {
    Vector out = v;
    for (const GroupMeans& group : groups_) group.subtract(out, weight_, sums_);
    for (std::size_t d = groups_.size() - 1; d > 0; --d)
      groups_[d - 1].subtract(out, weight_, sums_);
    return v - out;
  }

  double largest_mean(const Vector& x) {
    double largest = 0;
    for (const GroupMeans& group : groups_)
      largest = std::max(largest, group.largest(x, weight_, sums_));
    return largest;
  }

  void iterate(Vector& x, double spread) {
    Vector r = moved(x), p = r;
    double length = dot(r, r);
    const double small = 1e-26 * before_ * before_;
    for (steps_ = 0; length > small; ++steps_) {
      if (steps_ == options_.most_steps) return;
      // A glance at the certificate now and then: it may hold before the residual is tiny.
      if (steps_ % 8 == 7 && largest_mean(x) <= 0.1 * options_.tolerance * spread) break;
      const Vector q = moved(p);
      const double curvature = dot(p, q);
      if (!(curvature > 0.0)) break;
      const double step = length / curvature;
      x -= step * p;
      r -= step * q;
      const double next = dot(r, r);
      p = r + (next / length) * p;
      length = next;
    }
  }

  const std::vector<GroupMeans>& groups_;
  const std::vector<double>& weight_;
  const AbsorbOptions& options_;
  std::vector<double> sums_;
  double before_ = 0, after_ = 0, worst_ = kNaN;
  int steps_ = 0;
};

// Flags of complete rows; without rows alone in a group when asked.
inline std::vector<Index> rows_to_absorb(const Design& design,
                                         const std::vector<const int*>& codes,
                                         const std::vector<Index>& n_codes,
                                         bool drop_singletons,
                                         Index& n_singletons) {
  std::vector<Index> rows;
  for (Index row = 0; row < design.n_rows; ++row) {
    const double w = design.weight.empty() ? 1.0 : design.weight[0].at(row);
    bool complete = std::isfinite(w) && w > 0.0 && std::isfinite(design.y.at(row));
    for (const Column& x : design.x) complete = complete && std::isfinite(x.at(row));
    if (complete) rows.push_back(row);
  }
  for (const int* code : codes)
    for (const Index row : rows)
      if (code[row] < 0)
        throw Error(
            "cluster_id",
            "a row has no effect",
            {{"row", static_cast<double>(row + 1)}, {"dimension", 1.0}, {"count", 1.0}});
  n_singletons = 0;
  for (bool changed = drop_singletons; changed;) {
    changed = false;
    for (std::size_t d = 0; d < codes.size(); ++d) {
      std::vector<Index> count(static_cast<std::size_t>(n_codes[d]), 0);
      for (const Index row : rows) ++count[static_cast<std::size_t>(codes[d][row])];
      const auto end = std::remove_if(rows.begin(), rows.end(), [&](Index row) {
        return count[static_cast<std::size_t>(codes[d][row])] == 1;
      });
      n_singletons += rows.end() - end;
      changed = changed || end != rows.end();
      rows.erase(end, rows.end());
    }
  }
  return rows;
}

}  // namespace detail

// codes: D vectors of length n_rows, 0 .. n_codes - 1; -1, missing, is an error.
inline Absorbed absorb(const Design& design,
                       const std::vector<const int*>& codes,
                       const std::vector<Index>& n_codes,
                       const AbsorbOptions& options) {
  Absorbed out;
  const std::vector<Index> rows = detail::rows_to_absorb(
      design, codes, n_codes, options.drop_singletons, out.n_singletons);
  out.n_used = static_cast<Index>(rows.size());
  std::vector<double> weight(rows.size(), 1.0);
  if (!design.weight.empty())
    for (std::size_t i = 0; i < rows.size(); ++i)
      weight[i] = design.weight[0].at(rows[i]);
  std::vector<detail::GroupMeans> groups;
  for (std::size_t d = 0; d < codes.size(); ++d) {
    std::vector<int> own(rows.size());
    for (std::size_t i = 0; i < rows.size(); ++i) own[i] = codes[d][rows[i]];
    groups.emplace_back(std::move(own), n_codes[d], weight);
    out.levels.push_back(groups[d].n_present());
    Index shared = 0;
    for (std::size_t e = 0; e < d; ++e)
      shared = std::max(shared, detail::count_components(groups[e], groups[d]));
    out.rank += out.levels[d] - shared;
  }
  out.exact_rank = codes.size() <= 2;
  const auto K = static_cast<Index>(design.x.size());
  out.columns = Matrix::Constant(design.n_rows, K + 1, kNaN);
  out.kept_share = Vector::Zero(K + 1);
  std::vector<int> steps(static_cast<std::size_t>(K + 1), 0);
  Vector worst = Vector::Zero(K + 1);
  std::vector<char> certified(static_cast<std::size_t>(K + 1), 1);
  for_each_task(K + 1, options.threads, [&](Index k) {
    const Column& from = k == 0 ? design.y : design.x[static_cast<std::size_t>(k - 1)];
    Vector x(out.n_used);
    for (Index i = 0; i < out.n_used; ++i)
      x(i) = from.at(rows[static_cast<std::size_t>(i)]);
    detail::Absorber absorber(groups, weight, options);
    absorber.absorb(x);
    certified[static_cast<std::size_t>(k)] = absorber.certified();
    out.kept_share(k) = absorber.kept_share();
    steps[static_cast<std::size_t>(k)] = absorber.steps();
    worst(k) = absorber.worst();
    // What the effects span is left as rounding: none of it may pass for variation.
    if (out.kept_share(k) < 1e-7) x.setZero();
    for (Index i = 0; i < out.n_used; ++i)
      out.columns(rows[static_cast<std::size_t>(i)], k) = x(i);
  });
  for (Index k = 0; k <= K; ++k)
    if (!certified[static_cast<std::size_t>(k)])
      throw Error("no_convergence",
                  "The effects could not be taken out of a column.",
                  {{"column", static_cast<double>(k)},
                   {"worst", worst(k)},
                   {"steps", static_cast<double>(steps[static_cast<std::size_t>(k)])}});
  out.steps = *std::max_element(steps.begin(), steps.end());
  for (Index k = 0; k <= K; ++k)
    if (std::isfinite(worst(k))) out.worst = std::max(out.worst, worst(k));
  return out;
}

}  // namespace lambdabar
