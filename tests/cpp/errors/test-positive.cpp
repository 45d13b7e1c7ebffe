#include <gtest/gtest.h>

#include <lambdabar/errors/positive.hpp>

#include "../simulated_panel.hpp"

using namespace lambdabar;

namespace {

Matrix indefinite() {
  Matrix S(3, 3);
  S << 4.0, 3.0, 0.5, 3.0, 1.0, 0.2, 0.5, 0.2, 9.0;
  return S;
}

double smallest_eigenvalue(const Matrix& S) {
  return Eigen::SelfAdjointEigenSolver<Matrix>(S).eigenvalues()(0);
}

TEST(Positive, a_positive_matrix_keeps_its_bits) {
  std::mt19937 engine(1);
  const Matrix Y = simulated::normals(engine, 3, 5);  // rank 3 of 5
  const Matrix S = Y.transpose() * Y;
  const PositiveRepair repaired = make_positive(S, S.diagonal().cwiseSqrt());
  EXPECT_EQ(repaired.n_clipped, 0);
  EXPECT_TRUE((repaired.value.array() == S.array()).all());
}

TEST(Positive, clipping_gives_the_nearest_positive_matrix_in_scaled_units) {
  const Matrix S = indefinite();
  const Vector scale = S.diagonal().cwiseSqrt();
  ASSERT_LT(smallest_eigenvalue(S), -0.1);
  const PositiveRepair repaired = make_positive(S, scale);
  EXPECT_EQ(repaired.n_clipped, 1);
  EXPECT_LT(repaired.min_eigen_relative, 0.0);
  EXPECT_GE(smallest_eigenvalue(repaired.value), -1e-14);
  EXPECT_TRUE((repaired.value.array() == repaired.value.transpose().array()).all());
  // What was taken away is one eigen-direction of the scaled matrix.
  const Vector inverse = scale.cwiseInverse();
  const Matrix before = inverse.asDiagonal() * S * inverse.asDiagonal();
  const Matrix after = inverse.asDiagonal() * repaired.value * inverse.asDiagonal();
  const Eigen::SelfAdjointEigenSolver<Matrix> eigen(before);
  const Vector v = eigen.eigenvectors().col(0);
  EXPECT_LT((after - before + eigen.eigenvalues()(0) * v * v.transpose()).norm(), 1e-14);
}

TEST(Positive, clipping_does_not_depend_on_units) {
  const Matrix S = indefinite();
  Vector units(3);
  units << 1e-3, 1.0, 1e4;
  const Vector scale = S.diagonal().cwiseSqrt();
  const Matrix rescaled = units.asDiagonal() * S * units.asDiagonal();
  const Matrix a = make_positive(S, scale).value;
  const Matrix b = make_positive(rescaled, units.cwiseProduct(scale)).value;
  const Matrix back = units.asDiagonal() * a * units.asDiagonal();
  for (Index i = 0; i < 3; ++i)
    for (Index j = 0; j < 3; ++j) EXPECT_NEAR(b(i, j) / back(i, j), 1.0, 1e-12);
}

TEST(Positive, generalised_inverse_of_a_regular_matrix_is_its_inverse) {
  std::mt19937 engine(2);
  const Matrix Y = simulated::normals(engine, 20, 4);
  const Matrix S = Y.transpose() * Y;
  const GeneralisedInverse g = generalised_inverse(S);
  EXPECT_EQ(g.rank, 4);
  EXPECT_EQ(g.null_space.cols(), 0);
  EXPECT_LT((g.value * S - Matrix::Identity(4, 4)).norm(), 1e-13);
}

TEST(Positive, generalised_inverse_of_a_singular_matrix_inverts_its_span) {
  std::mt19937 engine(3);
  Matrix Y = simulated::normals(engine, 20, 4);
  Y.col(3) = 1e6 * (Y.col(0) - Y.col(1));
  const Matrix S = Y.transpose() * Y;
  const GeneralisedInverse g = generalised_inverse(S);
  EXPECT_EQ(g.rank, 3);
  EXPECT_EQ(g.null_space.cols(), 1);
  EXPECT_LT(simulated::distance(S * g.value * S, S), 1e-12);
  EXPECT_LT(simulated::distance(g.value * S * g.value, g.value), 1e-9);
}

TEST(Positive, zero_matrices_have_rank_zero) {
  const GeneralisedInverse g = generalised_inverse(Matrix::Zero(2, 2));
  EXPECT_EQ(g.rank, 0);
  EXPECT_EQ(g.value.norm(), 0.0);
}

}  // namespace
