#include "estimator/cli/estimate_text.hpp"

#include <algorithm>
#include <cmath>
#include <numbers>
#include <set>
#include <string>
#include <vector>

#include "estimator/cli/terminal.hpp"

namespace softsill::cli {
namespace {

using Align = Table::Align;

std::string plural(std::size_t count, const std::string& word) {
  return std::to_string(count) + ' ' + word + (count == 1 ? "" : "s");
}

std::string mode_words(FitMode mode) {
  switch (mode) {
    case FitMode::spikes_and_voltage:
      return "spikes and potential together: everything in mV";
    case FitMode::spikes_anchored:
      return "spikes alone, scaled to mV by the anchor: marked \"anchored\"";
    case FitMode::spikes_alone:
      return "spikes alone: potentials in units of Delta, which is itself not estimable in mV";
  }
  return {};
}

/// Names as people write them, for the rows that have one.
std::string plain_name(const std::string& name) {
  if (name == "noise_level") {
    return "noise level Delta";
  }
  if (name == "threshold") {
    return "threshold theta_0";
  }
  if (name == "threshold_above_rest") {
    return "theta_0 - E_0";
  }
  if (name == "resting_potential") {
    return "resting potential E_0";
  }
  std::string plain = name;
  std::replace(plain.begin(), plain.end(), '_', ' ');
  // Kernel names keep their underscore: theta_1, eta_minus_theta_1.
  for (const std::string& kernel : {std::string("eta minus theta 1"), std::string("theta 1")}) {
    if (plain.starts_with(kernel)) {
      std::string symbol = kernel;
      std::replace(symbol.begin(), symbol.end(), ' ', '_');
      plain.replace(0, kernel.size(), symbol);
      break;
    }
  }
  return plain;
}

/// Every parameter once: the first row of a name is the one to quote, later ones (robust intervals)
/// are in parameters.csv.
std::string parameters_text(const Estimate& estimate) {
  Table table({"", "value", "low", "high", "unit", "interval from"},
              {Align::left, Align::right, Align::right, Align::right, Align::left, Align::left});
  std::string absent;
  std::set<std::string> seen;
  const auto add = [&](const std::string& name, const Quantity& quantity) {
    if (!seen.insert(name).second) {
      return;
    }
    if (!quantity.value) {
      absent += "  " + wrap(plain_name(name) + ": none, " + quantity.why_absent, 4, 2) + '\n';
      return;
    }
    const QuantityText text = quantity_text(quantity);
    table.add({plain_name(name), text.value, text.low, text.high, quantity.unit, quantity.method});
  };
  add("noise_level", estimate.noise_level);
  if (estimate.parameters.empty()) {
    add("threshold", estimate.threshold);
    add("resting_potential", estimate.resting_potential);
  }
  for (const NamedQuantity& row : estimate.parameters) {
    add(row.name, row.quantity);
  }
  return (table.empty() ? "" : table.str()) + absent;
}

const Kernel* kernel_of(const Model& model, const std::string& name) {
  const Kernel* kernel = nullptr;
  if (name == "kappa") {
    kernel = &model.kappa;
  } else if (name == "eta" || name == "eta_minus_theta_1") {
    kernel = &model.eta;
  } else if (name == "theta_1") {
    kernel = &model.theta_1;
  }
  return kernel != nullptr && kernel->present() ? kernel : nullptr;
}

/// Unit of a kernel's integral over lags.
std::string integral_unit(const std::string& unit) {
  if (unit == "mV/(nA ms)") {
    return "MOhm";
  }
  const std::string per_ms = " ms)";
  if (unit.ends_with(per_ms)) {
    std::string area = unit.substr(0, unit.size() - per_ms.size());
    area.erase(std::remove(area.begin(), area.end(), '('), area.end());
    return area;
  }
  return unit + " ms";
}

/// Row of a kernel: where it is largest, with the band there, its integral, what it cost.
std::vector<std::string> kernel_row(const KernelCurve& curve, const Model& model) {
  std::vector<std::string> row{curve.kernel};
  if (curve.value.empty()) {
    return row;
  }
  const auto at = static_cast<std::size_t>(
      std::max_element(curve.value.begin(), curve.value.end(),
                       [](double a, double b) { return std::abs(a) < std::abs(b); }) -
      curve.value.begin());
  Quantity largest;
  largest.value = curve.value[at];
  if (at < curve.low.size() && std::isfinite(curve.low[at]) && std::isfinite(curve.high[at])) {
    largest.low = curve.low[at];
    largest.high = curve.high[at];
  }
  const QuantityText text = quantity_text(largest);
  const Kernel* kernel = kernel_of(model, curve.kernel);
  row.insert(
      row.end(),
      {text.value, text.low, text.high, curve.unit, significant(curve.lag_ms[at], 2) + " ms",
       kernel != nullptr ? significant(kernel->integral()) : "",
       kernel != nullptr ? integral_unit(curve.unit) : "",
       curve.effective_degrees_of_freedom > 0.0 ? significant(curve.effective_degrees_of_freedom, 2)
                                                : ""});
  return row;
}

std::string kernels_text(const Estimate& estimate) {
  Table table({"kernel", "largest", "low", "high", "unit", "at", "integral", "", "freedom"},
              {Align::left, Align::right, Align::right, Align::right, Align::left, Align::right,
               Align::right, Align::left, Align::right});
  std::string absent;
  for (const KernelCurve& curve : estimate.kernels) {
    if (!curve.why_absent.empty()) {
      absent += "  " + wrap(curve.kernel + ": none, " + curve.why_absent, 4, 2) + '\n';
    } else if (curve.kernel.find("_by_") == std::string::npos) {
      // Curves made only for the consistency check are in kernels.csv.
      table.add(kernel_row(curve, estimate.model));
    }
  }
  return (table.empty() ? "" : table.str()) + absent;
}

std::string bullet(const std::string& sentence) { return "  - " + wrap(sentence, 4, 4) + '\n'; }

std::string trust_text(const Estimate& estimate) {
  Table table;
  const double spikes = static_cast<double>(estimate.spikes);
  const double gain =
      (estimate.spike_log_likelihood - estimate.constant_rate_log_likelihood) / std::numbers::ln2;
  table.add(
      {"log-likelihood", fixed(estimate.log_likelihood, 1) + " nats; spikes alone " +
                             fixed(estimate.spike_log_likelihood, 1) + " nats, " +
                             fixed(gain / std::max(1.0, spikes), 2) +
                             " bits per spike above a constant rate (on the data of the fit)"});
  table.add(
      {"degrees of freedom", fixed(estimate.effective_degrees_of_freedom, 1) + " effective, of " +
                                 std::to_string(estimate.coordinates.size()) + " coordinates"});
  table.add({"quadrature",
             "off by " + significant(estimate.node_error.expected_spikes_error, 2) +
                 " expected spikes (allowed " + significant(estimate.node_error.allowed, 2) +
                 ") with " + std::to_string(estimate.node_error.nodes) +
                 " nodes; refining moves no parameter by more than " +
                 significant(estimate.node_error.largest_shift_in_se, 2) + " standard errors"});
  if (estimate.kappa_consistency.tested || !estimate.kappa_consistency.sentence.empty()) {
    table.add({"kappa consistency", estimate.kappa_consistency.sentence});
  }
  return table.str();
}

}  // namespace

std::string spikes_text(const Recording& recording) {
  Table table;
  for (const Use use : {Use::estimate, Use::predict}) {
    std::size_t sweeps = 0, detected = 0, spikes = 0;
    double seconds = 0.0;
    for (const Sweep& sweep : recording.sweeps) {
      if (sweep.use == use) {
        ++sweeps;
        detected += sweep.spike_origin == SpikeOrigin::detected ? 1 : 0;
        spikes += sweep.spikes_ms.size();
        seconds += sweep.duration_ms() / 1000.0;
      }
    }
    if (sweeps == 0) {
      continue;
    }
    std::string origin = "as listed";
    if (detected > 0) {
      origin = "found by " + recording.spike_detection;
    }
    if (detected > 0 && detected < sweeps) {
      origin += " in " + plural(detected, "sweep") + ", as listed elsewhere";
    }
    table.add({use == Use::estimate ? "to estimate" : "held out",
               plural(sweeps, "sweep") + ", " + significant(seconds) + " s, " +
                   plural(spikes, "spike") + ", " + origin});
  }
  return table.str();
}

std::string estimate_text(const Estimate& estimate) {
  std::string out = wrap(estimate.status_sentence) + "\n\n";
  Table data;
  data.add({"mode", mode_words(estimate.mode)});
  data.add({"analysed", plural(estimate.spikes, "spike") + " in " +
                            significant(estimate.analysed_ms / 1000.0) + " s (" +
                            significant(1000.0 * static_cast<double>(estimate.spikes) /
                                        std::max(estimate.analysed_ms, 1e-9)) +
                            " Hz)"});
  out += data.str() + '\n' + parameters_text(estimate) + '\n';
  if (const std::string kernels = kernels_text(estimate); !kernels.empty()) {
    out += kernels + '\n';
  }
  out += trust_text(estimate);
  if (!estimate.limits.empty()) {
    out += "\nWhat these data cannot say\n";
    for (const std::string& sentence : estimate.limits) {
      out += bullet(sentence);
    }
  }
  if (!estimate.notes.empty()) {
    out += "\nChoices made\n";
    for (const std::string& sentence : estimate.notes) {
      out += bullet(sentence);
    }
  }
  return out;
}

}  // namespace softsill::cli
