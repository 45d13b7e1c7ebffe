#include "convert.h"
#include "guard.h"
#include "views.h"

#include <lambdabar/passes/exposures.hpp>
#include <lambdabar/passes/shrink.hpp>

using lambdabar::Index;

namespace {

std::vector<int> as_ints(const Rcpp::IntegerVector& x) {
  return std::vector<int>(x.begin(), x.end());
}

lambdabar::ExposureOptions exposure_options(const Rcpp::List& settings) {
  lambdabar::ExposureOptions options;
  const std::string window = settings["window"], form = settings["lead_lag_form"];
  options.window = window == "rolling"     ? lambdabar::WindowKind::rolling
                   : window == "expanding" ? lambdabar::WindowKind::expanding
                   : window == "decay"     ? lambdabar::WindowKind::decay
                                           : lambdabar::WindowKind::full;
  options.length = static_cast<Index>(Rcpp::as<double>(settings["length"]));
  options.half_life = settings["half_life"];
  options.min_obs = static_cast<Index>(Rcpp::as<double>(settings["min_obs"]));
  options.lead_lag.leads = Rcpp::as<int>(settings["leads"]);
  options.lead_lag.lags = Rcpp::as<int>(settings["lags"]);
  options.lead_lag.form = form == "fowler_rorke" ? lambdabar::LeadLagForm::fowler_rorke
                                                 : lambdabar::LeadLagForm::sum;
  SEXP marks = settings["half_of_slot"];
  if (!Rf_isNull(marks)) {
    options.half_of_slot = INTEGER(marks);
    options.half = settings["half"];
  }
  options.threads = settings["threads"];
  return options;
}

}  // namespace

// data: y, weight (parts), asset, period, n_assets, slot (0-based, one a period), factors
// (slots x K). queries: asset, time, data_asset, last_slot, all 0-based; -1 marks an
// asset that is not in the data. wanted: which columns to fill.
// [[Rcpp::export(rng = false)]]
SEXP cpp_exposures(const Rcpp::List& data,
                   const Rcpp::List& queries,
                   const Rcpp::List& settings,
                   const std::vector<std::string>& wanted) {
  return guarded([&]() -> SEXP {
    const Rcpp::IntegerVector asset = data["asset"], period = data["period"];
    const Rcpp::NumericMatrix factors = data["factors"];
    lambdabar::ExposureData view{{},
                                 {},
                                 nullptr,
                                 nullptr,
                                 0,
                                 0,
                                 {},
                                 Eigen::Map<const Eigen::MatrixXd>(
                                     factors.begin(), factors.nrow(), factors.ncol())};
    view.n_rows = asset.size();
    view.returns = view_column(Rcpp::as<Rcpp::List>(data["y"]), view.n_rows);
    SEXP weight = data["weight"];
    if (!Rf_isNull(weight))
      view.weight.push_back(view_column(Rcpp::as<Rcpp::List>(weight), view.n_rows));
    view.asset = asset.begin();
    view.period = period.begin();
    view.n_assets = static_cast<Index>(Rcpp::as<double>(data["n_assets"]));
    view.slot = as_ints(data["slot"]);

    const Rcpp::IntegerVector asked = queries["asset"], time = queries["time"];
    lambdabar::ExposureQueries questions;
    questions.asset = asked.begin();
    questions.time = time.begin();
    questions.n = asked.size();
    questions.data_asset = as_ints(queries["data_asset"]);
    questions.last_slot = as_ints(queries["last_slot"]);

    const int n = static_cast<int>(asked.size()), K = factors.ncol();
    lambdabar::ExposureColumns columns;
    columns.missing = NA_REAL;
    Rcpp::List out;
    auto reals = [&](const char* name, R_xlen_t size) -> Rcpp::NumericVector {
      Rcpp::NumericVector values = Rcpp::no_init(size);
      out[name] = values;
      return values;
    };
    auto is_wanted = [&](const char* name) {
      return std::find(wanted.begin(), wanted.end(), name) != wanted.end();
    };
    auto matrix = [&](const char* name, int width) -> double* {
      if (!is_wanted(name)) return nullptr;
      Rcpp::NumericVector values = reals(name, static_cast<R_xlen_t>(n) * width);
      values.attr("dim") = Rcpp::Dimension(n, width);
      return values.begin();
    };
    auto vector = [&](const char* name) -> double* {
      return is_wanted(name) ? reals(name, n).begin() : nullptr;
    };
    columns.beta = matrix("beta", K);
    columns.std_error = matrix("std_error", K);
    columns.covariance = matrix("covariance", K * (K + 1) / 2);
    columns.alpha = vector("alpha");
    columns.resid_var = vector("resid_var");
    columns.r_squared = vector("r_squared");
    Rcpp::IntegerVector n_obs = Rcpp::no_init(n), status = Rcpp::no_init(n);
    columns.n_obs = n_obs.begin();
    columns.status = status.begin();
    out["n_obs"] = n_obs;
    out["status"] = status;
    lambdabar::exposures(view, questions, exposure_options(settings), columns);
    return out;
  });
}

// Shrinks the columns of beta and std_error (copies) within dates.
// [[Rcpp::export(rng = false)]]
Rcpp::List cpp_shrink_betas(const Rcpp::NumericMatrix& beta,
                            const Rcpp::NumericMatrix& std_error,
                            const Rcpp::IntegerVector& date,
                            int n_dates,
                            const std::string& rule) {
  const auto prior_rule = rule == "net" ? lambdabar::PriorVariance::net
                          : rule == "paule_mandel"
                              ? lambdabar::PriorVariance::paule_mandel
                              : lambdabar::PriorVariance::raw;
  Rcpp::NumericMatrix b = Rcpp::clone(beta), se = Rcpp::clone(std_error);
  Rcpp::NumericMatrix mean(n_dates, b.ncol()), variance(n_dates, b.ncol());
  for (int k = 0; k < b.ncol(); ++k) {
    const auto priors = lambdabar::shrink_betas(
        &b(0, k), &se(0, k), date.begin(), b.nrow(), n_dates, prior_rule);
    for (int t = 0; t < n_dates; ++t) {
      mean(t, k) = priors[static_cast<std::size_t>(t)].mean;
      variance(t, k) = priors[static_cast<std::size_t>(t)].variance;
    }
  }
  return Rcpp::List::create(Rcpp::_["beta"] = b,
                            Rcpp::_["std_error"] = se,
                            Rcpp::_["mean"] = mean,
                            Rcpp::_["variance"] = variance);
}
