// The gate behind the optimiser: what is no maximum must not pass, whatever the optimiser says.
#include <gtest/gtest.h>

#include <cmath>
#include <functional>
#include <limits>

#include "estimator/fit/ceres_minimizer.hpp"

namespace softsill {
namespace {

constexpr double infinity = std::numeric_limits<double>::infinity();

/// An objective from three functions.
struct Made : Objective {
  Eigen::Index dimensions = 2;
  std::function<double(const Vector&)> value;
  std::function<Vector(const Vector&)> gradient;
  std::function<Matrix(const Vector&)> hessian;

  Eigen::Index size() const override { return dimensions; }
  Evaluated evaluate(const Vector& at, Want) override {
    return {value(at), gradient(at), hessian(at), Matrix::Identity(dimensions, dimensions)};
  }
};

/// 100 expected spikes: sum of exp(z) - z with the minimum at z = 0, z = (x + y, x - 2 y).
Made convex() {
  const Matrix a = (Matrix(2, 2) << 1.0, 1.0, 1.0, -2.0).finished();
  Made made;
  made.value = [a](const Vector& at) {
    const Vector z = a * at;
    return 100.0 * (z.array().exp() - z.array()).sum();
  };
  made.gradient = [a](const Vector& at) {
    const Vector z = a * at;
    return Vector(100.0 * a.transpose() * (z.array().exp() - 1.0).matrix());
  };
  made.hessian = [a](const Vector& at) {
    const Vector z = a * at;
    return Matrix(100.0 * a.transpose() * z.array().exp().matrix().asDiagonal() * a);
  };
  return made;
}

Vector point(double x, double y) { return (Vector(2) << x, y).finished(); }

TEST(Gate, PassesTheMinimum) {
  Made objective = convex();
  const Minimum minimum = minimize(objective, point(2.0, -1.0));
  EXPECT_TRUE(minimum.passed()) << minimum.report;
  EXPECT_LT(minimum.theta.cwiseAbs().maxCoeff(), 1e-5);
  EXPECT_NEAR(minimum.value, 200.0, 1e-8);
  EXPECT_LT(minimum.decrement, 1e-9);
  EXPECT_EQ(minimum.hessian, objective.hessian(minimum.theta));
  EXPECT_EQ(minimum.gradient, objective.gradient(minimum.theta));
}

TEST(Gate, PassesAStartThatIsTheMinimum) {
  Made objective = convex();
  const Minimum minimum = minimize(objective, point(0.0, 0.0));
  EXPECT_TRUE(minimum.passed());
  EXPECT_EQ(minimum.iterations, 0);
}

// Rosenbrock 1960, Comput. J. 3:175: a curved valley, minimum 0 at (1, 1).
TEST(Gate, PassesTheEndOfACurvedValley) {
  Made objective;
  objective.value = [](const Vector& p) {
    return 100.0 * std::pow(p[1] - p[0] * p[0], 2) + std::pow(1.0 - p[0], 2);
  };
  objective.gradient = [](const Vector& p) {
    const double a = p[1] - p[0] * p[0];
    return point(-400.0 * p[0] * a - 2.0 * (1.0 - p[0]), 200.0 * a);
  };
  objective.hessian = [](const Vector& p) {
    const double xy = -400.0 * p[0];
    return Matrix(
        (Matrix(2, 2) << 1200.0 * p[0] * p[0] - 400.0 * p[1] + 2.0, xy, xy, 200.0).finished());
  };
  MinimizerOptions options;
  options.max_iterations = 1000;
  const Minimum minimum = minimize(objective, point(-1.2, 1.0), options);
  EXPECT_TRUE(minimum.passed()) << minimum.report;
  EXPECT_NEAR(minimum.theta[0], 1.0, 1e-4);
  EXPECT_NEAR(minimum.theta[1], 1.0, 1e-4);
}

TEST(Gate, RefusesAGradientOfTheWrongSign) {
  Made objective = convex();
  const auto right = objective.gradient;
  objective.gradient = [right](const Vector& at) { return Vector(-right(at)); };
  for (const Vector& start : {point(2.0, -1.0), point(-0.5, 0.3), point(0.01, 0.01)}) {
    const Minimum minimum = minimize(objective, start);
    EXPECT_FALSE(minimum.passed()) << minimum.report << " at " << minimum.theta.transpose();
    EXPECT_TRUE(minimum.finite);
  }
}

TEST(Gate, RefusesAGradientWithOneWrongSign) {
  Made objective = convex();
  const auto right = objective.gradient;
  objective.gradient = [right](const Vector& at) {
    Vector wrong = right(at);
    wrong[1] = -wrong[1];
    return wrong;
  };
  for (const Vector& start : {point(2.0, -1.0), point(1.0, 0.5), point(-0.5, 0.3)}) {
    const Minimum minimum = minimize(objective, start);
    EXPECT_FALSE(minimum.passed()) << minimum.report << " at " << minimum.theta.transpose();
  }
}

TEST(Gate, RefusesStartsThatAreNotFinite) {
  for (double bad : {std::numeric_limits<double>::quiet_NaN(), infinity, -infinity}) {
    Made objective = convex();
    objective.value = [bad](const Vector&) { return bad; };
    const Minimum minimum = minimize(objective, point(1.0, 1.0));
    EXPECT_FALSE(minimum.passed());
    EXPECT_FALSE(minimum.finite);
    EXPECT_EQ(minimum.theta, point(1.0, 1.0));
  }
  Made objective = convex();
  objective.gradient = [](const Vector&) { return point(NAN, 1.0); };
  EXPECT_FALSE(minimize(objective, point(1.0, 1.0)).passed());
}

TEST(Gate, RefusesANaNAtTheStartOnly) {
  // The start is a point too: nothing is known about it, so nothing may be claimed.
  Made objective = convex();
  const Minimum minimum = minimize(objective, point(NAN, 0.0));
  EXPECT_FALSE(minimum.passed());
  EXPECT_FALSE(minimum.finite);
}

TEST(Gate, RefusesAHessianWithNaN) {
  Made objective = convex();
  objective.hessian = [](const Vector&) { return Matrix(Matrix::Constant(2, 2, NAN)); };
  EXPECT_FALSE(minimize(objective, point(1.0, 1.0)).passed());
}

/// x^2 - y^2: a saddle at the origin, no minimum.
Made saddle() {
  Made made;
  made.value = [](const Vector& at) { return at[0] * at[0] - at[1] * at[1]; };
  made.gradient = [](const Vector& at) { return point(2.0 * at[0], -2.0 * at[1]); };
  made.hessian = [](const Vector&) { return Matrix(Vector(point(2.0, -2.0)).asDiagonal()); };
  return made;
}

TEST(Gate, RefusesAnIndefiniteHessian) {
  for (const Vector& start : {point(0.0, 0.0), point(1.0, 0.0), point(1.0, 1e-3)}) {
    Made objective = saddle();
    const Minimum minimum = minimize(objective, start);
    EXPECT_FALSE(minimum.passed()) << minimum.report;
    EXPECT_FALSE(minimum.positive_definite);
  }
}

TEST(Gate, RefusesAFlatDirection) {
  Made objective;
  objective.value = [](const Vector& at) { return at[0] * at[0]; };
  objective.gradient = [](const Vector& at) { return point(2.0 * at[0], 0.0); };
  objective.hessian = [](const Vector&) { return Matrix(Vector(point(2.0, 0.0)).asDiagonal()); };
  const Minimum minimum = minimize(objective, point(1.0, 1.0));
  EXPECT_FALSE(minimum.passed());
  EXPECT_FALSE(minimum.positive_definite);
  // Held, it is no direction any more.
  MinimizerOptions options;
  options.fixed = {false, true};
  const Minimum held = minimize(objective, point(1.0, 1.0), options);
  EXPECT_TRUE(held.passed()) << held.report;
  EXPECT_EQ(held.theta[1], 1.0);
  EXPECT_NEAR(held.theta[0], 0.0, 1e-4);
}

TEST(Gate, RefusesAWallBeforeTheMinimum) {
  Made objective = convex();
  const auto right = objective.value;
  objective.value = [right](const Vector& at) { return at[0] < 0.5 ? infinity : right(at); };
  const Minimum minimum = minimize(objective, point(2.0, -1.0));
  EXPECT_FALSE(minimum.passed()) << minimum.report << " at " << minimum.theta.transpose();
}

TEST(Gate, RefusesTooFewIterations) {
  Made objective;
  objective.dimensions = 1;
  // Newton steps of about 1 each through the flat part of exp(x) - 1e-9 x.
  objective.value = [](const Vector& x) { return std::exp(x[0]) - 1e-9 * x[0]; };
  objective.gradient = [](const Vector& x) {
    return Vector(Vector::Constant(1, std::exp(x[0]) - 1e-9));
  };
  objective.hessian = [](const Vector& x) {
    return Matrix(Matrix::Constant(1, 1, std::exp(x[0])));
  };
  MinimizerOptions options;
  options.max_iterations = 2;
  EXPECT_FALSE(minimize(objective, Vector::Constant(1, 20.0), options).passed());
}

TEST(Gate, AStopIsAStop) {
  Made objective = convex();
  MinimizerOptions options;
  int left = 1;
  options.keep_going = [&left] { return left-- > 0; };
  const Minimum minimum = minimize(objective, point(5.0, -4.0), options);
  EXPECT_TRUE(minimum.interrupted);
  EXPECT_FALSE(minimum.passed());
}

TEST(Gate, ValuesExposeABiasedGradient) {
  Made objective = convex();
  EXPECT_TRUE(values_agree(objective, minimize(objective, point(2.0, -1.0)), {}));
  // Wrong by a constant: the decrement is 0 at the gradient's own zero, 0.7 standard errors off.
  const auto right = objective.gradient;
  objective.gradient = [right](const Vector& at) { return Vector(right(at) + point(10.0, 0.0)); };
  const Minimum minimum = minimize(objective, point(0.0, 0.0));
  EXPECT_TRUE(minimum.passed()) << minimum.report;
  EXPECT_FALSE(values_agree(objective, minimum, {}));
}

TEST(Gate, ValuesExposeAWrongHessian) {
  Made objective = convex();
  const auto right = objective.hessian;
  objective.hessian = [right](const Vector& at) { return Matrix(3.0 * right(at)); };
  const Minimum minimum = minimize(objective, point(0.5, 0.2));
  EXPECT_FALSE(values_agree(objective, minimum, {}));
}

}  // namespace
}  // namespace softsill
