#include "views.h"

#include <lambdabar/panel/groups.hpp>

using lambdabar::Index;

// cell: 0-based, -1 for none; see refine_cells().
// [[Rcpp::export(rng = false)]]
Rcpp::IntegerVector cpp_refine_cells(const Rcpp::NumericVector& value,
                                     const Rcpp::LogicalVector& reference,
                                     const Rcpp::IntegerVector& cell,
                                     int n_cells,
                                     int n_classes) {
  Rcpp::IntegerVector out = Rcpp::clone(cell);
  lambdabar::refine_cells(
      value.begin(), reference.begin(), value.size(), n_cells, n_classes, out.begin());
  return out;
}

// [[Rcpp::export(rng = false)]]
Rcpp::List cpp_cell_means(const Rcpp::List& y,
                          const Rcpp::IntegerVector& period,
                          int n_periods,
                          const Rcpp::IntegerVector& cell,
                          int n_cells) {
  const auto means = lambdabar::cell_means(
      view_column(y, period.size()), period.begin(), cell.begin(), period.size(), n_periods, n_cells);
  return Rcpp::List::create(Rcpp::_["mean"] = means.mean, Rcpp::_["count"] = means.count);
}
