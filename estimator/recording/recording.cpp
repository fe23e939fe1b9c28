#include "softsill/recording.hpp"

#include <algorithm>

namespace softsill {

bool Recording::has_voltage() const {
  bool any = false;
  for (const Sweep& sweep : sweeps) {
    if (sweep.use == Use::estimate) {
      any = true;
      if (!sweep.has_voltage()) {
        return false;
      }
    }
  }
  return any;
}

std::size_t Recording::spike_count(Use use) const {
  std::size_t count = 0;
  for (const Sweep& sweep : sweeps) {
    if (sweep.use != use) {
      continue;
    }
    for (const Interval& interval : sweep.analysed) {
      const auto begin =
          std::lower_bound(sweep.spikes_ms.begin(), sweep.spikes_ms.end(), interval.begin_ms);
      const auto end = std::lower_bound(begin, sweep.spikes_ms.end(), interval.end_ms);
      count += static_cast<std::size_t>(end - begin);
    }
  }
  return count;
}

}  // namespace softsill
