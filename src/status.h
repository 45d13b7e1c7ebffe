// The words for a period's status, as R shows them.
#pragma once

#include <RcppEigen.h>

#include <lambdabar/passes/period_status.hpp>

#include <vector>

inline Rcpp::CharacterVector status_names(const std::vector<lambdabar::PeriodStatus>& status) {
  Rcpp::CharacterVector out(status.size());
  for (std::size_t t = 0; t < status.size(); ++t) {
    switch (status[t]) {
      case lambdabar::PeriodStatus::estimated: out[t] = "estimated"; break;
      case lambdabar::PeriodStatus::too_few_assets: out[t] = "too_few_assets"; break;
      case lambdabar::PeriodStatus::rank_deficient: out[t] = "rank_deficient"; break;
      case lambdabar::PeriodStatus::no_variation: out[t] = "no_variation"; break;
      case lambdabar::PeriodStatus::empty: out[t] = "empty"; break;
      case lambdabar::PeriodStatus::weak_instruments: out[t] = "weak_instruments"; break;
    }
  }
  return out;
}
