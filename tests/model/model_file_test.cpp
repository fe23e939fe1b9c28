// Model files: the documented example, digit-for-digit round trips, and mistakes.
#include <gtest/gtest.h>

#include <cmath>
#include <string>
#include <vector>

#include "softsill/error.hpp"
#include "softsill/model_file.hpp"

namespace softsill {
namespace {

const char* const example = R"(
name = "regular cell"
resting_potential_mV = -65
threshold_mV = -48
noise_level_mV = 1.5
refractory_ms = 2
[kappa]
resistance_MOhm = 100
tau_m_ms = 20
[eta]
family = "exponentials"
amplitudes = [-12, -2]
time_constants_ms = [20, 150]
[theta_1]
family = "steps"
edges_ms = [0, 5, 20, 80]
values = [10, 4, 1]
)";

Model read(const std::string& text) { return parse_model(text, "m.toml"); }

void expect_same(const Kernel& a, const Kernel& b) {
  EXPECT_EQ(a.basis.family, b.basis.family);
  EXPECT_EQ(a.basis.degree, b.basis.degree);
  EXPECT_EQ(a.basis.support_ms, b.basis.support_ms);
  EXPECT_EQ(a.basis.knots_ms, b.basis.knots_ms);
  EXPECT_EQ(a.basis.time_constants_ms, b.basis.time_constants_ms);
  EXPECT_EQ(a.coefficients, b.coefficients);
}

void expect_same(const Model& a, const Model& b) {
  EXPECT_EQ(a.name, b.name);
  EXPECT_EQ(a.input_unit, b.input_unit);
  EXPECT_EQ(a.scale, b.scale);
  EXPECT_EQ(a.escape, b.escape);
  EXPECT_EQ(a.resting_potential, b.resting_potential);
  EXPECT_EQ(a.threshold, b.threshold);
  EXPECT_EQ(a.noise_level, b.noise_level);
  EXPECT_EQ(a.refractory_ms, b.refractory_ms);
  expect_same(a.kappa, b.kappa);
  expect_same(a.eta, b.eta);
  expect_same(a.theta_1, b.theta_1);
}

TEST(ModelFile, ReadsTheExample) {
  const Model model = read(example);
  EXPECT_EQ(model.name, "regular cell");
  EXPECT_EQ(model.scale, PotentialScale::millivolt);
  EXPECT_EQ(model.input_unit, "nA");
  EXPECT_EQ(model.resting_potential, -65.0);
  EXPECT_EQ(model.threshold, -48.0);
  EXPECT_EQ(model.noise_level, 1.5);
  EXPECT_EQ(model.refractory_ms, 2.0);
  EXPECT_EQ(model.escape, Escape{});
  // A resistor of 100 MOhm with 20 ms: kappa(0) = R / tau, and its integral is R.
  EXPECT_DOUBLE_EQ(model.kappa.value(0.0), 5.0);
  EXPECT_DOUBLE_EQ(model.kappa.value(20.0), 5.0 * std::exp(-1.0));
  EXPECT_DOUBLE_EQ(model.kappa.integral(), 100.0);
  EXPECT_DOUBLE_EQ(model.eta.value(0.0), -14.0);
  EXPECT_DOUBLE_EQ(model.theta_1.value(6.0), 4.0);
  EXPECT_DOUBLE_EQ(model.theta_1.value(80.0), 0.0);
}

TEST(ModelFile, RoundTripsDigitForDigit) {
  Model model = read(example);
  expect_same(read(to_toml(model)), model);
  model.kappa.basis = Basis::spline(150.0, 1.0, 6);
  model.kappa.coefficients.assign(model.kappa.basis.size(), 0.1);
  model.kappa.coefficients[1] = -1.0 / 3.0;
  model.theta_1 = {};
  model.escape = {EscapeKind::rectified_power, 0.1 + 0.2, 1.0 / 3.0};
  model.name = "tab\t, \"quotes\" and \\";
  expect_same(read(to_toml(model)), model);
}

TEST(ModelFile, SplineByThreeNumbersOrByKnots) {
  const std::string head = "threshold_mV = 1\nnoise_level_mV = 1\n[kappa]\nfamily = \"spline\"\n";
  const Model model =
      read(head + "support_ms = 100\nfirst_ms = 1\ncount = 5\n" + "coefficients = [1, 2, 3, 2, 1]");
  Basis basis = Basis::spline(100.0, 1.0, 5);
  EXPECT_EQ(model.kappa.basis.knots_ms, basis.knots_ms);
  expect_same(read(to_toml(model)), model);
}

TEST(ModelFile, UnitsOfTheNoiseLevel) {
  const Model model = read("scale = \"noise_level\"\nthreshold = 6.5\ninput_unit = \"dB\"\n");
  EXPECT_EQ(model.scale, PotentialScale::noise_level);
  EXPECT_EQ(model.noise_level, 1.0);
  EXPECT_EQ(model.resting_potential, 0.0);
  EXPECT_EQ(model.threshold, 6.5);
  expect_same(read(to_toml(model)), model);
}

TEST(ModelFile, MistakesAreNamed) {
  const std::string good = "threshold_mV = 1\nnoise_level_mV = 1\n";
  struct Mistake {
    std::string text;
    std::vector<std::string> said;
  };
  const std::vector<Mistake> mistakes = {
      {"", {"m.toml", "threshold_mV is missing"}},
      {"threshold_mV = 1", {"noise_level_mV is missing"}},
      {"threshold_mV = 1\nnoise_level_mV = 0", {"line 2", "positive"}},
      {good + "treshold = 3", {"line 3", "unknown key 'treshold'"}},
      {good + "threshold = 3", {"line 3", "threshold_mV"}},
      {good + "scale = \"volt\"", {"line 3", "millivolt"}},
      {"scale = \"noise_level\"\nthreshold_mV = 1", {"line 2", "threshold"}},
      {"scale = \"noise_level\"\nthreshold = 1\n[theta_1]\nfamily = \"absent\"", {"line 3", "eta"}},
      {good + "[kappa]\nfamily = \"exponentials\"", {"kappa", "time_constants_ms is missing"}},
      {good + "[kappa]\nfamily = \"exponentials\"\ntime_constants_ms = [1, 2]\namplitudes = [1]",
       {"line 6", "must hold 2 numbers, holds 1"}},
      {good + "[kappa]\nfamily = \"exponentials\"\ntime_constants_ms = [0]\namplitudes = [1]",
       {"line 5", "above 0"}},
      {good + "[kappa]\nresistance_MOhm = 3", {"line 3", "tau_m_ms is missing"}},
      {good + "[eta]\nresistance_MOhm = 3", {"line 4", "[kappa] only"}},
      {good + "[kappa]\nresistance_MOhm = 3\ntau_m_ms = 3\ntau = 3", {"line 6", "'tau_m_ms'"}},
      {good + "[kappa]\nfamily = \"steps\"\nedges_ms = [0, 1]", {"values is missing"}},
      {good + "[kappa]\nfamily = \"spline\"\nknots_ms = [0, 1]", {"line 5", "5 knots"}},
      {good + "[kappa]\nfamily = \"spline\"\nsupport_ms = 4", {"first_ms is missing"}},
      {good + "[escape]\nfunction = \"rectified_power\"", {"exponent is missing"}},
      {good + "[escape]\nlambda_0_per_ms = \"fit\"", {"line 4", "positive number"}},
      {good + "[escape]\nexponent = 2", {"line 4", "rectified_power"}},
      {good + "refractory_ms = -1", {"line 3", "0 or more"}}};
  for (const Mistake& mistake : mistakes) {
    try {
      read(mistake.text);
      ADD_FAILURE() << "no error for:\n" << mistake.text;
    } catch (const Error& error) {
      const std::string message = error.what();
      for (const std::string& part : mistake.said) {
        EXPECT_NE(message.find(part), std::string::npos)
            << "wanted '" << part << "' in: " << message << "\nfor:\n"
            << mistake.text;
      }
    }
  }
}

}  // namespace
}  // namespace softsill
