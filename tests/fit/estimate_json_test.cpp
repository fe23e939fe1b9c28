// estimate.json and the two tables beside it: round trips field by field, and what is wrong with a
// damaged file.
#include <gmock/gmock.h>
#include <gtest/gtest.h>
#include <unistd.h>

#include <cmath>
#include <filesystem>
#include <limits>
#include <nlohmann/json.hpp>
#include <numeric>
#include <string>
#include <vector>

#include "softsill/error.hpp"
#include "softsill/estimate.hpp"
#include "softsill/files.hpp"

namespace softsill {
namespace {

using ::testing::HasSubstr;
using ::testing::Not;

constexpr double nan = std::numeric_limits<double>::quiet_NaN();
constexpr double infinity = std::numeric_limits<double>::infinity();

class File {
 public:
  explicit File(const std::string& text)
      : path_((std::filesystem::temp_directory_path() /
               ("softsill_estimate_" + std::to_string(::getpid()) + ".json"))
                  .string()) {
    write_file_atomically(path_, text);
  }
  ~File() { std::filesystem::remove(path_); }
  const std::string& path() const { return path_; }

 private:
  std::string path_;
};

Estimate read_back(const std::string& text) { return read_estimate(File(text).path()); }

Quantity quantity(double value, double low, double high, const std::string& unit) {
  Quantity out;
  out.value = value;
  out.low = low;
  out.high = high;
  out.unit = unit;
  out.method = "observed information";
  return out;
}

Quantity absent(const std::string& unit, const std::string& why) {
  Quantity out;
  out.unit = unit;
  out.why_absent = why;
  return out;
}

KernelCurve curve(const std::string& name, const std::string& unit) {
  KernelCurve out;
  out.kernel = name;
  out.unit = unit;
  for (int i = 0; i < 5; ++i) {
    out.lag_ms.push_back(i / 3.0);
    out.value.push_back(std::sin(i + 0.1));
    out.low.push_back(out.value.back() - 0.1);
    out.high.push_back(out.value.back() + 0.2);
  }
  out.effective_degrees_of_freedom = 3.7000000000000006;
  out.smoothing = 1.0 / 7.0;
  out.undetermined = {{0.5, 0.75}, {1.0, 4.0 / 3.0}};
  return out;
}

KernelCurve no_curve(const std::string& name, const std::string& why) {
  KernelCurve out;
  out.kernel = name;
  out.why_absent = why;
  return out;
}

Kernel kernel(Basis basis) {
  Kernel out;
  out.basis = std::move(basis);
  for (std::size_t i = 0; i < out.basis.size(); ++i) {
    out.coefficients.push_back(std::cos(3.0 * static_cast<double>(i)) / 3.0);
  }
  return out;
}

/// Every field away from its default.
Estimate filled() {
  Estimate e;
  e.cell = "H07 \"left\"\n\xc2\xb5";
  e.variant = parse_variant(
      "name = \"two currents\"\n[eta]\nfamily = \"exponentials\"\ncount = 2\n[escape]\n"
      "function = \"rectified_power\"\nexponent = \"fit\"\n[refractory]\ngiven_ms = 2.25\n",
      "v.toml");
  e.status = FitStatus::at_boundary;
  e.mode = FitMode::spikes_and_voltage;
  e.status_sentence = "Converged with eta.tau[2] held.";
  e.minimizer_report = "said 17 things";
  e.newton_decrement = 3.3e-11;
  e.starts = 5;
  e.starts_agreeing = 4;
  e.spikes = 1234;
  e.analysed_ms = 100000.1;
  e.left_out_ms = 400.3;
  e.left_out_spikes = 7;
  e.log_likelihood = 0.1 + 0.2;
  e.spike_log_likelihood = -5000.0 / 3.0;
  e.constant_rate_log_likelihood = -7000.0 / 9.0;
  e.log_marginal_likelihood = 1e300;
  e.noise_level = quantity(1.2345678901234567, 1.1, 1.4, "mV");
  e.noise_level.high.reset();
  e.threshold = quantity(-48.000000000000007, -49.0, -47.0, "mV");
  e.resting_potential = quantity(-65.0, -65.5, -64.5, "mV");
  e.parameters = {{"noise_level", e.noise_level},
                  {"kappa.amplitude[1]", quantity(5e-324, -1.0, 1.0, "mV/(nA ms)")},
                  {"eta, first \"part\"", absent("mV", "nothing to see, says \"the fit\"")}};
  e.kernels = {curve("kappa", "mV/(nA ms)"), curve("eta", "mV"),
               no_curve("theta_1", "not part of this variant"), curve("kappa_by_spikes", "1/ms")};
  e.kernels[1].smoothing.reset();
  e.kernels[1].undetermined.clear();
  e.effective_degrees_of_freedom = 21.1;
  e.node_error = {98765, 0.012, 0.7, 0.003};
  e.kappa_consistency = {true, 12.5, 11.0, 0.327, "They agree."};
  e.limits = {"One sentence.", "Another."};
  e.notes = {"A note."};
  e.model.name = "H07";
  e.model.input_unit = "nA";
  e.model.kappa = kernel(Basis::spline(150.0, 1.0, 14));
  e.model.eta = kernel(Basis::exponentials({9.3, 80.0 / 3.0}));
  e.model.theta_1 = kernel(Basis::steps({0.0, 5.0, 20.0, 80.5}));
  e.model.escape = {EscapeKind::rectified_power, 0.3, 2.0 / 3.0};
  e.model.resting_potential = -65.0;
  e.model.threshold = -48.000000000000007;
  e.model.noise_level = 1.2345678901234567;
  e.model.refractory_ms = 2.25;
  e.coordinate_names = {"E_0", "b", "log_sigma"};
  e.coordinates = {0.25, 1.0 / 1.2345678901234567, -1.0};
  e.covariance = {1.0, 0.1, 0.2, 0.1, 2.0, 0.3, 0.2, 0.3, 3.0};
  e.sandwich_covariance = {1.5, 0.15, 0.25, 0.15, 2.5, 0.35, 0.25, 0.35, 3.5};
  e.provenance.program_version = "0.1.0";
  e.provenance.command_line = "softsill fit 'my cell.toml' --out r";
  e.provenance.seed = std::numeric_limits<std::uint64_t>::max();
  e.provenance.inputs = {{"cell.toml", std::string(64, 'a')}, {"s1.csv", std::string(64, '0')}};
  return e;
}

/// What spikes alone leave: units of Delta, and no number for Delta, E_0, eta or theta_1.
Estimate spikes_alone() {
  Estimate e;
  e.cell = "n07";
  e.status = FitStatus::converged;
  e.mode = FitMode::spikes_alone;
  e.spikes = 600;
  e.noise_level = absent("mV", "spikes fix every potential only in units of Delta");
  e.threshold = quantity(5.5, 5.0, 6.0, "Delta");
  e.resting_potential = absent("Delta", "only the distance from rest to threshold is estimable");
  const char* why = "spikes alone see only the difference eta - theta_1";
  e.kernels = {curve("kappa", "Delta/(nA ms)"), no_curve("eta", why), no_curve("theta_1", why),
               curve("eta_minus_theta_1", "Delta")};
  e.model.scale = PotentialScale::noise_level;
  e.model.input_unit = "dB";
  e.model.kappa = kernel(Basis::spline(40.0, 0.5, 9));
  e.model.eta = kernel(Basis::spline(400.0, 1.0, 14));
  e.model.threshold = 5.5;
  e.coordinate_names = {"(E_0-theta_0)/Delta"};
  e.coordinates = {-5.5};
  e.covariance = {0.01};
  e.sandwich_covariance = {0.02};
  return e;
}

void expect_same(const Quantity& a, const Quantity& b, const std::string& what) {
  SCOPED_TRACE(what);
  EXPECT_EQ(a.value, b.value);
  EXPECT_EQ(a.low, b.low);
  EXPECT_EQ(a.high, b.high);
  EXPECT_EQ(a.unit, b.unit);
  EXPECT_EQ(a.method, b.method);
  EXPECT_EQ(a.why_absent, b.why_absent);
}

void expect_same(const KernelCurve& a, const KernelCurve& b) {
  SCOPED_TRACE(a.kernel);
  EXPECT_EQ(a.kernel, b.kernel);
  EXPECT_EQ(a.unit, b.unit);
  EXPECT_EQ(a.lag_ms, b.lag_ms);
  EXPECT_EQ(a.value, b.value);
  EXPECT_EQ(a.low, b.low);
  EXPECT_EQ(a.high, b.high);
  EXPECT_EQ(a.why_absent, b.why_absent);
  EXPECT_EQ(a.effective_degrees_of_freedom, b.effective_degrees_of_freedom);
  EXPECT_EQ(a.smoothing, b.smoothing);
  ASSERT_EQ(a.undetermined.size(), b.undetermined.size());
  for (std::size_t i = 0; i < a.undetermined.size(); ++i) {
    EXPECT_EQ(a.undetermined[i].begin_ms, b.undetermined[i].begin_ms);
    EXPECT_EQ(a.undetermined[i].end_ms, b.undetermined[i].end_ms);
  }
}

void expect_same(const Kernel& a, const Kernel& b, const std::string& what) {
  SCOPED_TRACE(what);
  EXPECT_EQ(a.basis.family, b.basis.family);
  EXPECT_EQ(a.basis.support_ms, b.basis.support_ms);
  EXPECT_EQ(a.basis.knots_ms, b.basis.knots_ms);
  EXPECT_EQ(a.basis.time_constants_ms, b.basis.time_constants_ms);
  EXPECT_EQ(a.coefficients, b.coefficients);
  for (double lag : {0.0, 0.3, 7.7, 60.0}) {
    EXPECT_EQ(a.value(lag), b.value(lag));
  }
}

void expect_same(const Model& a, const Model& b) {
  EXPECT_EQ(a.name, b.name);
  EXPECT_EQ(a.input_unit, b.input_unit);
  EXPECT_EQ(a.scale, b.scale);
  expect_same(a.kappa, b.kappa, "model.kappa");
  expect_same(a.eta, b.eta, "model.eta");
  expect_same(a.theta_1, b.theta_1, "model.theta_1");
  EXPECT_EQ(a.escape, b.escape);
  EXPECT_EQ(a.resting_potential, b.resting_potential);
  EXPECT_EQ(a.threshold, b.threshold);
  EXPECT_EQ(a.noise_level, b.noise_level);
  EXPECT_EQ(a.refractory_ms, b.refractory_ms);
}

void expect_same(const Estimate& a, const Estimate& b) {
  EXPECT_EQ(a.cell, b.cell);
  EXPECT_EQ(a.variant, b.variant);
  EXPECT_EQ(a.status, b.status);
  EXPECT_EQ(a.mode, b.mode);
  EXPECT_EQ(a.status_sentence, b.status_sentence);
  EXPECT_EQ(a.minimizer_report, b.minimizer_report);
  EXPECT_EQ(a.newton_decrement, b.newton_decrement);
  EXPECT_EQ(a.starts, b.starts);
  EXPECT_EQ(a.starts_agreeing, b.starts_agreeing);
  EXPECT_EQ(a.spikes, b.spikes);
  EXPECT_EQ(a.analysed_ms, b.analysed_ms);
  EXPECT_EQ(a.left_out_ms, b.left_out_ms);
  EXPECT_EQ(a.left_out_spikes, b.left_out_spikes);
  EXPECT_EQ(a.log_likelihood, b.log_likelihood);
  EXPECT_EQ(a.spike_log_likelihood, b.spike_log_likelihood);
  EXPECT_EQ(a.constant_rate_log_likelihood, b.constant_rate_log_likelihood);
  EXPECT_EQ(a.log_marginal_likelihood, b.log_marginal_likelihood);
  expect_same(a.noise_level, b.noise_level, "noise_level");
  expect_same(a.threshold, b.threshold, "threshold");
  expect_same(a.resting_potential, b.resting_potential, "resting_potential");
  ASSERT_EQ(a.parameters.size(), b.parameters.size());
  for (std::size_t i = 0; i < a.parameters.size(); ++i) {
    EXPECT_EQ(a.parameters[i].name, b.parameters[i].name);
    expect_same(a.parameters[i].quantity, b.parameters[i].quantity, a.parameters[i].name);
  }
  ASSERT_EQ(a.kernels.size(), b.kernels.size());
  for (std::size_t i = 0; i < a.kernels.size(); ++i) {
    expect_same(a.kernels[i], b.kernels[i]);
  }
  EXPECT_EQ(a.effective_degrees_of_freedom, b.effective_degrees_of_freedom);
  EXPECT_EQ(a.node_error.nodes, b.node_error.nodes);
  EXPECT_EQ(a.node_error.expected_spikes_error, b.node_error.expected_spikes_error);
  EXPECT_EQ(a.node_error.allowed, b.node_error.allowed);
  EXPECT_EQ(a.node_error.largest_shift_in_se, b.node_error.largest_shift_in_se);
  EXPECT_EQ(a.kappa_consistency.tested, b.kappa_consistency.tested);
  EXPECT_EQ(a.kappa_consistency.statistic, b.kappa_consistency.statistic);
  EXPECT_EQ(a.kappa_consistency.degrees_of_freedom, b.kappa_consistency.degrees_of_freedom);
  EXPECT_EQ(a.kappa_consistency.p_value, b.kappa_consistency.p_value);
  EXPECT_EQ(a.kappa_consistency.sentence, b.kappa_consistency.sentence);
  EXPECT_EQ(a.limits, b.limits);
  EXPECT_EQ(a.notes, b.notes);
  expect_same(a.model, b.model);
  EXPECT_EQ(a.coordinate_names, b.coordinate_names);
  EXPECT_EQ(a.coordinates, b.coordinates);
  EXPECT_EQ(a.covariance, b.covariance);
  EXPECT_EQ(a.sandwich_covariance, b.sandwich_covariance);
  EXPECT_EQ(a.provenance.program_version, b.provenance.program_version);
  EXPECT_EQ(a.provenance.command_line, b.provenance.command_line);
  EXPECT_EQ(a.provenance.seed, b.provenance.seed);
  ASSERT_EQ(a.provenance.inputs.size(), b.provenance.inputs.size());
  for (std::size_t i = 0; i < a.provenance.inputs.size(); ++i) {
    EXPECT_EQ(a.provenance.inputs[i].path, b.provenance.inputs[i].path);
    EXPECT_EQ(a.provenance.inputs[i].sha256, b.provenance.inputs[i].sha256);
  }
}

TEST(EstimateJson, RoundTripsEveryField) {
  const Estimate written = filled();
  const Estimate read = read_back(to_json(written));
  expect_same(read, written);
  EXPECT_EQ(to_json(read), to_json(written));
}

TEST(EstimateJson, RoundTripsSpikesAlone) {
  expect_same(read_back(to_json(spikes_alone())), spikes_alone());
}

TEST(EstimateJson, RoundTripsEveryStatusAndMode) {
  for (FitStatus status :
       {FitStatus::converged, FitStatus::at_boundary, FitStatus::converged_imprecise,
        FitStatus::not_converged, FitStatus::interrupted, FitStatus::failed}) {
    for (FitMode mode :
         {FitMode::spikes_and_voltage, FitMode::spikes_anchored, FitMode::spikes_alone}) {
      Estimate e;
      e.status = status;
      e.mode = mode;
      const Estimate read = read_back(to_json(e));
      EXPECT_EQ(read.status, status);
      EXPECT_EQ(read.mode, mode);
      EXPECT_EQ(trustworthy(status),
                status == FitStatus::converged || status == FitStatus::at_boundary);
    }
  }
}

// The keys that other programs rely on, with what they hold.
TEST(EstimateJson, HoldsThePromisedKeys) {
  const auto json = nlohmann::json::parse(to_json(filled()));
  EXPECT_EQ(json["schema_version"], 1);
  EXPECT_EQ(json["status"], "at_boundary");
  EXPECT_EQ(json["mode"], "spikes_and_voltage");
  EXPECT_EQ(json["spikes"], 1234);
  EXPECT_EQ(json["log_likelihood"], 0.1 + 0.2);
  EXPECT_EQ(json["effective_degrees_of_freedom"], 21.1);
  for (const char* name : {"noise_level", "threshold", "resting_potential"}) {
    for (const char* key : {"value", "low", "high", "unit"}) {
      EXPECT_TRUE(json[name].contains(key)) << name << "." << key;
    }
  }
  EXPECT_TRUE(json["noise_level"]["high"].is_null());
  for (const char* key :
       {"lag_ms", "value", "low", "high", "unit", "effective_degrees_of_freedom", "smoothing"}) {
    EXPECT_TRUE(json["kernels"]["kappa"].contains(key)) << key;
  }
  EXPECT_EQ(json["kernels"]["theta_1"].size(), 1u);
  EXPECT_EQ(json["kernels"]["theta_1"]["why_absent"], "not part of this variant");
  const auto alone = nlohmann::json::parse(to_json(spikes_alone()));
  EXPECT_TRUE(alone["noise_level"]["value"].is_null());
  EXPECT_THAT(alone["noise_level"]["why_absent"].get<std::string>(), HasSubstr("units of Delta"));
}

TEST(EstimateJson, NeverWritesWhatIsNotANumber) {
  Estimate e = filled();
  e.status = FitStatus::not_converged;
  e.log_likelihood = -infinity;
  e.threshold.value = nan;
  e.threshold.low = infinity;
  e.noise_level.high = infinity;
  e.kernels[0].low[2] = nan;
  e.covariance[4] = nan;
  const std::string text = to_json(e);
  EXPECT_TRUE(nlohmann::json::accept(text));  // knows neither nan nor inf
  const Estimate read = read_back(text);
  EXPECT_TRUE(std::isnan(read.log_likelihood));
  EXPECT_FALSE(read.threshold.value);
  EXPECT_FALSE(read.threshold.low);
  EXPECT_THAT(read.threshold.why_absent, HasSubstr("no finite number"));
  EXPECT_FALSE(read.noise_level.high);
  EXPECT_TRUE(std::isnan(read.kernels[0].low[2]));
  EXPECT_TRUE(std::isnan(read.covariance[4]));
  EXPECT_EQ(read.model.threshold, e.model.threshold);
}

// A model that holds no numbers, or none that a fit has found, is no model.
TEST(EstimateJson, AModelIsCompleteOrAbsent) {
  Estimate e = filled();
  e.status = FitStatus::not_converged;
  e.model.kappa.coefficients[3] = nan;
  EXPECT_TRUE(nlohmann::json::parse(to_json(e))["model"].is_null());
  EXPECT_FALSE(read_back(to_json(e)).model.kappa.present());
  e = filled();
  e.status = FitStatus::failed;
  EXPECT_TRUE(nlohmann::json::parse(to_json(e))["model"].is_null());
}

TEST(EstimateJson, SurvivesBytesThatAreNoUtf8) {
  Estimate e = spikes_alone();
  e.provenance.command_line = "softsill fit caf\xe9.toml";
  EXPECT_EQ(read_back(to_json(e)).provenance.command_line, "softsill fit caf\xef\xbf\xbd.toml");
}

struct Damage {
  const char* pointer;  ///< JSON pointer of what is changed
  const char* value;    ///< new value, or empty: removed
  const char* said;     ///< must be in the message
};

TEST(EstimateJson, NamesFileAndPlaceOfEveryDamage) {
  const std::vector<Damage> damages = {
      {"/schema_version", "", "schema_version: is missing"},
      {"/schema_version", "2", "schema_version: is 2, this program reads 1"},
      {"/schema_version", "\"1\"", "schema_version: must be a whole number"},
      {"/cell", "", "cell: is missing"},
      {"/cell", "7", "cell: must be text"},
      {"/status", "\"konverged\"", "status: unknown word 'konverged'; did you mean 'converged'?"},
      {"/mode", "null", "mode: must be text"},
      {"/spikes", "-3", "spikes: must be a whole number"},
      {"/spikes", "1.5", "spikes: must be a whole number"},
      {"/log_likelihood", "\"-5\"", "log_likelihood: must be a number"},
      {"/noise_level", "[]", "noise_level: must be an object"},
      {"/noise_level/unit", "", "noise_level.unit: is missing"},
      {"/noise_level/value", "null", "noise_level.why_absent: is missing"},
      {"/parameters/1/name", "", "parameters[1].name: is missing"},
      {"/parameters", "{}", "parameters: must be a list"},
      {"/kernels", "[]", "kernels: must be an object"},
      {"/kernels/kappa/lag_ms/2", "null", "kernels.kappa.lag_ms[2]: must be a number"},
      {"/kernels/kappa/low", "[1]", "kernels.kappa.low: must be as long as lag_ms"},
      {"/kernels/kappa/undetermined_ms/0", "[1]", "kernels.kappa.undetermined_ms[0]: must hold"},
      {"/limits/0", "0", "limits[0]: must be text"},
      {"/kappa_consistency/tested", "1", "kappa_consistency.tested: must be true or false"},
      {"/minimizer/starts", "99999999999", "minimizer.starts: must be a whole number from 0 to"},
      {"/variant", "\"[kappa]\\nfamliy = 3\"", "variant, line 2"},
      {"/model", "null", "model: is missing although the fit converged"},
      {"/model/noise_level", "0", "model.noise_level: must be above 0"},
      {"/model/scale", "\"volt\"", "model.scale: unknown word 'volt'"},
      {"/model/refractory_ms", "-1", "model.refractory_ms: must not be below 0"},
      {"/model/escape/function", "\"softmax\"", "model.escape.function: "},
      {"/model/kappa/family", "\"splin\"", "model.kappa.family: unknown kernel family 'splin'"},
      {"/model/kappa/degree", "2", "model.kappa.degree: must be 3"},
      {"/model/kappa/knots_ms", "[3, 2, 1, 0, 5]", "model.kappa.knots_ms: must hold at least 5"},
      {"/model/kappa/coefficients", "[1]", "model.kappa.coefficients: holds 1 numbers where"},
      {"/model/eta/time_constants_ms/1", "0", "model.eta.time_constants_ms[1]: must be above 0"},
      {"/coordinates/values", "[1]", "coordinates.values: must hold one number per name"},
      {"/coordinates/covariance/1", "[1]", "coordinates.covariance[1]: must hold one number per"},
      {"/coordinates/sandwich_covariance/2", "", "coordinates.sandwich_covariance: must hold one"},
      {"/provenance/seed", "-1", "provenance.seed: must be a whole number"},
      {"/provenance/inputs/0/sha256", "", "provenance.inputs[0].sha256: is missing"}};
  const auto good = nlohmann::ordered_json::parse(to_json(filled()));
  for (const Damage& damage : damages) {
    auto json = good;
    const nlohmann::ordered_json::json_pointer at(damage.pointer);
    if (*damage.value) {
      json[at] = nlohmann::ordered_json::parse(damage.value);
    } else if (json[at.parent_pointer()].is_array()) {
      json[at.parent_pointer()].erase(std::stoul(at.back()));
    } else {
      json[at.parent_pointer()].erase(at.back());
    }
    const File file(json.dump());
    try {
      read_estimate(file.path());
      ADD_FAILURE() << "no error for " << damage.pointer << " = " << damage.value;
    } catch (const Error& error) {
      EXPECT_THAT(error.what(), HasSubstr(damage.said));
      EXPECT_EQ(error.file(), file.path());
      EXPECT_THAT(error.what(), Not(HasSubstr("\n")));
    }
  }
}

TEST(EstimateJson, NamesWhatIsNotJson) {
  for (const auto& [text, said] : std::vector<std::pair<std::string, std::string>>{
           {"", "line 1: is not JSON"},
           {"{\n\"a\": 1,\n}", "line 3: is not JSON"},
           {"[]", "schema_version: is missing"},
           {"{\"schema_version\": 1e999}", "too large"}}) {
    try {
      read_back(text);
      ADD_FAILURE() << "no error for " << text;
    } catch (const Error& error) {
      EXPECT_THAT(error.what(), HasSubstr(said));
    }
  }
  EXPECT_THROW(read_estimate("/nowhere/estimate.json"), Error);
}

TEST(EstimateTables, KernelsOneRowPerLag) {
  Estimate e;
  e.kernels = {curve("kappa", "mV/(nA ms)"), no_curve("eta", "not part of this variant")};
  e.kernels[0].lag_ms.resize(2);
  e.kernels[0].value = {0.1 + 0.2, -1e-30};
  e.kernels[0].low = {nan, -2.0};
  e.kernels[0].high = {1.0, 2.0};
  EXPECT_EQ(kernels_csv(e),
            "kernel,lag_ms,value,low,high,unit\n"
            "kappa,0,0.30000000000000004,,1,mV/(nA ms)\n"
            "kappa,0.3333333333333333,-1e-30,-2,2,mV/(nA ms)\n");
}

TEST(EstimateTables, ParametersWithEmptyCellsAndQuotes) {
  Estimate e;
  Quantity open = quantity(1.5, 1.25, 2.0, "mV");
  open.high.reset();
  open.method = "observed information, theta_0 - E_0";
  e.parameters = {{"threshold", open},
                  {"noise_level", absent("mV", "spikes say \"no\"")},
                  {"refractory_time", quantity(2.0, 1.0, 3.0, "ms")}};
  EXPECT_EQ(parameters_csv(e),
            "name,value,low,high,unit,method\n"
            "threshold,1.5,1.25,,mV,\"observed information, theta_0 - E_0\"\n"
            "noise_level,,,,mV,\"absent: spikes say \"\"no\"\"\"\n"
            "refractory_time,2,1,3,ms,observed information\n");
}

}  // namespace
}  // namespace softsill
