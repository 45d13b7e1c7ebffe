// Dense integer codes for the keys of a panel, and the checks on them.
//
// A key vector of length n becomes codes 0 .. G-1 in order of first appearance and the row
// where each code appeared first; -1 marks a missing key. Time O(n); memory 4 n bytes for
// the codes and O(G) for the table. Whole numbers within a narrow range use a direct table,
// everything else an open-addressing hash on the 64 bits of the value.
#pragma once

#include "../base.hpp"

#include <algorithm>
#include <cmath>
#include <cstdint>
#include <cstring>

namespace lambdabar {

struct Codes {
  std::vector<Index> first;  // length G: row of first appearance
  Index n_missing = 0;
};

namespace detail {

inline std::uint64_t mix_bits(std::uint64_t x) {
  // Finaliser with full avalanche (constants of the splitmix64 generator, Steele, Lea and
  // Flood 2014), so that neighbouring keys do not share a neighbourhood of the table.
  x ^= x >> 30;
  x *= 0xbf58476d1ce4e5b9ULL;
  x ^= x >> 27;
  x *= 0x94d049bb133111ebULL;
  return x ^ (x >> 31);
}

class CodeTable {
 public:
  CodeTable() { resize(1 << 12); }

  // Code of `key`, made new (from row `row`) when it was not seen before.
  int code(std::uint64_t key, Index row, std::vector<Index>* first) {
    std::size_t slot = mix_bits(key) & mask_;
    while (codes_[slot] >= 0) {
      if (keys_[slot] == key) return codes_[slot];
      slot = (slot + 1) & mask_;
    }
    const int fresh = static_cast<int>(first->size());
    first->push_back(row);
    keys_[slot] = key;
    codes_[slot] = fresh;
    if (first->size() * 2 > codes_.size()) grow();
    return fresh;
  }

 private:
  void resize(std::size_t size) {
    keys_.assign(size, 0);
    codes_.assign(size, -1);
    mask_ = size - 1;
  }

  void grow() {
    std::vector<std::uint64_t> keys;
    std::vector<int> codes;
    keys.swap(keys_);
    codes.swap(codes_);
    resize(codes.size() * 4);
    for (std::size_t i = 0; i < codes.size(); ++i) {
      if (codes[i] < 0) continue;
      std::size_t slot = mix_bits(keys[i]) & mask_;
      while (codes_[slot] >= 0) slot = (slot + 1) & mask_;
      keys_[slot] = keys[i];
      codes_[slot] = codes[i];
    }
  }

  std::vector<std::uint64_t> keys_;
  std::vector<int> codes_;
  std::size_t mask_ = 0;
};

// Codes through a hash; `key(i)` gives 64 bits, `missing(i)` says whether row i has no key.
template <class Key, class Missing>
Codes encode_hashed(Index n, int* code, const Key& key, const Missing& missing) {
  Codes out;
  CodeTable table;
  std::uint64_t last_key = 0;
  int last_code = -1;
  for (Index i = 0; i < n; ++i) {
    if (missing(i)) {
      code[i] = -1;
      ++out.n_missing;
      continue;
    }
    const std::uint64_t k = key(i);
    if (last_code < 0 || k != last_key) {
      last_code = table.code(k, i, &out.first);
      last_key = k;
    }
    code[i] = last_code;
  }
  return out;
}

// Codes through a direct table over low .. low + span - 1.
template <class Value, class Missing>
Codes encode_direct(Index n,
                    int* code,
                    std::int64_t low,
                    std::size_t span,
                    const Value& value,
                    const Missing& missing) {
  Codes out;
  std::vector<int> table(span, -1);
  for (Index i = 0; i < n; ++i) {
    if (missing(i)) {
      code[i] = -1;
      ++out.n_missing;
      continue;
    }
    int& entry = table[static_cast<std::size_t>(value(i) - low)];
    if (entry < 0) {
      entry = static_cast<int>(out.first.size());
      out.first.push_back(i);
    }
    code[i] = entry;
  }
  return out;
}

// A direct table pays while it stays near the cache; beyond that the hash is quicker.
inline bool narrow(double low, double high, Index n) {
  const double span = high - low + 1.0;
  return span <= std::max(4.0 * static_cast<double>(n), 65536.0) && span <= 67108864.0;
}

}  // namespace detail

// `missing` is the value that stands for a missing key (INT_MIN in R).
inline Codes encode_integers(const int* x, Index n, int missing, int* code) {
  int low = 0, high = -1;
  bool any = false;
  for (Index i = 0; i < n; ++i) {
    if (x[i] == missing) continue;
    low = any ? std::min(low, x[i]) : x[i];
    high = any ? std::max(high, x[i]) : x[i];
    any = true;
  }
  auto is_missing = [&](Index i) { return x[i] == missing; };
  if (any && detail::narrow(low, high, n)) {
    const std::size_t span = static_cast<std::size_t>(static_cast<std::int64_t>(high) - low + 1);
    return detail::encode_direct(
        n, code, low, span, [&](Index i) { return static_cast<std::int64_t>(x[i]); },
        is_missing);
  }
  return detail::encode_hashed(
      n, code, [&](Index i) { return static_cast<std::uint64_t>(static_cast<std::uint32_t>(x[i])); },
      is_missing);
}

// NaN is missing; infinities are ordinary values here (the caller refuses them).
inline Codes encode_reals(const double* x, Index n, int* code) {
  double low = std::numeric_limits<double>::infinity(), high = -low;
  bool whole = true;
  for (Index i = 0; i < n; ++i) {
    if (std::isnan(x[i])) continue;
    low = std::min(low, x[i]);
    high = std::max(high, x[i]);
    whole = whole && x[i] == std::floor(x[i]);
  }
  auto is_missing = [&](Index i) { return std::isnan(x[i]); };
  if (whole && low <= high && std::abs(low) < 9e15 && std::abs(high) < 9e15 &&
      detail::narrow(low, high, n)) {
    const std::int64_t base = static_cast<std::int64_t>(low);
    const std::size_t span = static_cast<std::size_t>(static_cast<std::int64_t>(high) - base + 1);
    return detail::encode_direct(
        n, code, base, span, [&](Index i) { return static_cast<std::int64_t>(x[i]); },
        is_missing);
  }
  return detail::encode_hashed(
      n,
      code,
      [&](Index i) {
        const double value = x[i] == 0.0 ? 0.0 : x[i];  // -0 and 0 are one key
        std::uint64_t bits;
        std::memcpy(&bits, &value, sizeof bits);
        return bits;
      },
      is_missing);
}

// Addresses of interned values: equal addresses mean equal keys.
inline Codes encode_addresses(const void* const* x, Index n, const void* missing, int* code) {
  return detail::encode_hashed(
      n, code,
      [&](Index i) { return static_cast<std::uint64_t>(reinterpret_cast<std::uintptr_t>(x[i])); },
      [&](Index i) { return x[i] == missing; });
}

struct Duplicates {
  Index n_rows = 0;             // rows whose pair was seen before
  std::vector<Index> rows;      // the first few of them
  std::vector<Index> earlier;   // and the row that holds the same pair
};

// Pairs (asset, period) that occur more than once; at most `keep` are listed. A bitmap over
// all pairs when it is small against the data, else a sort of the pairs.
inline Duplicates find_duplicates(const int* asset,
                                  const int* period,
                                  Index n,
                                  Index n_assets,
                                  Index n_periods,
                                  std::size_t keep) {
  Duplicates out;
  auto pair = [&](Index i) {
    return static_cast<std::uint64_t>(asset[i]) * static_cast<std::uint64_t>(n_periods) +
           static_cast<std::uint64_t>(period[i]);
  };
  const double cells = static_cast<double>(n_assets) * static_cast<double>(n_periods);
  if (cells <= 64.0 * static_cast<double>(n) + 1e6) {
    std::vector<std::uint64_t> seen(static_cast<std::size_t>(cells) / 64 + 1, 0);
    for (Index i = 0; i < n; ++i) {
      const std::uint64_t key = pair(i), bit = std::uint64_t{1} << (key & 63);
      if (seen[key >> 6] & bit) {
        ++out.n_rows;
        if (out.rows.size() < keep) out.rows.push_back(i);
      }
      seen[key >> 6] |= bit;
    }
  } else {
    std::vector<std::uint64_t> keys(static_cast<std::size_t>(n));
    for (Index i = 0; i < n; ++i) keys[static_cast<std::size_t>(i)] = pair(i);
    std::vector<std::uint64_t> sorted = keys;
    std::sort(sorted.begin(), sorted.end());
    std::vector<std::uint64_t> twice;
    for (std::size_t i = 1; i < sorted.size(); ++i) {
      if (sorted[i] != sorted[i - 1]) continue;
      ++out.n_rows;
      if (twice.empty() || twice.back() != sorted[i]) twice.push_back(sorted[i]);
    }
    std::vector<bool> met(twice.size(), false);
    for (Index i = 0; i < n && out.rows.size() < keep && !twice.empty(); ++i) {
      const auto at = std::lower_bound(twice.begin(), twice.end(), keys[static_cast<std::size_t>(i)]);
      if (at == twice.end() || *at != keys[static_cast<std::size_t>(i)]) continue;
      const std::size_t which = static_cast<std::size_t>(at - twice.begin());
      if (met[which]) out.rows.push_back(i);
      met[which] = true;
    }
  }
  for (Index row : out.rows) {
    Index i = 0;
    while (pair(i) != pair(row)) ++i;
    out.earlier.push_back(i);
  }
  return out;
}

}  // namespace lambdabar
