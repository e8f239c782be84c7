#include "tapwright/link/read_link.hpp"

#include <algorithm>
#include <cmath>
#include <filesystem>
#include <map>
#include <memory>
#include <numbers>
#include <tuple>

#include "link/channel_reader.hpp"
#include "link/device_reader.hpp"
#include "link/embedded_text.hpp"
#include "link/files.hpp"
#include "link/link_cache.hpp"
#include "link/section.hpp"
#include "tapwright/base/digest.hpp"
#include "tapwright/base/fft.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"

namespace tapwright {
namespace {

using nlohmann::json;
using Notes = std::vector<Diagnostic>;

const json& schema() {
  static const json kSchema = json::parse(link_schema_text());
  return kSchema;
}

void append(Notes& notes, Notes more) {
  for (Diagnostic& note : more) notes.push_back(std::move(note));
}

Notes apply_change(JsonDocument& document, const LinkChange& change) {
  Result<JsonDocument> value = parse_json(change.value, change.path);
  if (!value) return std::move(value.notes);
  return set_value(document, change.path, value.value->root);
}

/// Puts what a device file says where the link file itself says nothing.
Notes merge_device(JsonDocument& document, InputFiles& files) {
  json& root = document.root;
  if (!root.is_object() || !root.contains("device") || !root["device"].is_string()) return {};
  Notes notes;
  const std::string name = root["device"].get<std::string>();
  const std::optional<std::string> text = files.read(Section(document, notes).at("device"));
  if (!text) return notes;
  Result<JsonDocument> parsed = parse_json(*text, files.resolved(name));
  if (!parsed) return std::move(parsed.notes);
  JsonDocument& device = *parsed.value;
  JsonDocument with_defaults = device;
  notes = check_against_schema(with_defaults, schema(), "#/$defs/device_file");
  if (has_error(notes)) return notes;

  // Names in the device file count from its own folder.
  const std::filesystem::path folder = std::filesystem::path(name).parent_path();
  if (json& device_root = device.root; device_root.contains("receiver") &&
                                       device_root["receiver"].contains("ctle") &&
                                       device_root["receiver"]["ctle"].is_array()) {
    for (json& state : device_root["receiver"]["ctle"]) {
      if (!state.contains("response")) continue;
      json& file = state["response"]["file"];
      file = (folder / file.get<std::string>()).string();
    }
  }
  const auto take_places = [&](const std::string& path) {
    for (auto at = device.places.lower_bound(path);
         at != device.places.end() && at->first.starts_with(path); ++at) {
      document.places.emplace(*at);
    }
  };
  for (const char* part : {"transmitter", "receiver"}) {
    if (!device.root.contains(part)) continue;
    if (!root.contains(part)) root[part] = json::object();
    if (!root[part].is_object()) continue;  // the check will say so
    document.places.emplace(part, device.place(part));
    for (auto& [key, value] : device.root[part].items()) {
      if (root[part].contains(key)) continue;
      root[part][key] = value;
      take_places(std::string(part) + "." + key);
    }
  }
  if (device.root.contains("registers") && !root.contains("registers")) {
    root["registers"] = device.root["registers"];
    take_places("registers");
  }
  return {};
}

/// The document with device and changes in it, checked, defaults filled in.
Result<JsonDocument> checked_document(std::string_view text, const std::string& file_name,
                                      const std::vector<LinkChange>& changes, InputFiles& files,
                                      const JsonVisitor& visit = {}) {
  Result<JsonDocument> parsed = parse_json(text, file_name);
  if (!parsed) return parsed;
  JsonDocument& document = *parsed.value;
  Notes notes;
  for (const LinkChange& change : changes) {
    if (change.path == "device") append(notes, apply_change(document, change));
  }
  append(notes, merge_device(document, files));
  for (const LinkChange& change : changes) {
    if (change.path != "device") append(notes, apply_change(document, change));
  }
  if (has_error(notes)) return {std::nullopt, std::move(notes)};
  append(notes, check_against_schema(document, schema(), "#", visit));
  if (has_error(notes)) return {std::nullopt, std::move(notes)};
  return {std::move(document), std::move(notes)};
}

double exact_level(double symbol, int levels) {
  for (int i = 0; i < levels; ++i) {
    const double level = -1.0 + 2.0 * i / (levels - 1);
    if (std::abs(symbol - level) < 5e-4) return level;
  }
  return std::nan("");
}

/// States that can be reached from `from`, along or against the words.
std::vector<bool> reached(const StateMachine& machine, bool forwards) {
  std::vector<bool> seen(static_cast<std::size_t>(machine.num_states), false);
  std::vector<int> open = {0};
  seen[0] = true;
  while (!open.empty()) {
    const int state = open.back();
    open.pop_back();
    for (const StateMachine::Edge& edge : machine.edges) {
      const int from = forwards ? edge.from : edge.to;
      const int to = forwards ? edge.to : edge.from;
      if (from != state || seen[static_cast<std::size_t>(to)]) continue;
      seen[static_cast<std::size_t>(to)] = true;
      open.push_back(to);
    }
  }
  return seen;
}

StateMachine read_state_machine(const Section& section, int levels) {
  StateMachine machine;
  std::map<std::string, int> states;
  const auto words = section.at("words").items();
  for (const Section& word : words) states.emplace(word.text("from"), 0);
  for (auto& [name, index] : states) index = machine.num_states++;
  std::vector<double> sums(states.size(), 0.0);
  std::vector<int> counts(states.size(), 0);
  for (const Section& word : words) {
    StateMachine::Edge edge;
    edge.from = states.at(word.text("from"));
    const auto to = states.find(word.text("to"));
    if (to == states.end()) {
      word.error("to", "no word starts in state " + shown_text(word.text("to")));
      return machine;
    }
    edge.to = to->second;
    for (const Section& symbol : word.at("symbols").items()) {
      edge.symbols.push_back(exact_level(symbol.number(), levels));
      if (std::isnan(edge.symbols.back())) {
        symbol.error(exact(symbol.number()) + " is no level of a signal with " +
                     std::to_string(levels) +
                     " levels; allowed: " + (levels == 2 ? "-1 and 1" : "-1, -1/3, 1/3 and 1"));
      }
    }
    if (!machine.edges.empty() && edge.symbols.size() != machine.edges.front().symbols.size()) {
      word.error("symbols", "the word has " + std::to_string(edge.symbols.size()) +
                                " symbols, the first word has " +
                                std::to_string(machine.edges.front().symbols.size()));
    }
    if (word.has("probability") != words.front().has("probability")) {
      word.error("either all words have a probability or none");
    }
    edge.probability = word.maybe("probability").value_or(0.0);
    sums[static_cast<std::size_t>(edge.from)] += edge.probability;
    ++counts[static_cast<std::size_t>(edge.from)];
    machine.edges.push_back(std::move(edge));
  }
  if (section.failed()) return machine;

  const bool given = words.front().has("probability");
  for (const auto& [name, index] : states) {
    const double sum = sums[static_cast<std::size_t>(index)];
    if (given && std::abs(sum - 1.0) > 1e-6) {
      section.error("words", "the probabilities in state " + shown_text(name) + " sum to " +
                                 significant(sum, 6) + "; wanted 1");
    }
  }
  for (StateMachine::Edge& edge : machine.edges) {
    const auto from = static_cast<std::size_t>(edge.from);
    edge.probability = given ? edge.probability / sums[from] : 1.0 / counts[from];
  }
  const std::vector<bool> forwards = reached(machine, true);
  const std::vector<bool> backwards = reached(machine, false);
  for (const auto& [name, index] : states) {
    const auto state = static_cast<std::size_t>(index);
    if (forwards[state] && backwards[state]) continue;
    section.error("words", "state " + shown_text(name) + " and state " +
                               shown_text(states.begin()->first) +
                               " can't both be reached from each other");
    break;
  }
  return machine;
}

LineCodeSpec read_line_code(const Section& signal, int levels) {
  const Section section = signal.at("line_code");
  LineCodeSpec code;
  if (section.value().is_object()) {
    code.kind = LineCodeKind::kStateMachine;
    code.machine = read_state_machine(section, levels);
    return code;
  }
  const std::string& name = section.text();
  code.kind = name == "8b10b"        ? LineCodeKind::k8b10b
              : name == "64b66b"     ? LineCodeKind::k64b66b
              : name == "manchester" ? LineCodeKind::kManchester
                                     : LineCodeKind::kNone;
  if (code.kind != LineCodeKind::kNone && levels != 2) {
    section.error(name + " has 2 levels, signal.levels is " + std::to_string(levels));
  }
  return code;
}

Signal read_signal(const Section& section) {
  Signal signal;
  signal.symbol_rate_bd = section.number("symbol_rate_gbd") * 1e9;
  signal.levels = section.integer("levels");
  signal.level_mismatch = section.number("level_mismatch");
  if (signal.levels == 2 && signal.level_mismatch != 1.0) {
    section.error("level_mismatch", exact(signal.level_mismatch) +
                                        " needs signal.levels 4; a signal with 2 levels has none");
  }
  signal.line_code = read_line_code(section, signal.levels);
  if (section.has("span_ui")) {
    const Section span = section.at("span_ui");
    signal.span_ui = {span.at(std::size_t{0}).integer(), span.at(1).integer()};
  }
  return signal;
}

Aggressor read_aggressor(const Section& section, std::size_t index, const Link& link) {
  Aggressor aggressor;
  aggressor.name =
      section.has("name") ? section.text("name") : "aggressor " + std::to_string(index + 1);
  aggressor.near_end = section.text("kind") == "near_end";
  if (const auto mvppd = section.maybe("swing_mvppd")) {
    aggressor.amplitude_v = mvppd_to_peak_v(*mvppd);
  }
  if (const auto rate = section.maybe("symbol_rate_gbd")) {
    aggressor.ui_ratio = link.signal.symbol_rate_bd / (*rate * 1e9);
  }
  if (section.has("fir")) {
    const auto& taps = link.device.transmitter.fir.taps;
    Eigen::VectorXd values = Eigen::VectorXd::Zero(static_cast<Eigen::Index>(taps.size()));
    std::vector<bool> seen(taps.size(), false);
    for (const Section& pair : section.at("fir").items()) {
      const int position = pair.at(std::size_t{0}).integer();
      const auto tap = std::find_if(taps.begin(), taps.end(),
                                    [&](const FirTap& one) { return one.position == position; });
      if (tap == taps.end()) {
        pair.error("transmitter.fir has no tap at position " + std::to_string(position));
        continue;
      }
      const auto at = static_cast<std::size_t>(tap - taps.begin());
      if (seen[at]) pair.error("position " + std::to_string(position) + " is given twice");
      seen[at] = true;
      values[static_cast<Eigen::Index>(at)] = pair.at(1).number();
    }
    aggressor.fixed_fir = values;
  }
  return aggressor;
}

/// Channel and crosstalk on one grid: whatever record is the longest sets its length.
void read_channels(const Section& root, Link& link, InputFiles& files) {
  const Section signal = root.at("signal");
  std::vector<Section> sections = {root.at("channel")};
  for (const Section& aggressor : root.at("crosstalk").items()) {
    sections.push_back(aggressor.at("channel"));
  }
  link.samples_per_ui = signal.has("samples_per_ui")
                            ? signal.integer("samples_per_ui")
                            : samples_per_ui_of(sections.front()).value_or(32);
  for (const Section& section : sections) {
    if ((samples_per_ui_of(section) == 1) == (link.samples_per_ui == 1)) continue;
    const std::string found =
        "the link has " + std::to_string(link.samples_per_ui) + " samples per UI, this channel ";
    section.error(link.samples_per_ui == 1 ? found +
                                                 "can't be sampled once per UI; only a pulse of "
                                                 "one sample per UI can"
                                           : found + "has 1");
  }
  const Section transmitter = root.at("transmitter");
  const Section receiver = root.at("receiver");
  PulseConditions conditions;
  conditions.grid = {link.signal.ui_s(), link.samples_per_ui, 0};
  if (link.signal.span_ui) {
    conditions.grid.min_num_ui = (*link.signal.span_ui)[0] + (*link.signal.span_ui)[1] + 1;
  }
  if (const auto ps = transmitter.maybe("rise_time_ps"))
    conditions.launch.rise_time_s = ps_to_s(*ps);
  if (const auto mhz = receiver.maybe("high_pass_mhz")) {
    link.high_pass_hz = *mhz * 1e6;
    // The tail of a lower corner is under 0.1 % a UI and would need a record of thousands of UI.
    const double tail_per_ui = 2.0 * std::numbers::pi * *link.high_pass_hz * link.signal.ui_s();
    if (tail_per_ui >= 1e-3) conditions.launch.high_pass_hz = link.high_pass_hz;
  }
  conditions.source_ohm = transmitter.maybe("impedance_ohm");
  conditions.source_f = pf_to_f(transmitter.number("capacitance_pf"));
  conditions.load_ohm = receiver.maybe("impedance_ohm");
  conditions.load_f = pf_to_f(receiver.number("capacitance_pf"));

  if (root.failed()) return;

  std::vector<ReceivedSpectrum> spectra;
  Eigen::Index longest = 0;
  for (std::size_t i = 0; i < sections.size(); ++i) {
    PulseConditions own = conditions;
    const double ui_ratio = i == 0 ? 1.0 : link.crosstalk[i - 1].ui_ratio;
    const double samples_per_own_ui = link.samples_per_ui * ui_ratio;
    own.is_victim = i == 0;
    own.grid.ui_s *= ui_ratio;
    own.grid.samples_per_ui = static_cast<int>(std::lround(samples_per_own_ui));
    if (std::abs(samples_per_own_ui - own.grid.samples_per_ui) > 1e-6 * samples_per_own_ui) {
      root.at("crosstalk")
          .at(i - 1)
          .error("symbol_rate_gbd",
                 "one UI at this rate is " + significant(samples_per_own_ui, 6) +
                     " samples; wanted a whole number (signal.samples_per_ui sets it)");
      continue;
    }
    std::optional<ReceivedSpectrum> spectrum = read_channel(sections[i], own, files);
    if (!spectrum) continue;
    spectrum->samples_per_ui = link.samples_per_ui;
    spectrum->ui_s = link.signal.ui_s();
    longest = std::max(longest, spectrum->num_samples);
    spectra.push_back(std::move(*spectrum));
  }
  if (std::any_of(spectra.begin(), spectra.end(),
                  [&](const ReceivedSpectrum& one) { return one.num_samples != longest; })) {
    const Eigen::Index per_ui = link.samples_per_ui;
    longest = per_ui * quick_transform_size((longest + per_ui - 1) / per_ui);
  }
  if (root.failed()) return;
  for (std::size_t i = 0; i < spectra.size(); ++i) {
    if (spectra[i].at_slicer != spectra[0].at_slicer) {
      sections[i].error(std::string("is taken at the ") +
                        (spectra[i].at_slicer ? "slicer" : "receiver's input") +
                        ", the victim's channel at the " +
                        (spectra[0].at_slicer ? "slicer" : "receiver's input"));
    }
    ReceivedSpectrum& place = i == 0 ? link.channel : link.crosstalk[i - 1].spectrum;
    place = lengthened(spectra[i], longest);
  }
}

/// What one sample per UI, or a record taken at the slicer, leaves no room for.
void check_record(const Section& root, const Link& link) {
  const Section receiver = root.at("receiver");
  if (link.channel.at_slicer) {
    const std::string reason =
        " can't be given: the channel's record is taken at the slicer and "
        "has the receiver's filters in it";
    for (const char* key : {"ctle", "bandwidth_ghz", "peak_input_mvppd"}) {
      if (receiver.has(key)) receiver.error(key, key + reason);
    }
    if (link.device.receiver.noise_density_v2_per_hz) {
      receiver.at("noise").error("density_v2_per_ghz",
                                 "density_v2_per_ghz" + reason + "; give rms_mv");
    }
  }
  if (link.samples_per_ui > 1) return;
  const std::string reason = " needs more than one sample per UI";
  const Section jitter = root.at("jitter");
  for (const char* key : {"random_ui", "dual_dirac_peak_ui", "common_random_ui"}) {
    if (jitter.number(key) > 0.0) jitter.error(key, key + reason);
  }
  if (link.mask_width_ui > 0.0) receiver.error("mask_width_ui", "mask_width_ui" + reason);
  if (link.sampling != SamplingRule::kBest) {
    receiver.error("sampling", receiver.text("sampling") + reason);
  }
  if (link.target.eye_width_ui > 0.0) {
    root.at("target").error("eye_width_ui", "eye_width_ui" + reason);
  }
}

Link build_link(const Section& root, InputFiles& files) {
  Link link;
  link.name = root.text("name");
  link.signal = read_signal(root.at("signal"));
  link.device.transmitter = read_transmitter(root.at("transmitter"));
  const Section receiver = root.at("receiver");
  link.device.receiver = read_receiver(receiver, files);
  link.mask_width_ui = receiver.number("mask_width_ui");
  const std::string& sampling = receiver.text("sampling");
  link.sampling = sampling == "mueller_muller" ? SamplingRule::kMuellerMuller
                  : sampling == "edge"         ? SamplingRule::kEdge
                                               : SamplingRule::kBest;
  const Section jitter = root.at("jitter");
  link.jitter = {jitter.number("random_ui"), jitter.number("dual_dirac_peak_ui"),
                 jitter.number("common_random_ui")};
  const Section target = root.at("target");
  link.target = {target.number("error_ratio"), mv_to_v(target.number("eye_height_mv")),
                 target.number("eye_width_ui")};
  link.objective = root.text("objective") == "at_error_ratio" ? ObjectiveKind::kAtErrorRatio
                                                              : ObjectiveKind::kWorstCase;
  if (root.failed()) return link;

  link.registers = read_registers(root.at("registers"), link.device);
  const std::vector<Section> aggressors = root.at("crosstalk").items();
  for (std::size_t i = 0; i < aggressors.size(); ++i) {
    link.crosstalk.push_back(read_aggressor(aggressors[i], i, link));
  }
  read_channels(root, link, files);
  if (!root.failed()) check_record(root, link);
  return link;
}

void put_in_order(Notes& notes, const std::string& file) {
  // The link file's own notes first, each file's by line.
  const auto rank = [&](const Diagnostic& note) {
    return std::tuple(note.file != file, note.file, note.line);
  };
  std::stable_sort(notes.begin(), notes.end(),
                   [&](const Diagnostic& a, const Diagnostic& b) { return rank(a) < rank(b); });
  std::vector<Diagnostic> kept;
  for (Diagnostic& note : notes) {
    if (std::find(kept.begin(), kept.end(), note) == kept.end()) kept.push_back(std::move(note));
  }
  if (kept.size() > kMaxNotes) kept.resize(kMaxNotes);
  notes = std::move(kept);
}

}  // namespace

LinkCache::LinkCache(std::size_t max_records) : kept_(std::make_unique<Kept>(max_records)) {}

LinkCache::~LinkCache() = default;

Result<Link> parse_link(std::string_view text, const std::string& file_name,
                        const std::string& base_directory, const std::vector<LinkChange>& changes,
                        LinkCache* cache) {
  InputFiles files(base_directory, cache);
  files.add({file_name, sha256_hex(text)});
  Result<JsonDocument> document = checked_document(text, file_name, changes, files);
  if (!document) return {std::nullopt, std::move(document.notes)};
  Notes notes = std::move(document.notes);
  Link link = build_link(Section(*document.value, notes), files);
  put_in_order(notes, file_name);
  if (has_error(notes)) return {std::nullopt, std::move(notes)};
  link.inputs = files.used();
  link.warnings = notes;
  return {std::move(link), std::move(notes)};
}

Result<Link> read_link(const std::string& path, const std::vector<LinkChange>& changes,
                       LinkCache* cache) {
  Result<TextFile> file = read_text_file(path, JsonLimits{}.max_bytes);
  if (!file) return {std::nullopt, std::move(file.notes)};
  return parse_link(file.value->text, path, std::filesystem::path(path).parent_path().string(),
                    changes, cache);
}

Result<std::vector<LinkNumber>> numbers_in_link(std::string_view text, const std::string& file_name,
                                                const std::string& base_directory,
                                                const std::vector<LinkChange>& changes) {
  std::vector<LinkNumber> numbers;
  const auto take = [&](const std::string& path, const json& value, const json& found) {
    if (!value.is_number() || !found.value("vary", false)) return;
    const auto number = value.get<double>();
    numbers.push_back({path, number, found.value("unit", ""), found.value("title", ""),
                       found.value("vary_step", 0.05 * std::abs(number))});
  };
  InputFiles files(base_directory, nullptr);
  Result<JsonDocument> document = checked_document(text, file_name, changes, files, take);
  if (!document) return {std::nullopt, std::move(document.notes)};
  return {std::move(numbers), std::move(document.notes)};
}

std::string link_schema() { return link_schema_text(); }

std::string example_link() { return example_link_text(); }

}  // namespace tapwright
