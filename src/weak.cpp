#include "convert.h"
#include "guard.h"
#include "series.h"
#include "two_pass_input.h"

#include <lambdabar/tests/premium_set.hpp>
#include <lambdabar/tests/rank.hpp>

namespace {

const char* shape_name(lambdabar::SetShape shape) {
  switch (shape) {
    case lambdabar::SetShape::empty:
      return "empty";
    case lambdabar::SetShape::interval:
      return "interval";
    case lambdabar::SetShape::rays:
      return "rays";
    case lambdabar::SetShape::line:
      return "line";
  }
  return "empty";
}

Rcpp::List set_list(const lambdabar::PremiumSet& set) {
  Rcpp::NumericVector lower, upper;
  for (const auto& piece : set.pieces) {
    lower.push_back(piece.first);
    upper.push_back(piece.second);
  }
  return Rcpp::List::create(Rcpp::_["shape"] = shape_name(set.shape),
                            Rcpp::_["lower"] = lower,
                            Rcpp::_["upper"] = upper);
}

}  // namespace

// signs: T x draws of -1 and 1; no columns: no bootstrap.
// [[Rcpp::export(rng = false)]]
SEXP cpp_rank_test(const Rcpp::List& input,
                   int rank,
                   const std::string& kind,
                   const Rcpp::List& series,
                   const Rcpp::IntegerVector& slot,
                   const Rcpp::NumericMatrix& signs) {
  return guarded([&]() -> SEXP {
    const TwoPassInput view(input);
    const auto which = kind == "cragg_donald" ? lambdabar::RankKind::cragg_donald
                       : kind == "bartlett"   ? lambdabar::RankKind::bartlett
                                              : lambdabar::RankKind::kleibergen_paap;
    const auto test = lambdabar::rank_test(view.data.returns,
                                           view.data.factors,
                                           view.options.intercept,
                                           rank,
                                           which,
                                           series_options(series),
                                           as_indices(slot),
                                           map_matrix(signs));
    return Rcpp::List::create(Rcpp::_["statistic"] = test.statistic,
                              Rcpp::_["df"] = test.df,
                              Rcpp::_["p_bootstrap"] = test.p_bootstrap,
                              Rcpp::_["refusal"] = static_cast<int>(test.refusal));
  });
}

// [[Rcpp::export(rng = false)]]
SEXP cpp_premium_sets(const Rcpp::List& input, double critical, double critical_one) {
  return guarded([&]() -> SEXP {
    const TwoPassInput view(input);
    const auto sets = lambdabar::premium_sets(view.data.returns,
                                              view.data.factors,
                                              view.options.intercept,
                                              critical,
                                              critical_one);
    Rcpp::List each;
    for (const auto& set : sets.each) each.push_back(set_list(set));
    return Rcpp::List::create(Rcpp::_["joint"] = shape_name(sets.joint.shape),
                              Rcpp::_["smallest"] = sets.joint.smallest,
                              Rcpp::_["estimate"] = sets.joint.estimate,
                              Rcpp::_["each"] = each,
                              Rcpp::_["YY"] = sets.YY,
                              Rcpp::_["one_Q"] = sets.one_Q);
  });
}

// [[Rcpp::export(rng = false)]]
SEXP cpp_premium_set_by_scan(const Rcpp::List& input,
                             bool expected,
                             double critical,
                             const Rcpp::List& series,
                             const Rcpp::IntegerVector& slot) {
  return guarded([&]() -> SEXP {
    const TwoPassInput view(input);
    return set_list(lambdabar::premium_set_by_scan(view.data.returns,
                                                   view.data.factors,
                                                   view.options.intercept,
                                                   expected,
                                                   critical,
                                                   series_options(series),
                                                   as_indices(slot)));
  });
}
