#include "convert.h"
#include "guard.h"
#include "pooled_fit.h"
#include "views.h"

#include <lambdabar/errors/few_clusters.hpp>

using lambdabar::Index;

namespace {

lambdabar::ClusterMoments moments_of(const Rcpp::List& list) {
  lambdabar::ClusterMoments m;
  m.s = Rcpp::as<lambdabar::Matrix>(list["s"]);
  m.back = Rcpp::as<lambdabar::Matrix>(list["back"]);
  const Rcpp::NumericMatrix S = list["S"];
  const Index r = m.s.rows();
  for (Index g = 0; g < m.s.cols(); ++g)
    m.S.push_back(
        Eigen::Map<const lambdabar::Matrix>(&S(0, static_cast<int>(g * r)), r, r));
  return m;
}

}  // namespace

// One way: S (r x r G, side by side), s (r x G), back.
// [[Rcpp::export(rng = false)]]
SEXP cpp_cluster_moments(const Rcpp::List& design,
                         const Rcpp::IntegerVector& period,
                         int n_periods,
                         const Rcpp::List& core,
                         const Rcpp::IntegerVector& code,
                         double n_codes) {
  return guarded([&]() -> SEXP {
    const auto m = lambdabar::cluster_moments(view_design(design, period, n_periods),
                                              pooled_fit(core),
                                              code.begin(),
                                              static_cast<Index>(n_codes));
    lambdabar::Matrix S(m.s.rows(), m.s.rows() * m.n_groups());
    for (Index g = 0; g < m.n_groups(); ++g)
      S.middleCols(g * m.s.rows(), m.s.rows()) = m.S[static_cast<std::size_t>(g)];
    return Rcpp::List::create(
        Rcpp::_["S"] = S, Rcpp::_["s"] = m.s, Rcpp::_["back"] = m.back);
  });
}

// [[Rcpp::export(rng = false)]]
SEXP cpp_few_clusters(const Rcpp::List& moments, double power) {
  return guarded([&]() -> SEXP {
    const auto found = lambdabar::few_clusters(moments_of(moments), power);
    return Rcpp::List::create(
        Rcpp::_["vcov"] = found.vcov,
        Rcpp::_["df"] = found.df,
        Rcpp::_["n_groups"] = static_cast<double>(found.n_groups),
        Rcpp::_["undecided"] = static_cast<double>(found.undecided + 1));
  });
}

// signs: G x draws. complete: all sign vectors, so that a share is exact. For each term
// the p-value of zero and the limits of the interval of `level`.
// [[Rcpp::export(rng = false)]]
SEXP cpp_wild(const Rcpp::List& moments,
              const Eigen::VectorXd& theta,
              const Rcpp::NumericMatrix& signs,
              bool complete,
              bool restricted,
              double level) {
  return guarded([&]() -> SEXP {
    const auto m = moments_of(moments);
    const Eigen::Map<const lambdabar::Matrix> drawn(
        signs.begin(), signs.nrow(), signs.ncol());
    const double B = static_cast<double>(signs.ncol());
    Rcpp::NumericVector p(theta.size()), lower(theta.size()), upper(theta.size());
    for (Index j = 0; j < theta.size(); ++j) {
      const auto draws = lambdabar::wild_draws(m, j, drawn);
      auto p_of = [&](double x) {
        const double share = lambdabar::wild_share(draws, x, restricted);
        return complete ? share : (share * B + 1.0) / (B + 1.0);
      };
      const double step = std::sqrt(draws.scale);
      p[j] = p_of(theta(j));
      lower[j] = theta(j) - lambdabar::wild_reach(p_of, step, 1.0 - level);
      upper[j] = theta(j) - lambdabar::wild_reach(p_of, -step, 1.0 - level);
    }
    return Rcpp::List::create(
        Rcpp::_["p"] = p, Rcpp::_["lower"] = lower, Rcpp::_["upper"] = upper);
  });
}
