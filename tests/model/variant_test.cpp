// Variant files: defaults, round trips, and a table of mistakes with what is said about them.
#include <gtest/gtest.h>

#include <filesystem>
#include <fstream>
#include <string>
#include <vector>

#include "softsill/error.hpp"
#include "softsill/variant.hpp"

namespace softsill {
namespace {

Variant read(const std::string& text) { return parse_variant(text, "v.toml"); }

const char* const everything = R"(
name = "a \"quoted\" name"
[kappa]
family = "exponentials"
count = 1
shortest_ms = 2
longest_ms = 60.5
[eta]
family = "exponentials"
fit_time_constants = false
time_constants_ms = [30, 200.25]
with_membrane = true
[theta_1]
family = "steps"
edges_ms = [0, 1.5, 4, 100]
[escape]
function = "rectified_power"
lambda_0_per_ms = "fit"
lambda_0_start_per_ms = 0.02
exponent = 3
[refractory]
given_ms = 2.5
[voltage]
use = false
mask_before_ms = 1
mask_after_ms = 7.5
step_ms = 0.1
[smoothing]
automatic = false
kappa = 0.1
eta = 33
theta_1 = 1e4
)";

TEST(VariantFile, EmptyTextIsTheDefault) {
  const Variant variant = read("");
  EXPECT_EQ(variant, Variant());
  EXPECT_EQ(variant.kappa.family, KernelFamily::spline);
  EXPECT_EQ(variant.kappa.support_ms, 150.0);
  EXPECT_EQ(variant.kappa.count, 14);
  EXPECT_EQ(variant.eta.support_ms, 800.0);
  EXPECT_EQ(variant.theta_1.count, 15);
  EXPECT_EQ(variant.escape.kind, EscapeKind::exponential);
  EXPECT_FALSE(variant.fit_lambda_0);
}

TEST(VariantFile, EveryKeyArrives) {
  const Variant v = read(everything);
  EXPECT_EQ(v.name, "a \"quoted\" name");
  EXPECT_EQ(v.kappa.family, KernelFamily::exponentials);
  EXPECT_EQ(v.kappa.count, 1);
  EXPECT_EQ(v.kappa.shortest_ms, 2.0);
  EXPECT_EQ(v.kappa.longest_ms, 60.5);
  EXPECT_TRUE(v.kappa.fit_time_constants);
  EXPECT_TRUE(v.kappa.time_constants_ms.empty());
  EXPECT_FALSE(v.eta.fit_time_constants);
  EXPECT_EQ(v.eta.count, 2);
  EXPECT_EQ(v.eta.time_constants_ms, (std::vector<double>{30.0, 200.25}));
  EXPECT_TRUE(v.eta.with_membrane);
  EXPECT_EQ(v.theta_1.family, KernelFamily::steps);
  EXPECT_EQ(v.theta_1.edges_ms, (std::vector<double>{0.0, 1.5, 4.0, 100.0}));
  EXPECT_EQ(v.escape.kind, EscapeKind::rectified_power);
  EXPECT_TRUE(v.fit_lambda_0);
  EXPECT_EQ(v.escape.lambda_0_per_ms, 0.02);
  EXPECT_FALSE(v.fit_exponent);
  EXPECT_EQ(v.escape.exponent, 3.0);
  EXPECT_EQ(v.refractory.given_ms, 2.5);
  EXPECT_FALSE(v.use_voltage);
  EXPECT_EQ(v.mask_before_ms, 1.0);
  EXPECT_EQ(v.mask_after_ms, 7.5);
  EXPECT_EQ(v.voltage_step_ms, 0.1);
  EXPECT_FALSE(v.smoothing.automatic);
  EXPECT_EQ(v.smoothing.kappa, 0.1);
  EXPECT_EQ(v.smoothing.eta, 33.0);
  EXPECT_EQ(v.smoothing.theta_1, 1e4);
}

TEST(VariantFile, RoundTrips) {
  std::vector<Variant> variants = {Variant(), read(everything)};
  for (const char* escape :
       {"exponential", "softplus", "logistic", "rectified_power", "gaussian_tail"}) {
    variants.push_back(read("[escape]\nfunction = \"" + std::string(escape) + "\""));
  }
  variants.push_back(read("[kappa]\nfamily = \"absent\"\n[theta_1]\nfamily = \"absent\""));
  variants.push_back(read("[refractory]\ncap_ms = 0.1\n[voltage]\nstep_ms = 0.30000000000000004"));
  variants.push_back(read("[eta]\nfamily = \"exponentials\""));
  for (const Variant& variant : variants) {
    const std::string text = to_toml(variant);
    EXPECT_EQ(read(text), variant) << text;
    EXPECT_EQ(to_toml(read(text)), text);
  }
}

TEST(VariantFile, EscapeDefaultsDependOnTheFunction) {
  EXPECT_TRUE(read("[escape]\nfunction = \"logistic\"").fit_lambda_0);
  EXPECT_FALSE(read("[escape]\nfunction = \"logistic\"\nlambda_0_per_ms = 0.3").fit_lambda_0);
  EXPECT_FALSE(read("[escape]\nfunction = \"softplus\"").fit_lambda_0);
  EXPECT_TRUE(read("[escape]\nfunction = \"softplus\"\nlambda_0_per_ms = \"fit\"").fit_lambda_0);
  EXPECT_TRUE(read("[escape]\nfunction = \"rectified_power\"").fit_exponent);
  EXPECT_EQ(read("[escape]\nfunction = \"rectified_power\"").escape.exponent, 2.0);
  EXPECT_FALSE(read("[escape]\nfunction = \"gaussian_tail\"").fit_lambda_0);
}

struct Mistake {
  std::string text;
  std::vector<std::string> said;
};

TEST(VariantFile, MistakesAreNamed) {
  const std::vector<Mistake> mistakes = {
      {"nmae = \"x\"", {"v.toml", "line 1", "nmae", "'name'"}},
      {"[kapa]\nfamily = \"spline\"", {"line 1", "kapa", "'kappa'"}},
      {"[kappa]\nsuport_ms = 3", {"line 2", "kappa.suport_ms", "'support_ms'"}},
      {"[kappa]\nfamily = \"splines\"", {"line 2", "kappa.family", "'splines'", "'spline'"}},
      {"[kappa]\nfamily = 3", {"line 2", "kappa.family", "text"}},
      {"[kappa]\nsupport_ms = -3", {"line 2", "kappa.support_ms", "above 0"}},
      {"[kappa]\nsupport_ms = \"long\"", {"line 2", "kappa.support_ms", "number"}},
      {"[kappa]\nsupport_ms = nan", {"line 2", "kappa.support_ms", "number"}},
      {"[kappa]\ncount = 3", {"line 2", "kappa.count", "whole number from 4"}},
      {"[kappa]\ncount = 7.5", {"line 2", "kappa.count", "whole number"}},
      {"[kappa]\nfirst_ms = 150", {"line 2", "kappa.first_ms", "below support_ms"}},
      {"[kappa]\nedges_ms = [0, 1]", {"line 2", "kappa.edges_ms", "steps"}},
      {"[kappa]\nfamily = \"steps\"", {"kappa.family", "edges_ms"}},
      {"[kappa]\nfamily = \"steps\"\nedges_ms = [0, 2, 1]", {"line 3", "kappa.edges_ms"}},
      {"[kappa]\nfamily = \"steps\"\nedges_ms = [0, true]", {"line 3", "entry 2"}},
      {"[kappa]\nfamily = \"steps\"\nedges_ms = [0, 2]\ncount = 1", {"line 4", "no meaning"}},
      {"[eta]\nfamily = \"exponentials\"\ncount = 6", {"line 3", "eta.count", "from 1 to 5"}},
      {"[eta]\nfamily = \"exponentials\"\nsupport_ms = 6", {"line 3", "spline"}},
      {"[eta]\nfamily = \"exponentials\"\ncount = 1\ntime_constants_ms = [1, 2]", {"line 3", "2"}},
      {"[eta]\nfamily = \"exponentials\"\ntime_constants_ms = [10, 5]", {"line 3", "increase"}},
      {"[eta]\nfamily = \"exponentials\"\ntime_constants_ms = [1000]", {"line 3", "longest_ms"}},
      {"[eta]\nfamily = \"exponentials\"\nfit_time_constants = false", {"line 3", "given"}},
      {"[eta]\nfamily = \"exponentials\"\nshortest_ms = 500", {"line 3", "below the longest"}},
      {"[eta]\nwith_membrane = true", {"line 2", "eta.with_membrane", "exponentials"}},
      {"[kappa]\nfamily = \"exponentials\"\nwith_membrane = true", {"line 3", "[eta]"}},
      {"[escape]\nfunction = \"exponental\"", {"line 2", "'exponental'", "'exponential'"}},
      {"[escape]\nlambda_0_per_ms = \"fit\"", {"line 2", "theta_0", "cannot be fitted"}},
      {"[escape]\nlambda_0_per_ms = 0", {"line 2", "escape.lambda_0_per_ms", "from 1e-09"}},
      {"[escape]\nfunction = \"softplus\"\nlambda_0_per_ms = \"fitt\"", {"line 3", "\"fit\""}},
      {"[escape]\nfunction = \"softplus\"\nlambda_0_start_per_ms = 1", {"line 3", "not fitted"}},
      {"[escape]\nexponent = 2", {"line 2", "rectified_power"}},
      {"[escape]\nfunction = \"rectified_power\"\nexponent = 0", {"line 3", "above 0"}},
      {"[refractory]\ngiven_ms = -1", {"line 2", "refractory.given_ms", "0 or more"}},
      {"[refractory]\ngiven_ms = 1\ncap_ms = 1", {"line 3", "beside given_ms"}},
      {"[voltage]\nuse = 1", {"line 2", "voltage.use", "true or false"}},
      {"[voltage]\nstep_ms = 0", {"line 2", "voltage.step_ms"}},
      {"[voltage]\nmask_after = 3", {"line 2", "unknown key 'mask_after'", "'mask_after_ms'"}},
      {"[smoothing]\nkappa = 3", {"line 2", "automatic = false"}},
      {"[smoothing]\nautomatic = false\nkappa = 0", {"line 3", "positive"}},
      {"kappa = 3", {"line 1", "kappa", "must be a table"}},
      {"[kappa", {"line 1", "not valid TOML"}}};
  for (const Mistake& mistake : mistakes) {
    try {
      read(mistake.text);
      ADD_FAILURE() << "no error for:\n" << mistake.text;
    } catch (const Error& error) {
      const std::string message = error.what();
      EXPECT_EQ(error.file(), "v.toml");
      EXPECT_EQ(message.find('\n'), std::string::npos) << message;
      for (const std::string& part : mistake.said) {
        EXPECT_NE(message.find(part), std::string::npos)
            << "wanted '" << part << "' in: " << message << "\nfor:\n"
            << mistake.text;
      }
    }
  }
}

TEST(VariantFile, ReadsFromDisk) {
  const std::string path =
      (std::filesystem::path(::testing::TempDir()) / "softsill_variant.toml").string();
  std::ofstream(path) << everything;
  EXPECT_EQ(read_variant(path), read(everything));
  std::filesystem::remove(path);
  try {
    read_variant(path);
    FAIL() << "no error";
  } catch (const Error& error) {
    EXPECT_NE(std::string(error.what()).find(path), std::string::npos);
  }
}

}  // namespace
}  // namespace softsill
