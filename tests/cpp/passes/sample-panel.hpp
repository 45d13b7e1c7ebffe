// Invented panels, slow reference solutions and certified data for the tests of passes
// and errors.
#pragma once

#include "lambdabar/passes/pooled.hpp"

#include <algorithm>
#include <cmath>
#include <cstdlib>
#include <fstream>
#include <numeric>
#include <random>
#include <sstream>
#include <string>
#include <vector>

namespace lambdabar::sample {

inline Column real_column(const std::vector<double>& values) {
  return Column{{Part{values.data(), nullptr, nullptr}}};
}

// Owns what a Design reads.
struct Panel {
  std::vector<int> period, asset;
  std::vector<double> y, w;
  std::vector<std::vector<double>> x;
  Index n_periods = 0;

  std::size_t n() const { return y.size(); }
  Design design(bool intercept = true, bool weighted = false) const {
    Design d;
    d.n_rows = static_cast<Index>(n());
    d.period = period.data();
    d.n_periods = n_periods;
    d.intercept = intercept;
    d.y = real_column(y);
    for (const auto& column : x) d.x.push_back(real_column(column));
    if (weighted) d.weight.push_back(real_column(w));
    return d;
  }

  Panel in_order(const std::vector<std::size_t>& order) const {
    Panel to = *this;
    for (std::size_t i = 0; i < n(); ++i) {
      to.period[i] = period[order[i]];
      to.asset[i] = asset[order[i]];
      to.y[i] = y[order[i]];
      to.w[i] = w[order[i]];
      for (std::size_t j = 0; j < x.size(); ++j) to.x[j][i] = x[j][order[i]];
    }
    return to;
  }

  Panel by_asset() const {
    std::vector<std::size_t> order(n());
    std::iota(order.begin(), order.end(), 0);
    std::stable_sort(order.begin(), order.end(), [&](std::size_t a, std::size_t b) {
      return asset[a] < asset[b];
    });
    return in_order(order);
  }

  Panel shuffled(unsigned seed) const {
    std::vector<std::size_t> order(n());
    std::iota(order.begin(), order.end(), 0);
    std::shuffle(order.begin(), order.end(), std::mt19937(seed));
    return in_order(order);
  }
};

// Ragged: each asset is there with probability 0.8, in period order.
inline Panel ragged_panel(int n_assets, int n_periods, int n_x, unsigned seed) {
  std::mt19937 engine(seed);
  std::normal_distribution<double> normal;
  std::uniform_real_distribution<double> uniform;
  Panel panel;
  panel.n_periods = n_periods;
  panel.x.resize(static_cast<std::size_t>(n_x));
  for (int t = 0; t < n_periods; ++t) {
    for (int a = 0; a < n_assets; ++a) {
      if (uniform(engine) > 0.8) continue;
      double y = 0.01 + 0.1 * normal(engine), common = normal(engine);
      for (int j = 0; j < n_x; ++j) {
        const double value = 3 * j + 0.5 * common + normal(engine);
        panel.x[static_cast<std::size_t>(j)].push_back(value);
        y += 0.02 * (j + 1) * value;
      }
      panel.y.push_back(y);
      panel.w.push_back(0.2 + uniform(engine));
      panel.period.push_back(t);
      panel.asset.push_back(a);
    }
  }
  return panel;
}

struct Reference {
  Vector coef, std_error;
  double rss = 0, tss = 0;
  Index n = 0;
};

// A plain QR on the complete rows for which `keep(row)` holds, in extended precision and
// without a shift.
template <class Keep>
Reference plain_qr(const Design& design, const Keep& keep) {
  using L = long double;
  using LMatrix = Eigen::Matrix<L, Eigen::Dynamic, Eigen::Dynamic>;
  using LVector = Eigen::Matrix<L, Eigen::Dynamic, 1>;
  const Index p = design.n_terms(), first = design.intercept ? 1 : 0;
  std::vector<Index> rows;
  detail::RowValues v;
  v.values.resize(design.x.size() + 1);
  for (Index i = 0; i < design.n_rows; ++i) {
    if (keep(i) && detail::read_row(design, i, v)) rows.push_back(i);
  }
  const Index n = static_cast<Index>(rows.size());
  LMatrix X(n, p);
  LVector y(n), root(n);
  for (Index i = 0; i < n; ++i) {
    detail::read_row(design, rows[static_cast<std::size_t>(i)], v);
    root[i] = std::sqrt(static_cast<L>(v.weight));
    y[i] = root[i] * v.values[0];
    if (design.intercept) X(i, 0) = root[i];
    for (Index j = first; j < p; ++j) {
      X(i, j) = root[i] * v.values[static_cast<std::size_t>(j - first) + 1];
    }
  }
  const Eigen::HouseholderQR<LMatrix> qr(X);
  const LVector b = qr.solve(y);
  const LMatrix R = qr.matrixQR().topRows(p).template triangularView<Eigen::Upper>();
  const LMatrix inverse =
      R.template triangularView<Eigen::Upper>().solve(LMatrix(LMatrix::Identity(p, p)));
  Reference to;
  to.n = n;
  to.coef = b.template cast<double>();
  const L rss = (y - X * b).squaredNorm();
  to.rss = static_cast<double>(rss);
  const L mean = design.intercept ? root.dot(y) / root.squaredNorm() : 0;
  to.tss = static_cast<double>((y - mean * root).squaredNorm());
  const LVector variance = inverse.rowwise().squaredNorm() * (rss / L(n - p));
  to.std_error = variance.cwiseSqrt().template cast<double>();
  return to;
}

// Certified sets: columns of a CSV file, named in its first line.
inline std::vector<std::vector<double>> read_csv(const std::string& path) {
  std::ifstream file(path);
  std::string line, cell;
  std::getline(file, line);
  std::vector<std::vector<double>> columns(
      static_cast<std::size_t>(std::count(line.begin(), line.end(), ',')) + 1);
  while (std::getline(file, line)) {
    std::istringstream cells(line);
    for (auto& column : columns) {
      std::getline(cells, cell, ',');
      column.push_back(std::strtod(cell.c_str(), nullptr));
    }
  }
  return columns;
}

// The quoted numbers, one or an array of them, that follow `key` behind `set`.
inline std::vector<long double> read_numbers(const std::string& path,
                                             const std::string& set,
                                             const std::string& key) {
  std::ifstream file(path);
  std::stringstream all;
  all << file.rdbuf();
  const std::string text = all.str();
  std::size_t at = text.find('"' + set + '"');
  at = text.find(':', text.find('"' + key + '"', at));
  const bool array = text.find_first_of("[\"", at) == text.find('[', at);
  const std::size_t end = array ? text.find(']', at) : text.find(',', at);
  std::vector<long double> numbers;
  while ((at = text.find_first_of("-0123456789", at)) < end) {
    const std::size_t stop = text.find_first_not_of("-+.0123456789eE", at);
    numbers.push_back(std::strtold(text.substr(at, stop - at).c_str(), nullptr));
    at = stop;
  }
  return numbers;
}

// Correct decimal digits of the worst element.
inline double digits(const Vector& value, const std::vector<long double>& exact) {
  double worst = 30;
  for (std::size_t i = 0; i < exact.size(); ++i) {
    const long double error =
        std::abs((value[static_cast<Index>(i)] - exact[i]) / exact[i]);
    if (error > 0) worst = std::min(worst, static_cast<double>(-std::log10(error)));
  }
  return worst;
}

struct CertifiedSet {
  Panel panel;
  bool intercept = true;
  std::vector<long double> estimate, sd;
};

// NIST StRD, linear least squares (Longley; Norris; NoInt1; Filip; Wampler1, 3, 5), with
// exact rational solutions of the published decimals in exact40.json.
inline CertifiedSet certified_set(const std::string& name, int degree) {
  const std::string folder = std::string(LAMBDABAR_FIXTURES) + "/strd/";
  const auto columns = read_csv(folder + name + ".csv");
  CertifiedSet set;
  Panel& panel = set.panel;
  panel.y = columns[0];
  panel.x.assign(columns.begin() + 1, columns.end());
  for (int power = 2; power <= degree; ++power) {
    std::vector<double> column;
    for (const double x : columns[1]) column.push_back(std::pow(x, power));
    panel.x.push_back(column);
  }
  panel.period.assign(panel.n(), 0);
  panel.asset.assign(panel.n(), 0);
  panel.w.assign(panel.n(), 1);
  panel.n_periods = 1;
  set.intercept = name != "NoInt1";
  set.estimate = read_numbers(folder + "exact40.json", name, "estimate");
  set.sd = read_numbers(folder + "exact40.json", name, "sd");
  return set;
}

struct Attainable {
  std::string name;
  int degree;
  double beta, sd;  // digits
};

// Digits from attainable.csv beside the data: those of a plain QR in double precision, or
// of the exact solution for the decimals rounded to doubles where that has fewer (Norris,
// errors: 14.0 against 14.1). Wampler1 has no residual, so no error to certify.
inline std::vector<Attainable> attainable_sets() {
  return {{"Longley", 1, 13, 14.1},
          {"Norris", 1, 12.5, 14.0},
          {"NoInt1", 1, 16.9, 14.5},
          {"Filip", 10, 7.2, 7},
          {"Wampler1", 5, 9.8, kNaN},
          {"Wampler3", 5, 9.3, 13.6},
          {"Wampler5", 5, 5.5, 13.6}};
}

}  // namespace lambdabar::sample
