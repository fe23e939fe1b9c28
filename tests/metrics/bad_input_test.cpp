// Bad input is refused with a sentence that says which train, which spike and what to do.
#include <gtest/gtest.h>

#include <functional>
#include <limits>

#include "softsill/error.hpp"
#include "softsill/metrics/bootstrap.hpp"
#include "softsill/metrics/calibration.hpp"
#include "softsill/metrics/coincidence.hpp"
#include "softsill/metrics/distances.hpp"
#include "softsill/metrics/pairs.hpp"
#include "softsill/metrics/psth.hpp"
#include "softsill/metrics/rescaling.hpp"
#include "softsill/metrics/testing.hpp"

namespace softsill::metrics {
namespace {

using Times = std::vector<double>;
constexpr double nan = std::numeric_limits<double>::quiet_NaN();

std::string message_of(const std::function<void()>& action) {
  try {
    action();
  } catch (const Error& error) {
    return error.what();
  }
  return "no error";
}

TEST(BadInput, IsNamed) {
  const Window window{0.0, 100.0};
  const Times good{1.0, 2.0};
  struct Row {
    std::function<void()> action;
    std::string expected;
  };
  CoincidenceSettings no_window, nan_window;
  no_window.window_ms = 0.0;
  nan_window.window_ms = nan;
  PairSettings nan_cost;
  nan_cost.cost_per_s = nan;
  BootstrapOptions few, level;
  few.replicates = 10;
  level.level = 1.0;
  const auto one = [](std::span<const double>, std::span<const double>) { return 1.0; };
  const std::vector<Row> rows = {
      {[&] { coincidence_factor(Times{-1.0}, good, window); },
       "reference train, spike 1: the time -1 ms is negative"},
      {[&] {
         coincidence_factor(good, Times{2.0, 1.0}, window);
       },
       "sort the times"},
      {[&] {
         coincidence_factor(good, Times{2.0, 2.0}, window);
       },
       "is listed twice"},
      {[&] { coincidence_factor(good, Times{100.0}, window); }, "past the window"},
      {[&] { coincidence_factor(good, Times{nan}, window); }, "not a finite number"},
      {[&] {
         coincidence_factor(good, good, {5.0, 5.0});
       },
       "window: it runs from 5 ms to 5 ms"},
      {[&] {
         coincidence_factor(good, good, {1.5, 5.0});
       },
       "before the window"},
      {[&] { coincidence_factor(good, good, window, no_window); }, "longer than 0 ms"},
      {[&] { coincidence_factor(good, good, window, nan_window); }, "longer than 0 ms"},
      {[&] { victor_purpura(good, good, nan); }, "cost of moving a spike"},
      {[&] { victor_purpura(good, good, -1.0); }, "cost of moving a spike"},
      {[&] {
         victor_purpura(Times{2.0, 1.0}, good, 1.0);
       },
       "first train, spike 2"},
      {[&] { van_rossum_squared(good, good, 0.0); }, "van Rossum"},
      {[&] { schreiber(good, good, nan); }, "Gaussian"},
      {[&] { event_reliability(good, good, -1.0); }, "event reliability"},
      {[&] {
         isi_distance(good, good, {0.0, nan});
       },
       "window"},
      {[&] { spike_distance(good, Times{101.0}, window); }, "second train, spike 1"},
      {[&] {
         pair_matrix(PairMeasure::victor_purpura, {{good}, window}, nan_cost);
       },
       "cost"},
      {[&] {
         pair_matrix(PairMeasure::isi_distance, {{good}, window}, {{good}, {0.0, 50.0}});
       },
       "different windows"},
      {[&] {
         pair_matrix(PairMeasure::isi_distance, {{good, {3.0, 3.0}}, window});
       },
       "set, trial 2, spike 2"},
      {[&] {
         rate_table({{good}, window}, {PsthSettings::Kind::bins, 0.0, 1.0});
       },
       "positive"},
      {[&] {
         rate_table({{good}, window}, {PsthSettings::Kind::bins, 101.0, 1.0});
       },
       "no longer"},
      {[&] {
         rescale(Times{1.0, 0.5});
       },
       "integrated hazard, spike 2"},
      {[&] { rescale(Times{nan}); }, "integrated hazard, spike 1"},
      {[&] {
         uniform_test(Times{0.5, 1.5});
       },
       "between 0 and 1"},
      {[&] {
         uniform_test(Times{0.5, nan, 0.7});
       },
       "between 0 and 1"},
      {[&] { bits_per_spike(0.0, 0, 1.0, 1.0); }, "no spikes"},
      {[&] { bits_per_spike(0.0, 5, 1.0, 0.0); }, "must be positive"},
      {[&] { bootstrap(5, 0, one, few); }, "fewer than 100 replicates"},
      {[&] { bootstrap(5, 0, one, level); }, "between 0 and 1"},
      {[&] {
         holm(Times{0.5, 1.2});
       },
       "outside 0 to 1"},
      {[&] { wilson_interval(3, 2); }, "no more successes than trials"},
      {[&] {
         chi_square_mixture_p(1.0, Times{0.5, 0.4});
       },
       "add up to 1"},
      {[&] { sign_flip_test(Times{}); }, "needs differences"},
      {[&] { hazard_calibration(Times{-0.1}, Times{1.0}, std::vector<unsigned>{0}); },
       "calibration, row 1"}};
  for (const Row& row : rows) {
    const std::string message = message_of(row.action);
    EXPECT_NE(message.find(row.expected), std::string::npos)
        << "expected: " << row.expected << "\nfound: " << message;
    EXPECT_EQ(message.find('\n'), std::string::npos) << message;
  }
}

}  // namespace
}  // namespace softsill::metrics
