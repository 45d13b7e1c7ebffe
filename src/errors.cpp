#include "convert.h"
#include "guard.h"
#include "pooled_fit.h"
#include "series.h"
#include "views.h"

#include <lambdabar/errors/average_clusters.hpp>
#include <lambdabar/tests/restrictions.hpp>

using lambdabar::Index;

namespace {

std::vector<const int*> cluster_ways(const Rcpp::List& codes) {
  std::vector<const int*> ways;
  for (R_xlen_t d = 0; d < codes.size(); ++d) ways.push_back(INTEGER(codes[d]));
  return ways;
}

lambdabar::SmallSample small_sample(const std::string& small) {
  return small == "each"  ? lambdabar::SmallSample::each
         : small == "min" ? lambdabar::SmallSample::min
                          : lambdabar::SmallSample::none;
}

Rcpp::List cluster_list(const lambdabar::ClusterCovariance& result) {
  return Rcpp::List::create(Rcpp::_["vcov"] = result.vcov,
                            Rcpp::_["n_groups"] = as_numeric(result.n_groups),
                            Rcpp::_["min_eigen_relative"] = result.min_eigen_relative,
                            Rcpp::_["n_clipped"] = static_cast<double>(result.n_clipped),
                            Rcpp::_["not_positive"] = as_logical(result.not_positive),
                            Rcpp::_["nested_in"] = one_based(std::vector<Index>(
                                result.nested_in.begin(), result.nested_in.end())));
}

}  // namespace

// [[Rcpp::export(rng = false)]]
SEXP cpp_sum_series(const Eigen::Map<Eigen::MatrixXd>& rows,
                    const Rcpp::IntegerVector& slot,
                    const Eigen::Map<Eigen::VectorXd>& bandwidth_weights,
                    const Rcpp::List& options) {
  return guarded([&]() -> SEXP {
    const auto sum = lambdabar::sum_series(
        rows, as_indices(slot), bandwidth_weights, series_options(options));
    return Rcpp::List::create(Rcpp::_["S"] = sum.S,
                              Rcpp::_["bandwidth"] = sum.bandwidth,
                              Rcpp::_["lags"] = sum.lags,
                              Rcpp::_["capped"] = sum.capped,
                              Rcpp::_["closed_gaps"] = sum.closed_gaps,
                              Rcpp::_["min_eigen_relative"] = sum.min_eigen_relative);
  });
}

// [[Rcpp::export(rng = false)]]
SEXP cpp_heteroskedastic(const Rcpp::List& design,
                         const Rcpp::IntegerVector& period,
                         int n_periods,
                         const Rcpp::List& core,
                         int type,
                         int threads) {
  return guarded([&]() -> SEXP {
    return Rcpp::wrap(lambdabar::heteroskedastic(
        view_design(design, period, n_periods), pooled_fit(core), type, threads));
  });
}

// [[Rcpp::export(rng = false)]]
SEXP cpp_clustered(const Rcpp::List& design,
                   const Rcpp::IntegerVector& period,
                   int n_periods,
                   const Rcpp::List& core,
                   const Rcpp::List& codes,
                   const Rcpp::NumericVector& n_codes,
                   const std::string& small,
                   int threads) {
  return guarded([&]() -> SEXP {
    return cluster_list(
        lambdabar::clustered(view_design(design, period, n_periods),
                             pooled_fit(core),
                             cluster_ways(codes),
                             std::vector<Index>(n_codes.begin(), n_codes.end()),
                             small_sample(small),
                             threads));
  });
}

// omega: weight of each period in the average, 0 where it was not used.
// [[Rcpp::export(rng = false)]]
SEXP cpp_clustered_average(const Rcpp::List& design,
                           const Rcpp::IntegerVector& period,
                           const Eigen::VectorXd& omega,
                           const Eigen::VectorXd& theta,
                           const Rcpp::List& codes,
                           const Rcpp::NumericVector& n_codes,
                           const std::string& small) {
  return guarded([&]() -> SEXP {
    return cluster_list(lambdabar::clustered_average(
        view_design(design, period, static_cast<int>(omega.size())),
        omega,
        theta,
        cluster_ways(codes),
        std::vector<Index>(n_codes.begin(), n_codes.end()),
        small_sample(small)));
  });
}

// Sums of influence rows in each period, n_periods x rank.
// [[Rcpp::export(rng = false)]]
SEXP cpp_period_scores(const Rcpp::List& design,
                       const Rcpp::IntegerVector& period,
                       int n_periods,
                       const Rcpp::List& core,
                       int threads) {
  return guarded([&]() -> SEXP {
    return Rcpp::wrap(lambdabar::period_scores(
        view_design(design, period, n_periods), pooled_fit(core), threads));
  });
}

// [[Rcpp::export(rng = false)]]
SEXP cpp_wald(const Eigen::Map<Eigen::VectorXd>& theta,
              const Eigen::Map<Eigen::MatrixXd>& vcov,
              const Eigen::Map<Eigen::MatrixXd>& restrictions,
              const Eigen::Map<Eigen::VectorXd>& value) {
  return guarded([&]() -> SEXP {
    const auto test = lambdabar::wald_test(theta, vcov, restrictions, value);
    return Rcpp::List::create(Rcpp::_["statistic"] = test.statistic,
                              Rcpp::_["rank"] = static_cast<double>(test.df),
                              Rcpp::_["outside"] = test.outside);
  });
}
