#include <softsill/kernel.hpp>

#include <cmath>

// The integral of exp(-s / tau) is tau.
int main() {
  const softsill::Kernel kernel{softsill::Basis::exponentials({20.0}), {5.0}};
  return std::abs(kernel.integral() - 100.0) < 1e-9 ? 0 : 1;
}
