#include "tapwright/study/audit.hpp"

#include <algorithm>
#include <cmath>
#include <numeric>
#include <stdexcept>

#include "study/shared_setting.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"
#include "tapwright/eye/sampling.hpp"
#include "tapwright/study/knob_sensitivity.hpp"

namespace tapwright {
namespace {

std::string mv(double v) { return fixed(v_to_mv(v), 1) + " mV"; }

/// `to` with one knob as in `from`; a remainder tap follows. Empty when that breaks a limit.
std::optional<Settings> with_knob_of(const Device& device, const Settings& to, const Settings& from,
                                     const Knob& knob) {
  Settings s = to;
  const auto at = static_cast<Eigen::Index>(knob.index);
  switch (knob.kind) {
    case Knob::Kind::kSwing: s.swing_index = from.swing_index; break;
    case Knob::Kind::kCtle:
    case Knob::Kind::kGain: {
      const auto& states = device.receiver.ctle;
      const CtleState& a = states[to.ctle_index];
      const CtleState& b = states[from.ctle_index];
      const int code = knob.kind == Knob::Kind::kCtle ? b.code : a.code;
      const auto gain = knob.kind == Knob::Kind::kGain ? b.gain : a.gain;
      const auto found = std::find_if(states.begin(), states.end(), [&](const CtleState& c) {
        return c.code == code && c.gain.has_value() == gain.has_value() && (!gain || c.gain->code == gain->code);
      });
      if (found == states.end()) return std::nullopt;
      s.ctle_index = static_cast<std::size_t>(found - states.begin());
      break;
    }
    case Knob::Kind::kFir: {
      const FirLimits& limits = device.transmitter.fir;
      if (limits.taps[knob.index].is_remainder) return std::nullopt;
      s.fir[at] = from.fir[at];
      s.fir = with_remainder(limits, s.fir);
      if (!keeps_limits(limits, s.fir)) return std::nullopt;
      break;
    }
    case Knob::Kind::kDfe: s.dfe_v[at] = from.dfe_v[at]; break;
  }
  return s;
}

/// Place of a reading in its knob's list, to say how many codes two readings are apart.
std::optional<int> place_in_list(const Device& device, const Settings& s, const Knob& knob) {
  const auto at = static_cast<Eigen::Index>(knob.index);
  switch (knob.kind) {
    case Knob::Kind::kSwing: return static_cast<int>(s.swing_index);
    case Knob::Kind::kCtle: {
      std::vector<int> codes;
      for (const CtleState& state : device.receiver.ctle) {
        if (std::find(codes.begin(), codes.end(), state.code) == codes.end()) codes.push_back(state.code);
      }
      return static_cast<int>(std::find(codes.begin(), codes.end(), device.receiver.ctle[s.ctle_index].code) - codes.begin());
    }
    case Knob::Kind::kGain: {
      const auto& gain = device.receiver.ctle[s.ctle_index].gain;
      return gain ? std::optional(gain->code) : std::nullopt;
    }
    case Knob::Kind::kFir: {
      const FirTap& tap = device.transmitter.fir.taps[knob.index];
      if (tap.codes.empty()) return std::nullopt;
      return static_cast<int>(nearest_code(tap.codes, s.fir[at]));
    }
    case Knob::Kind::kDfe: {
      const DfeTap& tap = device.receiver.dfe[knob.index];
      if (tap.codes.empty() || tap.relative) return std::nullopt;
      return static_cast<int>(nearest_code(tap.codes, s.dfe_v[at]));
    }
  }
  return std::nullopt;
}

/// The read-back settings with what is missing filled in: swing, CTLE and FIR by the best that the
/// rest allows, sampling instant by the link's rule, DFE adapted.
Settings filled_in(const EyeModel& model, const ReadBackSettings& given, const AuditOptions& options,
                   std::vector<std::string>* filled) {
  SearchOptions search;
  search.compare = false;
  search.max_nodes = options.max_nodes;
  search.swing_index = given.swing_index;
  search.ctle_index = given.ctle_index;
  search.fir = given.fir;
  Settings s;
  if (given.swing_index && given.ctle_index && given.fir) {
    s.swing_index = *given.swing_index;
    s.ctle_index = *given.ctle_index;
    s.fir = *given.fir;
    s.dfe_v = Eigen::VectorXd::Zero(static_cast<Eigen::Index>(model.link.device.receiver.dfe.size()));
  } else {
    s = solve(model, search).settings;
    if (!given.swing_index) filled->push_back("swing: not read back, taken at the best for the rest");
    if (!given.ctle_index) filled->push_back("ctle: not read back, taken at the best for the rest");
    if (!given.fir) filled->push_back("FIR: not read back, taken at the best for the rest");
  }
  if (given.phase_samples) {
    s.phase_samples = *given.phase_samples;
  } else {
    s.phase_samples = sampling_instant(model, s, model.link.sampling).phase_samples;
    filled->push_back("sampling: not read back, by the link's rule");
  }
  if (given.dfe_v) {
    s.dfe_v = *given.dfe_v;
  } else {
    s.dfe_v = best_dfe(model, s);
    filled->push_back("DFE: not read back, adapted");
  }
  return s;
}

AuditedLane audit_one(const ReadBackLane& lane, const ReadBackSettings& given, const EyeModel& model,
                      const AuditOptions& options) {
  const Device& device = model.link.device;
  AuditedLane out;
  out.lane = lane.lane;
  out.measured_height_v = lane.eye_height_v;
  out.measured_width_ui = lane.eye_width_ui;
  SearchOptions search;
  search.max_nodes = options.max_nodes;
  search.compare = false;
  out.best = solve(model, search);
  out.read_back = filled_in(model, given, options, &out.filled);
  // Without a read-back instant the best of all instants was looked for; an equal setting with the
  // best one's codes is the best one.
  out.predicted = score(model, out.read_back);
  out.height_v = objective_height_v(model, out.read_back);
  out.best_v = objective_height_v(model, out.best.settings);
  out.gap_v = std::max(0.0, out.best_v - out.height_v);
  if (out.height_v > 0.0 && out.best_v > 0.0) {
    out.gap_db = std::max(0.0, ratio_to_amplitude_db(out.best_v / out.height_v));
  }

  search.swing_index = out.read_back.swing_index;
  search.ctle_index = out.read_back.ctle_index;
  const bool same_state = out.read_back.swing_index == out.best.settings.swing_index &&
                          out.read_back.ctle_index == out.best.settings.ctle_index;
  const double state_best_v = same_state ? out.best_v : objective_height_v(model, solve(model, search).settings);
  out.adapted = adaptation(model, out.read_back.swing_index, out.read_back.ctle_index);
  const double joint_v = objective_height_v(model, out.adapted.joint);
  const double clock_v = objective_height_v(model, out.adapted.at_clock);
  const double clipped_v = objective_height_v(model, out.adapted.clipped);
  const double settled_v = objective_height_v(model, out.adapted.settled);
  out.parts.state_v = out.best_v - state_best_v;
  out.parts.objective_v = state_best_v - joint_v;
  out.parts.phase_v = joint_v - clock_v;
  out.parts.clipping_v = clock_v - clipped_v;
  out.parts.quantisation_v = clipped_v - settled_v;
  out.parts.unexplained_v = settled_v - out.height_v;

  const auto now = readings(device, out.read_back);
  const auto best = readings(device, out.best.settings);
  for (std::size_t i = 0; i < now.size(); ++i) {
    const KnobReading& r = now[i];
    if (r.at_least != r.at_most) {
      const bool idle = r.knob.kind == Knob::Kind::kFir && std::abs(r.value) < 1e-12;
      if (!idle) out.at_rail.push_back(r.knob.name + " at the " + (r.at_least ? "lower" : "upper") + " end of its range (" + r.shown + ")");
    }
    if (std::abs(r.value - best[i].value) < 1e-9 && r.code == best[i].code) continue;
    const auto there = with_knob_of(device, out.read_back, out.best.settings, r.knob);
    if (!there || !keeps_input_limit(model, *there)) continue;
    KnobCost cost{r.knob, r.shown, best[i].shown, {}, 0.0, 0.0};
    const auto from = place_in_list(device, out.best.settings, r.knob);
    const auto to = place_in_list(device, out.read_back, r.knob);
    if (from && to) cost.codes_off = *to - *from;
    cost.gain_v = objective_height_v(model, *there) - out.height_v;
    cost.gain_readapted_v = r.knob.kind == Knob::Kind::kDfe
                                ? cost.gain_v
                                : std::max(cost.gain_v, objective_height_v(model, readapted(model, *there)) - out.height_v);
    out.costs.push_back(std::move(cost));
  }
  std::stable_sort(out.costs.begin(), out.costs.end(),
                   [](const KnobCost& a, const KnobCost& b) { return a.gain_readapted_v > b.gain_readapted_v; });

  const bool gap_fine = out.gap_v <= 1e-9 || (out.gap_db && *out.gap_db <= options.tolerance_db + 1e-12);
  out.passed = gap_fine && (!options.tolerance_v || out.gap_v <= *options.tolerance_v + 1e-12) && out.predicted.target_met();
  if (!gap_fine || (options.tolerance_v && out.gap_v > *options.tolerance_v + 1e-12)) {
    std::string line = "leaves " + mv(out.gap_v) + (out.gap_db ? " (" + fixed(*out.gap_db, 2) + " dB)" : "") + " of the eye unused";
    if (!out.costs.empty() && out.costs.front().gain_readapted_v > 0.1 * out.gap_v) {
      const KnobCost& worst = out.costs.front();
      line += "; " + worst.knob.name + " stands at " + worst.at + " where the best has " + worst.best;
      if (worst.codes_off && *worst.codes_off != 0) {
        line += ", " + std::to_string(std::abs(*worst.codes_off)) + (std::abs(*worst.codes_off) == 1 ? " code " : " codes ") +
                (*worst.codes_off > 0 ? "up" : "down") + " its list";
      }
      line += ", which costs " + mv(worst.gain_readapted_v);
    }
    out.remarks.push_back(line);
    for (const std::string& rail : out.at_rail) {
      // A rail that the best setting is at too is no news.
      bool shared = false;
      for (const KnobReading& b : best) {
        shared = shared || (rail.starts_with(b.knob.name + " ") && b.at_least != b.at_most &&
                            rail.find(b.at_least ? "lower" : "upper") != std::string::npos);
      }
      if (!shared) out.remarks.push_back(rail + ", where the best setting is not");
    }
  }
  for (const std::string& missed : out.predicted.missed) out.remarks.push_back("target missed: " + missed);
  return out;
}

std::vector<double> ranks(const std::vector<double>& values) {
  std::vector<std::size_t> order(values.size());
  std::iota(order.begin(), order.end(), std::size_t{0});
  std::stable_sort(order.begin(), order.end(), [&](std::size_t a, std::size_t b) { return values[a] < values[b]; });
  std::vector<double> rank(values.size());
  for (std::size_t i = 0; i < order.size();) {
    std::size_t end = i;
    while (end < order.size() && values[order[end]] == values[order[i]]) ++end;
    for (std::size_t k = i; k < end; ++k) rank[order[k]] = 0.5 * static_cast<double>(i + end - 1);
    i = end;
  }
  return rank;
}

std::optional<double> correlation(const std::vector<double>& a, const std::vector<double>& b) {
  const auto n = static_cast<Eigen::Index>(a.size());
  Eigen::VectorXd x = Eigen::Map<const Eigen::VectorXd>(a.data(), n);
  Eigen::VectorXd y = Eigen::Map<const Eigen::VectorXd>(b.data(), n);
  x.array() -= x.mean();
  y.array() -= y.mean();
  const double scale = x.norm() * y.norm();
  if (!(scale > 0.0)) return std::nullopt;
  return x.dot(y) / scale;
}

double median(std::vector<double> values) {
  std::sort(values.begin(), values.end());
  const std::size_t n = values.size();
  return n % 2 == 1 ? values[n / 2] : 0.5 * (values[n / 2 - 1] + values[n / 2]);
}

void compare_with_measured(Audit* audit) {
  std::vector<double> predicted;
  std::vector<double> measured;
  std::vector<std::size_t> which;
  for (std::size_t i = 0; i < audit->lanes.size(); ++i) {
    if (!audit->lanes[i].measured_height_v) continue;
    predicted.push_back(audit->lanes[i].height_v);
    measured.push_back(*audit->lanes[i].measured_height_v);
    which.push_back(i);
  }
  if (which.size() < 3) return;
  audit->rank_correlation = correlation(ranks(predicted), ranks(measured));
  // The gain by the median ratio: one odd lane must not move what the others are judged by.
  std::vector<double> ratios;
  for (std::size_t k = 0; k < which.size(); ++k) {
    if (predicted[k] > 0.0 && measured[k] > 0.0) ratios.push_back(measured[k] / predicted[k]);
  }
  if (ratios.empty()) return;
  const double gain = median(ratios);
  audit->gain = gain;
  std::vector<double> residuals;
  double square = 0.0;
  for (std::size_t k = 0; k < which.size(); ++k) {
    residuals.push_back(std::abs(measured[k] - gain * predicted[k]));
    square += residuals.back() * residuals.back();
  }
  audit->residual_v = std::sqrt(square / static_cast<double>(which.size()));
  const double usual = median(residuals);
  for (std::size_t k = 0; k < which.size(); ++k) {
    AuditedLane& lane = audit->lanes[which[k]];
    // Five times the median and a twentieth of the eye: far outside what scatter would do.
    if (residuals[k] > 5.0 * usual && residuals[k] > 0.05 * std::abs(gain * predicted[k])) {
      lane.remarks.push_back("measured " + mv(measured[k]) + " where " + mv(gain * predicted[k]) +
                             " is expected from the other lanes: its channel or device differs from the model more than theirs");
    }
  }
}

/// Pairs of lanes whose codes fit each other's channel clearly better than their own.
void find_swapped(const std::vector<EyeModel>& models, Audit* audit) {
  constexpr std::size_t kMostLanes = 64;
  const std::size_t n = audit->lanes.size();
  if (n < 2 || n > kMostLanes) return;
  const auto height = [&](std::size_t codes_of, std::size_t on) {
    Settings s = audit->lanes[codes_of].read_back;
    const Device& a = models[on].link.device;
    if (s.swing_index >= a.transmitter.swings.size() || s.ctle_index >= a.receiver.ctle.size() ||
        s.fir.size() != static_cast<Eigen::Index>(a.transmitter.fir.taps.size()) ||
        s.dfe_v.size() != static_cast<Eigen::Index>(a.receiver.dfe.size())) {
      return -1.0;
    }
    // The instant belongs to the channel; the codes are what was read back.
    s.phase_samples = sampling_instant(models[on], s, models[on].link.sampling).phase_samples;
    return objective_height_v(models[on], s);
  };
  for (std::size_t i = 0; i < n; ++i) {
    for (std::size_t j = i + 1; j < n; ++j) {
      AuditedLane& a = audit->lanes[i];
      AuditedLane& b = audit->lanes[j];
      const double gap_now = a.gap_v + b.gap_v;
      if (gap_now < 0.02 * (std::abs(a.best_v) + std::abs(b.best_v))) continue;
      const double crossed = std::max(0.0, a.best_v - height(j, i)) + std::max(0.0, b.best_v - height(i, j));
      if (crossed < 0.35 * gap_now) {
        const std::string line = "lanes " + printable_text(a.lane, 40) + " and " + printable_text(b.lane, 40) +
                                 ": each one's codes fit the other's channel (gap " + mv(crossed) + " instead of " + mv(gap_now) +
                                 " together); the two channels may be swapped";
        audit->remarks.push_back(line);
        a.remarks.push_back("its codes fit the channel of lane " + printable_text(b.lane, 40) + "; the channels may be swapped");
        b.remarks.push_back("its codes fit the channel of lane " + printable_text(a.lane, 40) + "; the channels may be swapped");
      }
    }
  }
}

}  // namespace

bool Audit::passed() const {
  return std::all_of(lanes.begin(), lanes.end(), [](const AuditedLane& lane) { return lane.passed; });
}

Result<Audit> audit_lanes(const std::vector<ReadBackLane>& lanes, const std::vector<EyeModel>& models,
                          const std::string& file_name, const AuditOptions& options, const RunControl& control) {
  if (lanes.size() != models.size()) throw std::invalid_argument("audit_lanes: one model a lane is needed");
  std::vector<Diagnostic> notes;
  std::vector<ReadBackSettings> given(lanes.size());
  for (std::size_t i = 0; i < lanes.size(); ++i) {
    auto settings = settings_of(lanes[i], models[i].link, file_name);
    for (Diagnostic& note : settings.notes) notes.push_back(std::move(note));
    if (settings) given[i] = *settings.value;
  }
  if (has_error(notes)) return {std::nullopt, std::move(notes)};
  Audit audit;
  audit.lanes.resize(lanes.size());
  parallel_for(static_cast<int>(lanes.size()), control.num_threads, [&](int i) {
    if (control.stopped()) return;
    const auto at = static_cast<std::size_t>(i);
    audit.lanes[at] = audit_one(lanes[at], given[at], models[at], options);
    control.report(static_cast<double>(i + 1) / static_cast<double>(lanes.size()), "audit");
  });
  if (control.stopped()) return {std::move(audit), {}};
  compare_with_measured(&audit);
  find_swapped(models, &audit);
  return {std::move(audit), {}};
}

}  // namespace tapwright
