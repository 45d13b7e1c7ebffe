#include "convert.h"
#include "guard.h"
#include "views.h"

#include <lambdabar/passes/absorb.hpp>

using lambdabar::Index;

// [[Rcpp::export(rng = false)]]
SEXP cpp_absorb(const Rcpp::List& design,
                const Rcpp::IntegerVector& period,
                int n_periods,
                const Rcpp::List& codes,
                const Rcpp::NumericVector& n_codes,
                bool drop_singletons,
                int threads) {
  return guarded([&]() -> SEXP {
    std::vector<const int*> ways;
    for (R_xlen_t d = 0; d < codes.size(); ++d) ways.push_back(INTEGER(codes[d]));
    lambdabar::AbsorbOptions options;
    options.drop_singletons = drop_singletons;
    options.threads = threads;
    const auto found =
        lambdabar::absorb(view_design(design, period, n_periods),
                          ways,
                          std::vector<Index>(n_codes.begin(), n_codes.end()),
                          options);
    return Rcpp::List::create(
        Rcpp::_["columns"] = found.columns,
        Rcpp::_["kept_share"] = found.kept_share,
        Rcpp::_["levels"] = as_numeric(found.levels),
        Rcpp::_["rank"] = static_cast<double>(found.rank),
        Rcpp::_["exact_rank"] = found.exact_rank,
        Rcpp::_["n_used"] = static_cast<double>(found.n_used),
        Rcpp::_["n_singletons"] = static_cast<double>(found.n_singletons),
        Rcpp::_["steps"] = found.steps,
        Rcpp::_["worst"] = found.worst);
  });
}
