#include "convert.h"
#include "guard.h"
#include "pooled_fit.h"
#include "sections.h"
#include "views.h"

#include <lambdabar/passes/average.hpp>
#include <lambdabar/passes/predict.hpp>
#include <lambdabar/passes/usage.hpp>

using lambdabar::Index;

// [[Rcpp::export(rng = false)]]
SEXP cpp_cross_sections(const Rcpp::List& design,
                        const Rcpp::IntegerVector& period,
                        int n_periods,
                        double min_assets,
                        int threads) {
  return guarded([&]() -> SEXP {
    lambdabar::CrossSectionOptions options;
    options.min_assets = static_cast<Index>(min_assets);
    options.threads = threads;
    const auto fit = lambdabar::cross_sections(view_design(design, period, n_periods), options);
    Rcpp::List out = section_list(fit);
    out["from_rows"] = as_logical(fit.from_rows);
    return out;
  });
}

// [[Rcpp::export(rng = false)]]
SEXP cpp_average_premia(const Eigen::Map<Eigen::MatrixXd>& slopes,
                        const Eigen::Map<Eigen::MatrixXd>& std_error,
                        const Eigen::Map<Eigen::VectorXd>& n_assets,
                        const std::string& average) {
  return guarded([&]() -> SEXP {
    const auto how = average == "equal"    ? lambdabar::Average::equal
                     : average == "assets" ? lambdabar::Average::assets
                                           : lambdabar::Average::precision;
    const auto premia = lambdabar::average_premia(slopes, std_error, n_assets, how);
    return Rcpp::List::create(Rcpp::_["estimate"] = premia.estimate,
                              Rcpp::_["rows"] = premia.rows,
                              Rcpp::_["small_sample"] = premia.small_sample);
  });
}

// [[Rcpp::export(rng = false)]]
SEXP cpp_pooled(const Rcpp::List& design,
                const Rcpp::IntegerVector& period,
                int n_periods,
                int threads) {
  return guarded([&]() -> SEXP {
    return as_list(lambdabar::pooled(view_design(design, period, n_periods), threads));
  });
}

// [[Rcpp::export(rng = false)]]
Rcpp::NumericVector cpp_pooled_residuals(const Rcpp::List& design,
                                         const Rcpp::IntegerVector& period,
                                         int n_periods,
                                         const Rcpp::List& core) {
  return Rcpp::wrap(
      lambdabar::pooled_residuals(view_design(design, period, n_periods), pooled_fit(core)));
}

// [[Rcpp::export(rng = false)]]
Rcpp::List cpp_usage(const Rcpp::List& design,
                     const Rcpp::IntegerVector& period,
                     int n_periods,
                     const Rcpp::IntegerVector& asset,
                     double n_assets,
                     const Rcpp::LogicalVector& periods_in) {
  const auto usage = lambdabar::count_usage(view_design(design, period, n_periods),
                                            asset.begin(),
                                            static_cast<Index>(n_assets),
                                            std::vector<char>(periods_in.begin(), periods_in.end()));
  return Rcpp::List::create(Rcpp::_["n_rows"] = as_numeric(usage.n_rows),
                            Rcpp::_["n_used"] = as_numeric(usage.n_used),
                            Rcpp::_["missing"] = as_counts(usage.missing),
                            Rcpp::_["n_assets"] = static_cast<double>(usage.n_assets));
}

// [[Rcpp::export(rng = false)]]
Rcpp::NumericVector cpp_linear_predictor(const Rcpp::List& design,
                                         const Rcpp::IntegerVector& period,
                                         int n_periods,
                                         const Eigen::Map<Eigen::VectorXd>& coef) {
  return Rcpp::wrap(
      lambdabar::linear_predictor(view_design(design, period, n_periods), coef));
}

// [[Rcpp::export(rng = false)]]
Rcpp::NumericVector cpp_response(const Rcpp::List& design,
                                 const Rcpp::IntegerVector& period,
                                 int n_periods) {
  const auto view = view_design(design, period, n_periods);
  Rcpp::NumericVector out = Rcpp::no_init(view.n_rows);
  view.y.read(0, view.n_rows, out.begin());
  return out;
}
