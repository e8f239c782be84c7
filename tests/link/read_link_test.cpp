#include "tapwright/link/read_link.hpp"

#include <gtest/gtest.h>

#include <cmath>
#include <functional>
#include <nlohmann/json.hpp>
#include <numbers>

#include "tapwright/base/digest.hpp"
#include "tapwright/base/fft.hpp"

namespace tapwright {
namespace {

using nlohmann::json;

Link parsed(const std::string& text, const std::vector<LinkChange>& changes = {}) {
  Result<Link> link = parse_link(text, "link.json", "", changes);
  for (const Diagnostic& note : link.notes) ADD_FAILURE() << to_string(note);
  return link ? std::move(*link.value) : Link{};
}

const std::string kShort = R"({
  "format": "tapwright.link/1",
  "signal": {"symbol_rate_gbd": 10},
  "channel": {"pulse": {"samples_v": [0.1, 0.6, 0.2], "samples_per_ui": 1}}
})";

TEST(ReadLink, FillsInTheDefaultsThatTheSchemaStates) {
  const Link link = parsed(kShort);
  EXPECT_EQ(link.signal.symbol_rate_bd, 10e9);
  EXPECT_EQ(link.signal.levels, 2);
  EXPECT_EQ(link.signal.level_mismatch, 1.0);
  EXPECT_EQ(link.signal.line_code.kind, LineCodeKind::kNone);
  EXPECT_FALSE(link.signal.span_ui);
  EXPECT_EQ(link.target.error_ratio, 1e-12);
  EXPECT_EQ(link.objective, ObjectiveKind::kWorstCase);
  EXPECT_EQ(link.sampling, SamplingRule::kBest);
  EXPECT_EQ(link.jitter.random_ui, 0.0);
  EXPECT_EQ(link.device.transmitter.swings, (std::vector<Swing>{{0, 0.5}}));  // 1000 mVppd
  ASSERT_EQ(link.device.transmitter.fir.taps.size(), 1U);
  EXPECT_EQ(link.device.transmitter.fir.taps[0].min, 1.0);
  EXPECT_EQ(link.device.transmitter.fir.taps[0].max, 1.0);
  EXPECT_EQ(link.device.transmitter.fir.peak_limit, 1.0);
  EXPECT_EQ(link.device.receiver.ctle.size(), 1U);
  EXPECT_TRUE(link.device.receiver.dfe.empty());
  EXPECT_TRUE(link.crosstalk.empty());
  EXPECT_TRUE(link.registers.empty());
}

TEST(ReadLink, ListsTheFilesThatItReadWithTheirDigest) {
  const Link link = parsed(kShort);
  ASSERT_EQ(link.inputs.size(), 1U);
  EXPECT_EQ(link.inputs[0].path, "link.json");
  EXPECT_EQ(link.inputs[0].sha256, sha256_hex(kShort));
}

TEST(ReadLink, AnInlinePulseComesBackAndScalesWithTheSwingItWasTakenAt) {
  const Link at_2000 = parsed(kShort);
  const Link at_1000 = parsed(kShort, {{"channel.pulse.at_swing_mvppd", "1000"}});
  for (const auto& [link, factor] : {std::pair(at_2000, 1.0), std::pair(at_1000, 2.0)}) {
    EXPECT_EQ(link.samples_per_ui, 1);
    EXPECT_TRUE(link.channel.at_slicer);
    const Eigen::VectorXd record = real_record(link.channel.values, link.channel.num_samples);
    const Eigen::Vector3d given(0.1, 0.6, 0.2);
    // Rounding: two transforms of a record of a few samples and sum 0.9.
    EXPECT_LT((record.head(3) - factor * given).cwiseAbs().maxCoeff(), 1e-15);
    EXPECT_LT(record.tail(record.size() - 3).cwiseAbs().maxCoeff(), 1e-15);
  }
}

/// A smooth pulse of `num_ui` UI that is 0 at both ends, as the value of key "pulse".
std::string smooth_pulse(int num_ui, int samples_per_ui) {
  json samples = json::array();
  const int n = num_ui * samples_per_ui;
  for (int i = 0; i <= n; ++i) samples.push_back(std::pow(std::sin(std::numbers::pi * i / n), 6));
  return json{{"samples_v", samples}, {"samples_per_ui", samples_per_ui}}.dump();
}

TEST(ReadLink, RecordsOfAllAggressorsLieOnTheVictimsGrid) {
  const Link link = parsed(R"({
    "format": "tapwright.link/1", "signal": {"symbol_rate_gbd": 10},
    "channel": {"pulse": )" +
                           smooth_pulse(20, 8) + R"(},
    "crosstalk": [{"kind": "near_end", "swing_mvppd": 800, "fir": [[0, 0.7]],
                   "channel": {"pulse": )" +
                           smooth_pulse(300, 8) + R"(}},
                  {"kind": "far_end", "name": "b", "symbol_rate_gbd": 5,
                   "channel": {"pulse": )" +
                           smooth_pulse(10, 4) + "}}]}");
  ASSERT_EQ(link.crosstalk.size(), 2U);
  EXPECT_EQ(link.samples_per_ui, 8);
  EXPECT_GE(link.channel.num_samples, 300 * 8);
  EXPECT_EQ(link.channel.num_samples % 8, 0);
  for (const Aggressor& aggressor : link.crosstalk) {
    EXPECT_EQ(aggressor.spectrum.num_samples, link.channel.num_samples);
    EXPECT_EQ(aggressor.spectrum.samples_per_ui, 8);
    EXPECT_EQ(aggressor.spectrum.ui_s, link.channel.ui_s);
  }
  EXPECT_TRUE(link.crosstalk[0].near_end);
  EXPECT_EQ(link.crosstalk[0].name, "aggressor 1");
  EXPECT_EQ(link.crosstalk[0].amplitude_v, 0.4);
  EXPECT_EQ(link.crosstalk[0].fixed_fir, Eigen::VectorXd::Constant(1, 0.7));
  EXPECT_EQ(link.crosstalk[1].name, "b");
  EXPECT_FALSE(link.crosstalk[1].fixed_fir);
  EXPECT_EQ(link.crosstalk[1].ui_ratio, 2.0);
  // 10 UI at 5 GBd last as long as 20 UI at 10 GBd: the same curve, at 4 and at 8 samples per UI.
  const auto record = [](const ReceivedSpectrum& one) {
    return real_record(one.values, one.num_samples);
  };
  // Method: a quintic spline through 40 points of sin^6; order 6 in 2 pi * 3 / 40, about 1e-4.
  EXPECT_LT((record(link.crosstalk[1].spectrum) - record(link.channel)).cwiseAbs().maxCoeff(),
            1e-3);
}

TEST(ReadLink, CodesFromAStepAreTheMultiplesOfTheStep) {
  const Link link = parsed(kShort, {{"transmitter.fir", R"([
      {"position": -1, "min": -0.03, "max": 0.0, "step": 0.0125},
      {"position": 0, "rule": "remainder"},
      {"position": 1, "codes": [[7, 0.0], [9, -0.1]]}])"},
                                    {"receiver.dfe", R"([
      {"max_mv": 5, "step_mv": 2}, {"position": 4, "max_ratio": 0.5}])"}});
  const auto& taps = link.device.transmitter.fir.taps;
  ASSERT_EQ(taps.size(), 3U);
  EXPECT_EQ(taps[0].codes, (std::vector<Code>{{-2, -0.025}, {-1, -0.0125}, {0, 0.0}}));
  EXPECT_EQ(taps[0].min, -0.025);
  EXPECT_TRUE(taps[1].is_remainder);
  EXPECT_EQ(taps[1].min, 1.0 - 0.025 - 0.1);
  EXPECT_EQ(taps[2].codes, (std::vector<Code>{{9, -0.1}, {7, 0.0}}));  // ascending by value
  const auto& dfe = link.device.receiver.dfe;
  ASSERT_EQ(dfe.size(), 2U);
  ASSERT_EQ(dfe[0].codes.size(), 5U);  // -4, -2, 0, 2, 4 mV
  EXPECT_EQ(dfe[0].codes.front(), (Code{-2, -4 * 1e-3}));
  EXPECT_EQ(dfe[0].max, 5 * 1e-3);
  EXPECT_EQ(dfe[1].position, 4);
  EXPECT_TRUE(dfe[1].relative);
  EXPECT_TRUE(dfe[1].codes.empty());
}

TEST(ReadLink, EveryGainIsPairedWithEveryCtleState) {
  const Link link = parsed(R"({
    "format": "tapwright.link/1", "signal": {"symbol_rate_gbd": 10},
    "channel": {"pulse": {"samples_v": [0, 0.1, 0.6, 0.3, 0.1, 0, 0, 0, 0, 0], "samples_per_ui": 4}},
    "receiver": {"gain_db": [[3, 0], [4, 6]],
      "ctle": {"dc_gain_db": [0, -2], "f_z_ghz": 2, "poles_ghz": [2, 8],
               "low_frequency": {"dc_gain_db": [0, -1, -2], "f_lf_ghz": 0.1}}}})");
  const auto& states = link.device.receiver.ctle;
  ASSERT_EQ(states.size(), 12U);
  const auto& last = std::get<CtleReference>(states.back().response);
  EXPECT_EQ(last.dc_gain_db, -2.0);
  EXPECT_EQ(last.f_z_hz, 2e9);
  EXPECT_EQ(last.f_p2_hz, 8e9);
  ASSERT_TRUE(last.low_frequency);
  EXPECT_EQ(last.low_frequency->dc_gain_db, -2.0);
  EXPECT_EQ(states.back().code, 5);
  ASSERT_TRUE(states.back().gain);
  EXPECT_EQ(states.back().gain->code, 4);
  EXPECT_NEAR(states.back().gain->value, 1.99526231, 1e-8);  // 10^(6/20), printed to 1e-8
}

TEST(ReadLink, AStateMachineGetsItsProbabilitiesAndLevels) {
  const Link link = parsed(kShort, {{"signal.levels", "4"}, {"signal.line_code", R"({"words": [
      {"from": "low", "to": "high", "symbols": [-1, 0.3333]},
      {"from": "low", "to": "low", "symbols": [1, -1]},
      {"from": "high", "to": "low", "symbols": [-0.33333333, 1]}]})"}});
  const StateMachine& machine = link.signal.line_code.machine;
  ASSERT_EQ(machine.num_states, 2);
  ASSERT_EQ(machine.edges.size(), 3U);
  EXPECT_EQ(machine.edges[0].probability, 0.5);
  EXPECT_EQ(machine.edges[2].probability, 1.0);
  EXPECT_EQ(machine.edges[0].symbols[1], -1.0 + 2.0 * 2 / 3);
  EXPECT_EQ(machine.edges[0].from, machine.edges[1].to);
  EXPECT_NE(machine.edges[0].from, machine.edges[0].to);
}

TEST(ReadLink, TheOrderOfKeysChangesNothing) {
  // The same link, written twice: as given and with each object's keys turned round.
  const std::function<std::string(const nlohmann::ordered_json&)> reversed =
      [&](const nlohmann::ordered_json& value) -> std::string {
    if (value.is_array()) {
      std::string out;
      for (const auto& one : value) out += (out.empty() ? "" : ",") + reversed(one);
      return "[" + out + "]";
    }
    if (!value.is_object()) return value.dump();
    std::string out;
    for (const auto& [key, one] : value.items()) {
      out = json(key).dump() + ":" + reversed(one) + (out.empty() ? "" : ",") + out;
    }
    return "{" + out + "}";
  };
  const auto document = nlohmann::ordered_json::parse(example_link(), nullptr, true, true);
  const Link a = parsed(document.dump());
  const Link b = parsed(reversed(document));
  EXPECT_EQ(a.name, b.name);
  EXPECT_EQ(a.channel.values, b.channel.values);
  EXPECT_EQ(a.device.transmitter.swings, b.device.transmitter.swings);
  EXPECT_EQ(a.device.receiver.ctle.size(), b.device.receiver.ctle.size());
  EXPECT_EQ(a.registers.size(), b.registers.size());
}

TEST(ReadLink, ChangesTakeThePlaceOfWhatTheFileSays) {
  const Link link =
      parsed(kShort, {{"signal.symbol_rate_gbd", "5"}, {"jitter", "{}"}, {"name", "\"changed\""}});
  EXPECT_EQ(link.signal.symbol_rate_bd, 5e9);
  EXPECT_EQ(link.name, "changed");
  const auto unknown = parse_link(kShort, "link.json", "", {{"signal.symbol_rate", "5"}});
  ASSERT_EQ(unknown.notes.size(), 1U);
  EXPECT_EQ(to_string(unknown.notes[0]),
            "link.json: error: signal: unknown key \"symbol_rate\"; did you mean "
            "\"symbol_rate_gbd\"?");
  EXPECT_FALSE(parse_link(kShort, "link.json", "", {{"signal.symbol_rate_gbd", "5,"}}));
}

TEST(NumbersInLink, AreThoseThatTheOutsideWorldSets) {
  const auto numbers = numbers_in_link(kShort, "link.json", "",
                                       {{"receiver.noise.rms_mv", "2"}, {"jitter.random_ui", "0"}});
  ASSERT_TRUE(numbers);
  const auto find = [&](const std::string& path) {
    return std::find_if(numbers.value->begin(), numbers.value->end(),
                        [&](const LinkNumber& one) { return one.path == path; });
  };
  ASSERT_NE(find("receiver.noise.rms_mv"), numbers.value->end());
  EXPECT_EQ(find("receiver.noise.rms_mv")->value, 2.0);
  EXPECT_EQ(find("receiver.noise.rms_mv")->unit, "mV");
  EXPECT_EQ(find("receiver.noise.rms_mv")->title, "receiver noise");
  EXPECT_NE(find("jitter.dual_dirac_peak_ui"), numbers.value->end());  // a default
  EXPECT_EQ(find("target.error_ratio"), numbers.value->end());         // a wish, not a fact
}

TEST(LinkSchema, IsJson) {
  EXPECT_EQ(json::parse(link_schema()).at("$schema"),
            "https://json-schema.org/draft/2020-12/schema");
}

}  // namespace
}  // namespace tapwright
