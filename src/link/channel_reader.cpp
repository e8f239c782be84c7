#include "link/channel_reader.hpp"

#include <algorithm>
#include <filesystem>
#include <cmath>
#include <complex>
#include <functional>
#include <limits>
#include <map>
#include <numbers>

#include "link/link_cache.hpp"
#include "tapwright/base/digest.hpp"
#include "tapwright/base/fft.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"
#include "tapwright/channel/capture.hpp"
#include "tapwright/channel/line_model.hpp"
#include "tapwright/channel/linear_fit.hpp"
#include "tapwright/channel/lumped.hpp"
#include "tapwright/channel/network_operations.hpp"
#include "tapwright/channel/pattern.hpp"
#include "tapwright/channel/ports.hpp"
#include "tapwright/channel/quality.hpp"
#include "tapwright/channel/touchstone.hpp"

namespace tapwright {
namespace {

using std::numbers::pi;

constexpr double kReferenceOhm = 100.0;  ///< of modelled pieces, differential

/// Gives the notes of another room, which know no key, the section's place.
void adopt_here(const Section& section, const std::vector<Diagnostic>& notes) {
  for (const Diagnostic& note : notes) {
    if (!note.file.empty()) {
      section.adopt({note});
    } else if (note.severity == Diagnostic::Severity::kError) {
      section.error(note.message);
    } else {
      section.warning(note.message);
    }
  }
}

template <class T>
std::optional<T> value_or_notes(const Section& section, Result<T> result) {
  adopt_here(section, result.notes);
  return std::move(result.value);
}

// ---- Records in time ------------------------------------------------------------------------

/// Whether the record has the receiver's filters in it already.
bool is_at_slicer(const Section& record, int samples_per_ui) {
  if (!record.has("taken_at")) return samples_per_ui == 1;
  const bool at_slicer = record.text("taken_at") == "slicer";
  if (!at_slicer && samples_per_ui == 1) {
    record.error("taken_at",
                 "a record with one sample per UI can't be filtered; allowed: \"slicer\"");
  }
  return at_slicer;
}

std::optional<ReceivedSpectrum> read_pulse(const Section& pulse, const TimeGrid& grid) {
  const nlohmann::json& given = pulse.value().at("samples_v");
  const double launch_v = mvppd_to_peak_v(pulse.number("at_swing_mvppd"));
  Eigen::VectorXd samples_v(static_cast<Eigen::Index>(given.size()));
  for (Eigen::Index i = 0; i < samples_v.size(); ++i) {
    samples_v[i] = given[static_cast<std::size_t>(i)].get<double>() / launch_v;
  }
  if (!(samples_v.maxCoeff() > 0.0)) {
    pulse.error("samples_v", "no sample is above 0; a pulse needs a positive peak");
    return std::nullopt;
  }
  const int samples_per_ui = pulse.integer("samples_per_ui");
  std::optional<ReceivedSpectrum> spectrum = value_or_notes(
      pulse, received_spectrum(PulseResponse(samples_v, samples_per_ui, grid.ui_s), grid, ""));
  if (spectrum) spectrum->at_slicer = is_at_slicer(pulse, samples_per_ui);
  return spectrum;
}

CaptureFormat read_format(const Section& record) {
  CaptureFormat format;
  if (!record.has("format")) return format;
  const Section section = record.at("format");
  static const std::map<std::string, double> kUnits = {{"s", 1.0},   {"ms", 1e-3},  {"us", 1e-6},
                                                       {"ns", 1e-9}, {"ps", 1e-12}, {"fs", 1e-15},
                                                       {"V", 1.0},   {"mV", 1e-3},  {"uV", 1e-6}};
  const auto unit = [&](const char* key) {
    return section.has(key) ? std::optional(kUnits.at(section.text(key))) : std::nullopt;
  };
  const auto column = [&](const char* key) {
    return section.has(key) ? std::optional(section.integer(key)) : std::nullopt;
  };
  if (const auto ps = section.maybe("sample_interval_ps")) format.dt_s = ps_to_s(*ps);
  format.time_unit_s = unit("time_unit");
  format.value_unit_v = unit("value_unit");
  format.value_column = column("value_column");
  format.minus_column = column("minus_column");
  return format;
}

std::optional<PulseResponse> fitted_pulse(const Section& record, const Capture& waveform,
                                          const TimeGrid& grid) {
  const Section section = record.at("pattern");
  Pattern pattern;
  if (section.value().is_array()) {
    pattern = SymbolList{section.value().get<std::vector<double>>()};
  } else {
    const auto named = value_or_notes(section, pattern_named(section.text(), ""));
    if (!named) return std::nullopt;
    pattern = *named;
  }
  LinearFitOptions options;
  options.symbol_rate_bd = 1.0 / grid.ui_s;
  options.samples_per_ui = grid.samples_per_ui;
  options.num_pre_ui = record.integer("pre_ui");
  options.num_post_ui = record.integer("post_ui");
  options.launch_v = mvppd_to_peak_v(record.number("at_swing_mvppd"));
  std::optional<LinearFit> fit = value_or_notes(record, fit_pulse(waveform, pattern, options, ""));
  if (!fit) return std::nullopt;
  record.warning("the pulse was fitted with a signal-to-noise ratio of " + fixed(fit->snr_db, 1) +
                 " dB, at " + significant(fit->symbol_rate_bd * 1e-9, 9) + " GBd");
  return std::move(fit->pulse);
}

std::optional<ReceivedSpectrum> read_capture_of(const Section& channel, const TimeGrid& grid,
                                                InputFiles& files) {
  const char* const kind = channel.has("pulse_csv")  ? "pulse_csv"
                           : channel.has("step_csv") ? "step_csv"
                                                     : "waveform_csv";
  const Section record = channel.at(kind);
  const Section name = record.at("file");
  const std::optional<std::string> text = files.read(name);
  if (!text) return std::nullopt;
  const std::optional<Capture> capture =
      value_or_notes(name, parse_capture(*text, files.resolved(name.text()), read_format(record)));
  if (!capture) return std::nullopt;
  std::optional<PulseResponse> pulse;
  if (channel.has("waveform_csv")) {
    pulse = fitted_pulse(record, *capture, grid);
  } else if (channel.has("pulse_csv")) {
    const double launch_v = mvppd_to_peak_v(record.number("at_swing_mvppd"));
    pulse = value_or_notes(record, pulse_from_pulse(*capture, grid, launch_v, ""));
  } else {
    pulse = value_or_notes(record,
                           pulse_from_step(*capture, grid, mv_to_v(record.number("step_mv")), ""));
  }
  if (!pulse) return std::nullopt;
  std::optional<ReceivedSpectrum> spectrum =
      value_or_notes(record, received_spectrum(*pulse, grid, ""));
  if (spectrum) spectrum->at_slicer = is_at_slicer(record, pulse->samples_per_ui());
  return spectrum;
}

// ---- Networks and lines ---------------------------------------------------------------------

/// A piece of a cascade: measured, or to be computed on whatever frequencies the cascade has.
struct Piece {
  std::optional<Network> measured;
  std::function<Network(const Eigen::VectorXd&)> modelled;
  double delay_s = 0.0;  ///< of a modelled piece
};

std::shared_ptr<const Network> read_network_file(const Section& name, InputFiles& files) {
  const std::string path = files.resolved(name.text());
  // A pipe can be read once only.
  const bool may_keep = files.cache() != nullptr && std::filesystem::is_regular_file(path);
  if (may_keep) {
    const Result<std::string> digest = file_sha256(path);
    const auto known = digest ? files.cache()->networks.find(*digest.value + " " + path) : nullptr;
    if (known) {
      files.add({path, *digest.value, {}});
      return known;
    }
  }
  Result<TouchstoneFile> file = read_touchstone(path);
  if (!file && file.notes.size() == 1 && file.notes[0].line == 0 && file.notes[0].file == path) {
    // The file as a whole: told by the name that the link file has for it.
    name.error(shown_text(name.text()) + ": " + file.notes[0].message);
    return nullptr;
  }
  adopt_here(name, file.notes);
  if (!file) return nullptr;
  files.add({path, file.value->sha256, {}});
  auto network = std::make_shared<const Network>(std::move(file.value->network));
  // A file with warnings is read again, so that they are told again.
  if (may_keep && file.notes.empty()) {
    files.cache()->networks.keep(file.value->sha256 + " " + path, network);
  }
  return network;
}

/// The two-port that a Touchstone file holds between the ports of its map.
std::optional<Network> read_path(const Section& section, bool may_guess, InputFiles& files) {
  const Section name = section.at("file");
  std::shared_ptr<const Network> network = read_network_file(name, files);
  if (!network) return std::nullopt;
  if (section.has("repair")) {
    PassiveRepair repair = nearest_passive(*network);
    if (repair.num_changed > 0) {
      name.warning("as asked, " + std::to_string(repair.num_changed) + " of " +
                   std::to_string(network->num_points()) +
                   " points were made passive, by at most " +
                   significant(repair.largest_change, 2));
    }
    network = std::make_shared<const Network>(std::move(repair.network));
  }
  PortMap map{{1}, {2}};
  if (section.has("ports")) {
    const Section ports = section.at("ports");
    map.in = ports.value().at("in").get<std::vector<int>>();
    map.out = ports.value().at("out").get<std::vector<int>>();
    if (may_guess) files.add_ports(files.resolved(name.text()), map);
    return value_or_notes(ports, through_path(*network, map, ""));
  }
  if (network->num_ports() != 2) {
    const std::string found = "the file has " + std::to_string(network->num_ports()) + " ports";
    if (!may_guess) {
      section.error(found + "; crosstalk needs key \"ports\"");
      return std::nullopt;
    }
    const auto maps = value_or_notes(section, guess_ports(*network, ""));
    if (!maps) return std::nullopt;
    if (maps->size() != 1) {
      section.error(found + " and " + std::to_string(maps->size()) +
                    " paths; key \"ports\" must say which one is meant");
      return std::nullopt;
    }
    map = maps->front();
  }
  if (may_guess) files.add_ports(files.resolved(name.text()), map);
  return value_or_notes(section, through_path(*network, map, ""));
}

/// The two-port with its transmission to the power of `stretch` (magnitude and unwrapped phase,
/// counted from the multiple of pi at DC) and with loss added: what a sensitivity study may ask of
/// a measured channel. Reflections stay.
Network varied(Network two_port, double stretch, double skin_db, double dielectric_db) {
  if (stretch == 1.0 && skin_db == 0.0 && dielectric_db == 0.0) return two_port;
  const Eigen::VectorXd& f = two_port.frequencies_hz;
  for (const auto& [to, from] : {std::pair(1, 0), std::pair(0, 1)}) {
    double phase = 0.0;
    double base = 0.0;
    for (Eigen::Index k = 0; k < two_port.num_points(); ++k) {
      std::complex<double>& s = two_port.at(k)(to, from);
      const double before = std::arg(k == 0 ? s : std::polar(1.0, phase));
      phase = k == 0 ? before : phase + std::remainder(std::arg(s) - before, 2 * pi);
      if (k == 0) base = std::abs(before) > pi / 2 ? std::copysign(pi, before) : 0.0;
      const double loss_db = skin_db * std::sqrt(f[k] / 1e9) + dielectric_db * f[k] / 1e9;
      s = std::polar(std::pow(std::abs(s), stretch) * amplitude_db_to_ratio(-loss_db),
                     base + stretch * (phase - base));
    }
  }
  return two_port;
}

std::optional<Piece> read_touchstone(const Section& section, bool is_victim, InputFiles& files) {
  std::optional<Network> path = read_path(section, is_victim, files);
  if (!path) return std::nullopt;
  if (is_victim) adopt_here(section, check_polarity(*path, ""));
  std::optional<Network> halves[2];
  const char* const keys[2] = {"fixture_in", "fixture_out"};
  for (int i = 0; i < 2; ++i) {
    if (!section.has(keys[i])) continue;
    halves[i] = read_path(section.at(keys[i]), true, files);
    if (!halves[i]) return std::nullopt;
  }
  if (halves[0] || halves[1]) {
    path = value_or_notes(section, without_fixture(*path, halves[0], halves[1], ""));
    if (!path) return std::nullopt;
  }
  return Piece{
      varied(std::move(*path), section.number("stretch"), section.number("extra_skin_loss_db"),
             section.number("extra_dielectric_loss_db")),
      {},
      0.0};
}

PhysicalLine read_dimensions(const Section& line) {
  PhysicalLine out;
  const auto metres = [](const Section& section, const char* key) {
    return mm_to_m(section.number(key));
  };
  if (line.has("microstrip")) {
    const Section form = line.at("microstrip");
    out.geometry = Microstrip{metres(form, "width_mm"), metres(form, "height_mm"),
                              metres(form, "thickness_mm")};
  } else if (line.has("stripline")) {
    const Section form = line.at("stripline");
    out.geometry = Stripline{metres(form, "width_mm"), metres(form, "plane_spacing_mm"),
                             metres(form, "thickness_mm")};
  } else if (line.has("coax")) {
    const Section form = line.at("coax");
    out.geometry = Coax{metres(form, "inner_diameter_mm"), metres(form, "outer_diameter_mm")};
  } else {
    const Section form = line.at("wire_pair");
    out.geometry = WirePair{form.has("gauge_awg") ? awg_diameter_m(form.number("gauge_awg"))
                                                  : metres(form, "diameter_mm"),
                            metres(form, "spacing_mm")};
  }
  const Section conductor = line.at("conductor");
  out.conductor.conductivity_s_per_m = conductor.number("conductivity_s_per_m");
  out.conductor.temperature_c = conductor.number("temperature_c");
  out.conductor.temperature_coefficient_per_k = conductor.number("temperature_coefficient_per_k");
  if (const auto um = conductor.maybe("roughness_um")) out.conductor.roughness_rms_m = *um * 1e-6;
  const Section dielectric = line.at("dielectric");
  out.dielectric.eps_r = dielectric.number("eps_r");
  out.dielectric.tan_delta = dielectric.number("tan_delta");
  out.dielectric.frequency_hz = ghz_to_hz(dielectric.number("frequency_ghz"));
  return out;
}

LineModel read_line_model(const Section& line) {
  if (line.has("loss_db_per_m")) {
    DatasheetLine sheet;
    for (const Section& point : line.at("loss_db_per_m").items()) {
      sheet.loss.push_back({ghz_to_hz(point.at(std::size_t{0}).number()), point.at(1).number()});
    }
    sheet.delay_s_per_m = ns_to_s(line.number("delay_ns_per_m"));
    sheet.impedance_ohm = line.number("impedance_ohm");
    return sheet;
  }
  if (line.has("a1_sqrt_ns_per_mm")) {
    AnnexLine model = annex_line(line.number("gamma0_per_mm"), line.number("a1_sqrt_ns_per_mm"),
                                 line.number("a2_ns_per_mm"), line.number("tau_ns_per_mm"),
                                 line.number("impedance_ohm"));
    if (line.has("dispersion")) {
      const Section dispersion = line.at("dispersion");
      model.dispersion =
          Dispersion{dispersion.number("rise"), ghz_to_hz(dispersion.number("knee_ghz"))};
    }
    return model;
  }
  if (line.has("l_nh_per_m")) {
    return RlgcLine{line.number("r_ohm_per_m"), nh_to_h(line.number("l_nh_per_m")),
                    line.number("g_s_per_m"), pf_to_f(line.number("c_pf_per_m"))};
  }
  return read_dimensions(line);
}

std::optional<Piece> read_line(const Section& line, double symbol_rate_bd) {
  const LineModel model = read_line_model(line);
  const double length_m = line.number("length_m");
  const std::vector<Diagnostic> notes = check_line(model, "");
  adopt_here(line, notes);
  if (has_error(notes)) return std::nullopt;
  // Two uncoupled lines driven differentially have the S-parameters of one of them between ports of
  // half the reference.
  const bool is_two_lines =
      line.has("dielectric") && !line.has("wire_pair") && line.value().at("pair").get<bool>();
  const double reference_ohm = is_two_lines ? kReferenceOhm / 2 : kReferenceOhm;
  Piece piece;
  piece.modelled = [=](const Eigen::VectorXd& frequencies_hz) {
    Network network = line_network(model, length_m, frequencies_hz, reference_ohm);
    network.reference_ohm.setConstant(kReferenceOhm);
    return network;
  };
  piece.delay_s = line_delay_s(model, length_m, 0.5 * symbol_rate_bd);
  return piece;
}

std::optional<Piece> read_lumped(const Section& list) {
  Piece piece;
  Ladder ladder;
  const auto scaled = [](std::optional<double> value, double unit) {
    return value ? std::optional(*value * unit) : std::nullopt;
  };
  for (const Section& item : list.items()) {
    if (item.has("series")) {
      const Section part = item.at("series");
      ladder.push_back(SeriesElement{part.maybe("resistance_ohm").value_or(0.0),
                                     nh_to_h(part.maybe("inductance_nh").value_or(0.0)),
                                     scaled(part.maybe("capacitance_pf"), 1e-12)});
    } else if (item.has("shunt")) {
      const Section part = item.at("shunt");
      ladder.push_back(ShuntElement{part.maybe("resistance_ohm"),
                                    scaled(part.maybe("inductance_nh"), 1e-9),
                                    pf_to_f(part.maybe("capacitance_pf").value_or(0.0))});
    } else {
      const Section part = item.at("section");
      const double delay_s = ps_to_s(part.number("delay_ps"));
      ladder.push_back(
          LineSection{part.number("impedance_ohm"), delay_s, part.number("loss_db_at_1_ghz")});
      piece.delay_s += delay_s;
    }
  }
  const std::vector<Diagnostic> notes = check_ladder(ladder, "");
  adopt_here(list, notes);
  if (has_error(notes)) return std::nullopt;
  piece.modelled = [=](const Eigen::VectorXd& frequencies_hz) {
    return ladder_network(ladder, frequencies_hz, kReferenceOhm);
  };
  return piece;
}

/// The measured piece with the smallest steps; none when nothing is measured.
const Network* finest_of(const std::vector<Piece>& pieces) {
  const auto step = [](const Network& network) {
    return (network.frequencies_hz[network.num_points() - 1] - network.frequencies_hz[0]) /
           static_cast<double>(network.num_points());
  };
  const Network* finest = nullptr;
  for (const Piece& piece : pieces) {
    if (!piece.measured) continue;
    if (finest == nullptr || step(*piece.measured) < step(*finest)) finest = &*piece.measured;
  }
  return finest;
}

/// Frequencies for the modelled pieces: those of the finest measured piece within the range that
/// all measured ones share, in smaller steps where the lines' delay asks for them; with nothing
/// measured, what the symbol rate asks for.
Eigen::VectorXd cascade_frequencies_hz(const std::vector<Piece>& pieces, double symbol_rate_bd) {
  double delay_s = 0.0;
  double first_hz = 0.0;
  double last_hz = std::numeric_limits<double>::infinity();
  for (const Piece& piece : pieces) {
    if (!piece.measured) {
      delay_s += piece.delay_s;
      continue;
    }
    const Eigen::VectorXd& f = piece.measured->frequencies_hz;
    first_hz = std::max(first_hz, f[0]);
    last_hz = std::min(last_hz, f[f.size() - 1]);
  }
  const Network* finest = finest_of(pieces);
  if (finest == nullptr) return modelled_frequencies_hz(symbol_rate_bd, delay_s);

  std::vector<double> inside;
  for (const double f : finest->frequencies_hz) {
    if (f >= first_hz && f <= last_hz) inside.push_back(f);
  }
  std::vector<double> all;
  for (std::size_t i = 0; i < inside.size(); ++i) {
    if (i > 0) {
      const double step = inside[i] - inside[i - 1];
      const int parts = std::clamp(static_cast<int>(std::ceil(8.0 * delay_s * step)), 1, 64);
      for (int k = 1; k < parts; ++k) all.push_back(inside[i - 1] + step * k / parts);
    }
    all.push_back(inside[i]);
  }
  return Eigen::Map<const Eigen::VectorXd>(all.data(), static_cast<Eigen::Index>(all.size()));
}

/// One two-port from the pieces.
std::optional<Network> joined(const Section& section, std::vector<Piece> pieces,
                              double symbol_rate_bd) {
  const bool all_measured =
      std::all_of(pieces.begin(), pieces.end(), [](const Piece& piece) { return piece.measured; });
  std::vector<Network> networks;
  networks.reserve(pieces.size());
  if (all_measured) {
    for (Piece& piece : pieces) networks.push_back(std::move(*piece.measured));
  } else {
    const Eigen::VectorXd frequencies_hz = cascade_frequencies_hz(pieces, symbol_rate_bd);
    if (frequencies_hz.size() == 0) {
      section.error("the measured files share no range of frequencies");
      return std::nullopt;
    }
    const Network* finest = finest_of(pieces);
    const Eigen::VectorXd finest_hz = finest == nullptr ? frequencies_hz : finest->frequencies_hz;
    for (Piece& piece : pieces) {
      // Files on one grid follow it quietly when it is made finer; of others cascade() tells.
      const bool follows = piece.measured &&
                           is_same_grid(piece.measured->frequencies_hz, finest_hz) &&
                           !is_same_grid(finest_hz, frequencies_hz);
      networks.push_back(!piece.measured ? piece.modelled(frequencies_hz)
                         : follows       ? resampled(*piece.measured, frequencies_hz)
                                         : std::move(*piece.measured));
    }
  }
  if (networks.size() == 1) return std::move(networks.front());
  return value_or_notes(section, cascade(networks, ""));
}

std::optional<ReceivedSpectrum> read_network(const Section& channel,
                                             const PulseConditions& conditions, InputFiles& files) {
  std::vector<Piece> pieces;
  bool ac_coupled = false;
  const auto add_touchstone = [&](const Section& section) {
    const std::optional<Piece> piece = read_touchstone(section, conditions.is_victim, files);
    if (!piece) return;
    ac_coupled = ac_coupled || section.value().at("ac_coupled").get<bool>();
    pieces.insert(pieces.end(), static_cast<std::size_t>(section.integer("repeat")), *piece);
  };
  const auto add = [&](const Section& section) {
    if (section.has("touchstone")) return add_touchstone(section.at("touchstone"));
    std::optional<Piece> piece = section.has("line")
                                     ? read_line(section.at("line"), 1.0 / conditions.grid.ui_s)
                                     : read_lumped(section.at("lumped"));
    if (piece) pieces.push_back(std::move(*piece));
  };
  if (channel.has("cascade")) {
    for (const Section& piece : channel.at("cascade").items()) add(piece);
  } else if (channel.has("touchstone") && channel.at("touchstone").value().is_array()) {
    for (const Section& file : channel.at("touchstone").items()) add_touchstone(file);
  } else {
    add(channel);
  }
  if (channel.failed()) return std::nullopt;

  const std::optional<Network> network =
      joined(channel, std::move(pieces), 1.0 / conditions.grid.ui_s);
  if (!network) return std::nullopt;
  const auto ending = [&](std::optional<double> ohm, double farad, Eigen::Index port) {
    return Termination{ohm.value_or(network->reference_ohm[port].real()), farad, std::nullopt};
  };
  FrequencyResponse response =
      terminated_response(*network, ending(conditions.source_ohm, conditions.source_f, 0),
                          ending(conditions.load_ohm, conditions.load_f, 1));
  response.ac_coupled = ac_coupled;
  return value_or_notes(channel,
                        received_spectrum(response, conditions.grid, conditions.launch, ""));
}

}  // namespace

std::optional<int> samples_per_ui_of(const Section& channel) {
  if (!channel.has("pulse")) return std::nullopt;
  return channel.at("pulse").integer("samples_per_ui");
}

namespace {

std::optional<ReceivedSpectrum> compute_channel(const Section& channel,
                                                const PulseConditions& conditions,
                                                InputFiles& files) {
  if (channel.has("pulse")) return read_pulse(channel.at("pulse"), conditions.grid);
  if (channel.has("pulse_csv") || channel.has("step_csv") || channel.has("waveform_csv")) {
    return read_capture_of(channel, conditions.grid, files);
  }
  return read_network(channel, conditions, files);
}

/// Everything that a channel's pulse and its notes depend on, but for the files that it names.
std::string key_of(const Section& channel, const PulseConditions& conditions) {
  std::string text = channel.value().dump() + " " + to_string(channel.warning_here("")) + " " +
                     std::to_string(conditions.grid.samples_per_ui) + " " +
                     std::to_string(conditions.grid.min_num_ui) +
                     (conditions.is_victim ? " victim" : " aggressor");
  for (const std::optional<double> number :
       {std::optional(conditions.grid.ui_s), conditions.launch.rise_time_s,
        conditions.launch.high_pass_hz, conditions.source_ohm, std::optional(conditions.source_f),
        conditions.load_ohm, std::optional(conditions.load_f)}) {
    text += number ? " " + exact(*number) : " none";
  }
  return sha256_hex(text);
}

}  // namespace

std::optional<ReceivedSpectrum> read_channel(const Section& channel,
                                             const PulseConditions& conditions, InputFiles& files) {
  if (files.cache() == nullptr) {
    std::optional<ReceivedSpectrum> spectrum = compute_channel(channel, conditions, files);
    return channel.failed() ? std::nullopt : std::move(spectrum);
  }
  const std::string key = key_of(channel, conditions);
  if (const auto known = files.cache()->channels.find(key)) {
    if (files.are_unchanged(known->files)) {
      channel.adopt(known->notes);
      return known->spectrum;
    }
  }
  InputFiles own = files.fresh();
  const std::size_t num_notes = channel.notes().size();
  std::optional<ReceivedSpectrum> spectrum = compute_channel(channel, conditions, own);
  for (const InputFile& file : own.used()) files.add(file);
  if (channel.failed() || !spectrum) return std::nullopt;
  const std::vector<Diagnostic> notes(channel.notes().begin() + static_cast<long>(num_notes),
                                      channel.notes().end());
  files.cache()->channels.keep(
      key, std::make_shared<const KnownChannel>(KnownChannel{*spectrum, own.used(), notes}));
  return spectrum;
}

ReceivedSpectrum lengthened(ReceivedSpectrum spectrum, Eigen::Index num_samples) {
  if (spectrum.num_samples >= num_samples) return spectrum;
  Eigen::VectorXd record = Eigen::VectorXd::Zero(num_samples);
  record.head(spectrum.num_samples) = real_record(spectrum.values, spectrum.num_samples);
  spectrum.values = real_spectrum(record);
  spectrum.num_samples = num_samples;
  return spectrum;
}

}  // namespace tapwright
