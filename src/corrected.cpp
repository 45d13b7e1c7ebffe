#include "convert.h"
#include "guard.h"
#include "sections.h"
#include "views.h"

#include <lambdabar/passes/corrected_sections.hpp>
#include <lambdabar/passes/instrument_sections.hpp>

using lambdabar::Index;

namespace {

lambdabar::BetaErrors beta_errors(int n_factors, const Rcpp::NumericMatrix& covariance) {
  lambdabar::BetaErrors errors;
  errors.n_factors = n_factors;
  errors.covariance = covariance.begin();
  return errors;
}

lambdabar::CorrectedOptions corrected_options(double min_assets, int threads) {
  lambdabar::CorrectedOptions options;
  options.min_assets = static_cast<Index>(min_assets);
  options.threads = threads;
  return options;
}

}  // namespace

// The first n_factors columns of the design are betas; covariance: n x K(K+1)/2, packed.
// [[Rcpp::export(rng = false)]]
SEXP cpp_corrected_sections(const Rcpp::List& design,
                            const Rcpp::IntegerVector& period,
                            int n_periods,
                            int n_factors,
                            const Rcpp::NumericMatrix& covariance,
                            double min_assets,
                            int threads) {
  return guarded([&]() -> SEXP {
    const auto fit = lambdabar::corrected_sections(view_design(design, period, n_periods),
                                                   beta_errors(n_factors, covariance),
                                                   corrected_options(min_assets, threads));
    Rcpp::List out = section_list(fit);
    out["smallest_root"] = fit.smallest_root;
    out["kappa"] = fit.kappa;
    return out;
  });
}

// [[Rcpp::export(rng = false)]]
SEXP cpp_pooled_corrected(const Rcpp::List& design,
                          const Rcpp::IntegerVector& period,
                          int n_periods,
                          int n_factors,
                          const Rcpp::NumericMatrix& covariance,
                          const Rcpp::IntegerVector& asset,
                          int n_assets,
                          double min_assets,
                          int threads) {
  return guarded([&]() -> SEXP {
    const auto fit = lambdabar::pooled_corrected(view_design(design, period, n_periods),
                                                 beta_errors(n_factors, covariance),
                                                 asset.begin(),
                                                 n_assets,
                                                 corrected_options(min_assets, threads));
    return Rcpp::List::create(Rcpp::_["estimate"] = fit.estimate,
                              Rcpp::_["asset_rows"] = fit.asset_rows,
                              Rcpp::_["smallest_root"] = fit.smallest_root,
                              Rcpp::_["kappa"] = fit.kappa,
                              Rcpp::_["n_used"] = static_cast<double>(fit.n_used),
                              Rcpp::_["n_used_by_period"] = as_numeric(fit.n_used_by_period));
  });
}

// regressor_half: 0, 1 or 2 (both, averaged) a period.
// [[Rcpp::export(rng = false)]]
SEXP cpp_instrument_sections(const Rcpp::List& design,
                             const Rcpp::List& other,
                             const Rcpp::IntegerVector& period,
                             int n_periods,
                             const Rcpp::IntegerVector& regressor_half,
                             double min_assets,
                             int threads) {
  return guarded([&]() -> SEXP {
    std::vector<lambdabar::Column> columns;
    for (R_xlen_t k = 0; k < other.size(); ++k)
      columns.push_back(view_column(Rcpp::as<Rcpp::List>(other[k]), period.size()));
    std::vector<lambdabar::RegressorHalf> half;
    for (int mark : regressor_half)
      half.push_back(static_cast<lambdabar::RegressorHalf>(mark));
    lambdabar::InstrumentOptions options;
    options.min_assets = static_cast<Index>(min_assets);
    options.threads = threads;
    const auto fit = lambdabar::instrument_sections(
        view_design(design, period, n_periods), columns, half, options);
    Rcpp::List out = section_list(fit);
    out["strength"] = fit.strength;
    return out;
  });
}
