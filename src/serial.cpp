#include "convert.h"
#include "guard.h"
#include "series.h"

#include <lambdabar/errors/time_sums.hpp>
#include <lambdabar/tests/stability.hpp>

using lambdabar::Index;

// kind: cosine, blocks, geometric; size: cosines, groups, mean block length.
// [[Rcpp::export(rng = false)]]
SEXP cpp_time_sum(const Eigen::Map<Eigen::MatrixXd>& rows,
                  const std::string& kind,
                  double size) {
  return guarded([&]() -> SEXP {
    if (kind == "cosine")
      return Rcpp::wrap(lambdabar::cosine_sum(rows, static_cast<Index>(size)));
    if (kind == "blocks")
      return Rcpp::wrap(lambdabar::block_sum(rows, static_cast<Index>(size)));
    return Rcpp::wrap(lambdabar::geometric_sum(rows, size));
  });
}

// [[Rcpp::export(rng = false)]]
double cpp_block_length(const Eigen::Map<Eigen::VectorXd>& series) {
  return lambdabar::block_length(series);
}

// [[Rcpp::export(rng = false)]]
SEXP cpp_resampled_t(const Eigen::Map<Eigen::MatrixXd>& rows,
                     const Rcpp::IntegerMatrix& index,
                     double length,
                     int threads) {
  return guarded([&]() -> SEXP {
    return Rcpp::wrap(lambdabar::resampled_t(
        rows, std::vector<int>(index.begin(), index.end()), length, threads));
  });
}

// [[Rcpp::export(rng = false)]]
SEXP cpp_scan_breaks(const Eigen::Map<Eigen::VectorXd>& series,
                     double trim,
                     const Rcpp::List& options,
                     const Rcpp::IntegerVector& slot) {
  return guarded([&]() -> SEXP {
    const auto scan =
        lambdabar::scan_breaks(series, trim, series_options(options), as_indices(slot));
    return Rcpp::List::create(Rcpp::_["wald"] = scan.wald,
                              Rcpp::_["first"] = static_cast<double>(scan.first_date));
  });
}
