// The integrate-and-fire equations of a model, integrated step by step, give back kappa and eta.
#include "softsill/equations.hpp"

#include <gtest/gtest.h>

#include <cmath>
#include <functional>
#include <map>
#include <string>
#include <vector>

namespace softsill {
namespace {

using State = std::vector<double>;

/// Runge & Kutta's classical step of order 4.
void step_rk4(State& state, double h, const std::function<State(const State&)>& slope) {
  const auto moved = [&](const State& k, double by) {
    State out = state;
    for (std::size_t i = 0; i < out.size(); ++i) {
      out[i] += by * k[i];
    }
    return out;
  };
  const State k1 = slope(state), k2 = slope(moved(k1, 0.5 * h)), k3 = slope(moved(k2, 0.5 * h)),
              k4 = slope(moved(k3, h));
  for (std::size_t i = 0; i < state.size(); ++i) {
    state[i] += h / 6.0 * (k1[i] + 2.0 * k2[i] + 2.0 * k3[i] + k4[i]);
  }
}

std::map<std::string, double> values_of(const Model& model) {
  std::map<std::string, double> values;
  for (const EquationRow& row : integrate_and_fire_equations(model)) {
    EXPECT_EQ(values.count(row.symbol), 0u) << row.symbol;
    values[row.symbol] = row.value;
  }
  return values;
}

/// The written-out system as anyone would type it in from equations.csv.
class Neuron {
 public:
  explicit Neuron(const Model& model) : p_(values_of(model)) {
    single_ = p_.count("tau_m") > 0;
    const auto count = [&](const char* prefix) {
      std::size_t n = 0;
      while (p_.count(prefix + std::to_string(n + 1)) > 0) {
        ++n;
      }
      return n;
    };
    inputs_ = single_ ? 1 : count("tau_y_");
    spikes_ = count(single_ ? "tau_w_" : "tau_z_");
    thresholds_ = count("tau_h_");
    state_.assign(inputs_ + spikes_ + thresholds_, 0.0);
    if (single_) {
      state_[0] = p_["E_0"];
    }
  }

  double u() const {
    if (single_) {
      return state_[0];
    }
    double sum = p_.at("E_0");
    for (std::size_t i = 0; i < inputs_ + spikes_; ++i) {
      sum += state_[i];
    }
    return sum;
  }

  double theta() const {
    double sum = p_.at("theta_0");
    for (std::size_t i = inputs_ + spikes_; i < state_.size(); ++i) {
      sum += state_[i];
    }
    return sum;
  }

  void spike() {
    if (single_) {
      state_[0] += p_.at("J");
    }
    for (std::size_t k = 0; k < spikes_; ++k) {
      state_[inputs_ + k] += at(single_ ? "b_" : "A_", k);
    }
    for (std::size_t k = 0; k < thresholds_; ++k) {
      state_[inputs_ + spikes_ + k] += at("B_", k);
    }
  }

  void run(double current, double h, int steps) {
    for (int i = 0; i < steps; ++i) {
      step_rk4(state_, h, [&](const State& s) {
        State slope(s.size());
        if (single_) {
          double total = current;
          for (std::size_t k = 0; k < spikes_; ++k) {
            total -= s[1 + k];
          }
          slope[0] = (-(s[0] - p_.at("E_0")) + p_.at("R") * total) / p_.at("tau_m");
        } else {
          for (std::size_t j = 0; j < inputs_; ++j) {
            slope[j] = (-s[j] + at("R_", j) * current) / at("tau_y_", j);
          }
        }
        for (std::size_t k = 0; k < spikes_; ++k) {
          slope[inputs_ + k] = -s[inputs_ + k] / at(single_ ? "tau_w_" : "tau_z_", k);
        }
        for (std::size_t k = 0; k < thresholds_; ++k) {
          slope[inputs_ + spikes_ + k] = -s[inputs_ + spikes_ + k] / at("tau_h_", k);
        }
        return slope;
      });
    }
  }

 private:
  double at(const char* prefix, std::size_t k) const {
    return p_.at(prefix + std::to_string(k + 1));
  }
  std::map<std::string, double> p_;
  bool single_ = false;
  std::size_t inputs_ = 0, spikes_ = 0, thresholds_ = 0;
  State state_;
};

Model base_model() {
  Model model;
  model.resting_potential = -65.0;
  model.threshold = -48.0;
  model.noise_level = 1.5;
  model.refractory_ms = 2.0;
  model.kappa = {Basis::exponentials({20.0}), {5.0}};
  model.eta = {Basis::exponentials({30.0, 200.0}), {-8.0, -1.5}};
  model.theta_1 = {Basis::exponentials({10.0, 90.0}), {6.0, 2.0}};
  return model;
}

std::vector<Model> models() {
  std::vector<Model> all(7, base_model());
  all[1].eta = {Basis::exponentials({20.0, 150.0}), {-12.0, 2.0}};    // a part sharing tau_m
  all[2].eta = {Basis::exponentials({20.000001, 5.0}), {-9.0, 3.0}};  // almost sharing it
  all[3].eta = {};
  all[3].theta_1 = {};
  all[4].kappa = {Basis::exponentials({20.0, 4.0}), {5.0, -3.0}};
  all[5].kappa = {Basis::exponentials({20.0, 4.0, 60.0}), {5.0, 1.0, 0.5}};
  all[5].eta = {};
  all[6].eta = {Basis::exponentials({2.0, 20.0, 500.0}), {4.0, -10.0, -0.7}};
  return all;
}

// A spike without current: u - E_0 is eta and theta - theta_0 is theta_1.
TEST(Equations, ASpikeGivesBackEtaAndThreshold) {
  for (const Model& model : models()) {
    Neuron neuron(model);
    neuron.spike();
    for (int i = 0; i <= 300; ++i) {
      const double lag = static_cast<double>(i);
      const double eta = model.eta.present() ? model.eta.value(lag) : 0.0;
      const double theta = model.theta_1.present() ? model.theta_1.value(lag) : 0.0;
      EXPECT_NEAR(neuron.u() - model.resting_potential, eta, 1e-8) << "lag " << lag;
      EXPECT_NEAR(neuron.theta() - model.threshold, theta, 1e-8) << "lag " << lag;
      neuron.run(0.0, 0.02, 50);
    }
  }
}

// A brief current without spikes: u - E_0 is kappa * I.
TEST(Equations, ACurrentGivesBackKappa) {
  for (const Model& model : models()) {
    Neuron neuron(model);
    std::vector<double> input(200, 0.0), times;
    std::fill(input.begin(), input.begin() + 7, 1.3);
    for (int i = 0; i <= 200; ++i) {
      times.push_back(static_cast<double>(i));
    }
    const std::vector<double> expected = filtered_input(model.kappa, input, 0.0, 1.0, 0.0, times);
    for (std::size_t i = 0; i < 200; ++i) {
      EXPECT_NEAR(neuron.u() - model.resting_potential, expected[i], 1e-8) << "time " << i;
      neuron.run(input[i], 0.02, 50);
    }
  }
}

// Spikes and current together, more than one spike: everything adds up.
TEST(Equations, SpikesAndCurrentAddUp) {
  for (const Model& model : models()) {
    Neuron neuron(model);
    const std::vector<double> input(100, 0.2), spikes = {10.0, 15.0, 60.0};
    for (std::size_t i = 0; i < 100; ++i) {
      const double t = static_cast<double>(i);
      double u = model.resting_potential +
                 filtered_input(model.kappa, input, 0.0, 1.0, 0.0, std::vector<double>{t})[0];
      for (double spike : spikes) {
        if (spike < t && model.eta.present()) {
          u += model.eta.value(t - spike);
        }
      }
      EXPECT_NEAR(neuron.u(), u, 1e-8);
      for (double spike : spikes) {
        if (spike == t) {
          neuron.spike();
        }
      }
      neuron.run(0.2, 0.02, 50);
    }
  }
}

// Worked by hand: a = 5, tau_m = 20 give R = 100 MOhm and C = 0.2 nF; A = -8 mV at 30 ms needs
// b = 8 (30 - 20) / (100 30) nA; the jump of u is -8 - 1.5 mV.
TEST(Equations, ValuesByHand) {
  const auto values = values_of(base_model());
  EXPECT_DOUBLE_EQ(values.at("tau_m"), 20.0);
  EXPECT_DOUBLE_EQ(values.at("R"), 100.0);
  EXPECT_DOUBLE_EQ(values.at("C"), 0.2);
  EXPECT_DOUBLE_EQ(values.at("b_1"), 80.0 / 3000.0);
  EXPECT_DOUBLE_EQ(values.at("b_2"), 1.5 * 180.0 / 20000.0);
  EXPECT_DOUBLE_EQ(values.at("J"), -9.5);
  EXPECT_DOUBLE_EQ(values.at("E_0"), -65.0);
  EXPECT_DOUBLE_EQ(values.at("theta_0"), -48.0);
  EXPECT_DOUBLE_EQ(values.at("B_1"), 6.0);
  EXPECT_DOUBLE_EQ(values.at("tau_h_2"), 90.0);
  EXPECT_DOUBLE_EQ(values.at("Delta"), 1.5);
  EXPECT_DOUBLE_EQ(values.at("t_abs"), 2.0);
  const auto shared = values_of(models()[1]);
  EXPECT_EQ(shared.at("b_1"), 0.0);
}

TEST(Equations, UnitsFollowTheModel) {
  Model model = base_model();
  const auto unit = [&](const std::string& symbol) {
    for (const EquationRow& row : integrate_and_fire_equations(model)) {
      if (row.symbol == symbol) {
        return row.unit;
      }
    }
    return std::string("none");
  };
  EXPECT_EQ(unit("R"), "MOhm");
  EXPECT_EQ(unit("C"), "nF");
  EXPECT_EQ(unit("b_1"), "nA");
  model.input_unit = "dB";
  EXPECT_EQ(unit("R"), "mV/dB");
  EXPECT_EQ(unit("b_1"), "dB");
  model.scale = PotentialScale::noise_level;
  EXPECT_EQ(unit("R"), "Delta/dB");
  EXPECT_EQ(unit("J"), "Delta");
}

TEST(Equations, AbsenceIsExplained) {
  Model model = base_model();
  EXPECT_EQ(why_no_equations(model), "");
  model.eta = {Basis::spline(100.0, 1.0, 4), {0.0, 0.0, 0.0, 0.0}};
  EXPECT_NE(why_no_equations(model).find("eta is built of splines"), std::string::npos);
  EXPECT_TRUE(integrate_and_fire_equations(model).empty());
  model = base_model();
  model.theta_1 = {Basis::steps({0.0, 5.0}), {1.0}};
  EXPECT_NE(why_no_equations(model).find("theta_1 is built of steps"), std::string::npos);
  model = base_model();
  model.kappa = {};
  EXPECT_NE(why_no_equations(model).find("no kappa"), std::string::npos);
}

TEST(Equations, CsvQuotesWhatNeedsIt) {
  const std::string csv = equations_csv({{"a", 0.1, "mV", "one, two", "say \"x\""}});
  EXPECT_EQ(csv, "symbol,value,unit,meaning,equation\na,0.1,mV,\"one, two\",\"say \"\"x\"\"\"\n");
}

}  // namespace
}  // namespace softsill
