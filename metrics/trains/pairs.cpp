#include "softsill/metrics/pairs.hpp"

#include <cmath>
#include <cstdio>
#include <limits>

#include "metrics/trains/inner.hpp"
#include "softsill/error.hpp"

namespace softsill::metrics {
namespace {

constexpr double undefined = std::numeric_limits<double>::quiet_NaN();

// One measure ready for many pairs: sums of a train with itself are taken once per train.
class PairLoop {
 public:
  PairLoop(PairMeasure measure, const Window& window, const PairSettings& settings)
      : measure_(measure), window_(window), settings_(settings) {}

  std::vector<double> self_sums(const TrialSet& set) const {
    std::vector<double> sums(set.size(), 0.0);
    for (std::size_t i = 0; i < set.size(); ++i) {
      if (measure_ == PairMeasure::van_rossum) {
        sums[i] = inner::exponential_self(set.trains_ms[i], settings_.tau_ms);
      } else if (measure_ == PairMeasure::schreiber) {
        sums[i] = inner::gaussian_cross(set.trains_ms[i], set.trains_ms[i], settings_.sigma_ms);
      }
    }
    return sums;
  }

  double operator()(Train a, Train b, double self_a, double self_b) {
    switch (measure_) {
      case PairMeasure::coincidence:
        return gamma(a, b);
      case PairMeasure::victor_purpura:
        return inner::victor_purpura(a, b, 1e-3 * settings_.cost_per_s, row_);
      case PairMeasure::van_rossum:
        return std::sqrt(std::max(
            0.0, 0.5 * (self_a + self_b) - inner::exponential_cross(a, b, settings_.tau_ms)));
      case PairMeasure::schreiber:
        return a.empty() || b.empty()
                   ? undefined
                   : inner::gaussian_cross(a, b, settings_.sigma_ms) / std::sqrt(self_a * self_b);
      case PairMeasure::isi_distance:
        return inner::isi_distance(a, b, window_, settings_.edges);
      case PairMeasure::spike_distance:
        return inner::spike_distance(a, b, window_, settings_.edges, scratch_);
      case PairMeasure::event_reliability:
        return inner::event_reliability(a, b, settings_.event_tau_ms);
    }
    throw InternalError("pair_matrix: unknown measure");
  }

 private:
  double gamma(Train reference, Train predicted) const {
    const CoincidenceSettings& s = settings_.coincidence;
    if (s.chance == ChanceTerm::simulated) {
      return coincidence_factor(reference, predicted, window_, s).gamma.value_or(undefined);
    }
    const auto n = static_cast<double>(reference.size());
    const auto m = static_cast<double>(predicted.size());
    const double share = 2.0 * s.window_ms * m / window_.length_ms();
    if (n + m == 0.0 || share >= 1.0) {
      return undefined;
    }
    const double count = inner::coincidences(reference, predicted, s.window_ms, s.rule);
    return (count - share * n) / (0.5 * (n + m)) / (1.0 - share);
  }

  PairMeasure measure_;
  Window window_;
  PairSettings settings_;
  std::vector<double> row_;
  inner::SpikeScratch scratch_;
};

// Lets the public function of the measure judge its settings once, on two empty trains.
void check_settings(PairMeasure measure, const Window& window, const PairSettings& settings) {
  switch (measure) {
    case PairMeasure::coincidence:
      coincidence_factor({}, {}, window, settings.coincidence);
      break;
    case PairMeasure::victor_purpura:
      victor_purpura({}, {}, settings.cost_per_s);
      break;
    case PairMeasure::van_rossum:
      van_rossum_squared({}, {}, settings.tau_ms);
      break;
    case PairMeasure::schreiber:
      schreiber({}, {}, settings.sigma_ms);
      break;
    case PairMeasure::event_reliability:
      event_reliability({}, {}, settings.event_tau_ms);
      break;
    case PairMeasure::isi_distance:
    case PairMeasure::spike_distance:
      break;
  }
}

std::string with_number(const char* format, double value) {
  char text[80];
  std::snprintf(text, sizeof text, format, value);
  return text;
}

std::string describe(EdgeRule edges) {
  switch (edges) {
    case EdgeRule::auxiliary_spikes:
      return "auxiliary spikes at both ends of the window";
    case EdgeRule::longer_of_neighbours:
      return "outer intervals at least as long as their neighbours";
    case EdgeRule::common_span:
      return "averaged where both trains have spikes before and after";
  }
  return {};
}

}  // namespace

PairMatrix pair_matrix(PairMeasure measure, const TrialSet& rows, const TrialSet& columns,
                       const PairSettings& settings) {
  check_trials(rows, "first set");
  check_trials(columns, "second set");
  if (!(rows.window == columns.window)) {
    throw Error("", "pairs of trains", "the two sets were observed in different windows",
                "cut both to one window");
  }
  check_settings(measure, rows.window, settings);
  PairLoop loop(measure, rows.window, settings);
  const std::vector<double> row_sums = loop.self_sums(rows), column_sums = loop.self_sums(columns);
  PairMatrix matrix{rows.size(), columns.size(), {}};
  matrix.values.resize(rows.size() * columns.size());
  for (std::size_t i = 0; i < rows.size(); ++i) {
    for (std::size_t j = 0; j < columns.size(); ++j) {
      matrix(i, j) = loop(rows.trains_ms[i], columns.trains_ms[j], row_sums[i], column_sums[j]);
    }
  }
  return matrix;
}

PairMatrix pair_matrix(PairMeasure measure, const TrialSet& set, const PairSettings& settings) {
  check_trials(set, "set");
  check_settings(measure, set.window, settings);
  PairLoop loop(measure, set.window, settings);
  const std::vector<double> sums = loop.self_sums(set);
  const auto pair = [&](std::size_t i, std::size_t j) {
    return loop(set.trains_ms[i], set.trains_ms[j], sums[i], sums[j]);
  };
  PairMatrix matrix{set.size(), set.size(), {}};
  matrix.values.resize(set.size() * set.size());
  for (std::size_t i = 0; i < set.size(); ++i) {
    matrix(i, i) = pair(i, i);
    for (std::size_t j = i + 1; j < set.size(); ++j) {
      const bool ordered = measure == PairMeasure::coincidence;
      matrix(i, j) = ordered ? 0.5 * (pair(i, j) + pair(j, i)) : pair(i, j);
      matrix(j, i) = matrix(i, j);
    }
  }
  return matrix;
}

std::string name_of(PairMeasure measure) {
  switch (measure) {
    case PairMeasure::coincidence:
      return "coincidence factor Gamma";
    case PairMeasure::victor_purpura:
      return "Victor-Purpura distance";
    case PairMeasure::van_rossum:
      return "van Rossum distance";
    case PairMeasure::schreiber:
      return "Schreiber correlation";
    case PairMeasure::isi_distance:
      return "ISI-distance";
    case PairMeasure::spike_distance:
      return "SPIKE-distance";
    case PairMeasure::event_reliability:
      return "event reliability";
  }
  return {};
}

std::string describe(PairMeasure measure, const PairSettings& settings) {
  switch (measure) {
    case PairMeasure::coincidence:
      return describe(settings.coincidence);
    case PairMeasure::victor_purpura:
      return with_number("cost %g per s, not normalised", settings.cost_per_s);
    case PairMeasure::van_rossum:
      return with_number("tau %g ms, D (not squared), one spike more is 1/2 in D^2",
                         settings.tau_ms);
    case PairMeasure::schreiber:
      return with_number("Gaussian, sigma %g ms, undefined for empty trains", settings.sigma_ms);
    case PairMeasure::event_reliability:
      return with_number("Hunter & Milton 2003, tau %g ms", settings.event_tau_ms);
    case PairMeasure::isi_distance:
    case PairMeasure::spike_distance:
      return describe(settings.edges);
  }
  return {};
}

bool is_similarity(PairMeasure measure) {
  return measure == PairMeasure::coincidence || measure == PairMeasure::schreiber ||
         measure == PairMeasure::event_reliability;
}

}  // namespace softsill::metrics
