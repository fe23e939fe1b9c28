#include <algorithm>
#include <cmath>
#include <nlohmann/json.hpp>
#include <string>
#include <utility>

#include "estimator/fit/estimate_words.hpp"

namespace softsill {
namespace {

// Keys keep the order in which they are written: people read these files too.
using Json = nlohmann::ordered_json;

/// What is not a finite number is null: JSON has no other way to say so.
Json number(double value) { return std::isfinite(value) ? Json(value) : Json(nullptr); }

Json numbers(const std::vector<double>& values) {
  Json list = Json::array();
  for (double value : values) {
    list.push_back(number(value));
  }
  return list;
}

Json numbers(const std::optional<double>& value) { return value ? number(*value) : Json(nullptr); }

Json quantity_json(const Quantity& quantity) {
  Json out;
  const Json value = numbers(quantity.value);
  out["value"] = value;
  out["low"] = value.is_null() ? Json(nullptr) : numbers(quantity.low);
  out["high"] = value.is_null() ? Json(nullptr) : numbers(quantity.high);
  out["unit"] = quantity.unit;
  out["method"] = quantity.method;
  if (value.is_null()) {
    out["why_absent"] =
        quantity.why_absent.empty() ? "the fit reached no finite number" : quantity.why_absent;
  }
  return out;
}

Json curve_json(const KernelCurve& curve) {
  Json out;
  if (!curve.why_absent.empty()) {
    out["why_absent"] = curve.why_absent;
    return out;
  }
  out["unit"] = curve.unit;
  out["effective_degrees_of_freedom"] = number(curve.effective_degrees_of_freedom);
  out["smoothing"] = numbers(curve.smoothing);
  out["undetermined_ms"] = Json::array();
  for (const Interval& stretch : curve.undetermined) {
    out["undetermined_ms"].push_back(numbers({stretch.begin_ms, stretch.end_ms}));
  }
  out["lag_ms"] = numbers(curve.lag_ms);
  out["value"] = numbers(curve.value);
  out["low"] = numbers(curve.low);
  out["high"] = numbers(curve.high);
  return out;
}

Json kernel_json(const Kernel& kernel) {
  Json out;
  const Basis& basis = kernel.basis;
  out["family"] = to_string(basis.family);
  if (!kernel.present()) {
    return out;
  }
  out["support_ms"] = number(basis.support_ms);
  if (basis.family == KernelFamily::exponentials) {
    out["time_constants_ms"] = numbers(basis.time_constants_ms);
  } else {
    out["degree"] = basis.degree;
    out["knots_ms"] = numbers(basis.knots_ms);
  }
  out["coefficients"] = numbers(kernel.coefficients);
  return out;
}

bool holds_null(const Json& json) {
  return json.is_null() ||
         (json.is_structured() && std::any_of(json.begin(), json.end(), [](const Json& inside) {
            return holds_null(inside);
          }));
}

/// Null when the fit ended without a model: a default one must not be mistaken for a result.
Json model_json(const Estimate& estimate) {
  if (estimate.status == FitStatus::failed || estimate.status == FitStatus::interrupted) {
    return nullptr;
  }
  const Model& model = estimate.model;
  Json out;
  out["name"] = model.name;
  out["input_unit"] = model.input_unit;
  out["scale"] = word_of(scale_words, model.scale);
  out["resting_potential"] = number(model.resting_potential);
  out["threshold"] = number(model.threshold);
  out["noise_level"] = number(model.noise_level);
  out["refractory_ms"] = number(model.refractory_ms);
  out["escape"]["function"] = to_string(model.escape.kind);
  out["escape"]["lambda_0_per_ms"] = number(model.escape.lambda_0_per_ms);
  out["escape"]["exponent"] = number(model.escape.exponent);
  out["kappa"] = kernel_json(model.kappa);
  out["eta"] = kernel_json(model.eta);
  out["theta_1"] = kernel_json(model.theta_1);
  return holds_null(out) ? Json(nullptr) : out;
}

/// Row-major numbers as an array of rows, which Python, R and MATLAB read as a matrix.
Json matrix_json(const std::vector<double>& values, std::size_t columns) {
  Json out = Json::array();
  if (!values.empty() && (columns == 0 || values.size() != columns * columns)) {
    throw InternalError("a covariance that does not fit its coordinates");
  }
  for (std::size_t first = 0; first < values.size(); first += columns) {
    out.push_back(numbers(
        std::vector<double>(values.begin() + static_cast<std::ptrdiff_t>(first),
                            values.begin() + static_cast<std::ptrdiff_t>(first + columns))));
  }
  return out;
}

std::string compact(const Json& json) {
  // Paths and command lines may hold bytes that are no UTF-8.
  return json.dump(-1, ' ', false, Json::error_handler_t::replace);
}

/// Objects and lists of objects over several lines, lists of numbers and words on one.
void print(const Json& json, const std::string& indent, std::string& out) {
  const bool flat = !json.is_structured() || json.empty() ||
                    (json.is_array() && std::none_of(json.begin(), json.end(), [](const Json& x) {
                       return x.is_structured() || x.is_string();
                     }));
  if (flat) {
    out += compact(json);
    return;
  }
  const std::string inner = indent + "  ";
  out += json.is_array() ? '[' : '{';
  bool first = true;
  for (const auto& item : json.items()) {
    out += first ? "\n" : ",\n";
    first = false;
    out += inner;
    if (json.is_object()) {
      out += compact(Json(item.key())) + ": ";
    }
    print(item.value(), inner, out);
  }
  out += "\n" + indent + (json.is_array() ? ']' : '}');
}

void write_provenance(const Provenance& provenance, Json& out) {
  out["program_version"] = provenance.program_version;
  out["command_line"] = provenance.command_line;
  out["seed"] = provenance.seed;
  out["inputs"] = Json::array();
  for (const InputFile& input : provenance.inputs) {
    Json entry;
    entry["path"] = input.path;
    entry["sha256"] = input.sha256;
    out["inputs"].push_back(std::move(entry));
  }
}

}  // namespace

std::string_view to_string(FitStatus status) { return word_of(status_words, status); }

std::string_view to_string(FitMode mode) { return word_of(mode_words, mode); }

bool trustworthy(FitStatus status) {
  return status == FitStatus::converged || status == FitStatus::at_boundary;
}

std::string to_json(const Estimate& estimate) {
  Json out;
  out["schema_version"] = Estimate::schema_version;
  out["cell"] = estimate.cell;
  out["status"] = to_string(estimate.status);
  out["status_sentence"] = estimate.status_sentence;
  out["mode"] = to_string(estimate.mode);
  out["spikes"] = estimate.spikes;
  out["analysed_ms"] = number(estimate.analysed_ms);
  out["left_out_ms"] = number(estimate.left_out_ms);
  out["left_out_spikes"] = estimate.left_out_spikes;
  out["log_likelihood"] = number(estimate.log_likelihood);
  out["spike_log_likelihood"] = number(estimate.spike_log_likelihood);
  out["constant_rate_log_likelihood"] = number(estimate.constant_rate_log_likelihood);
  out["log_marginal_likelihood"] = number(estimate.log_marginal_likelihood);
  out["effective_degrees_of_freedom"] = number(estimate.effective_degrees_of_freedom);
  out["noise_level"] = quantity_json(estimate.noise_level);
  out["threshold"] = quantity_json(estimate.threshold);
  out["resting_potential"] = quantity_json(estimate.resting_potential);
  out["parameters"] = Json::array();
  for (const NamedQuantity& parameter : estimate.parameters) {
    Json entry;
    entry["name"] = parameter.name;
    entry.update(quantity_json(parameter.quantity));
    out["parameters"].push_back(std::move(entry));
  }
  Json& kernels = out["kernels"] = Json::object();
  for (const KernelCurve& curve : estimate.kernels) {
    if (kernels.contains(curve.kernel)) {
      throw InternalError("two curves called " + curve.kernel);
    }
    kernels[curve.kernel] = curve_json(curve);
  }
  out["limits"] = estimate.limits;
  out["notes"] = estimate.notes;
  Json& consistency = out["kappa_consistency"];
  consistency["tested"] = estimate.kappa_consistency.tested;
  if (estimate.kappa_consistency.tested) {
    consistency["statistic"] = number(estimate.kappa_consistency.statistic);
    consistency["degrees_of_freedom"] = number(estimate.kappa_consistency.degrees_of_freedom);
    consistency["p_value"] = number(estimate.kappa_consistency.p_value);
  }
  consistency["sentence"] = estimate.kappa_consistency.sentence;
  Json& nodes = out["node_error"];
  nodes["nodes"] = estimate.node_error.nodes;
  nodes["expected_spikes_error"] = number(estimate.node_error.expected_spikes_error);
  nodes["allowed"] = number(estimate.node_error.allowed);
  nodes["largest_shift_in_se"] = number(estimate.node_error.largest_shift_in_se);
  Json& minimizer = out["minimizer"];
  minimizer["newton_decrement"] = number(estimate.newton_decrement);
  minimizer["starts"] = estimate.starts;
  minimizer["starts_agreeing"] = estimate.starts_agreeing;
  minimizer["report"] = estimate.minimizer_report;
  out["variant"] = to_toml(estimate.variant);
  out["model"] = model_json(estimate);
  Json& coordinates = out["coordinates"];
  const std::size_t size = estimate.coordinate_names.size();
  coordinates["names"] = estimate.coordinate_names;
  coordinates["values"] = numbers(estimate.coordinates);
  coordinates["covariance"] = matrix_json(estimate.covariance, size);
  coordinates["sandwich_covariance"] = matrix_json(estimate.sandwich_covariance, size);
  write_provenance(estimate.provenance, out["provenance"]);
  std::string text;
  print(out, "", text);
  return text + "\n";
}

}  // namespace softsill
