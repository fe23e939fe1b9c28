#pragma once

// A neuron outside the model class: the equations of Wang & Buzsaki (1996, J. Neurosci. 16:6402),
// one compartment with sodium, potassium and leak conductances.

#include <span>
#include <vector>

namespace softsill::test {

/// Integrates the cell under a current density (uA/cm^2) that is held over steps of step_ms.
/// Fourth-order Runge-Kutta with `substeps` per step. Returns the potential (mV) at the start of
/// each step; the first is the resting potential.
std::vector<double> conductance_based_potential(std::span<const double> current_density,
                                                double step_ms, int substeps);

}  // namespace softsill::test
