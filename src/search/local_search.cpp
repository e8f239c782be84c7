#include "search/local_search.hpp"

#include <algorithm>
#include <cmath>
#include <limits>
#include <nlopt.hpp>
#include <stdexcept>

#include "tapwright/eye/sampling.hpp"
#include "tapwright/search/classical.hpp"

namespace tapwright::search {
namespace {

constexpr double kBetterV = 1e-9;         // smaller gains are not worth a move
constexpr int kMaxEvaluations = 300;      // of one NLopt run
constexpr double kLimitTolerance = 1e-9;  // as keeps_limits

class Local {
 public:
  Local(const EyeModel& model, const SearchOptions& options, const RunControl& control)
      : model_(model), options_(options), control_(control),
        limits_(model.link.device.transmitter.fir) {}

  LocalResult from(Settings start) {
    Settings best = start;
    double best_v = place_and_score(best);
    if (!options_.fir) {
      Settings smooth = start;
      if (continuous(smooth)) {
        const double smooth_v = place_and_score(smooth);
        if (smooth_v > best_v + kBetterV) {
          best_v = smooth_v;
          best = smooth;
        }
      }
    }
    for (bool moved = true; moved && !control_.stopped();) moved = move(best, best_v);
    return {best, best_v, num_settings_};
  }

 private:
  /// Height with the sampling rule and the DFE following; -infinity where a limit forbids it.
  double place_and_score(Settings& s) {
    ++num_settings_;
    constexpr double kForbidden = -std::numeric_limits<double>::infinity();
    const Device& device = model_.link.device;
    if (!options_.fir && !keeps_limits(limits_, s.fir)) return kForbidden;
    if (device.receiver.peak_input_v &&
        peak_input_v(limits_, s.fir, model_.input) *
                device.transmitter.swings[s.swing_index].value >
            *device.receiver.peak_input_v * (1.0 + 1e-12)) {
      return kForbidden;
    }
    if (model_.link.sampling != SamplingRule::kBest) {
      s.phase_samples = sampling_instant(model_, s, model_.link.sampling).phase_samples;
    }
    s.dfe_v = best_dfe(model_, s);
    return objective_height_v(model_, s);
  }

  /// The FIR as real values, codes nearest to the optimum. False when nothing allowed is near.
  bool continuous(Settings& s) {
    const auto n = static_cast<unsigned>(limits_.taps.size());
    if (std::any_of(limits_.taps.begin(), limits_.taps.end(),
                    [](const FirTap& tap) { return tap.is_remainder; })) {
      return false;  // its codes are searched by moves
    }
    nlopt::opt optimizer(nlopt::LN_COBYLA, n);
    std::vector<double> lower, upper, x;
    for (unsigned i = 0; i < n; ++i) {
      const FirTap& tap = limits_.taps[i];
      lower.push_back(tap.position == 0 && limits_.min_main ? std::max(tap.min, *limits_.min_main)
                                                            : tap.min);
      upper.push_back(std::max(lower.back(), tap.max));
      x.push_back(std::clamp(s.fir[static_cast<Eigen::Index>(i)], lower[i], upper[i]));
    }
    optimizer.set_lower_bounds(lower);
    optimizer.set_upper_bounds(upper);
    struct Context {
      Local* self;
      Settings settings;
    } context{this, s};
    optimizer.set_max_objective(
        [](const std::vector<double>& at, std::vector<double>&, void* data) {
          auto& c = *static_cast<Context*>(data);
          c.settings.fir = Eigen::Map<const Eigen::VectorXd>(
              at.data(), static_cast<Eigen::Index>(at.size()));
          ++c.self->num_settings_;
          c.settings.dfe_v = settled_dfe(c.self->model_, c.settings);
          return objective_height_v(c.self->model_, c.settings);
        },
        &context);
    double peak_limit = limits_.peak_limit;
    optimizer.add_inequality_constraint(
        [](const std::vector<double>& at, std::vector<double>&, void* data) {
          double sum = 0.0;
          for (const double value : at) sum += std::abs(value);
          return sum - *static_cast<double*>(data);
        },
        &peak_limit, 0.0);
    optimizer.set_initial_step(0.02);
    optimizer.set_xtol_abs(1e-7);
    optimizer.set_maxeval(kMaxEvaluations);
    double value = 0.0;
    try {
      optimizer.optimize(x, value);
    } catch (const nlopt::roundoff_limited&) {
      // x is as good as rounding lets it be
    }
    Eigen::VectorXd taps = Eigen::Map<const Eigen::VectorXd>(x.data(), static_cast<Eigen::Index>(n));
    const double sum = taps.lpNorm<1>();
    if (sum > limits_.peak_limit + kLimitTolerance / 2) taps *= limits_.peak_limit / sum;
    bool has_codes = false;
    for (const FirTap& tap : limits_.taps) has_codes = has_codes || !tap.codes.empty();
    if (has_codes) {
      const auto codes = nearest_codes(limits_, taps);
      if (!codes) return false;
      taps = *codes;
    }
    s.fir = taps;
    return true;
  }

  /// The best of all single and paired moves, taken if it helps.
  bool move(Settings& best, double& best_v) {
    const Settings here = best;
    const double here_v = best_v;
    const auto offer = [&](Settings trial) {
      const double trial_v = place_and_score(trial);
      if (trial_v > best_v + kBetterV) {
        best_v = trial_v;
        best = std::move(trial);
      }
    };
    const auto n = static_cast<Eigen::Index>(limits_.taps.size());
    const auto stepped = [&](const Eigen::VectorXd& fir, Eigen::Index i,
                             int by) -> std::optional<Eigen::VectorXd> {
      const FirTap& tap = limits_.taps[static_cast<std::size_t>(i)];
      if (tap.codes.empty()) return std::nullopt;
      const auto nearest = std::min_element(
          tap.codes.begin(), tap.codes.end(), [&](const Code& a, const Code& b) {
            return std::abs(a.value - fir[i]) < std::abs(b.value - fir[i]);
          });
      const std::ptrdiff_t to = (nearest - tap.codes.begin()) + by;
      if (to < 0 || to >= static_cast<std::ptrdiff_t>(tap.codes.size())) return std::nullopt;
      Eigen::VectorXd moved = fir;
      moved[i] = tap.codes[static_cast<std::size_t>(to)].value;
      return with_remainder(limits_, moved);
    };
    for (Eigen::Index i = 0; i < n && !options_.fir; ++i) {
      for (const int by : {-1, 1}) {
        const auto one = stepped(here.fir, i, by);
        if (!one) continue;
        Settings trial = here;
        trial.fir = *one;
        offer(trial);
        for (Eigen::Index j = i + 1; j < n; ++j) {
          for (const int by_j : {-1, 1}) {
            const auto two = stepped(*one, j, by_j);
            if (!two) continue;
            trial.fir = *two;
            offer(trial);
          }
        }
      }
    }
    for (const int by : {-1, 1}) {
      Settings trial = here;
      trial.phase_samples += by;
      if (model_.link.sampling == SamplingRule::kBest) offer(trial);
      trial = here;
      const auto ctle = static_cast<std::ptrdiff_t>(here.ctle_index) + by;
      if (!options_.ctle_index && ctle >= 0 &&
          ctle < static_cast<std::ptrdiff_t>(model_.states.size())) {
        trial.ctle_index = static_cast<std::size_t>(ctle);
        for (const Eigen::Index shift : {-1, 0, 1}) {  // another CTLE state shifts the best phase
          trial.phase_samples = here.phase_samples + shift;
          offer(trial);
        }
      }
      trial = here;
      const auto swing = static_cast<std::ptrdiff_t>(here.swing_index) + by;
      const auto num_swings =
          static_cast<std::ptrdiff_t>(model_.link.device.transmitter.swings.size());
      if (!options_.swing_index && swing >= 0 && swing < num_swings) {
        trial.swing_index = static_cast<std::size_t>(swing);
        offer(trial);
      }
    }
    return best_v > here_v;
  }

  const EyeModel& model_;
  const SearchOptions& options_;
  const RunControl& control_;
  const FirLimits& limits_;
  std::int64_t num_settings_ = 0;
};

}  // namespace

LocalResult local_search(const EyeModel& model, const std::vector<Settings>& starts,
                         const SearchOptions& options, const RunControl& control) {
  if (starts.empty()) throw std::invalid_argument("local_search: no start");
  // Starts are worked on side by side, each by itself, so the result doesn't depend on the threads.
  std::vector<LocalResult> results(starts.size());
  parallel_for(static_cast<int>(starts.size()), control.num_threads, [&](int i) {
    const auto index = static_cast<std::size_t>(i);
    results[index] = Local(model, options, control).from(starts[index]);
  });
  LocalResult best = results.front();
  for (std::size_t i = 1; i < results.size(); ++i) {
    if (results[i].height_v > best.height_v) {
      best.settings = results[i].settings;
      best.height_v = results[i].height_v;
    }
  }
  best.num_settings = 0;
  for (const LocalResult& result : results) best.num_settings += result.num_settings;
  return best;
}

}  // namespace tapwright::search
