#include "study/shared_setting.hpp"

#include <algorithm>
#include <cmath>

#include "tapwright/base/text.hpp"

namespace tapwright {
namespace {

std::optional<std::size_t> index_of_code(const std::vector<Code>& codes, int code) {
  const auto at = std::find_if(codes.begin(), codes.end(), [&](const Code& c) { return c.code == code; });
  if (at == codes.end()) return std::nullopt;
  return static_cast<std::size_t>(at - codes.begin());
}

const KnobValue* find(const std::vector<KnobValue>& knobs, const std::string& name) {
  const auto at = std::find_if(knobs.begin(), knobs.end(),
                               [&](const KnobValue& k) { return k.knob == name; });
  return at == knobs.end() ? nullptr : &*at;
}

}  // namespace

std::vector<KnobValue> knob_values(const EyeModel& model, const Settings& settings) {
  std::vector<KnobValue> out;
  for (const KnobReading& r : readings(model.link.device, settings)) {
    out.push_back({r.knob.name, r.value, r.code});
  }
  out.push_back(
      {"phase", static_cast<double>(settings.phase_samples) / model.link.samples_per_ui, {}});
  return out;
}

std::vector<KnobValue> shared_knobs(const Device& device, const Settings& settings) {
  std::vector<KnobValue> out;
  for (const KnobReading& r : readings(device, settings)) {
    if (r.knob.kind != Knob::Kind::kDfe) out.push_back({r.knob.name, r.value, r.code});
  }
  return out;
}

std::optional<Settings> carried_over(const std::vector<KnobValue>& knobs, const Device& device) {
  Settings settings;
  const Transmitter& transmitter = device.transmitter;
  if (const KnobValue* swing = find(knobs, "swing"); swing != nullptr && swing->code) {
    const auto index = index_of_code(transmitter.swings, *swing->code);
    if (!index) return std::nullopt;
    settings.swing_index = *index;
  }
  const FirLimits& fir = transmitter.fir;
  settings.fir = Eigen::VectorXd::Zero(static_cast<Eigen::Index>(fir.taps.size()));
  for (std::size_t i = 0; i < fir.taps.size(); ++i) {
    const FirTap& tap = fir.taps[i];
    double& value = settings.fir[static_cast<Eigen::Index>(i)];
    const KnobValue* knob = find(knobs, "fir:" + std::to_string(tap.position));
    if (knob == nullptr) return std::nullopt;
    value = knob->value;
    if (tap.codes.empty() || !knob->code) continue;
    const auto index = index_of_code(tap.codes, *knob->code);
    if (!index) return std::nullopt;
    value = tap.codes[*index].value;
  }
  settings.fir = with_remainder(fir, settings.fir);
  if (!keeps_limits(fir, settings.fir)) return std::nullopt;
  const std::vector<CtleState>& states = device.receiver.ctle;
  const KnobValue* ctle = find(knobs, "ctle");
  const KnobValue* gain = find(knobs, "gain");
  const auto state = std::find_if(states.begin(), states.end(), [&](const CtleState& s) {
    return (ctle == nullptr || !ctle->code || s.code == *ctle->code) &&
           (gain == nullptr || !gain->code || (s.gain && s.gain->code == *gain->code));
  });
  if (state == states.end()) return std::nullopt;
  settings.ctle_index = static_cast<std::size_t>(state - states.begin());
  settings.dfe_v = Eigen::VectorXd::Zero(static_cast<Eigen::Index>(device.receiver.dfe.size()));
  return settings;
}

std::string shown(const std::vector<KnobValue>& knobs) {
  std::string text;
  for (const KnobValue& k : knobs) {
    text += (text.empty() ? "" : ", ") + k.knob + " " +
            (k.code ? std::to_string(*k.code) : significant(k.value, 4));
  }
  return text;
}

bool keeps_input_limit(const EyeModel& model, const Settings& settings) {
  const auto& limit_v = model.link.device.receiver.peak_input_v;
  if (!limit_v) return true;
  const Transmitter& transmitter = model.link.device.transmitter;
  const double at_1v = peak_input_v(transmitter.fir, settings.fir, model.input);
  return transmitter.swings[settings.swing_index].value * at_1v <= *limit_v * (1.0 + 1e-12);
}

bool same_knobs(const Device& a, const Device& b) {
  const FirLimits& fa = a.transmitter.fir;
  const FirLimits& fb = b.transmitter.fir;
  return a.transmitter.swings == b.transmitter.swings && fa.peak_limit == fb.peak_limit &&
         fa.min_main == fb.min_main &&
         std::equal(fa.taps.begin(), fa.taps.end(), fb.taps.begin(), fb.taps.end(),
                    [](const FirTap& x, const FirTap& y) {
                      return x.position == y.position && x.min == y.min && x.max == y.max &&
                             x.codes == y.codes && x.is_remainder == y.is_remainder;
                    }) &&
         std::equal(a.receiver.ctle.begin(), a.receiver.ctle.end(), b.receiver.ctle.begin(),
                    b.receiver.ctle.end(), [](const CtleState& x, const CtleState& y) {
                      return x.code == y.code && x.gain == y.gain;
                    });
}

}  // namespace tapwright
