// Runs a piece of the core and hands its exceptions to R as values.
//
// R's own error would jump over C++ frames; a value lets every destructor run first. The R
// function core_result() turns the value into a classed condition.
#pragma once

#include <RcppEigen.h>

#include <lambdabar/base.hpp>

inline Rcpp::List named_facts(const lambdabar::Error::Facts& facts) {
  Rcpp::List out(facts.size());
  Rcpp::CharacterVector names(facts.size());
  for (std::size_t i = 0; i < facts.size(); ++i) {
    out[i] = facts[i].second;
    names[i] = facts[i].first;
  }
  out.names() = names;
  return out;
}

template <class Body>
SEXP guarded(const Body& body) {
  try {
    return body();
  } catch (const lambdabar::Error& error) {
    Rcpp::List out = Rcpp::List::create(Rcpp::_["tag"] = error.tag(),
                                        Rcpp::_["message"] = std::string(error.what()),
                                        Rcpp::_["facts"] = named_facts(error.facts()));
    out.attr("class") = "lb_core_error";
    return out;
  }
}
