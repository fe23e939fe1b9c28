#include "softsill/model_file.hpp"

#include <cmath>

#include "estimator/model/toml_table.hpp"
#include "softsill/error.hpp"
#include "softsill/files.hpp"

namespace softsill {
namespace {

constexpr Range time_range{0.0, 1e6, false};

void need(const TomlTable& table, const char* key) {
  if (!table.has(key)) {
    table.fail("", std::string("the key ") + key + " is missing");
  }
}

std::vector<double> read_coefficients(TomlTable& table, const char* key, const Basis& basis) {
  need(table, key);
  std::vector<double> values = *table.numbers(key, any_number);
  if (values.size() != basis.size()) {
    table.fail(key, "must hold " + std::to_string(basis.size()) + " numbers, holds " +
                        std::to_string(values.size()));
  }
  return values;
}

Kernel read_membrane(TomlTable& table) {
  need(table, "resistance_MOhm");
  need(table, "tau_m_ms");
  const double resistance = *table.number("resistance_MOhm", positive);
  const double tau = *table.number("tau_m_ms", time_range);
  table.reject_unknown({"family"});
  return {Basis::exponentials({tau}), {resistance / tau}};
}

Basis read_knots(TomlTable& table) {
  Basis basis;
  basis.family = KernelFamily::spline;
  basis.knots_ms = *table.numbers("knots_ms", any_number);
  const auto& knots = basis.knots_ms;
  for (std::size_t i = 1; i < knots.size(); ++i) {
    if (knots[i] < knots[i - 1]) {
      table.fail("knots_ms", "knots must not decrease");
    }
  }
  if (knots.size() < 5 || knots.back() <= 0.0 || knots.back() <= knots.front()) {
    table.fail("knots_ms", "must hold at least 5 knots, the last above 0");
  }
  basis.support_ms = knots.back();
  return basis;
}

Kernel read_kernel(TomlTable& top, const char* name) {
  auto found = top.table(name);
  if (!found) {
    return {};
  }
  TomlTable& table = *found;
  if (!table.has("family") && (table.has("resistance_MOhm") || table.has("tau_m_ms"))) {
    if (std::string(name) != "kappa") {
      table.fail("resistance_MOhm", "resistance_MOhm and tau_m_ms belong to [kappa] only");
    }
    return read_membrane(table);
  }
  need(table, "family");
  KernelFamily family = KernelFamily::absent;
  table.at("family", [&] { family = kernel_family_from(*table.text("family")); });
  Kernel kernel;
  switch (family) {
    case KernelFamily::absent:
      break;
    case KernelFamily::exponentials:
      need(table, "time_constants_ms");
      kernel.basis.time_constants_ms = *table.numbers("time_constants_ms", time_range);
      table.at("time_constants_ms",
               [&] { kernel.basis = Basis::exponentials(kernel.basis.time_constants_ms); });
      kernel.coefficients = read_coefficients(table, "amplitudes", kernel.basis);
      break;
    case KernelFamily::steps:
      need(table, "edges_ms");
      table.at("edges_ms",
               [&] { kernel.basis = Basis::steps(*table.numbers("edges_ms", not_negative)); });
      kernel.coefficients = read_coefficients(table, "values", kernel.basis);
      break;
    case KernelFamily::spline:
      if (table.has("knots_ms")) {
        table.reject({"support_ms", "first_ms", "count"}, "has no meaning beside knots_ms");
        kernel.basis = read_knots(table);
      } else {
        for (const char* key : {"support_ms", "first_ms", "count"}) {
          need(table, key);
        }
        const double support = *table.number("support_ms", time_range);
        const double first = *table.number("first_ms", time_range);
        const int count = *table.whole_number("count", 4, 1000);
        table.at("support_ms", [&] { kernel.basis = Basis::spline(support, first, count); });
      }
      kernel.coefficients = read_coefficients(table, "coefficients", kernel.basis);
      break;
  }
  table.reject_unknown();
  return kernel;
}

Escape read_escape(TomlTable& top) {
  Escape escape;
  auto table = top.table("escape");
  if (!table) {
    return escape;
  }
  if (const auto word = table->text("function")) {
    table->at("function", [&] { escape.kind = escape_kind_from(*word); });
  }
  escape.lambda_0_per_ms = table->number("lambda_0_per_ms", positive).value_or(1.0);
  if (escape.kind == EscapeKind::rectified_power) {
    need(*table, "exponent");
    escape.exponent = *table->number("exponent", {0.0, 50.0, false});
  } else {
    table->reject({"exponent"}, "belongs to function = \"rectified_power\" only");
  }
  table->reject_unknown();
  return escape;
}

std::string line(const char* key, const std::string& value) {
  return std::string(key) + " = " + value + "\n";
}

std::string kernel_text(const char* name, const Kernel& kernel) {
  if (!kernel.present()) {
    return {};
  }
  std::string out = "\n[" + std::string(name) + "]\n" +
                    line("family", toml_text(std::string(to_string(kernel.basis.family))));
  switch (kernel.basis.family) {
    case KernelFamily::absent:
      break;
    case KernelFamily::exponentials:
      out += line("amplitudes", toml_numbers(kernel.coefficients));
      out += line("time_constants_ms", toml_numbers(kernel.basis.time_constants_ms));
      break;
    case KernelFamily::steps:
      out += line("edges_ms", toml_numbers(kernel.basis.knots_ms));
      out += line("values", toml_numbers(kernel.coefficients));
      break;
    case KernelFamily::spline:
      out += line("knots_ms", toml_numbers(kernel.basis.knots_ms));
      out += line("coefficients", toml_numbers(kernel.coefficients));
      break;
  }
  return out;
}

}  // namespace

Model parse_model(const std::string& text, const std::string& path) {
  TomlTable top = TomlTable::parse(text, path);
  Model model;
  model.name = top.text("name").value_or("");
  model.input_unit = top.text("input_unit").value_or("nA");
  const std::string scale = top.text("scale").value_or("millivolt");
  if (scale != "millivolt" && scale != "noise_level") {
    top.fail("scale", "must be \"millivolt\" or \"noise_level\"");
  }
  if (scale == "millivolt") {
    top.reject({"threshold"}, "belongs to scale = \"noise_level\"; write threshold_mV");
    for (const char* key : {"threshold_mV", "noise_level_mV"}) {
      need(top, key);
    }
    model.resting_potential = top.number("resting_potential_mV", any_number).value_or(0.0);
    model.threshold = *top.number("threshold_mV", any_number);
    model.noise_level = *top.number("noise_level_mV", positive);
  } else {
    model.scale = PotentialScale::noise_level;
    top.reject({"threshold_mV", "noise_level_mV", "resting_potential_mV"},
               "belongs to scale = \"millivolt\"; in units of Delta give `threshold` alone");
    top.reject({"theta_1"}, "in units of Delta [eta] holds (eta - theta_1) / Delta");
    need(top, "threshold");
    model.threshold = *top.number("threshold", any_number);
  }
  model.refractory_ms = top.number("refractory_ms", not_negative).value_or(0.0);
  model.escape = read_escape(top);
  model.kappa = read_kernel(top, "kappa");
  model.eta = read_kernel(top, "eta");
  model.theta_1 = read_kernel(top, "theta_1");
  top.reject_unknown(model.scale == PotentialScale::millivolt
                         ? std::vector<std::string>{}
                         : std::vector<std::string>{"theta_1"});
  return model;
}

Model read_model(const std::string& path) { return parse_model(read_text_file(path), path); }

std::string to_toml(const Model& model) {
  std::string out = line("name", toml_text(model.name));
  out += line("input_unit", toml_text(model.input_unit));
  if (model.scale == PotentialScale::millivolt) {
    out += line("scale", "\"millivolt\"");
    out += line("resting_potential_mV", toml_number(model.resting_potential));
    out += line("threshold_mV", toml_number(model.threshold));
    out += line("noise_level_mV", toml_number(model.noise_level));
  } else {
    out += line("scale", "\"noise_level\"");
    out += line("threshold", toml_number(model.threshold));
  }
  out += line("refractory_ms", toml_number(model.refractory_ms));
  out += "\n[escape]\n" + line("function", toml_text(std::string(to_string(model.escape.kind))));
  out += line("lambda_0_per_ms", toml_number(model.escape.lambda_0_per_ms));
  if (model.escape.kind == EscapeKind::rectified_power) {
    out += line("exponent", toml_number(model.escape.exponent));
  }
  out += kernel_text("kappa", model.kappa);
  out += kernel_text("eta", model.eta);
  out += kernel_text("theta_1", model.theta_1);
  return out;
}

}  // namespace softsill
