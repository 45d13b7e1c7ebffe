// Small conversions between the core's containers and R's.
#pragma once

#include <RcppEigen.h>

#include <lambdabar/base.hpp>

inline Rcpp::NumericVector as_numeric(const std::vector<lambdabar::Index>& x) {
  return Rcpp::NumericVector(x.begin(), x.end());
}

// Rows and other positions: 0-based in the core, 1-based in R.
inline Rcpp::NumericVector one_based(const std::vector<lambdabar::Index>& x) {
  Rcpp::NumericVector out(x.size());
  for (std::size_t i = 0; i < x.size(); ++i) out[i] = static_cast<double>(x[i]) + 1.0;
  return out;
}

// The same with -1, "none", as NA.
inline Rcpp::IntegerVector one_based_or_na(const std::vector<lambdabar::Index>& x) {
  Rcpp::IntegerVector out(x.size());
  for (std::size_t i = 0; i < x.size(); ++i) {
    out[i] = x[i] < 0 ? NA_INTEGER : static_cast<int>(x[i]) + 1;
  }
  return out;
}

inline Rcpp::LogicalVector as_logical(const std::vector<bool>& x) {
  return Rcpp::LogicalVector(x.begin(), x.end());
}

inline Rcpp::NumericMatrix as_counts(
    const Eigen::Matrix<lambdabar::Index, Eigen::Dynamic, Eigen::Dynamic>& x) {
  return Rcpp::wrap(lambdabar::Matrix(x.cast<double>()));
}

inline std::vector<lambdabar::Index> as_indices(const Rcpp::IntegerVector& x) {
  return std::vector<lambdabar::Index>(x.begin(), x.end());
}
