#include "tapwright/equalizer/knobs.hpp"

#include <algorithm>
#include <cmath>
#include <stdexcept>

#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"

namespace tapwright {
namespace {

constexpr double kRailSlack = 1e-9;  // decimal limits are not exact in binary

void require_fit(const Device& device, const Settings& settings) {
  if (settings.swing_index >= device.transmitter.swings.size() ||
      settings.ctle_index >= device.receiver.ctle.size() ||
      settings.fir.size() != static_cast<Eigen::Index>(device.transmitter.fir.taps.size()) ||
      settings.dfe_v.size() != static_cast<Eigen::Index>(device.receiver.dfe.size())) {
    throw std::invalid_argument("knobs: the settings do not fit the device");
  }
}

/// States that differ from state `from` in one knob only, in list order: same gain code for the
/// CTLE knob, same CTLE code for the gain knob.
std::vector<std::size_t> states_beside(const Receiver& receiver, std::size_t from,
                                       Knob::Kind kind) {
  const auto key = [&](const CtleState& s) {
    return kind == Knob::Kind::kCtle ? (s.gain ? s.gain->code : 0) : s.code;
  };
  std::vector<std::size_t> states;
  for (std::size_t i = 0; i < receiver.ctle.size(); ++i) {
    if (key(receiver.ctle[i]) == key(receiver.ctle[from])) states.push_back(i);
  }
  return states;
}

std::string signed_fixed(double value, int decimals) {
  const std::string text = fixed(value, decimals);
  return value > 0.0 && !text.starts_with('-') ? "+" + text : text;
}

}  // namespace

std::size_t nearest_code(const std::vector<Code>& codes, double value) {
  const auto nearest = std::min_element(codes.begin(), codes.end(), [&](const Code& a, const Code& b) {
    return std::abs(a.value - value) < std::abs(b.value - value);
  });
  return static_cast<std::size_t>(nearest - codes.begin());
}

std::vector<Knob> knobs_of(const Device& device) {
  std::vector<Knob> knobs{{Knob::Kind::kSwing, 0, "swing"}};
  const auto& taps = device.transmitter.fir.taps;
  for (std::size_t i = 0; i < taps.size(); ++i) {
    knobs.push_back({Knob::Kind::kFir, i, "fir:" + std::to_string(taps[i].position)});
  }
  knobs.push_back({Knob::Kind::kCtle, 0, "ctle"});
  if (!device.receiver.ctle.empty() && device.receiver.ctle.front().gain) {
    knobs.push_back({Knob::Kind::kGain, 0, "gain"});
  }
  for (std::size_t i = 0; i < device.receiver.dfe.size(); ++i) {
    knobs.push_back(
        {Knob::Kind::kDfe, i, "dfe:" + std::to_string(device.receiver.dfe[i].position)});
  }
  return knobs;
}

std::vector<KnobReading> readings(const Device& device, const Settings& settings) {
  require_fit(device, settings);
  std::vector<KnobReading> all;
  for (const Knob& knob : knobs_of(device)) {
    KnobReading r;
    r.knob = knob;
    const auto at = static_cast<Eigen::Index>(knob.index);
    switch (knob.kind) {
      case Knob::Kind::kSwing: {
        const auto& swings = device.transmitter.swings;
        r.value = peak_v_to_mvppd(swings[settings.swing_index].value);
        r.unit = "mVppd";
        r.shown = significant(r.value, 6) + " mVppd";
        r.code = swings[settings.swing_index].code;
        r.at_least = settings.swing_index == 0;
        r.at_most = settings.swing_index + 1 == swings.size();
        break;
      }
      case Knob::Kind::kFir: {
        const FirTap& tap = device.transmitter.fir.taps[knob.index];
        r.value = settings.fir[at];
        r.shown = signed_fixed(r.value, 4);
        if (!tap.codes.empty()) r.code = tap.codes[nearest_code(tap.codes, r.value)].code;
        const double low = tap.codes.empty() ? tap.min : tap.codes.front().value;
        const double high = tap.codes.empty() ? tap.max : tap.codes.back().value;
        r.at_least = !tap.is_remainder && r.value <= low + kRailSlack;
        r.at_most = !tap.is_remainder && r.value >= high - kRailSlack;
        break;
      }
      case Knob::Kind::kCtle:
      case Knob::Kind::kGain: {
        const CtleState& state = device.receiver.ctle[settings.ctle_index];
        const auto states = states_beside(device.receiver, settings.ctle_index, knob.kind);
        r.at_least = settings.ctle_index == states.front();
        r.at_most = settings.ctle_index == states.back();
        if (knob.kind == Knob::Kind::kCtle) {
          r.code = state.code;
          r.shown = state.label;
          if (const auto* form = std::get_if<CtleReference>(&state.response)) {
            r.value = form->dc_gain_db;
            r.unit = "dB";
          } else {
            r.value = state.code;
          }
        } else {
          r.code = state.gain->code;
          r.value = ratio_to_amplitude_db(state.gain->value);
          r.unit = "dB";
          r.shown = signed_fixed(r.value, 2) + " dB";
        }
        break;
      }
      case Knob::Kind::kDfe: {
        const DfeTap& tap = device.receiver.dfe[knob.index];
        r.value = v_to_mv(settings.dfe_v[at]);
        r.unit = "mV";
        r.shown = signed_fixed(r.value, 1) + " mV";
        if (!tap.codes.empty() && !tap.relative) {
          const std::size_t i = nearest_code(tap.codes, settings.dfe_v[at]);
          r.code = tap.codes[i].code;
          r.at_least = i == 0;
          r.at_most = i + 1 == tap.codes.size();
        } else if (!tap.relative) {
          r.at_least = settings.dfe_v[at] <= -tap.max + kRailSlack;
          r.at_most = settings.dfe_v[at] >= tap.max - kRailSlack;
        }
        break;
      }
    }
    all.push_back(std::move(r));
  }
  return all;
}

std::optional<Settings> moved(const Device& device, const Settings& settings, const Knob& knob,
                              int steps, double main_cursor_v) {
  require_fit(device, settings);
  constexpr double kShareOfRange = 0.01;
  Settings out = settings;
  const auto at = static_cast<Eigen::Index>(knob.index);
  const auto stepped = [&](std::size_t from, std::size_t size) -> std::optional<std::size_t> {
    const long long to = static_cast<long long>(from) + steps;
    if (to < 0 || to >= static_cast<long long>(size)) return std::nullopt;
    return static_cast<std::size_t>(to);
  };
  switch (knob.kind) {
    case Knob::Kind::kSwing: {
      const auto to = stepped(settings.swing_index, device.transmitter.swings.size());
      if (!to) return std::nullopt;
      out.swing_index = *to;
      return out;
    }
    case Knob::Kind::kFir: {
      const FirLimits& limits = device.transmitter.fir;
      const FirTap& tap = limits.taps[knob.index];
      if (tap.is_remainder) return std::nullopt;
      if (tap.codes.empty()) {
        if (tap.max <= tap.min) return std::nullopt;
        out.fir[at] += steps * kShareOfRange * (tap.max - tap.min);
      } else {
        const auto to = stepped(nearest_code(tap.codes, settings.fir[at]), tap.codes.size());
        if (!to) return std::nullopt;
        out.fir[at] = tap.codes[*to].value;
      }
      out.fir = with_remainder(limits, out.fir);
      if (!keeps_limits(limits, out.fir)) return std::nullopt;
      return out;
    }
    case Knob::Kind::kCtle:
    case Knob::Kind::kGain: {
      const auto states = states_beside(device.receiver, settings.ctle_index, knob.kind);
      const auto here = std::find(states.begin(), states.end(), settings.ctle_index);
      const auto to = stepped(static_cast<std::size_t>(here - states.begin()), states.size());
      if (!to) return std::nullopt;
      out.ctle_index = states[*to];
      return out;
    }
    case Knob::Kind::kDfe: {
      const DfeTap& tap = device.receiver.dfe[knob.index];
      const double unit_v = tap.relative ? std::abs(main_cursor_v) : 1.0;
      if (tap.codes.empty()) {
        out.dfe_v[at] += steps * kShareOfRange * 2.0 * tap.max * unit_v;
        if (std::abs(out.dfe_v[at]) > tap.max * unit_v * (1.0 + kRailSlack)) return std::nullopt;
      } else {
        if (unit_v == 0.0) return std::nullopt;
        const auto to = stepped(nearest_code(tap.codes, settings.dfe_v[at] / unit_v),
                                tap.codes.size());
        if (!to) return std::nullopt;
        out.dfe_v[at] = tap.codes[*to].value * unit_v;
      }
      return out;
    }
  }
  return std::nullopt;
}

}  // namespace tapwright
