// Views of R's memory for the core. A view holds no reference: the R objects that came in as
// arguments of the export keep the memory alive until it returns.
#pragma once

#include <RcppEigen.h>

#include <lambdabar/panel/design.hpp>

// A part is list(x = vector or matrix, column = 0-based column of a matrix, table = numeric
// or NULL); see R/pass-design.R.
inline lambdabar::Part view_part(const Rcpp::List& part, lambdabar::Index n) {
  SEXP x = part["x"];
  const R_xlen_t column = Rf_asInteger(part["column"]);
  lambdabar::Part out;
  if (TYPEOF(x) == REALSXP) {
    out.real = REAL(x) + column * n;
  } else {
    out.code = (TYPEOF(x) == LGLSXP ? LOGICAL(x) : INTEGER(x)) + column * n;
  }
  if (Rf_xlength(x) < (column + 1) * n) Rcpp::stop("a design column is shorter than the panel");
  SEXP table = part["table"];
  if (!Rf_isNull(table)) out.table = REAL(table);
  return out;
}

inline lambdabar::Column view_column(const Rcpp::List& parts, lambdabar::Index n) {
  lambdabar::Column out;
  for (R_xlen_t i = 0; i < parts.size(); ++i) out.parts.push_back(view_part(parts[i], n));
  return out;
}

inline lambdabar::Column view_column(SEXP x, lambdabar::Index n) {
  return view_column(Rcpp::List::create(Rcpp::List::create(
                         Rcpp::_["x"] = x, Rcpp::_["column"] = 0, Rcpp::_["table"] = R_NilValue)),
                     n);
}

inline lambdabar::Design view_design(const Rcpp::List& design,
                                     const Rcpp::IntegerVector& period,
                                     int n_periods) {
  lambdabar::Design out;
  out.n_rows = period.size();
  out.period = period.begin();
  out.n_periods = n_periods;
  out.intercept = Rcpp::as<bool>(design["intercept"]);
  out.y = view_column(Rcpp::as<Rcpp::List>(design["y"]), out.n_rows);
  const Rcpp::List x = design["x"];
  for (R_xlen_t j = 0; j < x.size(); ++j) {
    out.x.push_back(view_column(Rcpp::as<Rcpp::List>(x[j]), out.n_rows));
  }
  SEXP weight = design["weight"];
  if (!Rf_isNull(weight)) {
    out.weight.push_back(view_column(Rcpp::as<Rcpp::List>(weight), out.n_rows));
  }
  return out;
}
