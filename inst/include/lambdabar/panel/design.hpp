// The rows of a panel as the estimators see them: columns read in place.
//
// A design column is a product of parts. A part is a real vector, an integer vector, or
// an integer code looked up in a small table (a factor's contrast). So `size`,
// `size:value` and each of 48 industry dummies need no memory beyond the user's own data.
// The caller owns all memory and keeps it alive while a Design is in use.
#pragma once

#include "../base.hpp"

#include <climits>

namespace lambdabar {

inline constexpr int kMissingInt = INT_MIN;  // how R stores a missing integer

struct Part {
  const double* real = nullptr;   // length n, or null
  const int* code = nullptr;      // length n, or null; kMissingInt reads as NaN
  const double* table = nullptr;  // value of code c is table[c - 1]; null: the code itself

  double at(Index i) const {
    if (real) return real[i];
    if (code[i] == kMissingInt) return kNaN;
    return table ? table[code[i] - 1] : static_cast<double>(code[i]);
  }
};

struct Column {
  std::vector<Part> parts;  // at least one

  // Writes rows begin .. begin + n - 1 to out.
  void read(Index begin, Index n, double* out) const {
    for (std::size_t p = 0; p < parts.size(); ++p) {
      const Part& part = parts[p];
      if (p == 0) {
        for (Index i = 0; i < n; ++i) out[i] = part.at(begin + i);
      } else {
        for (Index i = 0; i < n; ++i) out[i] *= part.at(begin + i);
      }
    }
  }

  double at(Index i) const {
    double value = parts[0].at(i);
    for (std::size_t p = 1; p < parts.size(); ++p) value *= parts[p].at(i);
    return value;
  }

  // The column's own memory when it is one plain real vector, else null.
  const double* plain() const { return parts.size() == 1 ? parts[0].real : nullptr; }
};

// What one regression needs. A row is complete when y, every x and the weight are finite
// and the weight is positive; only complete rows enter an estimate.
struct Design {
  Index n_rows = 0;
  const int* period = nullptr;  // 0 .. n_periods - 1, length n_rows, none missing
  Index n_periods = 0;
  bool intercept = true;
  Column y;
  std::vector<Column> x;     // without the constant
  std::vector<Column> weight;  // empty or one

  Index n_terms() const { return static_cast<Index>(x.size()) + (intercept ? 1 : 0); }
  // Variables whose missing values are counted: y, the x, the weight.
  Index n_variables() const { return 1 + static_cast<Index>(x.size() + weight.size()); }
};

}  // namespace lambdabar
