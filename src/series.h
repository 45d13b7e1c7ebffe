// Settings of a sum over periods; see series_options() in R/errors-restate.R.
#pragma once

#include <RcppEigen.h>

#include <lambdabar/errors/series_sum.hpp>

inline lambdabar::SeriesOptions series_options(const Rcpp::List& options) {
  const std::string kernel = options["kernel"], rule = options["rule"];
  lambdabar::SeriesOptions out;
  out.kernel = kernel == "parzen"      ? lambdabar::Kernel::parzen
               : kernel == "qs"        ? lambdabar::Kernel::qs
               : kernel == "truncated" ? lambdabar::Kernel::truncated
                                       : lambdabar::Kernel::bartlett;
  out.rule = rule == "rule"         ? lambdabar::LagRule::rule_of_thumb
             : rule == "root"       ? lambdabar::LagRule::root
             : rule == "newey_west" ? lambdabar::LagRule::newey_west
             : rule == "andrews"    ? lambdabar::LagRule::andrews
                                    : lambdabar::LagRule::fixed;
  out.lags = options["lags"];
  out.prewhiten = options["prewhiten"];
  return out;
}
