#include "softsill/variant.hpp"

#include <algorithm>
#include <cmath>

#include "estimator/model/toml_table.hpp"
#include "softsill/error.hpp"
#include "softsill/files.hpp"

namespace softsill {
namespace {

constexpr Range time_range{0.0, 1e6, false};
constexpr int most_exponentials = 5;
constexpr int most_splines = 200;
constexpr Range exponent_range{0.0, 50.0, false};
// A ceiling or scale outside this range cannot come from 10 kHz recordings of a neuron.
constexpr Range rate_range{1e-9, 1e3, true};

const std::vector<std::string> spline_keys = {"support_ms", "first_ms"};
const std::vector<std::string> step_keys = {"edges_ms"};
const std::vector<std::string> exponential_keys = {"time_constants_ms", "fit_time_constants",
                                                   "shortest_ms", "longest_ms"};

std::string only_for(KernelFamily family) {
  return "belongs to family = \"" + std::string(to_string(family)) + "\" only";
}

void read_spline(TomlTable& table, KernelPlan& plan) {
  plan.support_ms = table.number("support_ms", time_range).value_or(plan.support_ms);
  plan.first_ms = table.number("first_ms", time_range).value_or(plan.first_ms);
  plan.count = table.whole_number("count", 4, most_splines).value_or(plan.count);
  if (plan.first_ms >= plan.support_ms) {
    table.fail("first_ms", "first_ms must be below support_ms = " + toml_number(plan.support_ms));
  }
}

void read_exponentials(TomlTable& table, KernelPlan& plan) {
  plan.shortest_ms = table.number("shortest_ms", time_range).value_or(plan.shortest_ms);
  plan.longest_ms = table.number("longest_ms", time_range).value_or(plan.longest_ms);
  if (plan.shortest_ms >= plan.longest_ms) {
    table.fail("shortest_ms", "the shortest time constant must be below the longest, " +
                                  toml_number(plan.longest_ms) + " ms");
  }
  plan.fit_time_constants = table.flag("fit_time_constants").value_or(plan.fit_time_constants);
  const auto given = table.numbers("time_constants_ms", time_range);
  const auto count = table.whole_number("count", 1, most_exponentials);
  if (!given) {
    if (!plan.fit_time_constants) {
      table.fail("fit_time_constants", "time constants that are not fitted must be given",
                 "add time_constants_ms = [...]");
    }
    plan.count = count.value_or(plan.count);
    return;
  }
  if (given->empty() || given->size() > most_exponentials) {
    table.fail("time_constants_ms", "must hold 1 to 5 time constants");
  }
  if (count && static_cast<std::size_t>(*count) != given->size()) {
    table.fail("count", "count is " + std::to_string(*count) + " but time_constants_ms holds " +
                            std::to_string(given->size()));
  }
  for (std::size_t i = 0; i < given->size(); ++i) {
    const double tau = (*given)[i];
    if (plan.fit_time_constants && (tau < plan.shortest_ms || tau > plan.longest_ms)) {
      table.fail("time_constants_ms", toml_number(tau) + " ms is outside shortest_ms = " +
                                          toml_number(plan.shortest_ms) +
                                          " to longest_ms = " + toml_number(plan.longest_ms));
    }
    if (i > 0 && tau <= (*given)[i - 1]) {
      table.fail("time_constants_ms", "time constants must increase");
    }
  }
  plan.count = static_cast<int>(given->size());
  plan.time_constants_ms = *given;
}

void read_steps(TomlTable& table, KernelPlan& plan) {
  const auto edges = table.numbers("edges_ms", not_negative);
  if (!edges) {
    table.fail("family", "a steps kernel needs its edges", "add edges_ms = [0, 1, 2, 5, 10, ...]");
  }
  plan.edges_ms = *edges;
  table.at("edges_ms", [&] { Basis::steps(plan.edges_ms); });
}

/// \param few number of exponentials when the file does not say
void read_kernel(TomlTable& top, const char* name, int few, KernelPlan& plan) {
  auto found = top.table(name);
  if (!found) {
    return;
  }
  TomlTable& table = *found;
  if (const auto word = table.text("family")) {
    table.at("family", [&] { plan.family = kernel_family_from(*word); });
  }
  if (plan.family != KernelFamily::spline) {
    const KernelPlan plain;
    plan.support_ms = plain.support_ms;
    plan.first_ms = plain.first_ms;
    plan.count = plan.family == KernelFamily::exponentials ? few : plain.count;
    table.reject(spline_keys, only_for(KernelFamily::spline));
  }
  if (plan.family != KernelFamily::steps) {
    table.reject(step_keys, only_for(KernelFamily::steps));
  }
  if (plan.family != KernelFamily::exponentials) {
    table.reject(exponential_keys, only_for(KernelFamily::exponentials));
  }
  const bool can_share = std::string(name) == "eta" && plan.family == KernelFamily::exponentials;
  if (!can_share) {
    table.reject({"with_membrane"}, "belongs to [eta] with family = \"exponentials\" only");
  }
  switch (plan.family) {
    case KernelFamily::absent:
      break;
    case KernelFamily::spline:
      read_spline(table, plan);
      break;
    case KernelFamily::exponentials:
      read_exponentials(table, plan);
      if (can_share) {
        plan.with_membrane = table.flag("with_membrane").value_or(false);
      }
      break;
    case KernelFamily::steps:
      read_steps(table, plan);
      break;
  }
  std::vector<std::string> known = {"count"};
  for (const auto* keys : {&spline_keys, &step_keys, &exponential_keys}) {
    known.insert(known.end(), keys->begin(), keys->end());
  }
  if (plan.family == KernelFamily::steps || plan.family == KernelFamily::absent) {
    table.reject({"count"},
                 "has no meaning for family = \"" + std::string(to_string(plan.family)) + "\"");
  }
  table.reject_unknown(known);
}

/// Reads `key` = a number, or "fit" with an optional start. \returns whether it is to be fitted.
bool read_own_parameter(TomlTable& table, const char* key, const char* start_key, Range range,
                        bool fit_when_absent, double& value) {
  bool fit = fit_when_absent;
  if (table.holds_text(key)) {
    if (table.text(key) != "fit") {
      table.fail(key, "must be a number or \"fit\"");
    }
    fit = true;
  } else if (const auto number = table.number(key, range)) {
    fit = false;
    value = *number;
  }
  if (const auto start = table.number(start_key, range)) {
    if (!fit) {
      table.fail(start_key, std::string(key) + " is not fitted, so it has no start");
    }
    value = *start;
  }
  return fit;
}

void read_escape(TomlTable& top, Variant& variant) {
  auto found = top.table("escape");
  if (!found) {
    return;
  }
  TomlTable& table = *found;
  Escape& escape = variant.escape;
  if (const auto word = table.text("function")) {
    table.at("function", [&] { escape.kind = escape_kind_from(*word); });
  }
  const bool exponential = escape.kind == EscapeKind::exponential;
  if (exponential && (table.holds_text("lambda_0_per_ms") || table.has("lambda_0_start_per_ms"))) {
    table.fail(table.has("lambda_0_per_ms") ? "lambda_0_per_ms" : "lambda_0_start_per_ms",
               "with the exponential function lambda_0 and theta_0 say the same thing, so lambda_0 "
               "cannot be fitted",
               "give a number or leave it out");
  }
  variant.fit_lambda_0 =
      read_own_parameter(table, "lambda_0_per_ms", "lambda_0_start_per_ms", rate_range,
                         escape.kind == EscapeKind::logistic, escape.lambda_0_per_ms);
  if (escape.kind == EscapeKind::rectified_power) {
    escape.exponent = 2.0;
    variant.fit_exponent = read_own_parameter(table, "exponent", "exponent_start", exponent_range,
                                              true, escape.exponent);
  } else {
    table.reject({"exponent", "exponent_start"}, "belongs to function = \"rectified_power\" only");
  }
  table.reject_unknown({"exponent", "exponent_start"});
}

void read_refractory(TomlTable& top, RefractoryPlan& plan) {
  auto table = top.table("refractory");
  if (!table) {
    return;
  }
  plan.given_ms = table->number("given_ms", not_negative);
  if (plan.given_ms) {
    table->reject({"cap_ms"}, "has no meaning beside given_ms");
  }
  plan.cap_ms = table->number("cap_ms", not_negative).value_or(plan.cap_ms);
  table->reject_unknown();
}

void read_voltage(TomlTable& top, Variant& variant) {
  auto table = top.table("voltage");
  if (!table) {
    return;
  }
  variant.use_voltage = table->flag("use").value_or(variant.use_voltage);
  variant.mask_before_ms =
      table->number("mask_before_ms", not_negative).value_or(variant.mask_before_ms);
  variant.mask_after_ms =
      table->number("mask_after_ms", not_negative).value_or(variant.mask_after_ms);
  variant.voltage_step_ms = table->number("step_ms", time_range).value_or(variant.voltage_step_ms);
  table->reject_unknown();
}

void read_smoothing(TomlTable& top, SmoothingPlan& plan) {
  auto table = top.table("smoothing");
  if (!table) {
    return;
  }
  plan.automatic = table->flag("automatic").value_or(true);
  if (plan.automatic) {
    table->reject({"kappa", "eta", "theta_1"},
                  "smoothing parameters are found automatically; to give them, add automatic = "
                  "false");
  }
  plan.kappa = table->number("kappa", positive).value_or(plan.kappa);
  plan.eta = table->number("eta", positive).value_or(plan.eta);
  plan.theta_1 = table->number("theta_1", positive).value_or(plan.theta_1);
  table->reject_unknown();
}

std::string line(const char* key, const std::string& value) {
  return std::string(key) + " = " + value + "\n";
}

std::string truth(bool value) { return value ? "true" : "false"; }

std::string kernel_text(const char* name, const KernelPlan& plan) {
  std::string out = "\n[" + std::string(name) + "]\n";
  out += line("family", toml_text(std::string(to_string(plan.family))));
  switch (plan.family) {
    case KernelFamily::absent:
      break;
    case KernelFamily::spline:
      out += line("support_ms", toml_number(plan.support_ms));
      out += line("first_ms", toml_number(plan.first_ms));
      out += line("count", std::to_string(plan.count));
      break;
    case KernelFamily::exponentials:
      out += line("count", std::to_string(plan.count));
      if (!plan.time_constants_ms.empty()) {
        out += line("time_constants_ms", toml_numbers(plan.time_constants_ms));
      }
      out += line("fit_time_constants", truth(plan.fit_time_constants));
      out += line("shortest_ms", toml_number(plan.shortest_ms));
      out += line("longest_ms", toml_number(plan.longest_ms));
      if (plan.with_membrane) {
        out += line("with_membrane", "true");
      }
      break;
    case KernelFamily::steps:
      out += line("edges_ms", toml_numbers(plan.edges_ms));
      break;
  }
  return out;
}

std::string escape_text(const Variant& variant) {
  const Escape& escape = variant.escape;
  std::string out =
      "\n[escape]\n" + line("function", toml_text(std::string(to_string(escape.kind))));
  const auto own = [&](const char* key, const char* start_key, bool fit, double value) {
    if (fit) {
      out += line(key, "\"fit\"");
      key = start_key;
    }
    out += line(key, toml_number(value));
  };
  own("lambda_0_per_ms", "lambda_0_start_per_ms", variant.fit_lambda_0, escape.lambda_0_per_ms);
  if (escape.kind == EscapeKind::rectified_power) {
    own("exponent", "exponent_start", variant.fit_exponent, escape.exponent);
  }
  return out;
}

}  // namespace

Variant::Variant() {
  kappa.support_ms = 150.0;
  kappa.first_ms = 1.0;
  kappa.count = 14;
  for (KernelPlan* plan : {&eta, &theta_1}) {
    // A faster component has decayed before the refractory time ends.
    plan->shortest_ms = 2.0;
    plan->support_ms = 800.0;
    plan->first_ms = 2.0;
    plan->count = 15;
  }
}

Variant parse_variant(const std::string& text, const std::string& path) {
  TomlTable top = TomlTable::parse(text, path);
  Variant variant;
  variant.name = top.text("name").value_or(variant.name);
  read_kernel(top, "kappa", 1, variant.kappa);
  read_kernel(top, "eta", 2, variant.eta);
  read_kernel(top, "theta_1", 1, variant.theta_1);
  read_escape(top, variant);
  read_refractory(top, variant.refractory);
  read_voltage(top, variant);
  read_smoothing(top, variant.smoothing);
  top.reject_unknown();
  return variant;
}

Variant read_variant(const std::string& path) { return parse_variant(read_text_file(path), path); }

std::string to_toml(const Variant& variant) {
  std::string out = line("name", toml_text(variant.name));
  out += kernel_text("kappa", variant.kappa);
  out += kernel_text("eta", variant.eta);
  out += kernel_text("theta_1", variant.theta_1);
  out += escape_text(variant);
  out += "\n[refractory]\n";
  out += variant.refractory.given_ms ? line("given_ms", toml_number(*variant.refractory.given_ms))
                                     : line("cap_ms", toml_number(variant.refractory.cap_ms));
  out += "\n[voltage]\n" + line("use", truth(variant.use_voltage));
  out += line("mask_before_ms", toml_number(variant.mask_before_ms));
  out += line("mask_after_ms", toml_number(variant.mask_after_ms));
  out += line("step_ms", toml_number(variant.voltage_step_ms));
  out += "\n[smoothing]\n" + line("automatic", truth(variant.smoothing.automatic));
  if (!variant.smoothing.automatic) {
    out += line("kappa", toml_number(variant.smoothing.kappa));
    out += line("eta", toml_number(variant.smoothing.eta));
    out += line("theta_1", toml_number(variant.smoothing.theta_1));
  }
  return out;
}

}  // namespace softsill
