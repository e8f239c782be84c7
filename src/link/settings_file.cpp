#include "tapwright/link/settings_file.hpp"

#include <algorithm>
#include <cmath>
#include <nlohmann/json.hpp>

#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"
#include "tapwright/equalizer/knobs.hpp"

namespace tapwright {
namespace {

using nlohmann::json;

class SettingsReader {
 public:
  SettingsReader(const Link& link, const std::string& file) : link_(link), file_(file) {}

  Result<GivenSettings> read(const json& object) {
    static const std::vector<std::string> kKeys = {"swing_mvppd", "tx_fir", "ctle", "dfe_mv",
                                                   "phase_ui"};
    for (const auto& [key, value] : object.items()) {
      if (std::find(kKeys.begin(), kKeys.end(), key) != kKeys.end()) continue;
      const auto near = nearest_word(key, kKeys);
      problem(shown_text(key) + ": is not a known key" +
              (near ? "; did you mean \"" + *near + "\"?" : ""));
    }
    read_swing(object);
    read_fir(object);
    read_ctle(object);
    read_dfe(object);
    read_phase(object);
    if (!notes_.empty()) return {std::nullopt, std::move(notes_)};
    return {std::move(given_), {}};
  }

 private:
  void problem(const std::string& message) { notes_.push_back(error_at(file_, 0, message)); }

  std::optional<double> number(const json& value, const std::string& path) {
    if (value.is_number() && std::isfinite(value.get<double>())) return value.get<double>();
    problem(path + ": found " + shown_text(value.dump()) + ", wanted a number");
    return std::nullopt;
  }

  void read_swing(const json& object) {
    const auto& swings = link_.device.transmitter.swings;
    std::string list;
    for (const Swing& s : swings) {
      list += (list.empty() ? "" : ", ") + significant(peak_v_to_mvppd(s.value), 6);
    }
    if (!object.contains("swing_mvppd")) {
      if (swings.size() > 1) problem("swing_mvppd: is missing; the device has " + list);
      return;
    }
    const auto mvppd = number(object["swing_mvppd"], "swing_mvppd");
    if (!mvppd) return;
    given_.settings.swing_index = nearest_code(swings, mvppd_to_peak_v(*mvppd));
    const double near = peak_v_to_mvppd(swings[given_.settings.swing_index].value);
    if (std::abs(near - *mvppd) > 1e-6 * near) {
      problem("swing_mvppd: found " + exact(*mvppd) + ", wanted one of " + list);
    }
  }

  void read_fir(const json& object) {
    const FirLimits& limits = link_.device.transmitter.fir;
    auto& fir = given_.settings.fir;
    fir = Eigen::VectorXd::Zero(static_cast<Eigen::Index>(limits.taps.size()));
    const auto main = static_cast<Eigen::Index>(limits.main_index());
    bool main_given = false;
    const json taps = object.value("tx_fir", json::array());
    if (!taps.is_array()) return problem("tx_fir: wanted a list of {\"position\", \"value\"}");
    for (std::size_t i = 0; i < taps.size(); ++i) {
      const std::string path = "tx_fir[" + std::to_string(i) + "]";
      const json& tap = taps[i];
      if (!tap.is_object() || !tap.contains("position") || !tap["position"].is_number_integer()) {
        problem(path + ": wanted an object with a whole \"position\"");
        continue;
      }
      const auto position = tap["position"].get<long long>();
      const auto known = std::find_if(limits.taps.begin(), limits.taps.end(),
                                      [&](const FirTap& t) { return t.position == position; });
      if (known == limits.taps.end()) {
        problem(path + ".position: the transmitter has no tap at " + std::to_string(position));
        continue;
      }
      const auto at = static_cast<Eigen::Index>(known - limits.taps.begin());
      if (tap.contains("value") && !tap["value"].is_null()) {
        if (const auto value = number(tap["value"], path + ".value")) fir[at] = *value;
      } else if (tap.contains("code") && tap["code"].is_number_integer()) {
        const auto code =
            std::find_if(known->codes.begin(), known->codes.end(),
                         [&](const Code& c) { return c.code == tap["code"].get<long long>(); });
        if (code == known->codes.end()) {
          problem(path + ".code: the tap has no code " + tap["code"].dump());
        } else {
          fir[at] = code->value;
        }
      } else {
        problem(path + ": wanted \"value\" or \"code\"");
      }
      main_given = main_given || at == main;
    }
    if (!main_given && !limits.taps[static_cast<std::size_t>(main)].is_remainder) {
      fir[main] = limits.peak_limit - fir.lpNorm<1>();
    }
    fir = with_remainder(limits, fir);
    if (notes_.empty() && !keeps_limits(limits, fir)) {
      std::string shown;
      for (const double c : fir) shown += (shown.empty() ? "" : ", ") + significant(c, 6);
      problem("tx_fir: (" + shown +
              ") is outside the transmitter's limits: each tap on a code of "
              "its list, sum of |taps| at most " +
              significant(limits.peak_limit, 6));
    }
  }

  void read_ctle(const json& object) {
    const auto& states = link_.device.receiver.ctle;
    if (!object.contains("ctle")) {
      if (states.size() > 1) problem("ctle: is missing; the receiver has several states");
      return;
    }
    const json& ctle = object["ctle"];
    if (!ctle.is_object() || !ctle.contains("state") || !ctle["state"].is_number_integer()) {
      return problem("ctle: wanted an object with a whole \"state\"");
    }
    const auto wanted = ctle["state"].get<long long>();
    const bool has_gain = ctle.contains("gain") && ctle["gain"].is_number_integer();
    for (std::size_t i = 0; i < states.size(); ++i) {
      if (states[i].code != wanted) continue;
      if (has_gain && states[i].gain && states[i].gain->code != ctle["gain"].get<long long>()) {
        continue;
      }
      given_.settings.ctle_index = i;
      return;
    }
    problem("ctle.state: the receiver has no state " + std::to_string(wanted) +
            (has_gain ? " with gain code " + ctle["gain"].dump() : ""));
  }

  void read_dfe(const json& object) {
    const DfeLimits& dfe = link_.device.receiver.dfe;
    given_.settings.dfe_v = Eigen::VectorXd::Zero(static_cast<Eigen::Index>(dfe.size()));
    if (!object.contains("dfe_mv")) return;
    const json& list = object["dfe_mv"];
    if (!list.is_array() || list.size() > dfe.size()) {
      return problem("dfe_mv: wanted a list of at most " + std::to_string(dfe.size()) + " numbers");
    }
    given_.has_dfe = true;
    for (std::size_t i = 0; i < list.size(); ++i) {
      const std::string path = "dfe_mv[" + std::to_string(i) + "]";
      const auto mv = number(list[i], path);
      if (!mv) continue;
      const double value_v = mv_to_v(*mv);
      given_.settings.dfe_v[static_cast<Eigen::Index>(i)] = value_v;
      if (dfe[i].relative) continue;  // its limit is known only with the main cursor
      if (std::abs(settled_v(dfe[i], value_v, 1.0) - value_v) > 1e-9) {
        problem(path + ": found " + exact(*mv) + ", which the tap can't take (limit " +
                significant(v_to_mv(limit_v(dfe[i], 1.0)), 6) + " mV" +
                (dfe[i].codes.empty()
                     ? ")"
                     : ", nearest code " +
                           significant(v_to_mv(settled_v(dfe[i], value_v, 1.0)), 6) + " mV)"));
      }
    }
  }

  void read_phase(const json& object) {
    if (!object.contains("phase_ui")) return;
    const auto ui = number(object["phase_ui"], "phase_ui");
    if (!ui) return;
    if (std::abs(*ui) > 2.0) {
      return problem("phase_ui: found " + exact(*ui) + ", wanted -2 to 2, after the pulse's peak");
    }
    given_.has_phase = true;
    given_.settings.phase_samples = std::lround(*ui * link_.samples_per_ui);
  }

  const Link& link_;
  const std::string& file_;
  GivenSettings given_;
  std::vector<Diagnostic> notes_;
};

}  // namespace

Result<GivenSettings> settings_from_json(const Link& link, std::string_view text,
                                         const std::string& file_name) {
  const json document = json::parse(text, nullptr, false, true);
  if (!document.is_object()) {
    return failure<GivenSettings>(error_at(file_name, 0, "wanted a JSON object with settings"));
  }
  const bool whole = document.contains("format");
  if (whole && document["format"] != "tapwright.solution/1") {
    return failure<GivenSettings>(error_at(file_name, 0,
                                           "format: found " +
                                               shown_text(document["format"].dump()) +
                                               ", wanted \"tapwright.solution/1\""));
  }
  if (whole && !(document.contains("settings") && document["settings"].is_object())) {
    return failure<GivenSettings>(error_at(file_name, 0, "settings: is missing"));
  }
  return SettingsReader(link, file_name).read(whole ? document["settings"] : document);
}

}  // namespace tapwright
