// The input of a two-pass fit as price_factors() keeps it.
#pragma once

#include <RcppEigen.h>

#include <lambdabar/passes/two_pass.hpp>

using ConstMap = Eigen::Map<const Eigen::MatrixXd>;

inline ConstMap map_matrix(SEXP x) { return ConstMap(REAL(x), Rf_nrows(x), Rf_ncols(x)); }

// The maps read R's memory, which the list keeps alive.
struct TwoPassInput {
  explicit TwoPassInput(const Rcpp::List& input)
      : data{map_matrix(input["returns"]), map_matrix(input["factors"]), {}} {
    const Rcpp::List traits = input["traits"], settings = input["options"];
    for (R_xlen_t q = 0; q < traits.size(); ++q)
      data.traits.push_back(map_matrix(traits[q]));
    const std::string weighting = settings["weighting"];
    options.weighting = weighting == "wls"   ? lambdabar::Weighting::wls
                        : weighting == "gls" ? lambdabar::Weighting::gls
                                             : lambdabar::Weighting::ols;
    options.intercept = settings["intercept"];
    options.min_obs =
        static_cast<lambdabar::Index>(Rcpp::as<double>(settings["min_obs"]));
    options.min_assets =
        static_cast<lambdabar::Index>(Rcpp::as<double>(settings["min_assets"]));
    options.threads = settings["threads"];
  }

  lambdabar::TwoPassData data;
  lambdabar::TwoPassOptions options;
};
