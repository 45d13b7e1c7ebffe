#include "convert.h"
#include "guard.h"
#include "series.h"

#include <lambdabar/passes/latent.hpp>
#include <lambdabar/tests/frontier.hpp>
#include <lambdabar/tests/intercepts.hpp>
#include <lambdabar/tests/sharpe.hpp>
#include <lambdabar/tests/spanning.hpp>

using lambdabar::Index;
using ConstMap = Eigen::Map<const Eigen::MatrixXd>;

namespace {

ConstMap view(const Rcpp::NumericMatrix& x) {
  return ConstMap(x.begin(), x.nrow(), x.ncol());
}

}  // namespace

// counts: numbers of components; none: chosen by `rule`. One list a number.
// [[Rcpp::export(rng = false)]]
SEXP cpp_latent(const Rcpp::NumericMatrix& returns,
                const Rcpp::NumericMatrix& observed,
                const Rcpp::IntegerVector& counts,
                const std::string& rule,
                int most,
                bool intercept) {
  return guarded([&]() -> SEXP {
    int needed = most;
    for (int p : counts) needed = std::max(needed, p);
    const auto basis = lambdabar::latent_basis(view(returns), needed);
    const auto count_rule = rule == "eigen_ratio"    ? lambdabar::CountRule::eigen_ratio
                            : rule == "growth_ratio" ? lambdabar::CountRule::growth_ratio
                            : rule == "ic_p2"        ? lambdabar::CountRule::ic_p2
                                                     : lambdabar::CountRule::penalised;
    const int found = static_cast<int>(lambdabar::count_factors(
        basis.eigenvalues, returns.ncol(), returns.nrow(), most, count_rule));
    std::vector<int> wanted(counts.begin(), counts.end());
    if (wanted.empty()) wanted.push_back(std::max(1, found));
    Rcpp::List fits;
    for (int p : wanted) {
      if (p > basis.V.cols())
        throw lambdabar::Error("too_few",
                               "The returns do not have so many components.",
                               {{"n_latent", static_cast<double>(p)},
                                {"rank", static_cast<double>(basis.V.cols())}});
      const auto fit = lambdabar::latent_fit(basis, view(observed), p, intercept);
      fits.push_back(Rcpp::List::create(Rcpp::_["p"] = p,
                                        Rcpp::_["premium"] = fit.premium,
                                        Rcpp::_["rows"] = fit.rows,
                                        Rcpp::_["strength"] = fit.strength,
                                        Rcpp::_["r_squared"] = fit.r_squared,
                                        Rcpp::_["mean_r2"] = fit.mean_r2));
    }
    return Rcpp::List::create(Rcpp::_["eigenvalues"] = basis.eigenvalues,
                              Rcpp::_["found"] = found,
                              Rcpp::_["fits"] = fits);
  });
}

// [[Rcpp::export(rng = false)]]
SEXP cpp_squared_sharpe(const Rcpp::NumericMatrix& factors) {
  return guarded([&]() -> SEXP {
    const auto ratio = lambdabar::squared_sharpe(view(factors));
    return Rcpp::List::create(Rcpp::_["squared"] = ratio.squared,
                              Rcpp::_["adjusted"] = ratio.adjusted,
                              Rcpp::_["rows"] = ratio.rows);
  });
}

// [[Rcpp::export(rng = false)]]
SEXP cpp_best_model(const Eigen::VectorXd& delta,
                    const Eigen::MatrixXd& V,
                    const Rcpp::NumericMatrix& normal) {
  return guarded([&]() -> SEXP {
    const auto test = lambdabar::best_model_test(delta, V, view(normal));
    return Rcpp::List::create(Rcpp::_["statistic"] = test.statistic,
                              Rcpp::_["p"] = test.p);
  });
}

// F of the intercepts of `returns` on `factors`, exact under normality.
// [[Rcpp::export(rng = false)]]
SEXP cpp_grs(const Rcpp::NumericMatrix& returns, const Rcpp::NumericMatrix& factors) {
  return guarded([&]() -> SEXP {
    const auto test = lambdabar::intercept_tests(
        view(returns), view(factors), {lambdabar::AlphaKind::grs})[0];
    return Rcpp::List::create(Rcpp::_["statistic"] = test.statistic,
                              Rcpp::_["df1"] = test.df1,
                              Rcpp::_["df2"] = test.df2);
  });
}

// [[Rcpp::export(rng = false)]]
SEXP cpp_spanning(const Rcpp::NumericMatrix& returns,
                  const Rcpp::NumericMatrix& benchmarks,
                  const Rcpp::List& series,
                  const Rcpp::IntegerVector& slot) {
  return guarded([&]() -> SEXP {
    const auto tests = lambdabar::spanning_tests(
        view(returns), view(benchmarks), series_options(series), as_indices(slot));
    return Rcpp::List::create(Rcpp::_["joint"] = tests.joint,
                              Rcpp::_["first"] = tests.first,
                              Rcpp::_["second"] = tests.second,
                              Rcpp::_["wald"] = tests.wald,
                              Rcpp::_["refusal"] = static_cast<int>(tests.wald_refusal));
  });
}

// [[Rcpp::export(rng = false)]]
SEXP cpp_frontier(const Rcpp::NumericMatrix& returns, bool adjust) {
  return guarded([&]() -> SEXP {
    const auto found = lambdabar::mean_variance_frontier(
        view(returns), returns.nrow() - (adjust ? 1.0 : 0.0));
    return Rcpp::List::create(Rcpp::_["least_variance"] = found.least_variance,
                              Rcpp::_["least_mean"] = found.least_mean,
                              Rcpp::_["curvature"] = found.curvature,
                              Rcpp::_["sharpe"] = found.sharpe,
                              Rcpp::_["least"] = found.least,
                              Rcpp::_["tangency"] = found.tangency);
  });
}
