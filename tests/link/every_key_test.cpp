// The schema and the reader know the same keys: each key of the schema stands in one of the links
// below, and changing any value in them changes the link that is read.

#include <gtest/gtest.h>

#include <cmath>
#include <functional>
#include <map>
#include <numbers>
#include <set>

#include "base/json_document.hpp"
#include "link/folder.hpp"
#include "tapwright/base/digest.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/channel/line_model.hpp"
#include "tapwright/channel/pattern.hpp"
#include "tapwright/channel/touchstone.hpp"
#include "tapwright/link/read_link.hpp"

namespace tapwright {
namespace {

using nlohmann::json;

const json& schema() {
  static const json kSchema = json::parse(link_schema());
  return kSchema;
}

// ---- Links that use every key ---------------------------------------------------------------

const std::string kFormat = R"("format": "tapwright.link/1", )";

const std::map<std::string, std::string>& links() {
  static const std::map<std::string, std::string> kLinks = {
      {"pulse", R"({
  "format": "tapwright.link/1", "name": "a",
  "signal": {"symbol_rate_gbd": 5, "levels": 4, "level_mismatch": 0.95, "span_ui": [3, 20],
    "samples_per_ui": 8, "line_code": {"words": [
      {"from": "a", "to": "b", "symbols": [1, -1], "probability": 0.25},
      {"from": "a", "to": "a", "symbols": [-1, 1], "probability": 0.75},
      {"from": "b", "to": "a", "symbols": [0.3333, -0.3333], "probability": 1}]}},
  "channel": {"pulse": {"samples_per_ui": 4, "at_swing_mvppd": 1500, "taken_at": "receiver_input",
    "samples_v": [0, 0.01, 0.1, 0.4, 0.6, 0.5, 0.3, 0.1, 0.05, 0.01, 0, 0, 0, 0, 0, 0]}},
  "crosstalk": [{"name": "x", "kind": "far_end", "swing_mvppd": 700, "fir": [[0, 0.8], [1, -0.1]],
    "symbol_rate_gbd": 2.5,
    "channel": {"pulse": {"samples_per_ui": 8, "samples_v": [0, 0.01, 0.02, 0.01, 0, 0, 0, 0]}}}],
  "transmitter": {"swing_mvppd": [[1, 400], [2, 800]], "peak_limit": 0.98, "min_main": 0.41,
    "snr_db": 40,
    "fir": [{"position": -1, "min": -0.2, "max": -0.05, "step": 0.05},
            {"position": 0, "min": 0.4, "max": 0.9},
            {"position": 1, "codes": [[0, 0.0], [1, -0.1]]}]},
  "receiver": {"bandwidth_ghz": 4,
    "ctle": [
      {"code": 0, "label": "flat", "reference": {"dc_gain_db": -3, "f_z_ghz": 1.2,
        "poles_ghz": [1.5, 5]}},
      {"code": 1, "zeros_poles": {"gain": 0.8, "zeros_ghz": [1.1],
        "poles_ghz": [2, [3, 1]]}},
      {"code": 2, "response": {"file": "ctle.csv"}}],
    "gain_db": [[0, -1], [1, 2]],
    "dfe": [{"max_mv": 30, "step_mv": 2}, {"position": 3, "codes_mv": [[0, 0], [1, 5]]},
            {"position": 4, "max_ratio": 0.4, "step_ratio": 0.05},
            {"position": 6, "codes_ratio": [[0, 0], [1, 0.1]]}],
    "noise": {"density_v2_per_ghz": 4e-8}, "peak_input_mvppd": 600, "sampling": "edge",
    "mask_width_ui": 0.1, "sensitivity_mv": 4},
  "jitter": {"random_ui": 0.01, "dual_dirac_peak_ui": 0.02, "common_random_ui": 0.005},
  "target": {"error_ratio": 1e-9, "eye_height_mv": 20, "eye_width_ui": 0.2},
  "objective": "at_error_ratio",
  "registers": [{"field": "A", "address": "0x10", "bits": [3, 1], "knob": "swing",
                 "values": [[1, 5], [2, 6]]},
                {"field": "B", "address": 17, "bits": [4, 0], "knob": "fir:-1"}]})"},
      {"touchstone", R"({
  "format": "tapwright.link/1", "device": "device.json",
  "signal": {"symbol_rate_gbd": 5, "samples_per_ui": 8, "line_code": "8b10b"},
  "channel": {"touchstone": {"file": "pair.s4p", "ports": {"in": [1, 2], "out": [3, 4]},
    "fixture_in": {"file": "half.s2p", "ports": {"in": [1], "out": [2]}},
    "fixture_out": {"file": "half.s2p"}, "repeat": 2, "stretch": 1.1, "extra_skin_loss_db": 0.2,
    "extra_dielectric_loss_db": 0.1, "ac_coupled": false}}})"},
      {"list", R"({"format": "tapwright.link/1",
  "signal": {"symbol_rate_gbd": 5, "samples_per_ui": 8},
  "transmitter": {"fir": [{"position": 0, "rule": "remainder"},
                          {"position": 1, "min": -0.2, "max": 0}]},
  "channel": {"touchstone": [{"file": "half.s2p"}, {"file": "half.s2p"}]}})"},
      {"cascade", R"({
  "format": "tapwright.link/1", "signal": {"symbol_rate_gbd": 5, "samples_per_ui": 8},
  "channel": {"cascade": [
    {"touchstone": {"file": "half.s2p", "repair": "nearest_passive"}},
    {"line": {"length_m": 0.1, "loss_db_per_m": [[1, 5], [4, 13]], "delay_ns_per_m": 6,
              "impedance_ohm": 95}},
    {"line": {"length_m": 0.05, "gamma0_per_mm": 1e-5, "a1_sqrt_ns_per_mm": 4e-4,
              "a2_ns_per_mm": 2e-4, "tau_ns_per_mm": 6e-3, "impedance_ohm": 105,
              "dispersion": {"rise": 0.1, "knee_ghz": 8}}},
    {"line": {"length_m": 0.02, "r_ohm_per_m": 5, "l_nh_per_m": 500, "g_s_per_m": 0.001,
              "c_pf_per_m": 55}},
    {"line": {"length_m": 0.03, "pair": true,
              "microstrip": {"width_mm": 0.3, "height_mm": 0.17, "thickness_mm": 0.035},
              "conductor": {"conductivity_s_per_m": 5e7, "temperature_c": 40,
                            "temperature_coefficient_per_k": 0.004, "roughness_um": 1},
              "dielectric": {"eps_r": 4, "tan_delta": 0.02, "frequency_ghz": 2}}},
    {"line": {"length_m": 0.03,
              "stripline": {"width_mm": 0.15, "plane_spacing_mm": 0.4, "thickness_mm": 0.018},
              "dielectric": {"eps_r": 4, "tan_delta": 0.02}}},
    {"line": {"length_m": 0.04, "coax": {"inner_diameter_mm": 0.5, "outer_diameter_mm": 1.6},
              "dielectric": {"eps_r": 2, "tan_delta": 0.001}}},
    {"line": {"length_m": 0.04, "wire_pair": {"diameter_mm": 0.3, "spacing_mm": 0.8},
              "dielectric": {"eps_r": 2, "tan_delta": 0.001}}},
    {"line": {"length_m": 0.04, "wire_pair": {"gauge_awg": 28, "spacing_mm": 0.8},
              "dielectric": {"eps_r": 2, "tan_delta": 0.001}}},
    {"lumped": [{"series": {"resistance_ohm": 1, "inductance_nh": 0.5, "capacitance_pf": 1e5}},
                {"shunt": {"resistance_ohm": 5000, "inductance_nh": 1e6, "capacitance_pf": 0.1}},
                {"section": {"impedance_ohm": 90, "delay_ps": 30, "loss_db_at_1_ghz": 0.2}}]}]},
  "transmitter": {"rise_time_ps": 50, "impedance_ohm": 110, "capacitance_pf": 0.2},
  "receiver": {"impedance_ohm": 90, "capacitance_pf": 0.3, "high_pass_mhz": 3}})"},
      {"line", R"({"format": "tapwright.link/1",
  "signal": {"symbol_rate_gbd": 5, "samples_per_ui": 8},
  "channel": {"line": {"length_m": 0.1, "loss_db_per_m": [[1, 5], [4, 13]], "delay_ns_per_m": 6}}})"},
      {"lumped", R"({"format": "tapwright.link/1",
  "signal": {"symbol_rate_gbd": 5, "samples_per_ui": 8},
  "channel": {"lumped": [{"shunt": {"capacitance_pf": 0.1}}]}})"},
      {"pulse_csv", R"({"format": "tapwright.link/1",
  "signal": {"symbol_rate_gbd": 5, "samples_per_ui": 8},
  "channel": {"pulse_csv": {"file": "three_columns.csv", "at_swing_mvppd": 900,
    "taken_at": "receiver_input", "format": {"time_unit": "ps", "value_unit": "mV",
    "value_column": 2, "minus_column": 3}}}})"},
      {"pulse_csv without times", R"({"format": "tapwright.link/1",
  "signal": {"symbol_rate_gbd": 5, "samples_per_ui": 8},
  "channel": {"pulse_csv": {"file": "one_column.csv", "format": {"sample_interval_ps": 25}}}})"},
      {"step_csv", R"({"format": "tapwright.link/1",
  "signal": {"symbol_rate_gbd": 5, "samples_per_ui": 8},
  "channel": {"step_csv": {"file": "step.csv", "step_mv": 800, "taken_at": "slicer",
    "format": {"time_unit": "ps"}}}})"},
      {"waveform_csv", R"({"format": "tapwright.link/1",
  "signal": {"symbol_rate_gbd": 5, "samples_per_ui": 8},
  "channel": {"waveform_csv": {"file": "waveform.csv", "pattern": "prbs7", "pre_ui": 4,
    "post_ui": 10, "at_swing_mvppd": 900, "taken_at": "receiver_input",
    "format": {"time_unit": "ps"}}}})"}};
  return kLinks;
}

/// A pulse of 6 UI at 5 GBd, in volts at 1 V launch, at a time in ps.
double smooth(double t_ps) {
  const double x = t_ps / 1200.0;
  return x <= 0.0 || x >= 1.0 ? 0.0 : 0.7 * std::pow(std::sin(std::numbers::pi * x), 6);
}

void write_files(const test::Folder& folder) {
  folder.write("device.json", R"({"format": "tapwright.device/1", "name": "d",
    "transmitter": {"swing_mvppd": 900},
    "receiver": {"noise": {"rms_mv": 1},
      "ctle": {"dc_gain_db": [[5, -1], [6, -2]], "f_z_ghz": 1, "poles_ghz": [1, 5],
               "low_frequency": {"dc_gain_db": [0, -1], "f_lf_ghz": 0.1}}},
    "registers": [{"field": "A", "address": 1, "bits": [3, 0], "knob": "ctle"}]})");
  folder.write("ctle.csv", "0,-6,0\n1e9,-3,10\n5e9,0,-20\n");

  const Eigen::VectorXd f = Eigen::VectorXd::LinSpaced(400, 50e6, 20e9);
  const DatasheetLine sheet{{{1e9, 2.0}, {4e9, 6.0}}, 6e-9, 48.0};
  const Network line = line_network(sheet, 0.3, f, 50.0);
  Network pair = empty_network(f, Eigen::VectorXcd::Constant(4, 50.0));
  for (Eigen::Index k = 0; k < f.size(); ++k) {
    for (const auto& [near, far] : {std::pair(0, 2), std::pair(1, 3)}) {
      pair.at(k)(far, near) = line.at(k)(1, 0);
      pair.at(k)(near, far) = line.at(k)(0, 1);
      pair.at(k)(near, near) = line.at(k)(0, 0);
      pair.at(k)(far, far) = line.at(k)(1, 1);
    }
  }
  folder.write("pair.s4p", write_touchstone(pair));
  folder.write("half.s2p", write_touchstone(line_network(sheet, 0.05, f, 50.0)));

  std::string three = "t,plus,minus\n";
  std::string one = "v\n";
  std::string step = "t,v\n";
  for (int i = 0; i < 200; ++i) {
    const double t_ps = 25.0 * i;
    three += exact(t_ps) + "," + exact(300 * smooth(t_ps)) + "," + exact(-30 * smooth(t_ps)) + "\n";
    one += exact(smooth(t_ps)) + "\n";
    double sum = 0.0;
    for (int k = 0; k < 30; ++k) sum += 0.5 * smooth(t_ps - 200.0 * k);
    step += exact(t_ps) + "," + exact(sum) + "\n";
  }
  folder.write("three_columns.csv", three);
  folder.write("one_column.csv", one);
  folder.write("step.csv", step);

  const Eigen::VectorXd levels = symbols(*pattern_named("prbs7", "").value, 5, 400);
  std::string waveform = "t,v\n";
  for (int i = 7 * 8; i < 390 * 8; ++i) {
    double v = 0.0;
    for (int k = i / 8 - 6; k <= i / 8; ++k) v += levels[k] * smooth(25.0 * i - 200.0 * k);
    waveform += exact(25.0 * i) + "," + exact(0.4 * v) + "\n";
  }
  folder.write("waveform.csv", waveform);
}

// ---- Every key of the schema is used --------------------------------------------------------

const json& resolved(const json& node) {
  if (!node.contains("$ref")) return node;
  return resolved(schema().at(json::json_pointer(node["$ref"].get<std::string>().substr(1))));
}

/// Calls `visit` with a name and the schema of each property, once each.
void walk(const json& given, const std::string& path,
          const std::function<void(const std::string&, const json&)>& visit,
          std::set<const json*>& seen) {
  const json& node = resolved(given);
  if (!seen.insert(&node).second) return;
  if (node.contains("properties")) {
    for (const auto& [key, member] : node["properties"].items()) {
      visit(path + "." + key, member);
      walk(member, path + "." + key, visit, seen);
    }
  }
  if (node.contains("items")) walk(node["items"], path + "[]", visit, seen);
  for (const char* list : {"oneOf", "prefixItems"}) {
    if (!node.contains(list)) continue;
    for (const json& one : node[list]) walk(one, path, visit, seen);
  }
}

void walk_schema(const std::function<void(const std::string&, const json&)>& visit) {
  std::set<const json*> seen;
  walk(schema(), "link", visit, seen);
  walk(schema().at("$defs").at("device_file"), "device", visit, seen);
}

TEST(LinkSchema, EveryKeyHasATitleADescriptionAndAUnitThatItsNameCarries) {
  // Endings of keys that carry a unit (house rule: the key names it), and how the schema spells it.
  const std::map<std::string, std::string> units = {
      {"_ui", "UI"},   {"_mv", "mV"}, {"_mvppd", "mVppd"}, {"_ps", "ps"}, {"_ghz", "GHz"},
      {"_gbd", "GBd"}, {"_db", "dB"}, {"_ohm", "ohm"},     {"_pf", "pF"}, {"_nh", "nH"},
      {"_mhz", "MHz"}, {"_m", "m"},   {"_mm", "mm"},       {"_um", "um"}};
  const auto annotation = [](const json& member, const char* keyword) -> std::string {
    const json& target = resolved(member);
    return member.contains(keyword)   ? member[keyword].get<std::string>()
           : target.contains(keyword) ? target[keyword].get<std::string>()
                                      : "";
  };
  int num_keys = 0;
  walk_schema([&](const std::string& path, const json& member) {
    ++num_keys;
    EXPECT_FALSE(annotation(member, "title").empty()) << path;
    EXPECT_FALSE(annotation(member, "description").empty()) << path;
    const std::string key = path.substr(path.rfind('.') + 1);
    const auto ending = key.rfind('_');
    if (ending == std::string::npos) return;
    const auto unit = units.find(key.substr(ending));
    const bool per = key.find("_per_") != std::string::npos;
    if (unit == units.end() || per || key == "samples_per_ui" || key == "loss_db_at_1_ghz" ||
        key.starts_with("codes_")) {
      return;
    }
    EXPECT_EQ(annotation(member, "unit"), unit->second) << path;
  });
  EXPECT_GT(num_keys, 150);
}

TEST(LinkSchema, EveryKeyStandsInOneOfTheTestsLinks) {
  std::set<const json*> used;
  const JsonVisitor visit = [&](const std::string&, const json&, const json& found) {
    used.insert(&found);
  };
  const auto check = [&](const std::string& text, const std::string& start) {
    auto document = parse_json(text, "f");
    ASSERT_TRUE(document);
    for (const auto& note : check_against_schema(*document.value, schema(), start, visit)) {
      ADD_FAILURE() << to_string(note);
    }
  };
  for (const auto& [name, text] : links()) check(text, "#");
  const test::Folder folder;
  write_files(folder);
  std::ifstream device(folder.path() + "/device.json");
  check({std::istreambuf_iterator<char>(device), {}}, "#/$defs/device_file");

  const std::function<bool(const json&)> is_used = [&](const json& given) {
    const json& node = resolved(given);
    return used.contains(&node) ||
           (node.contains("oneOf") &&
            std::any_of(node["oneOf"].begin(), node["oneOf"].end(), is_used));
  };
  walk_schema(
      [&](const std::string& path, const json& member) { EXPECT_TRUE(is_used(member)) << path; });
}

// ---- Every value matters --------------------------------------------------------------------

/// Everything a link holds, as text; long records by their digest.
std::string described(const Link& link) {
  std::string out;
  const auto number = [&](double x) { out += exact(x) + " "; };
  const auto maybe = [&](const std::optional<double>& x) { out += x ? exact(*x) + " " : "- "; };
  const auto codes = [&](const std::vector<Code>& list) {
    for (const Code& code : list) out += std::to_string(code.code) + ":" + exact(code.value) + " ";
    out += "; ";
  };
  const auto digest = [&](const void* data, std::size_t size) {
    out += sha256_hex({static_cast<const char*>(data), size}) + " ";
  };
  const auto spectrum = [&](const ReceivedSpectrum& one) {
    digest(one.values.data(), static_cast<std::size_t>(one.values.size()) * 16);
    out += std::to_string(one.num_samples) + " " + std::to_string(one.samples_per_ui) + " ";
    number(one.ui_s);
    out += one.at_slicer ? "slicer " : "input ";
  };
  out += link.name + " ";
  number(link.signal.symbol_rate_bd);
  number(link.signal.levels);
  number(link.signal.level_mismatch);
  number(static_cast<int>(link.signal.line_code.kind));
  number(link.signal.line_code.machine.num_states);
  for (const auto& edge : link.signal.line_code.machine.edges) {
    number(edge.from);
    number(edge.to);
    number(edge.probability);
    for (const double symbol : edge.symbols) number(symbol);
  }
  if (link.signal.span_ui) {
    number((*link.signal.span_ui)[0]);
    number((*link.signal.span_ui)[1]);
  }
  number(link.samples_per_ui);
  spectrum(link.channel);
  for (const Aggressor& one : link.crosstalk) {
    out += one.name + (one.near_end ? " near " : " far ");
    spectrum(one.spectrum);
    maybe(one.amplitude_v);
    number(one.ui_ratio);
    if (one.fixed_fir) {
      for (const double tap : *one.fixed_fir) number(tap);
    }
  }
  const Transmitter& tx = link.device.transmitter;
  codes(tx.swings);
  for (const FirTap& tap : tx.fir.taps) {
    number(tap.position);
    number(tap.min);
    number(tap.max);
    codes(tap.codes);
    out += tap.is_remainder ? "remainder " : "free ";
  }
  number(tx.fir.peak_limit);
  maybe(tx.fir.min_main);
  maybe(tx.snr_db);
  const Receiver& rx = link.device.receiver;
  maybe(rx.bandwidth_hz);
  const Eigen::VectorXd f = Eigen::VectorXd::LinSpaced(30, 0.0, 10e9);
  for (const CtleState& state : rx.ctle) {
    out += state.label + " ";
    number(state.code);
    if (state.gain) codes({*state.gain});
    const Eigen::VectorXcd h = response(state, f);
    digest(h.data(), static_cast<std::size_t>(h.size()) * 16);
  }
  for (const DfeTap& tap : rx.dfe) {
    number(tap.position);
    number(tap.max);
    out += tap.relative ? "relative " : "absolute ";
    codes(tap.codes);
  }
  maybe(rx.noise_density_v2_per_hz);
  maybe(rx.noise_rms_v);
  maybe(rx.peak_input_v);
  number(rx.sensitivity_v);
  maybe(link.high_pass_hz);
  number(link.jitter.random_ui);
  number(link.jitter.dual_dirac_peak_ui);
  number(link.jitter.common_random_ui);
  number(link.target.error_ratio);
  number(link.target.eye_height_v);
  number(link.target.eye_width_ui);
  number(static_cast<int>(link.objective));
  number(static_cast<int>(link.sampling));
  number(link.mask_width_ui);
  for (const RegisterField& field : link.registers) {
    out += field.field + " " + std::to_string(field.address) + " " + field.knob + " ";
    number(field.high_bit);
    number(field.low_bit);
    for (const auto& pair : field.table) {
      out += std::to_string(pair[0]) + "=" + std::to_string(pair[1]) + " ";
    }
  }
  return out;
}

/// Other values that the schema allows in place of this one.
std::vector<json> others(const json& value, const json& found) {
  std::vector<json> out;
  if (found.contains("enum")) {
    for (const json& one : found["enum"]) {
      if (one != value) out.push_back(one);
    }
  } else if (value.is_boolean()) {
    out.push_back(!value.get<bool>());
  } else if (value.is_string()) {
    out.push_back(value.get<std::string>() + "2");
  } else if (found.value("type", json()) == "integer") {
    out = {value.get<int>() + 1, value.get<int>() - 1};
  } else if (value.is_number()) {
    const double x = value.get<double>();
    out = {x * 1.01 + (x == 0.0 ? 0.01 : 0.0), x * 0.99 - (x == 0.0 ? 0.01 : 0.0)};
  }
  return out;
}

TEST(ReadLink, EveryValueOfALinkMatters) {
  const test::Folder folder;
  write_files(folder);
  for (const auto& [name, text] : links()) {
    LinkCache cache;  // so the test also shows that the cache misses no change
    const auto read = [&](const std::vector<LinkChange>& changes) {
      return parse_link(text, name, folder.path(), changes, &cache);
    };
    const Result<Link> link = read({});
    for (const Diagnostic& note : link.notes) {
      EXPECT_EQ(note.severity, Diagnostic::Severity::kWarning) << to_string(note);
    }
    ASSERT_TRUE(link) << name;
    const std::string as_given = described(*link.value);
    EXPECT_EQ(as_given, described(*read({}).value));

    std::map<std::string, std::pair<json, const json*>> leaves;
    auto document = parse_json(text, name);
    ASSERT_TRUE(
        check_against_schema(*document.value, schema(), "#",
                             [&](const std::string& path, const json& value, const json& found) {
                               if (value.is_primitive() && !found.contains("const")) {
                                 leaves[path] = {value, &found};
                               }
                             })
            .empty());
    const json given = parse_json(text, name).value->root;
    for (const auto& [path, leaf] : leaves) {
      // Defaults of absent keys are other tests' business.
      const std::string pointer = [&] {
        std::string out = "/" + path;
        for (const auto& [from, to] :
             {std::pair(".", "/"), std::pair("[", "/"), std::pair("]", "")}) {
          for (auto at = out.find(from); at != std::string::npos; at = out.find(from, at + 1)) {
            out.replace(at, 1, to);
          }
        }
        return out;
      }();
      if (!given.contains(json::json_pointer(pointer))) continue;
      bool matters = leaf.second->contains("enum") && (*leaf.second)["enum"].size() == 1;
      std::string tried;
      for (const json& other : others(leaf.first, *leaf.second)) {
        const Result<Link> changed = read({{path, other.dump()}});
        // Refused counts too: then a check between keys has looked at it.
        matters = matters || !changed || described(*changed.value) != as_given;
        tried += " " + other.dump();
      }
      EXPECT_TRUE(matters) << name << ": " << path << " made no difference:" << tried;
    }
  }
}

}  // namespace
}  // namespace tapwright
