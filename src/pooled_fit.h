// A pooled fit as an R list and back, so that its errors can be restated later.
#pragma once

#include "convert.h"

#include <lambdabar/passes/pooled.hpp>

inline Rcpp::List as_list(const lambdabar::PooledFit& fit) {
  return Rcpp::List::create(Rcpp::_["coef"] = fit.coef,
                            Rcpp::_["aliased"] = as_logical(fit.aliased),
                            Rcpp::_["bread"] = fit.bread,
                            Rcpp::_["rss"] = fit.rss,
                            Rcpp::_["tss"] = fit.tss,
                            Rcpp::_["sigma2"] = fit.sigma2,
                            Rcpp::_["r_squared"] = fit.r_squared,
                            Rcpp::_["n_used"] = static_cast<double>(fit.n_used),
                            Rcpp::_["n_rows"] = static_cast<double>(fit.n_rows),
                            Rcpp::_["rank"] = static_cast<double>(fit.rank),
                            Rcpp::_["from_rows"] = fit.from_rows,
                            Rcpp::_["missing"] = as_numeric(fit.missing),
                            Rcpp::_["centre"] = fit.centre,
                            Rcpp::_["level"] = fit.level,
                            Rcpp::_["whiten"] = fit.whiten);
}

inline lambdabar::PooledFit pooled_fit(const Rcpp::List& list) {
  lambdabar::PooledFit fit;
  fit.coef = Rcpp::as<lambdabar::Vector>(list["coef"]);
  fit.aliased = Rcpp::as<std::vector<bool>>(list["aliased"]);
  fit.bread = Rcpp::as<lambdabar::Matrix>(list["bread"]);
  fit.rss = list["rss"];
  fit.tss = list["tss"];
  fit.sigma2 = list["sigma2"];
  fit.r_squared = list["r_squared"];
  fit.n_used = static_cast<lambdabar::Index>(Rcpp::as<double>(list["n_used"]));
  fit.n_rows = static_cast<lambdabar::Index>(Rcpp::as<double>(list["n_rows"]));
  fit.rank = static_cast<lambdabar::Index>(Rcpp::as<double>(list["rank"]));
  fit.from_rows = list["from_rows"];
  const Rcpp::NumericVector missing = list["missing"];
  fit.missing.assign(missing.begin(), missing.end());
  fit.centre = Rcpp::as<lambdabar::Vector>(list["centre"]);
  fit.level = list["level"];
  fit.whiten = Rcpp::as<lambdabar::Matrix>(list["whiten"]);
  return fit;
}
