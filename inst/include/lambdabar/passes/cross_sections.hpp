// One cross-sectional regression a period (first step of Fama and MacBeth, 1973).
//
//   b_t = (X_t' W_t X_t)^-1 X_t' W_t y_t,   classical errors  s_t^2 (X_t' W_t X_t)^-1,
//   s_t^2 = rss_t / (n_t - P),              R2_t = 1 - rss_t / tss_t
//
// Weights are analytic: only their ratios matter for b_t and its errors. Rows in any
// order, columns read in place. Every period gets a status; none is left out silently.
// Most periods are solved from their moments (moments.hpp); one that is too
// ill-conditioned for that goes back to its rows (least_squares.hpp).
//
// Shapes: T periods, P terms (the constant first). Cost: one read of the columns, see
// moments.hpp, plus T P^3; rows are read again only for periods that go back to them, or
// whose shift lay far out. Same bits for any number of threads.
// Not handled: no terms at all; columns whose squares underflow (values near 1e-160), which
// read as without variation. R2 is NaN where y does not vary.
#pragma once

#include "least_squares.hpp"
#include "period_status.hpp"

namespace lambdabar {

struct CrossSectionOptions {
  // Complete rows a period needs; never fewer than P + 1, which 0 stands for.
  Index min_assets = 0;
  int threads = 1;
};

// What every kind of cross-section reports: P terms, T periods.
struct SectionResults {
  Matrix coef;                       // P x T, NaN unless estimated
  Matrix std_error;                  // P x T, NaN unless estimated
  Vector r_squared;                  // T; centred with a constant, else around zero
  std::vector<Index> n_rows;         // T
  std::vector<Index> n_used;         // T, complete rows
  std::vector<PeriodStatus> status;  // T
  // T: the term that has no variation (the first such) or lies in the span of terms
  // before it (the last such); 0 is the constant if there is one; -1 otherwise.
  std::vector<Index> culprit;
  // P: the term varies inside at least one period of two or more complete rows. True for
  // the constant. Judged alike with and without a constant.
  std::vector<bool> varies;

  void prepare(Index n_terms, Index n_periods) {
    const std::size_t size = static_cast<std::size_t>(n_periods);
    coef = std_error = Matrix::Constant(n_terms, n_periods, kNaN);
    r_squared = Vector::Constant(n_periods, kNaN);
    n_rows.assign(size, 0);
    n_used.assign(size, 0);
    status.assign(size, PeriodStatus::empty);
    culprit.assign(size, -1);
  }
};

// Errors are classical.
struct CrossSections : SectionResults {
  Vector rss, tss;  // T; weighted when the design is
  // n_variables() x T: incomplete rows by the first offending variable in the order y,
  // x, weight. A zero weight counts under weight.
  Eigen::Matrix<Index, Eigen::Dynamic, Eigen::Dynamic> missing;
  std::vector<bool> from_rows;  // T: the period went back to its rows
};

namespace detail {

inline constexpr Index kPeriodsPerTask = 16;
inline constexpr Index kGatheredRows = Index{1} << 20;  // 8 MB of row numbers

inline void check_terms(const Design& design) {
  if (design.n_terms() == 0) throw Error("input", "a regression needs at least one term");
}

// The rows of some periods: a range each when rows are in period order, else a list.
class PeriodRows {
 public:
  PeriodRows(const Design& design, const Moments& moments)
      : design_(design), moments_(moments), begin_(moments.n_rows.size(), 0) {
    if (!moments.in_order) return;
    for (std::size_t p = 1; p < begin_.size(); ++p) {
      begin_[p] = begin_[p - 1] + moments.n_rows[p - 1];
    }
  }

  // How many of `periods`, from `from` on, fit into one gathering (at least one).
  std::size_t batch(const std::vector<Index>& periods, std::size_t from) const {
    if (moments_.in_order) return periods.size() - from;
    Index rows = 0;
    std::size_t to = from;
    while (to < periods.size() && (to == from || rows < kGatheredRows)) {
      rows += count(periods[to++]);
    }
    return to - from;
  }

  void gather(const std::vector<Index>& periods, std::size_t from, std::size_t n) {
    if (moments_.in_order) return;
    std::vector<Index> next(begin_.size(), -1);
    Index rows = 0;
    for (std::size_t i = from; i < from + n; ++i) {
      const std::size_t p = static_cast<std::size_t>(periods[i]);
      begin_[p] = next[p] = rows;
      rows += count(periods[i]);
    }
    list_.resize(static_cast<std::size_t>(rows));
    for (Index row = 0; row < design_.n_rows; ++row) {
      Index& at = next[static_cast<std::size_t>(design_.period[row])];
      if (at >= 0) list_[static_cast<std::size_t>(at++)] = row;
    }
  }

  Index count(Index period) const {
    return moments_.n_rows[static_cast<std::size_t>(period)];
  }
  Index row(Index period, Index i) const {
    const Index at = begin_[static_cast<std::size_t>(period)] + i;
    return moments_.in_order ? at : list_[static_cast<std::size_t>(at)];
  }

 private:
  const Design& design_;
  const Moments& moments_;
  std::vector<Index> begin_, list_;
};

// One period after the other through its moments, or back to its rows. What is kept of a
// fit, and which rows count on the way back, is the derived solver's.
template <class Results>
class SectionSolver {
 public:
  virtual ~SectionSolver() = default;

  Results solve() {
    const Index n_periods = moments_.n_periods();
    const Index n_tasks = (n_periods + kPeriodsPerTask - 1) / kPeriodsPerTask;
    for_each_task(n_tasks, threads_, [&](Index task) {
      const Index end = std::min(n_periods, (task + 1) * kPeriodsPerTask);
      for (Index p = task * kPeriodsPerTask; p < end; ++p) solve_period(p);
    });
    solve_from_rows();
    find_variation();
    return std::move(out_);
  }

 protected:
  SectionSolver(const Design& design, Index min_assets, int threads, Moments moments)
      : design_(design),
        moments_(std::move(moments)),
        to_rows_(moments_.n_used.size(), 0),
        threads_(threads),
        needed_(std::max(min_assets, design.n_terms() + 1)) {
    out_.prepare(design.n_terms(), moments_.n_periods());
    out_.n_rows = moments_.n_rows;
    out_.n_used = moments_.n_used;
  }

  // fit has full rank.
  virtual void store(Index period, const LeastSquares& fit) = 0;
  virtual bool counts(Index row) const = 0;

  double r_squared(Index p, double rss, double tss) const {
    const bool y_varies = design_.intercept ? varies_in(moments_, 0, p) : tss > 0;
    return y_varies ? 1 - rss / tss : kNaN;
  }

  double residual_variance(Index p, double rss) const {
    const Index n = moments_.n_used[static_cast<std::size_t>(p)];
    return rss / static_cast<double>(n - design_.n_terms());
  }

  const Design& design_;
  Moments moments_;
  std::vector<char> to_rows_;  // bytes, because tasks write neighbours at the same time
  Results out_;

 private:
  // Outcome of a period as far as its moments tell; marks it if rows are needed.
  void solve_period(Index p) {
    const std::size_t at = static_cast<std::size_t>(p);
    const Index n = moments_.n_used[at];
    if (n == 0) return;
    out_.status[at] = PeriodStatus::too_few_assets;
    if (n < needed_) return;
    if (design_.intercept) {
      out_.culprit[at] = first_without_variation(p);
      out_.status[at] = PeriodStatus::no_variation;
      if (out_.culprit[at] >= 0) return;
    }
    const LeastSquares fit = solve_moments(moments_, p, design_.intercept);
    if (fit.trusted) {
      keep(p, fit);
    } else {
      to_rows_[at] = 1;
    }
  }

  void keep(Index p, const LeastSquares& fit) {
    out_.status[static_cast<std::size_t>(p)] = PeriodStatus::estimated;
    store(p, fit);
  }

  Index first_without_variation(Index p) const {
    for (Index j = 1; j < moments_.n_variables; ++j) {
      if (!varies_in(moments_, j, p)) return j;
    }
    return -1;
  }

  void solve_from_rows() {
    std::vector<Index> periods;
    for (std::size_t p = 0; p < to_rows_.size(); ++p) {
      if (to_rows_[p]) periods.push_back(static_cast<Index>(p));
    }
    PeriodRows rows(design_, moments_);
    for (std::size_t from = 0; from < periods.size();) {
      const std::size_t n = rows.batch(periods, from);
      rows.gather(periods, from, n);
      for_each_task(static_cast<Index>(n), threads_, [&](Index i) {
        factor_period(rows, periods[from + static_cast<std::size_t>(i)]);
      });
      from += n;
    }
  }

  void factor_period(const PeriodRows& rows, Index p) {
    RowFactor factor(design_, factor_centre(moments_, p, design_.intercept));
    for (Index i = 0; i < rows.count(p); ++i) {
      const Index row = rows.row(p, i);
      if (counts(row)) factor.add(row);
    }
    const LeastSquares fit = factor.solve();
    if (fit.rank == design_.n_terms()) return keep(p, fit);
    out_.status[static_cast<std::size_t>(p)] = PeriodStatus::rank_deficient;
    out_.culprit[static_cast<std::size_t>(p)] = fit.last_aliased();
  }

  bool varies_somewhere(Index variable) const {
    for (Index p = 0; p < moments_.n_periods(); ++p) {
      if (moments_.n_used[static_cast<std::size_t>(p)] < 2) continue;
      if (varies_in(moments_, variable, p)) return true;
    }
    return false;
  }

  void find_variation() {
    if (design_.intercept) out_.varies.push_back(true);
    for (Index j = 1; j < moments_.n_variables; ++j)
      out_.varies.push_back(varies_somewhere(j));
  }

  int threads_;
  Index needed_;
};

class CrossSectionSolver : public SectionSolver<CrossSections> {
 public:
  CrossSectionSolver(const Design& design, const CrossSectionOptions& options)
      : SectionSolver(design,
                      options.min_assets,
                      options.threads,
                      period_moments(design, options.threads)) {
    out_.rss = out_.tss = Vector::Constant(moments_.n_periods(), kNaN);
    out_.missing = moments_.missing;
  }

  CrossSections solve() {
    CrossSections out = SectionSolver::solve();
    out.from_rows.assign(to_rows_.begin(), to_rows_.end());
    return out;
  }

 private:
  void store(Index p, const LeastSquares& fit) override {
    out_.coef.col(p) = fit.coef;
    out_.std_error.col(p) =
        (fit.bread.diagonal() * residual_variance(p, fit.rss)).cwiseSqrt();
    out_.rss[p] = fit.rss;
    out_.tss[p] = fit.tss;
    out_.r_squared[p] = r_squared(p, fit.rss, fit.tss);
  }

  // The factor leaves incomplete rows out by itself.
  bool counts(Index) const override { return true; }
};

}  // namespace detail

inline CrossSections cross_sections(const Design& design,
                                    const CrossSectionOptions& options) {
  detail::check_terms(design);
  return detail::CrossSectionSolver(design, options).solve();
}

}  // namespace lambdabar
