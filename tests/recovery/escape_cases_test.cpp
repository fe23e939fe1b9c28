// Every escape function, with and without the potential: an honest status, never worse than a
// constant rate, and the same numbers at any thread count.
#include <gtest/gtest.h>

#include <algorithm>
#include <cstdio>
#include <ostream>
#include <string>
#include <tuple>

#include "softsill/fit.hpp"
#include "tests/recovery/cells.hpp"

namespace softsill {

/// How googletest names a parameter.
void PrintTo(EscapeKind kind, std::ostream* out) { *out << to_string(kind); }

}  // namespace softsill

namespace softsill::test {
namespace {

/// A short recording and kernels to match: these cases are about ends, not about precision.
Recording short_recording(bool with_voltage) {
  Cell cell;
  cell.theta_1.clear();
  Protocol protocol;
  protocol.seconds = 25.0;
  protocol.with_voltage = with_voltage;
  set_rate(cell, protocol, 15.0);
  return recording_of(cell, protocol, 31);
}

Variant short_variant(EscapeKind kind) {
  Variant variant;
  variant.kappa.support_ms = 120.0;
  variant.kappa.count = 10;
  variant.eta.support_ms = 300.0;
  variant.eta.count = 10;
  variant.theta_1.family = KernelFamily::absent;
  variant.escape.kind = kind;
  variant.fit_lambda_0 = kind == EscapeKind::logistic;
  variant.fit_exponent = kind == EscapeKind::rectified_power;
  return variant;
}

class EscapeCases : public ::testing::TestWithParam<std::tuple<EscapeKind, bool>> {
 protected:
  EscapeKind kind() const { return std::get<0>(GetParam()); }
  bool with_voltage() const { return std::get<1>(GetParam()); }
};

TEST_P(EscapeCases, EndsHonestlyAndTheSameWithTwoThreads) {
  const Recording recording = short_recording(with_voltage());
  const Variant variant = short_variant(kind());
  FitOptions options;
  options.starts = 2;
  options.threads = 1;
  const Estimate estimate = fit(recording, variant, options);
  std::printf("%s: %s, %.2f nats over a constant rate, %d of %d starts agree\n",
              std::string(to_string(kind())).c_str(), estimate.status_sentence.c_str(),
              estimate.spike_log_likelihood - estimate.constant_rate_log_likelihood,
              estimate.starts_agreeing, estimate.starts);
  // The data come from the exponential: it and the concave ones must find their maximum. The others
  // may meet an edge, or say that they did not converge.
  if (escape_is_concave(kind())) {
    EXPECT_EQ(estimate.status, FitStatus::converged) << estimate.status_sentence;
  } else {
    EXPECT_NE(estimate.status, FitStatus::failed) << estimate.status_sentence;
    EXPECT_NE(estimate.status, FitStatus::interrupted);
  }
  EXPECT_FALSE(estimate.status_sentence.empty());
  // Known to be a large gain: the input drives these spikes.
  EXPECT_GT(estimate.spike_log_likelihood, estimate.constant_rate_log_likelihood + 100.0);
  EXPECT_EQ(estimate.mode, with_voltage() ? FitMode::spikes_and_voltage : FitMode::spikes_alone);
  if (trustworthy(estimate.status) && with_voltage()) {
    ASSERT_TRUE(estimate.noise_level.value);
    // Delta and the exponent of a rectified power can run away together; then that is said.
    const bool bounded = estimate.noise_level.low && estimate.noise_level.high;
    if (kind() == EscapeKind::rectified_power) {
      EXPECT_TRUE(bounded || std::any_of(estimate.limits.begin(), estimate.limits.end(),
                                         [](const std::string& limit) {
                                           return limit.find("bound") != std::string::npos;
                                         }));
    } else {
      EXPECT_TRUE(bounded);
    }
  }
  if (!trustworthy(estimate.status)) {
    EXPECT_FALSE(estimate.threshold.value) << "numbers of a failed fit would be believed";
    EXPECT_FALSE(estimate.threshold.why_absent.empty());
  }

  options.threads = 2;
  const Estimate again = fit(recording, variant, options);
  // Everything a fit says, digit for digit.
  EXPECT_EQ(to_json(estimate), to_json(again));
  ASSERT_EQ(estimate.coordinates.size(), again.coordinates.size());
  for (std::size_t i = 0; i < estimate.coordinates.size(); ++i) {
    EXPECT_EQ(estimate.coordinates[i], again.coordinates[i]) << estimate.coordinate_names[i];
  }
}

INSTANTIATE_TEST_SUITE_P(
    All, EscapeCases,
    ::testing::Combine(::testing::Values(EscapeKind::exponential, EscapeKind::softplus,
                                         EscapeKind::logistic, EscapeKind::rectified_power,
                                         EscapeKind::gaussian_tail),
                       ::testing::Bool()),
    [](const auto& which) {
      return std::string(to_string(std::get<0>(which.param))) +
             (std::get<1>(which.param) ? "_with_potential" : "_spikes_alone");
    });

}  // namespace
}  // namespace softsill::test
