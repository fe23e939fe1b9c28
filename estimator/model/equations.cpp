#include "softsill/equations.hpp"

#include <array>
#include <charconv>
#include <cmath>

namespace softsill {
namespace {

std::string shortest(double value) {
  std::array<char, 32> buffer;
  const auto end = std::to_chars(buffer.data(), buffer.data() + buffer.size(), value);
  return {buffer.data(), end.ptr};
}

struct Term {
  double amplitude, tau_ms;
};

std::vector<Term> terms_of(const Kernel& kernel) {
  std::vector<Term> terms;
  for (std::size_t k = 0; k < kernel.basis.size(); ++k) {
    terms.push_back({kernel.coefficients[k], kernel.basis.time_constants_ms[k]});
  }
  return terms;
}

/// "w_1 + w_2 + w_3"
std::string sum_of(const char* symbol, std::size_t count) {
  std::string text;
  for (std::size_t k = 1; k <= count; ++k) {
    text += (k > 1 ? " + " : "") + std::string(symbol) + "_" + std::to_string(k);
  }
  return text;
}

class Writer {
 public:
  explicit Writer(const Model& model) : model_(model) {
    const bool millivolt = model.scale == PotentialScale::millivolt;
    potential_ = millivolt ? "mV" : "Delta";
    current_ = model.input_unit;
    const bool plain = millivolt && current_ == "nA";
    resistance_ = plain ? "MOhm" : potential_ + "/" + current_;
    capacitance_ = plain ? "nF" : current_ + " ms/" + potential_;
  }

  std::vector<EquationRow> all() {
    const std::vector<Term> kappa = terms_of(model_.kappa), eta = terms_of(model_.eta);
    if (kappa.size() == 1) {
      membrane(kappa[0], eta);
    } else {
      parallel(kappa, eta);
    }
    threshold(terms_of(model_.theta_1));
    hazard();
    return std::move(rows_);
  }

 private:
  void add(const std::string& symbol, double value, const std::string& unit,
           const std::string& meaning, const std::string& equation = {}) {
    rows_.push_back({symbol, value, unit, meaning, equation});
  }

  void membrane(const Term& kappa, const std::vector<Term>& eta) {
    const double resistance = kappa.amplitude * kappa.tau_ms;
    const std::string currents =
        eta.empty() ? std::string() : " - R (" + sum_of("w", eta.size()) + ")";
    add("tau_m", kappa.tau_ms, "ms", "membrane time constant",
        "tau_m du/dt = -(u - E_0) + R I" + currents);
    add("R", resistance, resistance_, "input resistance");
    add("C", 1.0 / kappa.amplitude, capacitance_, "membrane capacitance", "C = tau_m / R");
    add("E_0", model_.resting_potential, potential_, "resting potential");
    double jump = 0.0;
    for (const Term& term : eta) {
      jump += term.amplitude;
    }
    add("J", jump, potential_, "jump of u at a spike", "at a spike: u <- u + J");
    for (std::size_t k = 0; k < eta.size(); ++k) {
      const std::string index = std::to_string(k + 1), w = "w_" + index, tau = "tau_w_" + index;
      const Term& term = eta[k];
      const double b = -term.amplitude * (term.tau_ms - kappa.tau_ms) / (resistance * term.tau_ms);
      const bool shared = term.tau_ms == kappa.tau_ms;
      add(tau, term.tau_ms, "ms", "time constant of adaptation current " + index,
          tau + " d" + w + "/dt = -" + w);
      add("b_" + index, b, current_,
          shared ? "jump of " + w + " at a spike: 0, since tau_w_" + index +
                       " = tau_m makes this part a jump of u alone"
                 : "jump of " + w + " at a spike",
          "at a spike: " + w + " <- " + w + " + b_" + index);
    }
  }

  void parallel(const std::vector<Term>& kappa, const std::vector<Term>& eta) {
    std::string sum = "u = E_0";
    for (const auto& [symbol, count] : {std::pair{"y", kappa.size()}, {"z", eta.size()}}) {
      sum += count > 0 ? " + " + sum_of(symbol, count) : "";
    }
    add("E_0", model_.resting_potential, potential_, "resting potential", sum);
    for (std::size_t j = 0; j < kappa.size(); ++j) {
      const std::string index = std::to_string(j + 1), tau = "tau_y_" + index;
      add(tau, kappa[j].tau_ms, "ms", "time constant of input filter " + index,
          tau + " dy_" + index + "/dt = -y_" + index + " + R_" + index + " I");
      add("R_" + index, kappa[j].amplitude * kappa[j].tau_ms, resistance_,
          "resistance of input filter " + index);
    }
    for (std::size_t k = 0; k < eta.size(); ++k) {
      const std::string index = std::to_string(k + 1), z = "z_" + index, tau = "tau_z_" + index;
      add(tau, eta[k].tau_ms, "ms", "time constant of spike-afterpotential " + index,
          tau + " d" + z + "/dt = -" + z);
      add("A_" + index, eta[k].amplitude, potential_, "jump of " + z + " at a spike",
          "at a spike: " + z + " <- " + z + " + A_" + index);
    }
  }

  void threshold(const std::vector<Term>& theta) {
    add("theta_0", model_.threshold, potential_, "threshold at rest",
        theta.empty() ? "theta = theta_0" : "theta = theta_0 + " + sum_of("h", theta.size()));
    for (std::size_t k = 0; k < theta.size(); ++k) {
      const std::string index = std::to_string(k + 1), h = "h_" + index, tau = "tau_h_" + index;
      add(tau, theta[k].tau_ms, "ms", "time constant of threshold part " + index,
          tau + " d" + h + "/dt = -" + h);
      add("B_" + index, theta[k].amplitude, potential_, "jump of " + h + " at a spike",
          "at a spike: " + h + " <- " + h + " + B_" + index);
    }
  }

  void hazard() {
    const Escape& escape = model_.escape;
    std::string f;
    switch (escape.kind) {
      case EscapeKind::exponential:
        f = "exp(x)";
        break;
      case EscapeKind::softplus:
        f = "log(1 + exp(x))";
        break;
      case EscapeKind::logistic:
        f = "1 / (1 + exp(-x))";
        break;
      case EscapeKind::rectified_power:
        f = "log(1 + exp(x))^n";
        break;
      case EscapeKind::gaussian_tail:
        f = "phi(x) / Phi(-x)";
        break;
    }
    add("Delta", model_.noise_level, potential_, "noise level: softness of the threshold",
        "x = (u - theta) / Delta");
    add("lambda_0", escape.lambda_0_per_ms, "1/ms", "rate scale of the escape function",
        "spikes at rate lambda_0 " + f);
    if (escape.kind == EscapeKind::rectified_power) {
      add("n", escape.exponent, "1", "exponent of the escape function");
    }
    add("t_abs", model_.refractory_ms, "ms", "absolute refractory time",
        "no spike until t_abs after the last; all equations run on meanwhile");
  }

  const Model& model_;
  std::string potential_, current_, resistance_, capacitance_;
  std::vector<EquationRow> rows_;
};

std::string quoted(const std::string& text) {
  if (text.find_first_of(",\"\n\r") == std::string::npos) {
    return text;
  }
  std::string out = "\"";
  for (const char c : text) {
    out += c;
    if (c == '"') {
      out += '"';
    }
  }
  return out + "\"";
}

}  // namespace

std::string why_no_equations(const Model& model) {
  if (!model.kappa.present()) {
    return "there is no kappa, so no membrane to write an equation for";
  }
  for (const auto& [name, kernel] :
       {std::pair{"kappa", &model.kappa}, {"eta", &model.eta}, {"theta_1", &model.theta_1}}) {
    if (kernel->present() && kernel->basis.family != KernelFamily::exponentials) {
      return std::string(name) + " is built of " +
             (kernel->basis.family == KernelFamily::spline ? "splines" : "steps") +
             "; only sums of exponentials are the solution of such equations";
    }
  }
  if (model.kappa.basis.size() == 1 && model.kappa.coefficients[0] == 0.0) {
    return "kappa is 0: a membrane without resistance";
  }
  return {};
}

std::vector<EquationRow> integrate_and_fire_equations(const Model& model) {
  return why_no_equations(model).empty() ? Writer(model).all() : std::vector<EquationRow>{};
}

std::string equations_csv(const std::vector<EquationRow>& rows) {
  std::string out = "symbol,value,unit,meaning,equation\n";
  for (const EquationRow& row : rows) {
    out += quoted(row.symbol) + ',' + shortest(row.value) + ',' + quoted(row.unit) + ',' +
           quoted(row.meaning) + ',' + quoted(row.equation) + '\n';
  }
  return out;
}

}  // namespace softsill
