// What every kind of cross-section reports, as R gets it.
#pragma once

#include "convert.h"
#include "status.h"

#include <lambdabar/passes/cross_sections.hpp>

inline Rcpp::List section_list(const lambdabar::SectionResults& fit) {
  return Rcpp::List::create(Rcpp::_["coef"] = fit.coef,
                            Rcpp::_["std_error"] = fit.std_error,
                            Rcpp::_["r_squared"] = fit.r_squared,
                            Rcpp::_["n_used"] = as_numeric(fit.n_used),
                            Rcpp::_["status"] = status_names(fit.status),
                            Rcpp::_["culprit"] = one_based_or_na(fit.culprit),
                            Rcpp::_["varies"] = as_logical(fit.varies));
}
