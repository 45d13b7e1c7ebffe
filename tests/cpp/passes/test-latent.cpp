#include <gtest/gtest.h>

#include <lambdabar/passes/latent.hpp>

#include "../simulated_panel.hpp"

using namespace lambdabar;

TEST(Latent, BasisIsOrthonormalWhicheverSideIsShorter) {
  for (Index N : {12, 70}) {
    const simulated::Panel p = simulated::panel(40, N, 2, 14);
    const LatentBasis basis = latent_basis(p.returns, 5);
    EXPECT_LT((basis.V.transpose() * basis.V / 40.0 - Matrix::Identity(5, 5)).norm(),
              1e-10);
    const Matrix R = p.returns.rowwise() - p.returns.colwise().mean();
    EXPECT_NEAR(
        basis.eigenvalues.sum(), R.squaredNorm() / static_cast<double>(R.size()), 1e-10);
    for (Index j = 0; j < 5; ++j)
      EXPECT_NEAR(basis.beta.col(j).squaredNorm() / static_cast<double>(N),
                  basis.eigenvalues(j),
                  1e-10);
  }
}

TEST(Latent, AFactorThatIsAComponentHasItsPremium) {
  const simulated::Panel p = simulated::panel(60, 20, 2, 15);
  const LatentBasis basis = latent_basis(p.returns, 4);
  const LatentFit fit = latent_fit(basis, basis.V.leftCols(2), 3, true);
  EXPECT_NEAR(fit.premium(0), fit.gamma(1), 1e-10);
  EXPECT_NEAR(fit.premium(1), fit.gamma(2), 1e-10);
  EXPECT_NEAR(fit.r_squared(0), 1.0, 1e-10);
  EXPECT_NEAR(fit.rows.colwise().sum().norm(), 0.0, 1e-10);
}

TEST(Latent, CountsOneFactorInAClearCase) {
  Vector e(12);
  e << 50, 1.1, 1.05, 1, 0.98, 0.95, 0.9, 0.88, 0.85, 0.8, 0.78, 0.75;
  for (CountRule rule :
       {CountRule::penalised, CountRule::eigen_ratio, CountRule::growth_ratio})
    EXPECT_EQ(count_factors(e, 12, 100, 4, rule), 1);
  EXPECT_GE(count_factors(e, 12, 100, 4, CountRule::ic_p2), 1);
}
