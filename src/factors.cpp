#include "convert.h"
#include "guard.h"
#include "series.h"
#include "status.h"
#include "two_pass_input.h"

#include <lambdabar/tests/alpha.hpp>

using lambdabar::Index;

namespace {

lambdabar::AlphaKind alpha_kind(const std::string& kind) {
  if (kind == "averaged") return lambdabar::AlphaKind::averaged;
  if (kind == "corrected") return lambdabar::AlphaKind::corrected;
  if (kind == "f_approx") return lambdabar::AlphaKind::f_approx;
  if (kind == "grs") return lambdabar::AlphaKind::grs;
  if (kind == "grs_chisq") return lambdabar::AlphaKind::grs_chisq;
  if (kind == "grs_lr") return lambdabar::AlphaKind::grs_lr;
  if (kind == "grs_moments") return lambdabar::AlphaKind::grs_moments;
  return lambdabar::AlphaKind::moments;
}

const char* refusal_name(lambdabar::Refusal refusal) {
  switch (refusal) {
    case lambdabar::Refusal::none: return "none";
    case lambdabar::Refusal::just_identified: return "just_identified";
    case lambdabar::Refusal::too_few_periods: return "too_few_periods";
    case lambdabar::Refusal::singular: return "singular";
    case lambdabar::Refusal::not_positive: return "not_positive";
    case lambdabar::Refusal::no_convergence: return "no_convergence";
  }
  return "none";
}

}  // namespace

// [[Rcpp::export(rng = false)]]
SEXP cpp_two_pass(const Rcpp::List& input) {
  return guarded([&]() -> SEXP {
    const TwoPassInput view(input);
    const auto fit = lambdabar::two_pass(view.data, view.options);
    const Rcpp::List first =
        Rcpp::List::create(Rcpp::_["beta"] = fit.first.beta,
                           Rcpp::_["beta_se"] = fit.first.beta_se,
                           Rcpp::_["alpha"] = fit.first.alpha,
                           Rcpp::_["alpha_se"] = fit.first.alpha_se,
                           Rcpp::_["resid_var"] = fit.first.resid_var,
                           Rcpp::_["r_squared"] = fit.first.r_squared,
                           Rcpp::_["n_obs"] = as_numeric(fit.first.n_obs),
                           Rcpp::_["min_obs"] = static_cast<double>(fit.first.min_obs));
    Rcpp::List out = Rcpp::List::create(Rcpp::_["first"] = first,
                                        Rcpp::_["balanced"] = fit.balanced,
                                        Rcpp::_["period_premia"] = fit.period_premia,
                                        Rcpp::_["period_se"] = fit.period_se,
                                        Rcpp::_["r_squared"] = fit.r_squared,
                                        Rcpp::_["n_assets"] = as_numeric(fit.n_assets),
                                        Rcpp::_["status"] = status_names(fit.status),
                                        Rcpp::_["culprit"] = one_based_or_na(fit.culprit),
                                        Rcpp::_["premia"] = fit.premia);
    out["rows_series"] = fit.rows_series;
    out["rows_estimated"] = fit.rows_estimated;
    out["rows_misspecified"] = fit.rows_misspecified;
    out["mean_return"] = fit.mean_return;
    out["fitted"] = fit.fitted;
    out["alpha"] = fit.alpha;
    out["c"] = fit.c;
    out["condition"] = fit.condition;
    out["n_left_out"] = static_cast<double>(fit.n_left_out);
    return out;
  });
}

// The small closed fits below are estimated again rather than kept: a complete panel takes
// milliseconds, and a fit that is saved and read back needs no pointer into the core.

// [[Rcpp::export(rng = false)]]
SEXP cpp_shanken(const Rcpp::List& input,
                 const Rcpp::List& series,
                 const Rcpp::IntegerVector& slot) {
  return guarded([&]() -> SEXP {
    const TwoPassInput view(input);
    const auto fit = lambdabar::two_pass(view.data, view.options);
    return Rcpp::wrap(lambdabar::shanken(fit, series_options(series), as_indices(slot)));
  });
}

// [[Rcpp::export(rng = false)]]
SEXP cpp_alpha_covariance(const Rcpp::List& input,
                          const std::string& kind,
                          const Rcpp::List& series,
                          const Rcpp::IntegerVector& slot) {
  return guarded([&]() -> SEXP {
    const TwoPassInput view(input);
    const auto fit = lambdabar::two_pass(view.data, view.options);
    if (kind == "shanken") return Rcpp::wrap(lambdabar::shanken_alpha(view.data, fit));
    const auto which = kind == "series"      ? lambdabar::AlphaRows::series
                       : kind == "estimated" ? lambdabar::AlphaRows::estimated
                                             : lambdabar::AlphaRows::misspecified;
    const lambdabar::Matrix rows = lambdabar::alpha_rows(view.data, fit, which);
    return Rcpp::wrap(lambdabar::sum_series(rows,
                                            as_indices(slot),
                                            lambdabar::Vector::Ones(rows.cols()),
                                            series_options(series))
                          .S);
  });
}

// [[Rcpp::export(rng = false)]]
SEXP cpp_alpha_tests(const Rcpp::List& input,
                     const std::vector<std::string>& kinds,
                     const Rcpp::List& series,
                     const Rcpp::IntegerVector& slot) {
  return guarded([&]() -> SEXP {
    const TwoPassInput view(input);
    const auto fit = lambdabar::two_pass(view.data, view.options);
    std::vector<lambdabar::AlphaKind> wanted;
    for (const std::string& kind : kinds) wanted.push_back(alpha_kind(kind));
    const auto tests = lambdabar::alpha_tests(
        view.data, fit, wanted, series_options(series), as_indices(slot));
    const R_xlen_t n = static_cast<R_xlen_t>(tests.size());
    Rcpp::NumericVector statistic(n), df1(n), df2(n);
    Rcpp::CharacterVector refusal(n);
    Rcpp::LogicalVector capped(n);
    Rcpp::List facts(n);
    for (R_xlen_t i = 0; i < n; ++i) {
      const auto& test = tests[static_cast<std::size_t>(i)];
      statistic[i] = test.statistic;
      df1[i] = test.df1;
      df2[i] = test.df2;
      refusal[i] = refusal_name(test.refusal);
      capped[i] = test.capped;
      facts[i] = named_facts(test.facts);
    }
    return Rcpp::List::create(Rcpp::_["statistic"] = statistic,
                              Rcpp::_["df1"] = df1,
                              Rcpp::_["df2"] = df2,
                              Rcpp::_["refusal"] = refusal,
                              Rcpp::_["capped"] = capped,
                              Rcpp::_["facts"] = facts);
  });
}
