// A receptor of a grasshopper's ear: sound in, spikes out, no potential. Recordings from Debian's
// package python3-nitime (see fetch_grasshopper.sh); the first 7 s of each stimulus are fitted, the
// last 3 s are told from the fit.
#include <gmock/gmock.h>
#include <gtest/gtest.h>

#include <cmath>
#include <cstdio>
#include <filesystem>
#include <fstream>
#include <string>

#include "softsill/fit.hpp"
#include "softsill/sheet.hpp"
#include "softsill/variant.hpp"
#include "tests/recording/scratch.hpp"
#include "tests/recovery/cells.hpp"
#include "tests/recovery/held_out.hpp"

namespace softsill::test {
namespace {

constexpr double split_ms = 7000.0, end_ms = 10000.0;

// About 90 Hz: nothing lasts long here.
constexpr const char* receptor_variant = R"(
name = "fast receptor"
[kappa]
family = "spline"
support_ms = 40
count = 14
[eta]
family = "spline"
support_ms = 60
count = 12
[theta_1]
family = "absent"
)";

class Grasshopper : public Scratch, public ::testing::WithParamInterface<int> {
 protected:
  std::string original(const std::string& kind) const {
    return std::string(SOFTSILL_GRASSHOPPER) + "/grasshopper_" + kind + std::to_string(GetParam()) +
           ".txt";
  }

  /// Two columns, microseconds and amplitude, as CSV.
  void convert_stimulus() const {
    std::ifstream in(original("stimulus"));
    std::ofstream out(path("sound.csv"));
    out << "# amplitude modulation of a 2.5 kHz tone\ntime_us,input\n";
    std::string time, amplitude;
    while (in >> time >> amplitude) {
      out << time << ',' << amplitude << '\n';
    }
  }

  void convert_spikes() const {
    std::ifstream in(original("spike_times"));
    std::ofstream out(path("spikes.csv"));
    out << "spike_us\n";
    std::string line;
    while (std::getline(in, line)) {
      if (!line.empty() && line[0] != '#') {
        out << line << '\n';
      }
    }
  }

  Recording recording() {
    convert_stimulus();
    convert_spikes();
    const std::string sweep = "[[sweep]]\nrecording = \"sound.csv\"\nspikes = \"spikes.csv\"\n";
    return read_cell_sheet(
        write("cell.toml", "cell = \"receptor\"\ninput_unit = \"a.u.\"\n" + sweep +
                               "name = \"fitted\"\nend_ms = 7000\n" + sweep +
                               "name = \"held out\"\nuse = \"predict\"\nstart_ms = 7000\n"));
  }
};

TEST_P(Grasshopper, TellsSpikesItHasNotSeen) {
  if (!std::filesystem::exists(original("spike_times"))) {
    GTEST_SKIP() << "python3-nitime was not downloaded";
  }
  const Recording cell = recording();
  ASSERT_EQ(cell.sweeps.size(), 2u);
  EXPECT_FALSE(cell.has_voltage());
  EXPECT_NEAR(cell.sweeps[0].step_ms, 0.05, 1e-9);
  EXPECT_GT(cell.spike_count(Use::estimate), 500u);
  EXPECT_GT(cell.spike_count(Use::predict), 200u);

  const Estimate estimate = fit(cell, parse_variant(receptor_variant, "receptor_variant"));
  EXPECT_EQ(estimate.status, FitStatus::converged) << estimate.status_sentence;
  EXPECT_EQ(estimate.mode, FitMode::spikes_alone);
  EXPECT_GT(estimate.spike_log_likelihood, estimate.constant_rate_log_likelihood);

  const Sweep& held_out = cell.sweeps[1];
  // Blocks of 100 ms: longer than every kernel.
  const BitsPerSpike bits = bits_per_spike(
      score_blocks(estimate.model, held_out, held_out.input.front(), {split_ms, end_ms}, 30), 5);
  std::printf(
      "stimulus %d: %zu spikes fitted, %.3f bits per spike held out [%.3f, %.3f], "
      "refractory time %.2f ms\n",
      GetParam(), estimate.spikes, bits.value, bits.low, bits.high, estimate.model.refractory_ms);
  EXPECT_GT(bits.value, 0.0);
  EXPECT_GT(bits.low, 0.0);
  EXPECT_LT(bits.low, bits.value);

  // The same score on what was fitted is the fit's own log-likelihood, by another way; the fit
  // promises the hazard's integral to 0.02 sqrt(spikes).
  const Sweep& fitted = cell.sweeps[0];
  const double lead_in = split_ms - estimate.analysed_ms;
  const BlockScores own =
      score_blocks(estimate.model, fitted, fitted.input.front(), {lead_in, split_ms}, 1);
  EXPECT_NEAR(own.model[0], estimate.spike_log_likelihood,
              0.02 * std::sqrt(static_cast<double>(estimate.spikes)));
}

TEST_P(Grasshopper, NothingIsCalledWhatItIsNot) {
  if (!std::filesystem::exists(original("spike_times"))) {
    GTEST_SKIP() << "python3-nitime was not downloaded";
  }
  const Estimate estimate = fit(recording(), parse_variant(receptor_variant, "receptor_variant"));
  EXPECT_EQ(estimate.model.input_unit, "a.u.");
  EXPECT_EQ(estimate.model.scale, PotentialScale::noise_level);
  auto honest = [](const std::string& unit) {
    for (const char* wrong : {"mV", "nA", "MOhm"}) {
      EXPECT_THAT(unit, ::testing::Not(::testing::HasSubstr(wrong)));
    }
  };
  std::size_t curves = 0;
  for (const KernelCurve& curve : estimate.kernels) {
    if (curve.why_absent.empty()) {
      honest(curve.unit);
      ++curves;
    }
  }
  EXPECT_EQ(curves, 2u) << "kappa and eta - theta_1";
  EXPECT_THAT(find_curve(estimate, "kappa")->unit, ::testing::HasSubstr("a.u."));
  for (const NamedQuantity& row : estimate.parameters) {
    if (row.quantity.value) {
      honest(row.quantity.unit);
    }
  }
  honest(kernels_csv(estimate));
  EXPECT_EQ(find_row(estimate, "input_resistance"), nullptr) << "a sound meets no resistance";
  ASSERT_NE(find_row(estimate, "input_gain"), nullptr);
  EXPECT_FALSE(estimate.noise_level.value);
  EXPECT_FALSE(estimate.noise_level.why_absent.empty());
}

INSTANTIATE_TEST_SUITE_P(Stimulus, Grasshopper, ::testing::Values(1, 2), [](const auto& which) {
  return "Stimulus" + std::to_string(which.param);
});

}  // namespace
}  // namespace softsill::test
