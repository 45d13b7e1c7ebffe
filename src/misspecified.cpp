#include "convert.h"
#include "guard.h"
#include "series.h"
#include "two_pass_input.h"

#include <lambdabar/tests/discount.hpp>
#include <lambdabar/tests/efficient.hpp>
#include <lambdabar/tests/pricing_r2.hpp>
#include <lambdabar/tests/weighted_chisq.hpp>

namespace {

Rcpp::List form_list(const lambdabar::WeightedForm& form) {
  return Rcpp::List::create(
      Rcpp::_["statistic"] = form.statistic,
      Rcpp::_["weights"] = form.weights,
      Rcpp::_["p"] = lambdabar::weighted_chisq_tail(form.weights, form.statistic));
}

struct WeightedInput : TwoPassInput {
  WeightedInput(const Rcpp::List& input, bool gls) : TwoPassInput(input) {
    options.weighting = gls ? lambdabar::Weighting::gls : lambdabar::Weighting::ols;
  }
};

}  // namespace

// [[Rcpp::export(rng = false)]]
double cpp_weighted_chisq(const Eigen::VectorXd& weights, double statistic) {
  return lambdabar::weighted_chisq_tail(weights, statistic);
}

// The second pass is done again under the weights of the measure.
// [[Rcpp::export(rng = false)]]
SEXP cpp_pricing_r2(const Rcpp::List& input,
                    bool gls,
                    const Rcpp::List& series,
                    const Rcpp::IntegerVector& slot) {
  return guarded([&]() -> SEXP {
    const WeightedInput view(input, gls);
    const auto fit = lambdabar::two_pass(view.data, view.options);
    const auto r2 = lambdabar::pricing_r2(
        view.data, fit, view.options, series_options(series), as_indices(slot));
    const auto prices = lambdabar::covariance_prices(fit);
    return Rcpp::List::create(Rcpp::_["r2"] = r2.r2,
                              Rcpp::_["std_error"] = r2.std_error,
                              Rcpp::_["Q"] = r2.Q,
                              Rcpp::_["Q0"] = r2.Q0,
                              Rcpp::_["rows"] = r2.rows,
                              Rcpp::_["one"] = form_list(r2.one),
                              Rcpp::_["zero"] = form_list(r2.zero),
                              Rcpp::_["b"] = prices.b,
                              Rcpp::_["b_rows"] = prices.rows);
  });
}

// [[Rcpp::export(rng = false)]]
SEXP cpp_joint_zero(const Eigen::VectorXd& value,
                    const Eigen::MatrixXd& rows,
                    const Rcpp::List& series,
                    const Rcpp::IntegerVector& slot) {
  return guarded([&]() -> SEXP {
    return Rcpp::wrap(
        lambdabar::joint_zero(value, rows, as_indices(slot), series_options(series))
            .value);
  });
}

// [[Rcpp::export(rng = false)]]
SEXP cpp_discount_factor(const Rcpp::List& input,
                         bool gross,
                         const Rcpp::List& series,
                         const Rcpp::IntegerVector& slot) {
  return guarded([&]() -> SEXP {
    const TwoPassInput view(input);
    const auto m = lambdabar::discount_factor(view.data.returns,
                                              view.data.factors,
                                              gross,
                                              series_options(series),
                                              as_indices(slot));
    return Rcpp::List::create(Rcpp::_["b"] = m.b,
                              Rcpp::_["premium"] = m.premium,
                              Rcpp::_["rows"] = m.rows,
                              Rcpp::_["usual_rows"] = m.usual_rows,
                              Rcpp::_["distance2"] = m.distance2,
                              Rcpp::_["distance_rows"] = m.distance_rows,
                              Rcpp::_["right"] = form_list(m.right));
  });
}

// [[Rcpp::export(rng = false)]]
SEXP cpp_efficient_moments(const Rcpp::List& input,
                           const Rcpp::List& series,
                           const Rcpp::IntegerVector& slot) {
  return guarded([&]() -> SEXP {
    const WeightedInput view(input, false);
    const auto fit = lambdabar::two_pass(view.data, view.options);
    const auto found = lambdabar::efficient_moments(
        view.data, fit, series_options(series), as_indices(slot));
    return Rcpp::List::create(Rcpp::_["premia"] = found.premia,
                              Rcpp::_["covariance"] = found.covariance,
                              Rcpp::_["J"] = found.J,
                              Rcpp::_["refusal"] = static_cast<int>(found.refusal));
  });
}
