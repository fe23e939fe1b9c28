#pragma once

/// \file model.hpp
/// A complete escape-noise model of one cell with numbers for everything:
///
///   u(t)      = E_0 + (kappa * I)(t) + sum_f eta(t - t_f)
///   theta(t)  = theta_0 + sum_f theta_1(t - t_f)
///   lambda(t) = lambda_0 f((u - theta) / Delta), and 0 for t - t_last < t_abs
///
/// (Gerstner & Kistler 2002, Spiking Neuron Models, ch. 4-5, for the model class.)

#include <string>

#include "softsill/escape.hpp"
#include "softsill/kernel.hpp"

namespace softsill {

/// In which unit potentials are expressed.
enum class PotentialScale {
  millivolt,   ///< voltage recorded, or an anchor given
  noise_level  ///< units of Delta: all that spikes alone can tell. Delta = 1, E_0 = 0.
};

struct Model {
  std::string name;
  std::string input_unit = "nA";
  PotentialScale scale = PotentialScale::millivolt;
  Kernel kappa;    ///< mV/(nA ms), or Delta/(input unit ms)
  Kernel eta;      ///< mV; under PotentialScale::noise_level this holds (eta - theta_1) / Delta
  Kernel theta_1;  ///< mV; absent under PotentialScale::noise_level
  Escape escape;
  double resting_potential = 0.0;  ///< E_0
  double threshold = 0.0;          ///< theta_0
  double noise_level = 1.0;        ///< Delta
  double refractory_ms = 0.0;      ///< t_abs
};

}  // namespace softsill
