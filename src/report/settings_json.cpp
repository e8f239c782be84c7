#include "report/settings_json.hpp"

#include "tapwright/base/units.hpp"
#include "tapwright/equalizer/knobs.hpp"

namespace tapwright {

using Json = nlohmann::ordered_json;

Json settings_json(const EyeModel& model, const Settings& settings) {
  const Device& device = model.link.device;
  Json out;
  Json taps = Json::array();
  for (const KnobReading& r : readings(device, settings)) {
    if (r.knob.kind == Knob::Kind::kSwing) out["swing_mvppd"] = r.value;
    if (r.knob.kind != Knob::Kind::kFir) continue;
    taps.push_back({{"position", device.transmitter.fir.taps[r.knob.index].position},
                    {"value", r.value},
                    {"code", r.code ? Json(*r.code) : Json(nullptr)}});
  }
  out["tx_fir"] = taps;
  const CtleState& state = device.receiver.ctle[settings.ctle_index];
  out["ctle"] = {{"state", state.code}, {"label", state.label}};
  if (state.gain) out["ctle"]["gain"] = state.gain->code;
  Json dfe = Json::array();
  for (const double d : settings.dfe_v) dfe.push_back(v_to_mv(d));
  out["dfe_mv"] = dfe;
  out["phase_ui"] = static_cast<double>(settings.phase_samples) / model.link.samples_per_ui;
  return out;
}

const char* name_of(Proof::Kind kind) {
  switch (kind) {
    case Proof::Kind::kProven: return "proven";
    case Proof::Kind::kBounded: return "bounded";
    case Proof::Kind::kExhausted: return "exhausted";
    case Proof::Kind::kNone: break;
  }
  return "none";
}

std::string csv_cell(const std::string& text) {
  if (text.find_first_of(",;\"\n\r\t") == std::string::npos) return text;
  std::string out = "\"";
  for (const char c : text) out += c == '"' ? std::string("\"\"") : std::string(1, c);
  return out + "\"";
}

}  // namespace tapwright
