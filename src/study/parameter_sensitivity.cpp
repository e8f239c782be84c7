#include "tapwright/study/parameter_sensitivity.hpp"

#include <algorithm>
#include <cmath>

#include "study/model_window.hpp"
#include "study/shared_setting.hpp"
#include "study/smooth_loss.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"
#include "tapwright/eye/score.hpp"
#include "tapwright/study/normal_draws.hpp"

namespace tapwright {
namespace {

// Spreads: round figures of common practice, stated in every report.
constexpr double kLengthShare = 0.05;
constexpr double kLossShare = 0.10;
constexpr double kDielectricShare = 0.05;
constexpr double kImpedanceShare = 0.10;
constexpr double kTemperature_k = 40.0;
constexpr double kTerminationShare = 0.10;
constexpr double kRiseTimeShare = 0.10;
constexpr double kSwingShare = 0.05;
constexpr double kTapSteps = 0.5;
constexpr double kCtleGain_db = 0.5;
constexpr double kCtlePoleShare = 0.10;
constexpr double kCrosstalkShare = 0.10;
constexpr double kNoiseShare = 0.20;
constexpr double kJitterShare = 0.20;
constexpr double kOffset_v = 0.002;

std::string last_key(const std::string& path) {
  const std::size_t dot = path.rfind('.');
  const std::string key = dot == std::string::npos ? path : path.substr(dot + 1);
  return key.substr(0, key.find('['));
}

/// The numbers of the link file that a parameter moves, each by how much of itself for one spread.
struct Moved {
  std::string path;
  double value = 0.0;
  double share = 0.0;
  double amount = 0.0;  ///< in place of the share, in the key's unit
};

std::vector<Moved> moved_numbers(ParameterKind kind, const std::vector<LinkNumber>& numbers) {
  std::vector<Moved> out;
  for (const LinkNumber& n : numbers) {
    const std::string key = last_key(n.path);
    const bool channel = n.path.starts_with("channel.");
    const auto take = [&](double share, double amount = 0.0) {
      out.push_back({n.path, n.value, share, amount});
    };
    switch (kind) {
      case ParameterKind::kLength:
        if (channel && (key == "length_m" || key == "stretch")) take(kLengthShare);
        break;
      case ParameterKind::kLoss:
        if (channel && (key == "loss_db_per_m" || key == "a1_sqrt_ns_per_mm" ||
                        key == "a2_ns_per_mm" || key == "r_ohm_per_m" || key == "tan_delta")) {
          take(kLossShare);
        }
        break;
      case ParameterKind::kDielectric:
        // A delay goes with the square root of the dielectric constant, a capacitance with itself.
        if (channel && (key == "eps_r" || key == "c_pf_per_m")) take(kDielectricShare);
        if (channel && (key == "delay_ns_per_m" || key == "tau_ns_per_mm")) {
          take(std::sqrt(1.0 + kDielectricShare) - 1.0);
        }
        break;
      case ParameterKind::kImpedance:
        if (channel && key == "impedance_ohm") take(kImpedanceShare);
        break;
      case ParameterKind::kTemperature:
        if (channel && key == "temperature_c") take(0.0, kTemperature_k);
        break;
      case ParameterKind::kTermination:
        if (!channel && key == "impedance_ohm") take(kTerminationShare);
        break;
      case ParameterKind::kRiseTime:
        if (n.path == "transmitter.rise_time_ps") take(kRiseTimeShare);
        break;
      default: break;
    }
  }
  return out;
}

bool from_file(ParameterKind kind) { return kind <= ParameterKind::kRiseTime; }

std::string percent(double share) { return significant(100.0 * share, 3) + " %"; }

void scale_ctle_poles(CtleState& state, double factor) {
  if (auto* form = std::get_if<CtleReference>(&state.response)) {
    form->f_p1_hz *= factor;
    form->f_p2_hz *= factor;
  } else if (auto* roots = std::get_if<CtleZerosPoles>(&state.response)) {
    for (auto& pole : roots->poles_hz) pole *= factor;
  } else if (auto* measured = std::get_if<CtleMeasured>(&state.response)) {
    measured->frequencies_hz *= factor;
  }
}

void raise_ctle_gain(CtleState& state, double db) {
  const double ratio = amplitude_db_to_ratio(db);
  if (auto* form = std::get_if<CtleReference>(&state.response)) {
    form->dc_gain_db += db;
  } else if (auto* roots = std::get_if<CtleZerosPoles>(&state.response)) {
    roots->gain *= ratio;
  } else if (auto* measured = std::get_if<CtleMeasured>(&state.response)) {
    measured->values *= ratio;
  }
}

bool is_flat(const CtleState& state) {
  const auto* roots = std::get_if<CtleZerosPoles>(&state.response);
  return roots != nullptr && roots->poles_hz.empty() && roots->zeros_hz.empty();
}

std::vector<LinkNumber> numbers_of(const LinkSource& source) {
  const auto numbers = numbers_in_link(source.text, source.file_name, source.base_directory,
                                       source.changes);
  return numbers ? *numbers.value : std::vector<LinkNumber>{};
}

/// The setting with every tap off by `codes` of a code, to the sides that hurt most as the others
/// stay: found by trying all signs where there are few taps, else tap by tap.
Settings with_tap_errors(const EyeModel& model, const Settings& settings, double codes) {
  const std::vector<FirTap>& taps = model.link.device.transmitter.fir.taps;
  std::vector<std::pair<Eigen::Index, double>> errors;
  for (std::size_t i = 0; i < taps.size(); ++i) {
    const FirTap& tap = taps[i];
    const double step = tap.codes.size() > 1
                            ? (tap.codes.back().value - tap.codes.front().value) /
                                  static_cast<double>(tap.codes.size() - 1)
                            : 0.01 * (tap.max - tap.min);
    if (!tap.is_remainder && step > 0.0) errors.emplace_back(i, codes * step);
  }
  constexpr std::size_t kMostTried = 4;
  if (errors.size() > kMostTried) {
    Settings there = settings;
    for (const auto& [tap, error] : errors) {
      Settings low = settings;
      Settings high = settings;
      low.fir[tap] -= error;
      high.fir[tap] += error;
      const bool low_hurts = objective_height_v(model, low) < objective_height_v(model, high);
      there.fir[tap] += low_hurts ? -error : error;
    }
    return there;
  }
  Settings worst = settings;
  double worst_v = objective_height_v(model, settings);
  for (unsigned signs = 0; signs < 1U << errors.size(); ++signs) {
    Settings there = settings;
    for (std::size_t i = 0; i < errors.size(); ++i) {
      there.fir[errors[i].first] += (signs >> i & 1U) != 0 ? errors[i].second : -errors[i].second;
    }
    const double height_v = objective_height_v(model, there);
    if (height_v >= worst_v) continue;
    worst_v = height_v;
    worst = std::move(there);
  }
  return worst;
}

/// The link at one CTLE state, so that a variation costs one transform and not one for each state.
Link at_state(Link link, std::size_t ctle_index, const std::array<int, 2>& span_ui) {
  link.device.receiver.ctle = {link.device.receiver.ctle[ctle_index]};
  link.signal.span_ui = span_ui;
  return link;
}

class Strayed {
 public:
  Strayed(const EyeModel& model, const LinkSource& source, const Settings& settings)
      : model_(model), source_(source), settings_(settings), parameters_(parameters_of(model.link, source)) {
    alone_ = settings;
    alone_.ctle_index = 0;
  }

  [[nodiscard]] const std::vector<Parameter>& parameters() const { return parameters_; }

  /// Eye heights with parameters off; notes when there is no such link.
  Result<StrayedEye> eye(const std::vector<double>& strays) const {
    const Result<EyeModel> there = model_at(strays, true);
    if (!there) return {std::nullopt, there.notes};
    double tap_codes = 0.0;
    for (std::size_t i = 0; i < parameters_.size(); ++i) {
      if (parameters_[i].kind == ParameterKind::kTapError) tap_codes = kTapSteps * std::abs(strays[i]);
    }
    const Settings here =
        tap_codes > 0.0 ? with_tap_errors(*there.value, alone_, tap_codes) : alone_;
    const double fixed_v = objective_height_v(*there.value, here);
    const double follows_v = objective_height_v(*there.value, readapted(*there.value, here));
    return {StrayedEye{fixed_v, std::max(fixed_v, follows_v)}, {}};
  }

  Result<EyeModel> model_at(const std::vector<double>& strays, bool one_state) const {
    Result<Link> link = strayed_link(model_.link, source_, parameters_, strays);
    if (!link) return {std::nullopt, link.notes};
    if (one_state) link.value = at_state(std::move(*link.value), settings_.ctle_index, model_.span_ui);
    link.value->signal.span_ui = model_.span_ui;
    return {prepare(*link.value), {}};
  }

 private:
  const EyeModel& model_;
  const LinkSource& source_;
  const Settings& settings_;
  std::vector<Parameter> parameters_;
  Settings alone_;
};

std::string mv(double v) { return fixed(v_to_mv(v), 1) + " mV"; }

std::vector<std::string> what_matters(const std::vector<KnobSensitivity>& knobs,
                                      const std::vector<ParameterSensitivity>& parameters) {
  std::vector<std::string> out;
  const KnobSensitivity* knob = nullptr;
  double knob_v = 0.0;
  for (const KnobSensitivity& k : knobs) {
    for (const auto* change : {&k.down, &k.up}) {
      if (!*change || -(*change)->readapted_v <= knob_v) continue;
      knob_v = -(*change)->readapted_v;
      knob = &k;
    }
  }
  if (knob != nullptr) {
    out.push_back("The knob that matters most is " + knob->knob.name + ": one code costs up to " +
                  mv(knob_v) + ", DFE and sampling instant following.");
  }
  const ParameterSensitivity* most = nullptr;
  for (const ParameterSensitivity& p : parameters) {
    if (p.cost_v() > 0.0 && (most == nullptr || p.cost_v() > most->cost_v())) most = &p;
  }
  if (most != nullptr) {
    out.push_back("The parameter that matters most is the " + most->parameter.name + ": " +
                  most->parameter.spread + " cost up to " + mv(most->cost_v()) +
                  ", DFE and sampling instant following.");
  }
  return out;
}

}  // namespace

double ParameterSensitivity::cost_v() const {
  double cost = 0.0;
  for (const auto* side : {&low, &high}) {
    if (*side) cost = std::max(cost, -(*side)->readapted_v);
  }
  return cost;
}

std::vector<Parameter> parameters_of(const Link& link, const LinkSource& source) {
  const std::vector<LinkNumber> numbers = numbers_of(source);
  std::vector<Parameter> out;
  const auto from_numbers = [&](ParameterKind kind, const char* name, const std::string& spread) {
    if (!moved_numbers(kind, numbers).empty()) out.push_back({kind, name, spread, false});
  };
  // Every channel has a length and a loss, a number for them or not.
  out.push_back({ParameterKind::kLength, "channel length", percent(kLengthShare), false});
  out.push_back({ParameterKind::kLoss, "channel loss", percent(kLossShare), false});
  from_numbers(ParameterKind::kDielectric, "dielectric constant", percent(kDielectricShare));
  from_numbers(ParameterKind::kImpedance, "line impedance", percent(kImpedanceShare));
  from_numbers(ParameterKind::kTemperature, "temperature", significant(kTemperature_k, 3) + " K");
  from_numbers(ParameterKind::kTermination, "termination", percent(kTerminationShare));
  from_numbers(ParameterKind::kRiseTime, "rise time", percent(kRiseTimeShare));
  const Device& device = link.device;
  out.push_back({ParameterKind::kSwing, "swing", percent(kSwingShare), false});
  if (device.transmitter.fir.taps.size() > 1) {
    out.push_back({ParameterKind::kTapError, "FIR taps' error", "half a code each", true});
  }
  if (!link.channel.at_slicer && !std::all_of(device.receiver.ctle.begin(), device.receiver.ctle.end(), is_flat)) {
    out.push_back({ParameterKind::kCtleGain, "CTLE gain", significant(kCtleGain_db, 2) + " dB", false});
    out.push_back({ParameterKind::kCtlePoles, "CTLE poles", percent(kCtlePoleShare), false});
  }
  if (!link.crosstalk.empty()) {
    out.push_back({ParameterKind::kCrosstalk, "crosstalk", percent(kCrosstalkShare), false});
  }
  if (device.receiver.noise_density_v2_per_hz || device.receiver.noise_rms_v) {
    out.push_back({ParameterKind::kNoise, "receiver noise", percent(kNoiseShare), false});
  }
  if (link.jitter.random_ui > 0.0) {
    out.push_back({ParameterKind::kRandomJitter, "random jitter", percent(kJitterShare), false});
  }
  if (link.jitter.dual_dirac_peak_ui > 0.0) {
    out.push_back({ParameterKind::kDualDiracJitter, "dual-Dirac jitter", percent(kJitterShare), false});
  }
  out.push_back({ParameterKind::kSlicerOffset, "slicer offset",
                 significant(v_to_mv(kOffset_v), 2) + " mV", true});
  return out;
}

Result<Link> strayed_link(const Link& link, const LinkSource& source,
                          const std::vector<Parameter>& parameters,
                          const std::vector<double>& strays) {
  const std::vector<LinkNumber> numbers = numbers_of(source);
  std::vector<LinkChange> changes;
  SmoothLoss more;
  const SmoothLoss smooth = smooth_loss(link.channel);
  const auto add_loss = [&](double share) {
    more.constant += share * smooth.constant;
    more.by_sqrt += share * smooth.by_sqrt;
    more.by_f += share * smooth.by_f;
  };
  for (std::size_t i = 0; i < parameters.size(); ++i) {
    if (strays[i] == 0.0 || !from_file(parameters[i].kind)) continue;
    const std::vector<Moved> moved = moved_numbers(parameters[i].kind, numbers);
    for (const Moved& m : moved) {
      changes.push_back({m.path, exact(m.value * (1.0 + strays[i] * m.share) + strays[i] * m.amount)});
    }
    if (!moved.empty()) continue;
    if (parameters[i].kind == ParameterKind::kLength) add_loss(strays[i] * kLengthShare);
    if (parameters[i].kind == ParameterKind::kLoss) add_loss(strays[i] * kLossShare);
  }
  Result<Link> changed =
      changes.empty() ? Result<Link>{link, {}} : read_link(source, changes);
  if (!changed) return changed;
  Link& there = *changed.value;
  if (more.constant != 0.0 || more.by_sqrt != 0.0 || more.by_f != 0.0) {
    there.channel = with_more_loss(std::move(there.channel), more);
  }
  Receiver& receiver = there.device.receiver;
  for (std::size_t i = 0; i < parameters.size(); ++i) {
    const double t = strays[i];
    if (t == 0.0) continue;
    switch (parameters[i].kind) {
      case ParameterKind::kSwing:
        for (Swing& swing : there.device.transmitter.swings) swing.value *= 1.0 + t * kSwingShare;
        break;
      case ParameterKind::kCtleGain:
        for (CtleState& state : receiver.ctle) raise_ctle_gain(state, t * kCtleGain_db);
        break;
      case ParameterKind::kCtlePoles:
        for (CtleState& state : receiver.ctle) scale_ctle_poles(state, 1.0 + t * kCtlePoleShare);
        break;
      case ParameterKind::kCrosstalk:
        for (Aggressor& a : there.crosstalk) a.spectrum.values *= 1.0 + t * kCrosstalkShare;
        break;
      case ParameterKind::kNoise: {
        const double factor = 1.0 + t * kNoiseShare;  // of the RMS
        if (auto& density = receiver.noise_density_v2_per_hz) *density *= factor * factor;
        if (auto& rms = receiver.noise_rms_v) *rms *= factor;
        break;
      }
      case ParameterKind::kRandomJitter: there.jitter.random_ui *= 1.0 + t * kJitterShare; break;
      case ParameterKind::kDualDiracJitter:
        there.jitter.dual_dirac_peak_ui *= 1.0 + t * kJitterShare;
        break;
      case ParameterKind::kSlicerOffset:
        // The height counts the narrower side twice, so that an offset costs what as much sensitivity
        // does.
        receiver.sensitivity_v += std::abs(t) * kOffset_v;
        break;
      default: break;
    }
  }
  return changed;
}

ParameterStudy parameter_study(const EyeModel& model, const LinkSource& source,
                               const Settings& settings, const std::vector<KnobSensitivity>& knobs,
                               const ParameterStudyOptions& options, const RunControl& control) {
  const Strayed study(model, source, settings);
  const std::vector<Parameter>& parameters = study.parameters();
  const std::size_t num = parameters.size();
  ParameterStudy out;
  out.nominal_v = objective_height_v(model, settings);
  const double target_v = model.link.target.eye_height_v;
  const auto met = [&](double height_v) { return height_v > 0.0 && height_v >= target_v; };

  // Each alone, to either side.
  std::vector<Result<StrayedEye>> sides(2 * num);
  parallel_for(static_cast<int>(2 * num), control.num_threads, [&](int i) {
    const auto p = static_cast<std::size_t>(i / 2);
    if (control.stopped() || (i % 2 == 0 && parameters[p].one_sided)) return;
    std::vector<double> strays(num, 0.0);
    strays[p] = i % 2 == 0 ? -1.0 : 1.0;
    sides[static_cast<std::size_t>(i)] = study.eye(strays);
  });
  Corner worst{"everything at the end that hurts", std::vector<double>(num, 0.0), {}, false};
  Corner best{"everything at the end that helps", std::vector<double>(num, 0.0), {}, false};
  for (std::size_t p = 0; p < num; ++p) {
    ParameterSensitivity s{parameters[p], {}, {}};
    const auto change = [&](const Result<StrayedEye>& side) -> std::optional<StrayedEye> {
      if (!side) return std::nullopt;
      return StrayedEye{side.value->fixed_v - out.nominal_v, side.value->readapted_v - out.nominal_v};
    };
    s.low = change(sides[2 * p]);
    s.high = change(sides[2 * p + 1]);
    const double low_v = s.low ? s.low->readapted_v : 0.0;
    const double high_v = s.high ? s.high->readapted_v : 0.0;
    if (std::min(low_v, high_v) < 0.0) worst.strays[p] = low_v < high_v ? -1.0 : 1.0;
    if (std::max(low_v, high_v) > 0.0) best.strays[p] = low_v > high_v ? -1.0 : 1.0;
    out.parameters.push_back(std::move(s));
  }

  // All at once.
  out.least_v = out.nominal_v;
  for (Corner* corner : {&worst, &best}) {
    const Result<StrayedEye> eye = study.eye(corner->strays);
    if (!eye) {
      out.notes.push_back(warning_at("", 0, "corner left out, " + corner->name + ": " +
                                                to_string(eye.notes.front())));
      continue;
    }
    corner->eye = *eye.value;
    corner->met = met(eye.value->readapted_v);
    out.least_v = std::min(out.least_v, corner->eye.readapted_v);
    out.corners.push_back(*corner);
  }
  if (options.num_draws > 0) {
    const auto count = static_cast<std::size_t>(options.num_draws);
    std::vector<Result<StrayedEye>> drawn(count);
    parallel_for(options.num_draws, control.num_threads, [&](int i) {
      if (control.stopped()) return;
      NormalDraws normal(options.seed, static_cast<std::uint64_t>(i));
      std::vector<double> strays(num);
      for (double& stray : strays) stray = 0.5 * normal.next_within(4.0);
      drawn[static_cast<std::size_t>(i)] = study.eye(strays);
    });
    Draws draws{0, options.seed, 0, 0, 0.0, 0.0};
    std::vector<double> heights_v;
    for (const Result<StrayedEye>& eye : drawn) {
      if (!eye) continue;
      ++draws.count;
      draws.met_fixed += met(eye.value->fixed_v) ? 1 : 0;
      draws.met += met(eye.value->readapted_v) ? 1 : 0;
      heights_v.push_back(eye.value->readapted_v);
    }
    std::sort(heights_v.begin(), heights_v.end());
    if (!heights_v.empty()) {
      draws.least_v = heights_v.front();
      draws.median_v = heights_v[heights_v.size() / 2];
      out.draws = draws;
    }
  }
  if (options.alternatives && out.corners.size() == 2 && !control.stopped()) {
    // One setting for the link and both corners. The swing's own tolerance scales all alike and
    // would make three devices of one, so it stays out.
    std::vector<EyeModel> set{model};
    for (Corner* corner : {&worst, &best}) {
      std::vector<double> strays = corner->strays;
      for (std::size_t p = 0; p < num; ++p) {
        if (parameters[p].kind == ParameterKind::kSwing) strays[p] = 0.0;
      }
      if (Result<EyeModel> there = study.model_at(strays, false)) {
        set.push_back(within_span(std::move(*there.value)));
      }
    }
    SearchOptions search;
    search.compare = false;
    const JointSolution joint = solve_together(set, search, control);
    // Empty where no setting keeps the limits on all three; the answer is then as robust as any.
    Alternative robust{"robust", joint.settings_of.empty() ? settings : joint.settings, 0.0, 0.0, ""};
    const Settings shared = robust.settings;
    robust.settings = readapted(model, shared);
    robust.height_v = objective_height_v(model, robust.settings);
    robust.least_v = robust.height_v;
    double answer_least_v = out.nominal_v;
    for (std::size_t i = 1; i < set.size(); ++i) {
      const auto least = [&](double& least_v, const Settings& s) {
        least_v = std::min(least_v, objective_height_v(set[i], readapted(set[i], s)));
      };
      least(robust.least_v, shared);
      least(answer_least_v, settings);
    }
    // The answer itself is one of the settings to choose from.
    if (robust.least_v < answer_least_v) {
      robust.settings = settings;
      robust.height_v = out.nominal_v;
      robust.least_v = answer_least_v;
    }
    robust.note = "its least eye over the link and its corners is " + mv(robust.least_v) +
                  ", the answer's " + mv(answer_least_v) + "; it is " +
                  shown(shared_knobs(model.link.device, robust.settings));
    out.alternatives.push_back(std::move(robust));
  }
  out.sentences = what_matters(knobs, out.parameters);
  return out;
}

}  // namespace tapwright
