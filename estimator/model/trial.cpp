#include "estimator/model/trial.hpp"

#include <algorithm>
#include <array>
#include <cmath>
#include <limits>

#include "estimator/model/steady_exp.hpp"

namespace softsill {
namespace {

constexpr std::size_t run = HistoryTables::run;

/// How history and drive combine for the exponential: everything is a product.
struct Product {
  static constexpr double rest = 1.0;
  static double combine(double effect, double factor) {
    // Kept away from overflow and from the slow arithmetic of denormal numbers.
    effect *= factor;
    effect = effect < 1e-200 ? 1e-200 : effect;
    return effect > 1e200 ? 1e200 : effect;
  }
  double amount(double drive, double effect) const { return drive * effect; }
  double amount(double drive, double effect, double carried) const {
    return drive * effect * carried;
  }
  /// From a sum of terms of x to what amount() takes.
  static void prepare(std::array<double, run>& carried) {
    for (double& value : carried) {
      value = steady_exp(value);
    }
  }
};

/// The same for all other escape functions: x is a sum, and the hazard is looked up.
struct Lookup {
  static constexpr double rest = 0.0;
  static double combine(double effect, double term) { return effect + term; }
  double amount(double drive, double effect) const { return (*table)(drive + effect); }
  double amount(double drive, double effect, double carried) const {
    return (*table)(drive + effect + carried);
  }
  static void prepare(std::array<double, run>&) {}
  const HazardTable* table;
};

/// Exponential kernels from one run of steps to the next.
class Carried {
 public:
  Carried(std::span<const HistoryTables::Exponential> terms, double step_ms)
      : terms_(terms), step_ms_(step_ms), value_(terms.size(), 0.0), pending_(terms.size(), 0.0) {
    for (const HistoryTables::Exponential& term : terms_) {
      for (std::size_t j = 0; j < run; ++j) {
        decay_.push_back(std::exp(-(static_cast<double>(j) + 0.5) * step_ms / term.tau_ms));
      }
    }
  }

  bool any() const { return any_; }

  /// Sum over terms at the middle of every step of this run.
  std::array<double, run> along_run() const {
    std::array<double, run> sum{};
    for (std::size_t k = 0; k < terms_.size(); ++k) {
      const double value = value_[k];
      const double* decay = decay_.data() + k * run;
      for (std::size_t j = 0; j < run; ++j) {
        sum[j] += value * decay[j];
      }
    }
    return sum;
  }

  /// \param steps_left from the spike to the end of its run
  void spike(double steps_left) {
    for (std::size_t k = 0; k < terms_.size(); ++k) {
      pending_[k] += terms_[k].amplitude * std::exp(-steps_left * step_ms_ / terms_[k].tau_ms);
    }
  }

  void next_run() {
    any_ = false;
    for (std::size_t k = 0; k < terms_.size(); ++k) {
      double value = value_[k] * terms_[k].decay_per_run + pending_[k];
      value = std::abs(value) < 1e-30 ? 0.0 : value;
      value_[k] = value;
      pending_[k] = 0.0;
      any_ = any_ || value != 0.0;
    }
  }

 private:
  std::span<const HistoryTables::Exponential> terms_;
  double step_ms_;
  std::vector<double> value_, pending_, decay_;
  bool any_ = false;
};

template <typename Hazard>
class Trial {
 public:
  Trial(const TrialPlan& plan, Hazard hazard, RandomStream random)
      : plan_(plan),
        hazard_(hazard),
        random_(random),
        carried_(plan.history->exponentials(), plan.step_ms) {
    const std::size_t length = plan.history->length();
    window_ = std::max<std::size_t>(4096, (length + run - 1) / run * run);
    effect_.assign(window_ + run + length, Hazard::rest);
    target_ = random_.exponential();
  }

  TrialOutcome all() {
    const std::size_t steps = plan_.drive.size();
    for (first_ = 0; first_ < steps && !done_; first_ += run) {
      if (first_ == base_ + window_) {
        slide();
      }
      count_ = std::min(run, steps - first_);
      if (next_ < first_ + count_) {
        one_run();
      }
      carried_.next_run();
    }
    if (!outcome_.runaway) {
      outcome_.stopped_ms = plan_.end_ms;
    }
    return std::move(outcome_);
  }

 private:
  /// Drops the effects on steps that are over.
  void slide() {
    std::copy(effect_.begin() + static_cast<std::ptrdiff_t>(window_), effect_.end(),
              effect_.begin());
    std::fill(effect_.end() - static_cast<std::ptrdiff_t>(window_), effect_.end(), Hazard::rest);
    base_ += window_;
  }

  /// Integrals of the hazard over steps first_ + from, ..., as far as the past is known now.
  void fill(std::size_t from) {
    const double* drive = plan_.drive.data() + first_;
    const double* effect = effect_.data() + (first_ - base_);
    if (carried_.any()) {
      for (std::size_t j = from; j < count_; ++j) {
        amount_[j] = hazard_.amount(drive[j], effect[j], along_run_[j]);
      }
    } else {
      for (std::size_t j = from; j < count_; ++j) {
        amount_[j] = hazard_.amount(drive[j], effect[j]);
      }
    }
  }

  double sum(std::size_t from) const {
    double a = 0.0, b = 0.0, c = 0.0, d = 0.0;
    std::size_t j = from;
    for (; j + 4 <= count_; j += 4) {
      a += amount_[j];
      b += amount_[j + 1];
      c += amount_[j + 2];
      d += amount_[j + 3];
    }
    for (; j < count_; ++j) {
      a += amount_[j];
    }
    return (a + c) + (b + d);
  }

  /// One run of steps, from next_ (alive from a share `dead_` of that step on).
  void one_run() {
    std::size_t j = next_ > first_ ? next_ - first_ : 0;
    if (carried_.any()) {
      along_run_ = carried_.along_run();
      Hazard::prepare(along_run_);
    }
    fill(j);
    amount_[j] *= 1.0 - dead_;
    const double total = sum(j);
    if (gathered_ + total < target_) {
      gathered_ += total;
      j = count_;
    }
    while (j < count_) {
      if (gathered_ + amount_[j] < target_) {
        gathered_ += amount_[j];
        dead_ = 0.0;
        ++j;
        continue;
      }
      spike(j);
      if (done_ || next_ >= first_ + count_) {
        return;  // dead_ belongs to a later run
      }
      j = next_ - first_;
      fill(j);
      amount_[j] *= 1.0 - dead_;
    }
    next_ = first_ + count_;
    dead_ = 0.0;
  }

  void spike(std::size_t j) {
    const double here = static_cast<double>(first_ + j);
    double share = (target_ - gathered_) / amount_[j];
    if (!(share >= 0.0)) {
      share = 0.0;  // an infinite hazard, or one that is not a number
    }
    const double phase = dead_ + (1.0 - dead_) * std::min(share, 1.0);
    double time = plan_.start_ms + (here + phase) * plan_.step_ms;
    std::vector<double>& train = outcome_.spikes_ms;
    if (!train.empty() && time <= train.back()) {
      time = std::nextafter(train.back(), std::numeric_limits<double>::infinity());
    }
    if (std::isnan(amount_[j])) {
      stop(time);
      return;
    }
    if (time >= plan_.end_ms) {
      done_ = true;
      return;
    }
    train.push_back(time);
    if (train.size() >= plan_.runaway_spikes &&
        time - train[train.size() - plan_.runaway_spikes] < plan_.runaway_window_ms) {
      stop(time);
      return;
    }
    gathered_ = 0.0;
    target_ = random_.exponential();
    leave_effects(j, phase);
    const double alive = here + phase + plan_.refractory_steps;
    next_ = static_cast<std::size_t>(alive);
    dead_ = alive - static_cast<double>(next_);
    if (next_ == first_ + j) {
      double& effect = effect_[next_ - base_];
      effect = Hazard::combine(effect, plan_.history->within_step(0.5 * (1.0 + dead_) - phase));
    }
  }

  void leave_effects(std::size_t j, double phase) {
    const HistoryTables& history = *plan_.history;
    double* effect = effect_.data() + (first_ - base_) + j;
    const std::span<const double> soon = history.soon(phase), lasting = history.lasting(phase);
    const std::size_t left = run - j;
    for (std::size_t k = 1; k < left; ++k) {
      effect[k] = Hazard::combine(effect[k], soon[k]);
    }
    const std::size_t length = lasting.size();
    for (std::size_t k = left; k < length; ++k) {
      effect[k] = Hazard::combine(effect[k], lasting[k]);
    }
    carried_.spike(static_cast<double>(left) - phase);
  }

  void stop(double time) {
    outcome_.runaway = done_ = true;
    outcome_.stopped_ms = time;
  }

  const TrialPlan& plan_;
  Hazard hazard_;
  RandomStream random_;
  Carried carried_;
  TrialOutcome outcome_;

  std::size_t window_ = 0;      ///< steps after which effects are slid down
  std::vector<double> effect_;  ///< of past spikes on steps base_, base_ + 1, ...
  std::size_t base_ = 0;
  std::size_t first_ = 0, count_ = 0;    ///< the run of steps at hand
  std::array<double, run> amount_{};     ///< hazard integrals of its steps
  std::array<double, run> along_run_{};  ///< what exponential kernels bring into them
  std::size_t next_ = 0;                 ///< first step that is not refractory throughout ...
  double dead_ = 0.0;                    ///< ... and the share of it that is
  double gathered_ = 0.0, target_ = 0.0;
  bool done_ = false;
};

}  // namespace

TrialOutcome run_trial(const TrialPlan& plan, RandomStream random) {
  if (plan.hazard) {
    return Trial<Lookup>(plan, Lookup{plan.hazard.get()}, random).all();
  }
  return Trial<Product>(plan, Product{}, random).all();
}

}  // namespace softsill
