// The rows of each asset in the order of time.
//
// Rows that already lie so cost one look at the keys and no memory; others a counting sort
// by time (left out when rows are in period order) and one by asset: O(n), 4 bytes a row.
#pragma once

#include "../base.hpp"

namespace lambdabar {

class AssetRows {
 public:
  // asset in 0 .. n_assets - 1, time in 0 .. n_times - 1; a pair occurs once.
  AssetRows(const int* asset, const int* time, Index n, Index n_assets, Index n_times)
      : begin_(static_cast<std::size_t>(n_assets) + 1, 0) {
    bool by_asset = true, by_time = true;
    for (Index i = 0; i < n; ++i) {
      ++begin_[static_cast<std::size_t>(asset[i]) + 1];
      if (i == 0) continue;
      by_time = by_time && time[i] >= time[i - 1];
      by_asset = by_asset && (asset[i] > asset[i - 1] ||
                              (asset[i] == asset[i - 1] && time[i] > time[i - 1]));
    }
    for (std::size_t a = 1; a < begin_.size(); ++a) begin_[a] += begin_[a - 1];
    if (by_asset) return;
    const std::vector<int> in_time =
        by_time ? std::vector<int>() : sorted_rows(time, n, n_times);
    order_.resize(static_cast<std::size_t>(n));
    std::vector<Index> next(begin_.begin(), begin_.end() - 1);
    for (Index i = 0; i < n; ++i) {
      const int row = by_time ? static_cast<int>(i) : in_time[static_cast<std::size_t>(i)];
      Index& at = next[static_cast<std::size_t>(asset[row])];
      order_[static_cast<std::size_t>(at++)] = row;
    }
  }

  Index n_assets() const { return static_cast<Index>(begin_.size()) - 1; }
  Index begin(Index asset) const { return begin_[static_cast<std::size_t>(asset)]; }
  Index end(Index asset) const { return begin_[static_cast<std::size_t>(asset) + 1]; }
  Index row(Index i) const {
    return order_.empty() ? i : order_[static_cast<std::size_t>(i)];
  }

 private:
  static std::vector<int> sorted_rows(const int* time, Index n, Index n_times) {
    std::vector<Index> next(static_cast<std::size_t>(n_times) + 1, 0);
    for (Index i = 0; i < n; ++i) ++next[static_cast<std::size_t>(time[i]) + 1];
    for (std::size_t t = 1; t < next.size(); ++t) next[t] += next[t - 1];
    std::vector<int> rows(static_cast<std::size_t>(n));
    for (Index i = 0; i < n; ++i) {
      Index& at = next[static_cast<std::size_t>(time[i])];
      rows[static_cast<std::size_t>(at++)] = static_cast<int>(i);
    }
    return rows;
  }

  std::vector<Index> begin_;
  std::vector<int> order_;  // empty: rows lie in order
};

}  // namespace lambdabar
