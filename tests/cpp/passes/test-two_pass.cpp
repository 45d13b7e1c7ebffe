#include <gtest/gtest.h>

#include <lambdabar/passes/two_pass.hpp>

#include "../simulated_panel.hpp"

#include <complex>

using namespace lambdabar;

namespace {

using simulated::distance;
using Traits = std::vector<Matrix>;

std::vector<Eigen::Map<const Matrix>> views(const Traits& traits) {
  std::vector<Eigen::Map<const Matrix>> out;
  for (const Matrix& trait : traits)
    out.emplace_back(trait.data(), trait.rows(), trait.cols());
  return out;
}

TwoPassOptions with(Weighting weighting, bool intercept = true) {
  TwoPassOptions options;
  options.weighting = weighting;
  options.intercept = intercept;
  return options;
}

TwoPass fit(const Matrix& returns,
            const Matrix& factors,
            const TwoPassOptions& options,
            const Traits& traits = {}) {
  return two_pass({returns, factors, views(traits)}, options);
}

const Weighting kAll[] = {Weighting::ols, Weighting::wls, Weighting::gls};

// The premia as an analytic function of the weights of the periods, by normal equations:
// with a weight of 1 + i h its imaginary part over h is the derivative, free of
// cancellation. Rows of the estimate must be that derivative.
using Complex = std::complex<double>;
using CMatrix = Eigen::MatrixXcd;
using CVector = Eigen::VectorXcd;

struct WeightedTwoPass {
  const Matrix& returns;
  const Matrix& factors;
  const Traits& traits;
  Weighting weighting;
  bool intercept;

  bool has(Index t, Index i) const { return std::isfinite(returns(t, i)); }
  bool priced(Index t, Index i) const {
    bool complete = has(t, i);
    for (const Matrix& trait : traits) complete = complete && std::isfinite(trait(t, i));
    return complete;
  }

  struct Exposure {
    CVector beta;
    Complex variance;
  };

  Exposure exposure(const CVector& omega, Index i) const {
    const Index size = factors.cols();
    Complex total = 0.0, mean_return = 0.0;
    CVector mean = CVector::Zero(size);
    for (Index t = 0; t < returns.rows(); ++t) {
      if (!has(t, i)) continue;
      total += omega(t);
      mean += omega(t) * factors.row(t).transpose().cast<Complex>();
      mean_return += omega(t) * returns(t, i);
    }
    mean /= total;
    mean_return /= total;
    CMatrix V = CMatrix::Zero(size, size);
    CVector covariance = CVector::Zero(size);
    for (Index t = 0; t < returns.rows(); ++t) {
      if (!has(t, i)) continue;
      const CVector d = factors.row(t).transpose().cast<Complex>() - mean;
      V += omega(t) * d * d.transpose();
      covariance += omega(t) * d * (returns(t, i) - mean_return);
    }
    Exposure out;
    out.beta = V.partialPivLu().solve(covariance);
    out.variance = 0.0;
    for (Index t = 0; t < returns.rows(); ++t) {
      if (!has(t, i)) continue;
      const CVector d = factors.row(t).transpose().cast<Complex>() - mean;
      const Complex e = returns(t, i) - mean_return - (out.beta.transpose() * d)(0);
      out.variance += omega(t) * e * e;
    }
    out.variance /= total;
    return out;
  }

  CMatrix covariance_of_returns(const CVector& omega) const {
    const CMatrix R = returns.cast<Complex>();
    const CVector mean = R.transpose() * omega / omega.sum();
    const CMatrix centred = R.rowwise() - mean.transpose();
    return centred.transpose() * omega.asDiagonal() * centred / omega.sum();
  }

  CVector premia(const CVector& omega) const {
    const Index n_assets = returns.cols(), size = factors.cols();
    const Index n_terms = size + static_cast<Index>(traits.size()) + (intercept ? 1 : 0);
    std::vector<Exposure> all;
    for (Index i = 0; i < n_assets; ++i) all.push_back(exposure(omega, i));
    CVector sum = CVector::Zero(n_terms);
    Complex total = 0.0;
    for (Index s = 0; s < returns.rows(); ++s) {
      std::vector<Index> here;
      for (Index i = 0; i < n_assets; ++i)
        if (priced(s, i)) here.push_back(i);
      const Index n = static_cast<Index>(here.size());
      if (n < n_terms + 1) continue;
      CMatrix X(n, n_terms), W = CMatrix::Identity(n, n);
      CVector y(n);
      for (Index row = 0; row < n; ++row) {
        const Index i = here[static_cast<std::size_t>(row)];
        const Exposure& e = all[static_cast<std::size_t>(i)];
        const Index first = intercept ? 1 : 0;
        if (intercept) X(row, 0) = 1.0;
        X.row(row).segment(first, size) = e.beta.transpose();
        for (std::size_t q = 0; q < traits.size(); ++q)
          X(row, first + size + static_cast<Index>(q)) = traits[q](s, i);
        if (weighting == Weighting::wls) W(row, row) = 1.0 / e.variance;
        y(row) = returns(s, i);
      }
      if (weighting == Weighting::gls) W = covariance_of_returns(omega).inverse();
      const CMatrix XW = X.transpose() * W;
      sum += omega(s) * (XW * X).partialPivLu().solve(XW * y);
      total += omega(s);
    }
    return sum / total;
  }

  Matrix derivative() const {
    const double step = 1e-20;
    const Index n_periods = returns.rows();
    Matrix rows;
    for (Index t = 0; t < n_periods; ++t) {
      CVector omega = CVector::Ones(n_periods);
      omega(t) += Complex(0.0, step);
      const CVector moved = premia(omega);
      if (t == 0) rows.resize(n_periods, moved.size());
      rows.row(t) = moved.imag().transpose() / step;
    }
    return rows;
  }
};

TEST(TwoPass, mean_of_period_premia_is_the_regression_of_mean_returns) {
  const simulated::Panel p = simulated::panel(60, 8, 2, 1);
  for (Weighting weighting : kAll)
    for (bool intercept : {true, false}) {
      const TwoPass f = fit(p.returns, p.factors, with(weighting, intercept));
      EXPECT_TRUE(f.balanced);
      EXPECT_LT(distance(f.premia, f.A * f.mean_return), 1e-12);
      EXPECT_LT((f.A * f.X - Matrix::Identity(f.n_terms(), f.n_terms())).norm(), 1e-12);
      EXPECT_LT(f.rows_series.colwise().sum().norm(), 1e-13);
      EXPECT_LT(f.rows_estimated.colwise().sum().norm(), 1e-13);
      EXPECT_LT(f.rows_misspecified.colwise().sum().norm(), 1e-13);
      EXPECT_NEAR(f.w.mean(), 0.0, 1e-13);
      EXPECT_NEAR(f.w.squaredNorm() / 60.0, f.c, 1e-12);
    }
}

TEST(TwoPass, weighted_period_regressions_by_normal_equations) {
  const simulated::Panel p = simulated::panel(60, 8, 2, 2);
  const Matrix centred = p.returns.rowwise() - p.returns.colwise().mean();
  const Matrix V = centred.transpose() * centred / 60.0;
  for (Weighting weighting : kAll)
    for (bool intercept : {true, false}) {
      const TwoPass f = fit(p.returns, p.factors, with(weighting, intercept));
      Matrix W = Matrix::Identity(8, 8);
      if (weighting == Weighting::wls) W = f.first.resid_var.cwiseInverse().asDiagonal();
      if (weighting == Weighting::gls) W = V.inverse();
      const Matrix H = (f.X.transpose() * W * f.X).inverse();
      const Matrix A = H * f.X.transpose() * W;
      EXPECT_LT(distance(f.H, H), 1e-11);
      EXPECT_LT(distance(f.A, A), 1e-11);
      const Vector y = p.returns.row(17);
      const Vector e = y - f.X * (A * y);
      const double rss = e.dot(W * e);
      Vector base = y;
      if (intercept) base.array() -= W.rowwise().sum().dot(y) / W.sum();
      EXPECT_NEAR(f.r_squared(17), 1.0 - rss / base.dot(W * base), 1e-11);
      const double s2 = rss / static_cast<double>(8 - f.n_terms());
      EXPECT_LT(
          (f.period_se.row(17).transpose() - (s2 * H.diagonal()).cwiseSqrt()).norm(),
          1e-11);
    }
}

TEST(TwoPass, covariances_decompose) {
  const simulated::Panel p = simulated::panel(60, 8, 2, 3);
  for (Weighting weighting : kAll)
    for (bool intercept : {true, false}) {
      const TwoPass f = fit(p.returns, p.factors, with(weighting, intercept));
      const Matrix iid = outer_sum(f.rows_series);
      const Matrix errors = outer_sum(f.loading_rows);
      Matrix factor_part = Matrix::Zero(f.n_terms(), f.n_terms());
      factor_part.bottomRightCorner(2, 2) = f.Vf / 60.0;
      EXPECT_LT(distance(iid, errors + factor_part), 1e-12);
      EXPECT_LT(distance(shanken(f, {}), iid + f.c * errors), 1e-12);
      // A Sigma A' from the residuals themselves.
      Matrix e = p.returns.rowwise() - p.returns.colwise().mean();
      e -= f.factor_deviations * f.first.beta.transpose();
      EXPECT_LT(distance(errors, f.A * e.transpose() * e * f.A.transpose() / 3600.0),
                1e-11);
      // No weight or factor part enters the pricing errors.
      EXPECT_NEAR((shanken_alpha({p.returns, p.factors, {}}, f) -
                   (1.0 + f.c) * (Matrix::Identity(8, 8) - f.X * f.A) * e.transpose() *
                       e * (Matrix::Identity(8, 8) - f.X * f.A).transpose() / 3600.0)
                      .norm(),
                  0.0,
                  1e-12);
    }
}

TEST(TwoPass, long_run_factor_covariance_enters_its_own_block_only) {
  const simulated::Panel p = simulated::panel(60, 8, 2, 4);
  const TwoPass f = fit(p.returns, p.factors, with(Weighting::ols));
  SeriesOptions nw;
  nw.lags = 3;
  const Matrix change = shanken(f, nw) - shanken(f, {});
  EXPECT_EQ(change.row(0).norm(), 0.0);
  const Matrix d = f.factor_deviations / 60.0;
  const Matrix expected =
      detail::kernel_sum(d, detail::consecutive(60), Kernel::bartlett, 4.0) -
      outer_sum(d);
  EXPECT_LT((change.bottomRightCorner(2, 2) - expected).norm(), 1e-15);
}

TEST(TwoPass, misspecified_rows_are_the_derivative_in_period_weights) {
  const simulated::Panel p = simulated::panel(40, 6, 2, 5);
  const Traits none;
  for (Weighting weighting : kAll)
    for (bool intercept : {true, false}) {
      const TwoPass f = fit(p.returns, p.factors, with(weighting, intercept));
      const WeightedTwoPass reference{p.returns, p.factors, none, weighting, intercept};
      EXPECT_LT(distance(f.rows_misspecified, reference.derivative()), 1e-10);
    }
}

TEST(TwoPass, estimated_rows_are_the_derivative_when_the_model_prices_exactly) {
  // Mean returns moved onto X gamma: alpha = 0, and both kinds of rows agree.
  simulated::Panel p = simulated::panel(40, 6, 2, 6);
  const TwoPass before = fit(p.returns, p.factors, with(Weighting::ols));
  p.returns.rowwise() -= before.alpha.transpose();
  const Traits none;
  for (Weighting weighting : kAll) {
    const TwoPass f = fit(p.returns, p.factors, with(weighting));
    EXPECT_LT(f.alpha.norm(), 1e-13);
    const WeightedTwoPass reference{p.returns, p.factors, none, weighting, true};
    EXPECT_LT(distance(f.rows_estimated, reference.derivative()), 1e-10);
    EXPECT_LT(distance(f.rows_estimated, f.rows_misspecified), 1e-11);
  }
}

TEST(TwoPass, ragged_rows_are_the_derivative_in_period_weights) {
  simulated::Panel p = simulated::panel(40, 9, 2, 7);
  simulated::punch_holes(p.returns, 0.25, 8);
  p.returns.row(5).setConstant(kNaN);
  p.returns.row(6).tail(7).setConstant(kNaN);
  std::mt19937 engine(9);
  Traits traits{simulated::normals(engine, 40, 9).array() + 2.0};
  simulated::punch_holes(traits[0], 0.05, 10);
  // The trait is priced, so that leaving it out of the rows could not pass unseen.
  p.returns += 0.7 * traits[0];
  for (const Traits& used : {Traits{}, traits})
    for (Weighting weighting : {Weighting::ols, Weighting::wls})
      for (bool intercept : {true, false}) {
        const TwoPass f = fit(p.returns, p.factors, with(weighting, intercept), used);
        EXPECT_FALSE(f.balanced);
        EXPECT_LT(f.used_periods.size(), 40u);
        const WeightedTwoPass reference{p.returns, p.factors, used, weighting, intercept};
        const Matrix derivative = reference.derivative();
        EXPECT_LT(distance(f.rows_misspecified, derivative), 1e-10);
        EXPECT_LT(distance(f.premia, reference.premia(CVector::Ones(40)).real()), 1e-11);
        // Without pricing errors' own term the rows are others.
        EXPECT_GT(distance(f.rows_estimated, derivative), 1e-4);
      }
}

// Formulas of the estimated rows with their sums written out.
TEST(TwoPass, ragged_estimated_rows_leave_out_the_pricing_errors) {
  simulated::Panel p = simulated::panel(30, 8, 1, 11);
  simulated::punch_holes(p.returns, 0.2, 12);
  const TwoPass f = fit(p.returns, p.factors, with(Weighting::ols));
  const double tu = static_cast<double>(f.used_periods.size());
  Matrix rows = Matrix::Zero(30, 2);
  for (Index t : f.used_periods)
    rows.row(t) += (f.period_premia.row(t) - f.premia.transpose()) / tu;
  Vector G0 = Vector::Zero(8), G1 = Vector::Zero(8);
  for (Index s : f.used_periods) {
    Matrix XX = Matrix::Zero(2, 2);
    for (Index i = 0; i < 8; ++i) {
      if (!std::isfinite(p.returns(s, i))) continue;
      Vector x(2);
      x << 1.0, f.first.beta(i, 0);
      XX += x * x.transpose();
    }
    for (Index i = 0; i < 8; ++i) {
      if (!std::isfinite(p.returns(s, i))) continue;
      Vector x(2);
      x << 1.0, f.first.beta(i, 0);
      const Vector a = XX.inverse() * x * f.period_premia(s, 1) / tu;
      G0(i) += a(0);
      G1(i) += a(1);
    }
  }
  for (Index i = 0; i < 8; ++i) {
    double n = 0, mean = 0, V = 0;
    for (Index t = 0; t < 30; ++t)
      if (std::isfinite(p.returns(t, i))) ++n, mean += p.factors(t, 0);
    mean /= n;
    for (Index t = 0; t < 30; ++t)
      if (std::isfinite(p.returns(t, i))) V += std::pow(p.factors(t, 0) - mean, 2);
    for (Index t = 0; t < 30; ++t) {
      if (!std::isfinite(p.returns(t, i))) continue;
      const double e =
          p.returns(t, i) - f.first.alpha(i) - f.first.beta(i, 0) * p.factors(t, 0);
      const double step = e * (p.factors(t, 0) - mean) / V;
      rows(t, 0) -= G0(i) * step;
      rows(t, 1) -= G1(i) * step;
    }
  }
  EXPECT_LT(distance(f.rows_estimated, rows), 1e-11);
}

TEST(TwoPass, ragged_path_on_a_complete_panel_is_the_closed_form) {
  const simulated::Panel p = simulated::panel(50, 9, 2, 13);
  const TwoPassData data{p.returns, p.factors, {}};
  for (Weighting weighting : {Weighting::ols, Weighting::wls})
    for (bool intercept : {true, false}) {
      const TwoPassOptions options = with(weighting, intercept);
      const TwoPass closed = two_pass(data, options);
      const detail::FactorBasis basis = detail::factor_basis(p.factors);
      const TwoPass ragged =
          detail::ragged_two_pass(data, options, basis, first_pass(p.returns, p.factors));
      EXPECT_LT(distance(ragged.premia, closed.premia), 1e-12);
      EXPECT_LT(distance(ragged.period_premia, closed.period_premia), 1e-12);
      EXPECT_LT(distance(ragged.period_se, closed.period_se), 1e-11);
      EXPECT_LT(distance(ragged.r_squared, closed.r_squared), 1e-11);
      EXPECT_LT(distance(ragged.rows_series, closed.rows_series), 1e-11);
      EXPECT_LT(distance(ragged.rows_estimated, closed.rows_estimated), 1e-11);
      EXPECT_LT(distance(ragged.rows_misspecified, closed.rows_misspecified), 1e-11);
      EXPECT_LT(distance(ragged.alpha, closed.alpha), 1e-11);
      EXPECT_LT(distance(ragged.fitted, closed.fitted), 1e-11);
    }
}

TEST(TwoPass, gls_by_returns_is_gls_by_residuals) {
  const simulated::Panel p = simulated::panel(80, 6, 2, 14);
  const TwoPass f = fit(p.returns, p.factors, with(Weighting::gls));
  Matrix e = p.returns.rowwise() - p.returns.colwise().mean();
  e -= f.factor_deviations * f.first.beta.transpose();
  const Matrix W = (e.transpose() * e / 80.0).inverse();
  const Matrix H = (f.X.transpose() * W * f.X).inverse();
  EXPECT_LT(distance(f.premia, H * f.X.transpose() * W * f.mean_return), 1e-11);
  Matrix expected = H;
  expected.bottomRightCorner(2, 2) += f.Vf;
  EXPECT_LT(distance(f.H, expected), 1e-10);
}

// Every factor value paired with every error row: in sample exactly independent.
struct ProductSample {
  Matrix returns, factors;
};

ProductSample product_sample() {
  std::mt19937 engine(15);
  const Matrix f = simulated::normals(engine, 8, 2).array() + 0.5;
  Matrix e = simulated::normals(engine, 11, 5);
  e.rowwise() -= e.colwise().mean();
  const Matrix beta = simulated::normals(engine, 5, 2);
  const Vector alpha = simulated::normals(engine, 5, 1);
  ProductSample out;
  out.returns.resize(88, 5);
  out.factors.resize(88, 2);
  for (Index s = 0; s < 8; ++s)
    for (Index j = 0; j < 11; ++j) {
      out.factors.row(11 * s + j) = f.row(s);
      out.returns.row(11 * s + j) =
          alpha.transpose() + f.row(s) * beta.transpose() + e.row(j);
    }
  return out;
}

TEST(TwoPass, shanken_is_exact_in_a_product_sample) {
  const ProductSample p = product_sample();
  for (Weighting weighting : kAll)
    for (bool intercept : {true, false}) {
      const TwoPass f = fit(p.returns, p.factors, with(weighting, intercept));
      ASSERT_GT(f.c, 0.01);
      EXPECT_LT(distance(outer_sum(f.rows_estimated), shanken(f, {})), 1e-12);
      const TwoPassData data{p.returns, p.factors, {}};
      EXPECT_LT(distance(outer_sum(alpha_rows(data, f, AlphaRows::estimated)),
                         shanken_alpha(data, f)),
                1e-11);
    }
}

TEST(TwoPass, alpha_rows_follow_their_definitions) {
  const simulated::Panel p = simulated::panel(50, 7, 2, 16);
  const TwoPassData data{p.returns, p.factors, {}};
  for (Weighting weighting : kAll) {
    const TwoPass f = two_pass(data, with(weighting));
    const Matrix M = Matrix::Identity(7, 7) - f.X * f.A;
    Matrix e = p.returns.rowwise() - p.returns.colwise().mean();
    const Matrix r = e;
    e -= f.factor_deviations * f.first.beta.transpose();
    const Vector y = 1.0 - f.w.array();
    EXPECT_LT(distance(alpha_rows(data, f, AlphaRows::series), r * M.transpose() / 50.0),
              1e-11);
    EXPECT_LT(distance(alpha_rows(data, f, AlphaRows::estimated),
                       y.asDiagonal() * e * M.transpose() / 50.0),
              1e-11);
    const Matrix robust =
        (r - f.w.asDiagonal() * e) / 50.0 - f.rows_misspecified * f.X.transpose();
    EXPECT_LT(distance(alpha_rows(data, f, AlphaRows::misspecified), robust), 1e-12);
  }
}

TEST(TwoPass, traded_factors_among_the_assets_earn_their_mean_under_gls) {
  const simulated::Panel p = simulated::panel(70, 5, 2, 17);
  Matrix assets(70, 7);
  assets << p.returns, p.factors;
  const TwoPass f = fit(assets, p.factors, with(Weighting::gls, false));
  const Vector mean = p.factors.colwise().mean();
  EXPECT_LT(distance(f.premia, mean), 1e-11);
  const Matrix d = (p.factors.rowwise() - mean.transpose()) / 70.0;
  EXPECT_LT(distance(f.rows_series, d), 1e-10);
  EXPECT_LT(distance(f.rows_estimated, d), 1e-10);
  EXPECT_LT(distance(f.rows_misspecified, d), 1e-10);
  EXPECT_LT(distance(shanken(f, {}), f.Vf / 70.0), 1e-10);
  const TwoPass g = fit(assets, p.factors, with(Weighting::gls, true));
  for (Index k = 0; k < 2; ++k)
    EXPECT_NEAR(g.premia(0) + g.premia(1 + k), mean(k), 1e-11);
}

TEST(TwoPass, rotating_the_factors_rotates_the_premia) {
  const simulated::Panel p = simulated::panel(60, 8, 2, 18);
  Matrix turn(2, 2);
  turn << 0.6, -2.0, 30.0, 0.8;
  Matrix full = Matrix::Identity(3, 3);
  full.bottomRightCorner(2, 2) = turn;
  for (Weighting weighting : kAll) {
    const TwoPass f = fit(p.returns, p.factors, with(weighting));
    const TwoPass g = fit(p.returns, p.factors * turn.transpose(), with(weighting));
    EXPECT_LT(distance(g.premia, full * f.premia), 1e-11);
    EXPECT_LT(distance(g.rows_misspecified, f.rows_misspecified * full.transpose()),
              1e-10);
    EXPECT_LT(distance(shanken(g, {}), full * shanken(f, {}) * full.transpose()), 1e-10);
    EXPECT_NEAR(g.c / f.c, 1.0, 1e-10);
  }
}

TEST(TwoPass, shifts_units_and_order_of_assets_act_as_they_should) {
  const simulated::Panel p = simulated::panel(60, 8, 2, 19);
  for (Weighting weighting : kAll) {
    const TwoPass f = fit(p.returns, p.factors, with(weighting));
    const TwoPass moved =
        fit(p.returns, (p.factors.array() + 3.0).matrix(), with(weighting));
    EXPECT_LT(distance(moved.premia, f.premia), 1e-11);
    EXPECT_LT(distance(moved.rows_misspecified, f.rows_misspecified), 1e-10);
    const TwoPass raised =
        fit((p.returns.array() + 0.5).matrix(), p.factors, with(weighting));
    EXPECT_NEAR(raised.premia(0), f.premia(0) + 0.5, 1e-11);
    EXPECT_LT(distance(raised.rows_estimated, f.rows_estimated), 1e-10);
    const TwoPass percent = fit(100.0 * p.returns, p.factors, with(weighting));
    // Betas in percent too: factor premia stay, the constant scales.
    EXPECT_NEAR(percent.premia(0) / f.premia(0), 100.0, 1e-9);
    EXPECT_LT(distance(percent.premia.tail(2), f.premia.tail(2)), 1e-11);
    const TwoPass backwards =
        fit(p.returns.rowwise().reverse(), p.factors, with(weighting));
    EXPECT_LT(distance(backwards.premia, f.premia), 1e-11);
    EXPECT_LT(distance(backwards.alpha.reverse(), f.alpha), 1e-11);
  }
}

TEST(TwoPass, repackaged_assets_leave_gls_alone) {
  const simulated::Panel p = simulated::panel(60, 5, 1, 20);
  std::mt19937 engine(21);
  Matrix mix = simulated::normals(engine, 5, 5);
  mix.array().colwise() /= mix.rowwise().sum().array();  // portfolios cost one
  const TwoPass f = fit(p.returns, p.factors, with(Weighting::gls));
  const TwoPass g = fit(p.returns * mix.transpose(), p.factors, with(Weighting::gls));
  EXPECT_LT(distance(g.premia, f.premia), 1e-9);
  EXPECT_LT(distance(g.rows_misspecified, f.rows_misspecified), 1e-8);
}

TEST(TwoPass, as_many_premia_as_assets_leave_no_pricing_error) {
  const simulated::Panel p = simulated::panel(30, 3, 2, 22);
  for (Weighting weighting : kAll) {
    const TwoPass f = fit(p.returns, p.factors, with(weighting));
    EXPECT_EQ(f.alpha.norm(), 0.0);
    EXPECT_TRUE((f.rows_misspecified.array() == f.rows_estimated.array()).all());
    EXPECT_TRUE(std::isnan(f.period_se(0, 0)));
    const TwoPassData data{p.returns, p.factors, {}};
    EXPECT_EQ(alpha_rows(data, f, AlphaRows::estimated).norm(), 0.0);
  }
}

TEST(TwoPass, assets_without_betas_are_left_out_and_counted) {
  simulated::Panel p = simulated::panel(40, 9, 2, 23);
  simulated::punch_holes(p.returns, 0.1, 24);
  p.returns.col(4).head(37).setConstant(kNaN);
  p.returns.col(7).setConstant(kNaN);
  Matrix others(40, 7);
  others << p.returns.leftCols(4), p.returns.middleCols(5, 2), p.returns.rightCols(1);
  const TwoPass f = fit(p.returns, p.factors, with(Weighting::ols));
  const TwoPass g = fit(others, p.factors, with(Weighting::ols));
  EXPECT_EQ(f.n_left_out, 2);
  EXPECT_LT(distance(f.premia, g.premia), 1e-13);
  EXPECT_LT(distance(f.rows_misspecified, g.rows_misspecified), 1e-12);
  EXPECT_TRUE(std::isnan(f.alpha(4)) && std::isnan(f.alpha(7)));
  EXPECT_EQ(f.n_priced[4], 0);
}

TEST(TwoPass, periods_carry_their_status) {
  simulated::Panel p = simulated::panel(40, 10, 1, 25);
  std::mt19937 engine(26);
  Traits traits{simulated::normals(engine, 40, 10), simulated::normals(engine, 40, 10)};
  p.returns.row(3).setConstant(kNaN);
  p.returns.row(4).tail(6).setConstant(kNaN);
  traits[0].row(5).setConstant(2.0);
  traits[1].row(6) = -3.0 * traits[0].row(6).array() + 1.0;
  const TwoPass f = fit(p.returns, p.factors, with(Weighting::ols), traits);
  EXPECT_EQ(f.status[3], PeriodStatus::empty);
  EXPECT_EQ(f.status[4], PeriodStatus::too_few_assets);
  EXPECT_EQ(f.n_assets[4], 4);
  EXPECT_EQ(f.status[5], PeriodStatus::no_variation);
  EXPECT_EQ(f.culprit[5], 2);
  EXPECT_EQ(f.status[6], PeriodStatus::rank_deficient);
  EXPECT_EQ(f.culprit[6], 3);
  EXPECT_EQ(f.status[7], PeriodStatus::estimated);
  EXPECT_EQ(f.used_periods.size(), 36u);
  EXPECT_EQ(f.rows_series.rows(), 36);
  EXPECT_EQ(f.rows_estimated.rows(), 40);
  EXPECT_TRUE(std::isnan(f.period_premia(5, 0)));
  TwoPassOptions strict = with(Weighting::ols);
  strict.min_assets = 4;  // P: an exact fit is allowed when asked for
  EXPECT_EQ(fit(p.returns, p.factors, strict, traits).status[4], PeriodStatus::estimated);
}

TEST(TwoPass, bits_do_not_depend_on_threads) {
  simulated::Panel p = simulated::panel(50, 200, 2, 27);
  const TwoPass a = fit(p.returns, p.factors, with(Weighting::wls));
  TwoPassOptions many = with(Weighting::wls);
  many.threads = 5;
  const TwoPass b = fit(p.returns, p.factors, many);
  EXPECT_TRUE((a.rows_misspecified.array() == b.rows_misspecified.array()).all());
  EXPECT_TRUE((a.period_se.array() == b.period_se.array()).all());
  simulated::punch_holes(p.returns, 0.1, 28);
  const TwoPass c = fit(p.returns, p.factors, with(Weighting::wls));
  const TwoPass d = fit(p.returns, p.factors, many);
  EXPECT_TRUE((c.premia.array() == d.premia.array()).all());
  EXPECT_TRUE((c.rows_misspecified.array() == d.rows_misspecified.array()).all());
  EXPECT_TRUE((c.alpha.array() == d.alpha.array()).all());
}

Error error_of(const Matrix& returns,
               const Matrix& factors,
               const TwoPassOptions& options,
               const Traits& traits = {}) {
  try {
    fit(returns, factors, options, traits);
  } catch (const Error& error) {
    return error;
  }
  return Error("none", "");
}

double fact(const Error& error, const std::string& name) {
  for (const auto& [key, value] : error.facts())
    if (key == name) return value;
  return kNaN;
}

TEST(TwoPass, refuses_what_it_cannot_identify) {
  const simulated::Panel p = simulated::panel(40, 6, 2, 29);
  const TwoPassOptions ols = with(Weighting::ols);
  Error error = error_of(p.returns.leftCols(2), p.factors, ols);
  EXPECT_EQ(error.tag(), "too_few");
  EXPECT_EQ(fact(error, "n_terms"), 3.0);
  EXPECT_EQ(
      error_of(p.returns.topRows(6), p.factors.topRows(6), with(Weighting::gls)).tag(),
      "too_few");

  // Every asset has a beta of one.
  std::mt19937 engine(30);
  Matrix flat = p.factors.col(0).replicate(1, 6);
  flat += Vector::Ones(40) * simulated::normals(engine, 1, 6);
  error = error_of(flat, p.factors.leftCols(1), ols);
  EXPECT_EQ(error.tag(), "rank");
  EXPECT_EQ(fact(error, "rank"), 1.0);
  EXPECT_EQ(fact(error, "term"), 2.0);
  EXPECT_EQ(error_of(flat, p.factors.leftCols(1), with(Weighting::ols, false)).tag(),
            "none");

  // A factor repeated under another name is collinear over time.
  Matrix twice(40, 2);
  twice << p.factors.col(0), 2.0 * p.factors.col(0);
  EXPECT_EQ(error_of(p.returns, twice, ols).tag(), "rank");
  twice.col(1).setConstant(1.0);
  EXPECT_EQ(error_of(p.returns, twice, ols).tag(), "constant_factor");

  // A repeated asset makes V singular.
  Matrix repeated = p.returns;
  repeated.col(5) = repeated.col(1);
  error = error_of(repeated, p.factors, with(Weighting::gls));
  EXPECT_EQ(error.tag(), "rank");
  EXPECT_EQ(fact(error, "asset"), 6.0);

  // A factor among the assets has no residual variance.
  Matrix traded = p.returns;
  traded.col(2) = p.factors.col(0);
  error = error_of(traded, p.factors, with(Weighting::wls));
  EXPECT_EQ(error.tag(), "zero_residual");
  EXPECT_EQ(fact(error, "asset"), 3.0);
  EXPECT_EQ(error_of(traded, p.factors, with(Weighting::gls)).tag(), "none");
}

TEST(TwoPass, refuses_ragged_panels_that_it_cannot_price) {
  simulated::Panel p = simulated::panel(40, 6, 1, 31);
  const TwoPassOptions ols = with(Weighting::ols);
  const Traits flat{Vector::LinSpaced(40, 0.0, 1.0).replicate(1, 6)};
  Error error = error_of(p.returns, p.factors, ols, flat);
  EXPECT_EQ(error.tag(), "no_variation");
  EXPECT_EQ(fact(error, "term"), 3.0);
  std::mt19937 engine(32);
  const Matrix z = simulated::normals(engine, 40, 6);
  error = error_of(p.returns, p.factors, ols, {z, 2.0 * z});
  EXPECT_EQ(error.tag(), "rank");
  EXPECT_EQ(fact(error, "term"), 4.0);
  EXPECT_EQ(error_of(p.returns, p.factors, ols, {z.topRows(39)}).tag(), "input");
  EXPECT_EQ(error_of(p.returns, p.factors, with(Weighting::gls), {z}).tag(),
            "unsupported");
  p.returns(3, 3) = kNaN;
  EXPECT_EQ(error_of(p.returns, p.factors, with(Weighting::gls)).tag(), "unsupported");
  TwoPassOptions many = ols;
  many.min_assets = 7;
  EXPECT_EQ(error_of(p.returns, p.factors, many).tag(), "too_few");
  const TwoPass f = fit(p.returns, p.factors, ols);
  EXPECT_THROW(shanken(f, {}), Error);
  EXPECT_THROW(alpha_rows({p.returns, p.factors, {}}, f, AlphaRows::series), Error);
}

}  // namespace
