#include "convert.h"
#include "views.h"

#include <lambdabar/panel/health.hpp>
#include <lambdabar/panel/keys.hpp>
#include <lambdabar/panel/reshape.hpp>

using lambdabar::Index;

// [[Rcpp::export(rng = false)]]
Rcpp::List cpp_encode(SEXP x) {
  const Index n = Rf_xlength(x);
  Rcpp::IntegerVector code = Rcpp::no_init(n);
  lambdabar::Codes codes;
  switch (TYPEOF(x)) {
    case INTSXP:
      codes = lambdabar::encode_integers(INTEGER(x), n, NA_INTEGER, code.begin());
      break;
    case REALSXP:
      codes = lambdabar::encode_reals(REAL(x), n, code.begin());
      break;
    case STRSXP: {
      const SEXP* strings = STRING_PTR(x);
      codes = lambdabar::encode_addresses(reinterpret_cast<const void* const*>(strings),
                                          n,
                                          static_cast<const void*>(NA_STRING),
                                          code.begin());
      break;
    }
    default:
      Rcpp::stop("this type cannot be encoded");
  }
  return Rcpp::List::create(Rcpp::_["code"] = code, Rcpp::_["first"] = one_based(codes.first));
}

// Writes into `code`, which cpp_encode() made in this call chain and nobody else holds.
// [[Rcpp::export(rng = false)]]
Rcpp::IntegerVector cpp_relabel(Rcpp::IntegerVector code, const Rcpp::IntegerVector& to) {
  for (R_xlen_t i = 0; i < code.size(); ++i) {
    if (code[i] >= 0) code[i] = to[code[i]];
  }
  return code;
}

// [[Rcpp::export(rng = false)]]
Rcpp::List cpp_missing_codes(const Rcpp::IntegerVector& code, int keep) {
  double count = 0;
  Rcpp::NumericVector rows;
  for (R_xlen_t i = 0; i < code.size(); ++i) {
    if (code[i] >= 0) continue;
    if (count++ < keep) rows.push_back(static_cast<double>(i) + 1.0);
  }
  return Rcpp::List::create(Rcpp::_["count"] = count, Rcpp::_["rows"] = rows);
}

// [[Rcpp::export(rng = false)]]
Rcpp::List cpp_duplicates(const Rcpp::IntegerVector& asset,
                          const Rcpp::IntegerVector& period,
                          double n_assets,
                          double n_periods,
                          int keep) {
  const auto found = lambdabar::find_duplicates(asset.begin(),
                                                period.begin(),
                                                asset.size(),
                                                static_cast<Index>(n_assets),
                                                static_cast<Index>(n_periods),
                                                static_cast<std::size_t>(keep));
  return Rcpp::List::create(Rcpp::_["count"] = static_cast<double>(found.n_rows),
                            Rcpp::_["rows"] = one_based(found.rows),
                            Rcpp::_["earlier"] = one_based(found.earlier));
}

// [[Rcpp::export(rng = false)]]
Rcpp::List cpp_asset_spans(const Rcpp::IntegerVector& asset,
                           const Rcpp::IntegerVector& period,
                           double n_assets,
                           const Rcpp::IntegerVector& slot) {
  const std::vector<Index> slots(slot.begin(), slot.end());
  const auto spans = lambdabar::asset_spans(
      asset.begin(), period.begin(), asset.size(), static_cast<Index>(n_assets), slots);
  return Rcpp::List::create(Rcpp::_["n_rows"] = as_numeric(spans.n_rows),
                            Rcpp::_["first_slot"] = as_numeric(spans.first_slot),
                            Rcpp::_["last_slot"] = as_numeric(spans.last_slot),
                            Rcpp::_["n_assets"] = as_numeric(spans.n_assets));
}

// [[Rcpp::export(rng = false)]]
Rcpp::List cpp_column_health(SEXP x, const Rcpp::IntegerVector& period, int n_periods) {
  const auto health =
      lambdabar::column_health(view_column(x, period.size()), period.size(), period.begin(), n_periods);
  return Rcpp::List::create(
      Rcpp::_["n_missing"] = static_cast<double>(health.n_missing),
      Rcpp::_["n_infinite"] = static_cast<double>(health.n_infinite),
      Rcpp::_["minimum"] = health.minimum,
      Rcpp::_["maximum"] = health.maximum,
      Rcpp::_["n_periods_constant"] = static_cast<double>(health.n_periods_constant),
      Rcpp::_["n_periods_compared"] = static_cast<double>(health.n_periods_compared),
      Rcpp::_["mean_size"] = Rcpp::NumericVector(health.mean_size.begin(), health.mean_size.end()));
}

// [[Rcpp::export(rng = false)]]
Rcpp::NumericMatrix cpp_widen(const Rcpp::List& column,
                              const Rcpp::IntegerVector& asset,
                              const Rcpp::IntegerVector& period,
                              int n_assets,
                              int n_periods) {
  return Rcpp::wrap(lambdabar::widen(view_column(column, asset.size()),
                                     asset.size(),
                                     asset.begin(),
                                     period.begin(),
                                     n_assets,
                                     n_periods));
}

// [[Rcpp::export(rng = false)]]
Rcpp::List cpp_period_values(const Rcpp::List& column,
                             const Rcpp::IntegerVector& period,
                             int n_periods) {
  const auto values = lambdabar::period_values(
      view_column(column, period.size()), period.size(), period.begin(), n_periods);
  return Rcpp::List::create(
      Rcpp::_["value"] = values.value,
      Rcpp::_["conflict_row"] = static_cast<double>(values.conflict_row) + 1.0,
      Rcpp::_["n_conflicts"] = static_cast<double>(values.n_conflicts));
}
