#include "link/device_reader.hpp"

#include <algorithm>
#include <array>
#include <charconv>
#include <cmath>
#include <numbers>
#include <set>

#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"

namespace tapwright {
namespace {

constexpr double kMostCodes = 100000.0;

/// Pairs [code, value], or values that get the codes 0, 1, 2 ...; in the order given, in the
/// file's unit.
std::vector<Code> read_codes(const Section& list) {
  std::vector<Code> codes;
  std::set<int> seen_codes;
  std::set<double> seen_values;
  for (const Section& item : list.items()) {
    const bool is_pair = item.value().is_array();
    const Code code{is_pair ? item.at(std::size_t{0}).integer() : static_cast<int>(codes.size()),
                    is_pair ? item.at(1).number() : item.number()};
    if (is_pair != list.at(std::size_t{0}).value().is_array()) {
      item.error("values and pairs [code, value] can't stand in one list");
      return codes;
    }
    if (!seen_codes.insert(code.code).second) {
      item.error("code " + std::to_string(code.code) + " is given twice");
    }
    if (!seen_values.insert(code.value).second) {
      item.error("value " + exact(code.value) + " is given twice");
    }
    codes.push_back(code);
  }
  return codes;
}

std::vector<Code> ascending(std::vector<Code> codes) {
  std::sort(codes.begin(), codes.end(),
            [](const Code& a, const Code& b) { return a.value < b.value; });
  return codes;
}

std::vector<Code> times(std::vector<Code> codes, double factor) {
  for (Code& code : codes) code.value *= factor;
  return codes;
}

/// The multiples of the step, or a note why there can't be a list of them.
std::vector<Code> codes_by_step(const Section& tap, const char* step_key, const char* limits,
                                double min, double max) {
  const double step = tap.number(step_key);
  if ((max - min) / step > kMostCodes || std::max(std::abs(min), std::abs(max)) / step > 1e9) {
    tap.error(step_key, "step " + exact(step) + " makes more than " +
                            std::to_string(static_cast<int>(kMostCodes)) + " codes between " +
                            exact(min) + " and " + exact(max));
    return {};
  }
  std::vector<Code> codes = codes_from_step(min, max, step);
  if (codes.empty()) {
    tap.error(step_key, "no multiple of the step " + exact(step) + " lies between " + limits);
  }
  return codes;
}

/// Whether the position of the next tap comes after all before it.
template <class Tap>
bool check_position(const Section& section, const std::vector<Tap>& before, int position) {
  const std::string found = "position " + std::to_string(position);
  if (std::any_of(before.begin(), before.end(),
                  [&](const Tap& tap) { return tap.position == position; })) {
    section.error("position", found + " is given twice");
    return false;
  }
  if (!before.empty() && position < before.back().position) {
    section.error("position", found + " comes after position " +
                                  std::to_string(before.back().position) +
                                  "; taps stand in ascending position");
    return false;
  }
  return true;
}

FirTap read_fir_tap(const Section& section) {
  FirTap tap;
  tap.position = section.integer("position");
  if (section.has("rule")) {
    tap.is_remainder = true;
    if (tap.position != 0) {
      section.error("rule",
                    "only the main tap (position 0) can be the remainder, this is position " +
                        std::to_string(tap.position));
    }
    if (section.has("step")) section.error("step", "the remainder has no step of its own");
  } else if (section.has("codes")) {
    tap.codes = ascending(read_codes(section.at("codes")));
    if (section.has("step")) section.error("step", "a list of codes has no step");
    tap.min = tap.codes.front().value;
    tap.max = tap.codes.back().value;
  } else {
    tap.min = section.number("min");
    tap.max = section.number("max");
    if (tap.min > tap.max) {
      section.error("min", "min " + exact(tap.min) + " lies above max " + exact(tap.max));
    } else if (section.has("step")) {
      tap.codes = codes_by_step(section, "step",
                                ("min " + exact(tap.min) + " and max " + exact(tap.max)).c_str(),
                                tap.min, tap.max);
      if (!tap.codes.empty()) {
        tap.min = tap.codes.front().value;
        tap.max = tap.codes.back().value;
      }
    }
  }
  return tap;
}

double least_magnitude(const FirTap& tap) {
  if (tap.codes.empty()) return tap.min > 0.0 ? tap.min : tap.max < 0.0 ? -tap.max : 0.0;
  double least = std::abs(tap.codes.front().value);
  for (const Code& code : tap.codes) least = std::min(least, std::abs(code.value));
  return least;
}

/// Limits that no tap values can keep together: named in pairs.
void check_together(const Section& transmitter, const FirLimits& fir) {
  constexpr double kSlack = 1e-9;  // as keeps_limits compares
  const Section taps = transmitter.at("fir");
  double least_others = 0.0;
  for (const FirTap& tap : fir.taps) {
    if (tap.position != 0) least_others += least_magnitude(tap);
  }
  const FirTap& main = fir.taps[fir.main_index()];
  const Section main_section = taps.at(fir.main_index());
  const double least_main =
      main.is_remainder ? 0.0 : std::max(least_magnitude(main), fir.min_main.value_or(0.0));
  if (!main.is_remainder && !(main.max > 0.0)) {
    main_section.error("the main tap can't be above 0, its largest value is " + exact(main.max));
  }
  const double main_max = main.is_remainder ? fir.peak_limit - least_others : main.max;
  if (fir.min_main && *fir.min_main > main_max + kSlack) {
    transmitter.error("min_main",
                      "min_main " + exact(*fir.min_main) + " can't be met: " + taps.path() +
                          " lets the main tap reach " + significant(main_max, 9) + " at most");
  } else if (least_others + least_main > fir.peak_limit + kSlack) {
    transmitter.error("peak_limit", "peak_limit " + exact(fir.peak_limit) +
                                        " can't be met: " + taps.path() +
                                        " makes the sum of the taps' magnitudes at least " +
                                        significant(least_others + least_main, 9));
  } else if (main.is_remainder && !(main_max > 0.0)) {
    main_section.error("the other taps leave nothing of peak_limit " + exact(fir.peak_limit) +
                       " for the main tap");
  }
}

FirLimits read_fir(const Section& transmitter) {
  FirLimits fir;
  fir.peak_limit = transmitter.number("peak_limit");
  fir.min_main = transmitter.maybe("min_main");
  const Section list = transmitter.at("fir");
  bool ordered = true;
  for (const Section& section : list.items()) {
    FirTap tap = read_fir_tap(section);
    ordered = check_position(section, fir.taps, tap.position) && ordered;
    fir.taps.push_back(std::move(tap));
  }
  const bool has_main = std::any_of(fir.taps.begin(), fir.taps.end(),
                                    [](const FirTap& tap) { return tap.position == 0; });
  if (!has_main) list.error("the main tap (position 0) is missing");
  if (!has_main || !ordered || list.failed()) return fir;

  for (FirTap& tap : fir.taps) {
    if (!tap.is_remainder) continue;
    double most_others = 0.0;
    for (const FirTap& other : fir.taps) {
      if (!other.is_remainder) most_others += std::max(std::abs(other.min), std::abs(other.max));
    }
    tap.min = std::max(fir.peak_limit - most_others, 0.0);
    tap.max = fir.peak_limit;
  }
  check_together(transmitter, fir);
  return fir;
}

CtleReference read_reference(const Section& section, double dc_gain_db) {
  const Section poles = section.at("poles_ghz");
  return {dc_gain_db,
          ghz_to_hz(section.number("f_z_ghz")),
          ghz_to_hz(poles.at(std::size_t{0}).number()),
          ghz_to_hz(poles.at(1).number()),
          {}};
}

std::string db_label(double gain_db) { return exact(gain_db) + " dB"; }

std::vector<CtleState> read_reference_states(const Section& ctle) {
  std::vector<CtleState> states;
  const std::vector<Code> gains = read_codes(ctle.at("dc_gain_db"));
  for (std::size_t i = 0; i < gains.size(); ++i) {
    if (gains[i].value > 0.0) {
      ctle.at("dc_gain_db")
          .at(i)
          .error("DC gain " + exact(gains[i].value) + " dB is out of range; allowed: at most 0 dB");
    }
    const CtleReference form = read_reference(ctle, gains[i].value);
    if (!ctle.has("low_frequency")) {
      states.push_back({gains[i].code, db_label(gains[i].value), form, {}});
      continue;
    }
    const Section low = ctle.at("low_frequency");
    const std::vector<Section> low_gains = low.at("dc_gain_db").items();
    for (std::size_t j = 0; j < low_gains.size(); ++j) {
      CtleReference both = form;
      both.low_frequency = {low_gains[j].number(), ghz_to_hz(low.number("f_lf_ghz"))};
      const long long code =
          static_cast<long long>(gains[i].code) * static_cast<long long>(low_gains.size()) +
          static_cast<long long>(j);
      if (std::abs(code) > 2000000000) {
        ctle.at("dc_gain_db").error("codes are too large for a low-frequency stage");
        return states;
      }
      states.push_back({static_cast<int>(code),
                        db_label(gains[i].value) + ", low " + db_label(low_gains[j].number()),
                        both,
                        {}});
    }
  }
  return states;
}

std::vector<std::complex<double>> read_roots(const Section& list) {
  std::vector<std::complex<double>> roots;
  for (const Section& item : list.items()) {
    if (item.value().is_array()) {
      const std::complex<double> root(ghz_to_hz(item.at(std::size_t{0}).number()),
                                      ghz_to_hz(item.at(1).number()));
      if (root.imag() == 0.0)
        item.error(
            "a pair [real, imaginary] needs an imaginary part; a real "
            "root is a plain number");
      roots.push_back(root);
      roots.push_back(std::conj(root));
    } else {
      roots.emplace_back(ghz_to_hz(item.number()), 0.0);
    }
    if (roots.back() == 0.0) item.error("a zero or pole at 0 has no place in this form");
  }
  return roots;
}

CtleZerosPoles read_zeros_poles(const Section& section) {
  CtleZerosPoles form;
  form.gain = section.number("gain");
  form.zeros_hz = read_roots(section.at("zeros_ghz"));
  form.poles_hz = read_roots(section.at("poles_ghz"));
  for (const std::complex<double>& pole : form.poles_hz) {
    if (!(pole.real() > 0.0)) {
      section.at("poles_ghz")
          .error("pole " + exact(hz_to_ghz(pole.real())) +
                 " GHz is not stable; its real part must be above 0");
      break;
    }
  }
  if (form.zeros_hz.size() > form.poles_hz.size()) {
    section.at("zeros_ghz")
        .error("has " + std::to_string(form.zeros_hz.size()) +
               " zeros; allowed: no more than the " + std::to_string(form.poles_hz.size()) +
               " poles");
  }
  return form;
}

/// Rows of frequency in Hz, gain in dB, phase in degrees; heading and comment lines before them.
std::optional<CtleMeasured> read_response(const Section& section, InputFiles& files) {
  const Section name = section.at("file");
  const std::optional<std::string> text = files.read(name);
  if (!text) return std::nullopt;
  const std::string path = files.resolved(name.text());
  std::vector<std::array<double, 3>> rows;
  std::vector<Diagnostic> notes;
  std::string_view rest = *text;
  for (int line = 1; !rest.empty() && notes.size() < kMaxNotes; ++line) {
    const auto stop = std::min(rest.find('\n'), rest.size());
    std::string_view row = trimmed(rest.substr(0, stop));
    rest.remove_prefix(std::min(stop + 1, rest.size()));
    if (row.empty() || row.starts_with('#') || row.starts_with('!')) continue;
    std::vector<std::optional<double>> numbers;
    while (true) {
      const auto cut = std::min(row.find_first_of(",;\t"), row.size());
      numbers.push_back(parse_number(trimmed(row.substr(0, cut))));
      if (cut == row.size()) break;
      row.remove_prefix(cut + 1);
    }
    const bool all = std::all_of(numbers.begin(), numbers.end(),
                                 [](const auto& number) { return number.has_value(); });
    if (!all && rows.empty()) continue;  // a heading
    if (!all || numbers.size() != 3) {
      notes.push_back(error_at(path, line,
                               "a row needs 3 numbers: frequency in Hz, gain in dB, "
                               "phase in degrees"));
      continue;
    }
    if (!rows.empty() && !(*numbers[0] > rows.back()[0])) {
      notes.push_back(error_at(path, line,
                               "frequency " + exact(*numbers[0]) + " Hz does not rise above " +
                                   exact(rows.back()[0]) + " Hz before it"));
      continue;
    }
    if (*numbers[0] < 0.0 || std::abs(*numbers[1]) > 400.0) {
      notes.push_back(error_at(path, line, "frequency must be at least 0 Hz, gain within 400 dB"));
      continue;
    }
    rows.push_back({*numbers[0], *numbers[1], *numbers[2]});
  }
  if (notes.empty() && rows.size() < 2) {
    notes.push_back(error_at(
        path, 0, "found " + std::to_string(rows.size()) + " rows of 3 numbers, wanted at least 2"));
  }
  if (!notes.empty()) {
    section.adopt(std::move(notes));
    return std::nullopt;
  }
  CtleMeasured measured;
  measured.frequencies_hz.resize(static_cast<Eigen::Index>(rows.size()));
  measured.values.resize(static_cast<Eigen::Index>(rows.size()));
  for (std::size_t i = 0; i < rows.size(); ++i) {
    const auto k = static_cast<Eigen::Index>(i);
    measured.frequencies_hz[k] = rows[i][0];
    measured.values[k] =
        std::polar(amplitude_db_to_ratio(rows[i][1]), rows[i][2] * std::numbers::pi / 180.0);
  }
  return measured;
}

std::vector<CtleState> read_listed_states(const Section& ctle, InputFiles& files) {
  std::vector<CtleState> states;
  std::set<int> seen;
  for (const Section& item : ctle.items()) {
    CtleState state;
    state.code = item.integer("code");
    state.label = "code " + std::to_string(state.code);
    if (!seen.insert(state.code).second) {
      item.error("code", "code " + std::to_string(state.code) + " is given twice");
    }
    if (item.has("reference")) {
      const Section form = item.at("reference");
      state.response = read_reference(form, form.number("dc_gain_db"));
      state.label = db_label(form.number("dc_gain_db"));
    } else if (item.has("zeros_poles")) {
      state.response = read_zeros_poles(item.at("zeros_poles"));
    } else if (auto measured = read_response(item.at("response"), files)) {
      state.response = std::move(*measured);
    }
    if (item.has("label")) state.label = item.text("label");
    states.push_back(std::move(state));
  }
  return states;
}

std::vector<CtleState> read_ctle(const Section& receiver, InputFiles& files) {
  std::vector<CtleState> states;
  if (!receiver.has("ctle")) {
    states.push_back({0, "none", CtleZerosPoles{}, {}});
  } else if (receiver.at("ctle").value().is_object()) {
    states = read_reference_states(receiver.at("ctle"));
  } else {
    states = read_listed_states(receiver.at("ctle"), files);
  }
  if (!receiver.has("gain_db")) return states;

  constexpr std::size_t kMostStates = 65536;
  const std::vector<Code> gains = read_codes(receiver.at("gain_db"));
  if (states.size() * gains.size() > kMostStates) {
    receiver.error("gain_db", std::to_string(gains.size()) + " gains times " +
                                  std::to_string(states.size()) + " CTLE states are more than " +
                                  std::to_string(kMostStates));
    return states;
  }
  std::vector<CtleState> with_gain;
  with_gain.reserve(states.size() * gains.size());
  for (const CtleState& state : states) {
    for (const Code& gain : gains) {
      with_gain.push_back(state);
      with_gain.back().gain = Code{gain.code, amplitude_db_to_ratio(gain.value)};
    }
  }
  return with_gain;
}

DfeLimits read_dfe(const Section& list) {
  DfeLimits dfe;
  for (const Section& section : list.items()) {
    DfeTap tap;
    tap.position = section.has("position") ? section.integer("position")
                   : dfe.empty()           ? 1
                                           : dfe.back().position + 1;
    check_position(section, dfe, tap.position);
    const bool absolute = section.has("max_mv") || section.has("codes_mv");
    tap.relative = !absolute;
    const double unit = absolute ? 1e-3 : 1.0;
    const char* codes_key = absolute ? "codes_mv" : "codes_ratio";
    const char* step_key = absolute ? "step_mv" : "step_ratio";
    if (section.has(codes_key)) {
      tap.codes = times(ascending(read_codes(section.at(codes_key))), unit);
      for (const Code& code : tap.codes) tap.max = std::max(tap.max, std::abs(code.value));
    } else {
      const double max = section.number(absolute ? "max_mv" : "max_ratio");
      tap.max = max * unit;
      if (section.has(step_key)) {
        tap.codes = times(codes_by_step(section, step_key, "the limits", -max, max), unit);
      }
    }
    dfe.push_back(std::move(tap));
  }
  return dfe;
}

/// Whether |H|^2 falls off fast enough for white noise to have a finite power.
bool bounds_noise(const CtleState& state) {
  if (std::holds_alternative<CtleReference>(state.response)) return true;
  const auto* form = std::get_if<CtleZerosPoles>(&state.response);
  return form != nullptr && form->poles_hz.size() > form->zeros_hz.size();
}

struct KnobCodes {
  std::vector<int> codes;  ///< empty: any value
};

std::vector<int> numbers_of(const std::vector<Code>& codes) {
  std::vector<int> out;
  for (const Code& code : codes) out.push_back(code.code);
  return out;
}

/// The codes of the knob a register field holds; empty when there is no such knob.
std::optional<KnobCodes> find_knob(const std::string& knob, const Device& device) {
  KnobCodes found;
  if (knob == "swing") {
    found.codes = numbers_of(device.transmitter.swings);
    return found;
  }
  if (knob == "ctle" || knob == "gain") {
    for (const CtleState& state : device.receiver.ctle) {
      if (knob == "ctle") {
        found.codes.push_back(state.code);
      } else if (state.gain) {
        found.codes.push_back(state.gain->code);
      } else {
        return std::nullopt;
      }
    }
    return found;
  }
  const auto colon = knob.find(':');
  if (colon == std::string::npos) return std::nullopt;
  const auto position = parse_integer(std::string_view(knob).substr(colon + 1));
  if (!position) return std::nullopt;
  if (knob.starts_with("fir:")) {
    for (const FirTap& tap : device.transmitter.fir.taps) {
      if (tap.position == *position) return KnobCodes{numbers_of(tap.codes)};
    }
  } else if (knob.starts_with("dfe:")) {
    for (const DfeTap& tap : device.receiver.dfe) {
      if (tap.position == *position) return KnobCodes{numbers_of(tap.codes)};
    }
  }
  return std::nullopt;
}

std::vector<std::string> knob_names(const Device& device) {
  std::vector<std::string> names = {"swing", "ctle"};
  if (device.receiver.ctle.front().gain) names.emplace_back("gain");
  for (const FirTap& tap : device.transmitter.fir.taps) {
    names.push_back("fir:" + std::to_string(tap.position));
  }
  for (const DfeTap& tap : device.receiver.dfe)
    names.push_back("dfe:" + std::to_string(tap.position));
  return names;
}

std::optional<unsigned long long> read_address(const Section& address) {
  if (address.value().is_number()) return static_cast<unsigned long long>(address.number());
  const std::string& text = address.text();
  unsigned long long value = 0;
  if (text.starts_with("0x") || text.starts_with("0X")) {
    const auto [end, code] = std::from_chars(text.data() + 2, text.data() + text.size(), value, 16);
    if (code == std::errc{} && end == text.data() + text.size()) return value;
  }
  address.error(shown_text(text) + " is not an address; wanted a text such as \"0x1a04\"");
  return std::nullopt;
}

/// Whether each code of the knob can be written into the field.
void check_fits(const Section& section, const RegisterField& field, const KnobCodes& knob) {
  const int width = field.high_bit - field.low_bit + 1;
  const auto limit = [](int bits) { return std::ldexp(1.0, bits); };
  if (!field.table.empty()) {
    std::set<long long> mapped;
    for (const auto& [code, value] : field.table) {
      if (!mapped.insert(code).second) {
        section.at("values").error("code " + std::to_string(code) + " is given twice");
      }
      if (static_cast<double>(value) >= limit(width)) {
        section.at("values").error("field value " + std::to_string(value) + " does not fit into " +
                                   std::to_string(width) + " bits");
      }
    }
    for (const int code : knob.codes) {
      if (!mapped.contains(code)) {
        section.at("values").error("code " + std::to_string(code) + " of knob " + field.knob +
                                   " has no field value");
        return;
      }
    }
    return;
  }
  if (knob.codes.empty()) return;
  const auto [least, most] = std::minmax_element(knob.codes.begin(), knob.codes.end());
  const double above = *least < 0 ? limit(width - 1) : limit(width);
  if (*most >= above || *least < -limit(width - 1)) {
    section.at("bits").error("codes " + std::to_string(*least) + " to " + std::to_string(*most) +
                             " of knob " + field.knob + " do not fit into " +
                             std::to_string(width) + " bits");
  }
}

}  // namespace

Transmitter read_transmitter(const Section& section) {
  Transmitter transmitter;
  const Section swing = section.at("swing_mvppd");
  if (swing.value().is_number()) {
    transmitter.swings = {{0, swing.number()}};
  } else {
    transmitter.swings = ascending(read_codes(swing));
    if (!(transmitter.swings.front().value > 0.0)) {
      swing.error("swing " + exact(transmitter.swings.front().value) +
                  " is out of range; allowed: above 0 mVppd");
    }
  }
  for (Swing& one : transmitter.swings) one.value = mvppd_to_peak_v(one.value);
  transmitter.fir = read_fir(section);
  transmitter.snr_db = section.maybe("snr_db");
  return transmitter;
}

Receiver read_receiver(const Section& section, InputFiles& files) {
  Receiver receiver;
  if (const auto ghz = section.maybe("bandwidth_ghz")) receiver.bandwidth_hz = ghz_to_hz(*ghz);
  receiver.ctle = read_ctle(section, files);
  receiver.dfe = read_dfe(section.at("dfe"));
  if (section.has("noise")) {
    const Section noise = section.at("noise");
    if (const auto rms_mv = noise.maybe("rms_mv")) receiver.noise_rms_v = mv_to_v(*rms_mv);
    if (const auto density = noise.maybe("density_v2_per_ghz")) {
      receiver.noise_density_v2_per_hz = v2_per_ghz_to_v2_per_hz(*density);
      if (!receiver.bandwidth_hz &&
          !std::all_of(receiver.ctle.begin(), receiver.ctle.end(), bounds_noise)) {
        noise.error("density_v2_per_ghz",
                    "a density needs receiver.bandwidth_ghz, or a CTLE that falls off in every "
                    "state; nothing bounds the noise");
      }
    }
  }
  if (const auto mvppd = section.maybe("peak_input_mvppd")) {
    receiver.peak_input_v = mvppd_to_peak_v(*mvppd);
  }
  receiver.sensitivity_v = mv_to_v(section.number("sensitivity_mv"));
  return receiver;
}

std::vector<RegisterField> read_registers(const Section& registers, const Device& device) {
  std::vector<RegisterField> fields;
  for (const Section& section : registers.items()) {
    RegisterField field;
    field.field = section.text("field");
    if (const auto address = read_address(section.at("address"))) field.address = *address;
    field.high_bit = section.at("bits").at(std::size_t{0}).integer();
    field.low_bit = section.at("bits").at(1).integer();
    field.knob = section.text("knob");
    if (section.has("values")) {
      for (const Section& pair : section.at("values").items()) {
        field.table.push_back({pair.value()[0].get<long long>(), pair.value()[1].get<long long>()});
      }
    }
    const std::optional<KnobCodes> knob = find_knob(field.knob, device);
    if (!knob) {
      std::string known;
      for (const std::string& name : knob_names(device))
        known += (known.empty() ? "" : ", ") + name;
      section.error("knob", shown_text(field.knob) + " is no knob of this device; it has " + known);
    }
    if (field.high_bit < field.low_bit) {
      section.error("bits", "highest bit " + std::to_string(field.high_bit) +
                                " lies below lowest bit " + std::to_string(field.low_bit));
    } else if (knob) {
      check_fits(section, field, *knob);
    }
    fields.push_back(std::move(field));
  }
  return fields;
}

}  // namespace tapwright
