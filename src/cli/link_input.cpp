#include "cli/link_input.hpp"

#include <filesystem>
#include <nlohmann/json.hpp>
#include <ostream>

#include "tapwright/base/text.hpp"
#include "tapwright/channel/text_file.hpp"
#include "tapwright/eye/sampling.hpp"
#include "tapwright/link/read_link.hpp"
#include "tapwright/report/output_file.hpp"

namespace tapwright::cli {

std::string absolute_path(const std::string& path) {
  std::error_code problem;
  const auto absolute = std::filesystem::absolute(path, problem);
  return problem ? path : absolute.lexically_normal().string();
}

std::vector<LinkChange> changes_from(const Arguments& arguments) {
  std::vector<LinkChange> changes;
  for (const std::string& word : arguments.texts("--set")) {
    const std::size_t equals = word.find('=');
    if (equals == std::string::npos || equals == 0) {
      throw BadArgument{"--set: found " + shown_text(word) + ", wanted KEY=VALUE"};
    }
    changes.push_back({word.substr(0, equals), word.substr(equals + 1)});
  }
  return changes;
}

std::optional<LinkSource> source_from(const Arguments& arguments, Console& console) {
  LinkSource source;
  source.changes = changes_from(arguments);
  const auto file = arguments.text("LINK");
  if (!file) {
    source.text = example_link();
    source.file_name = "built-in sample";
    if (!console.quiet) {
      console.err << "tapwright: no link file given, so this is the built-in sample "
                     "(tapwright example prints it)\n";
    }
    return source;
  }
  Result<TextFile> text = read_text_file(*file);
  if (!text) {
    console.tell(text.notes);
    return std::nullopt;
  }
  source.text = std::move(text.value->text);
  source.file_name = *file;
  source.base_directory = std::filesystem::path(*file).parent_path().string();
  return source;
}

std::optional<EyeModel> model_from(const LinkSource& source, Console& console) {
  const Result<Link> link = read_link(source);
  if (!link) {
    console.tell(link.notes);
    return std::nullopt;
  }
  return prepare(*link.value);
}

std::optional<EyeModel> model_from(const Arguments& arguments, Console& console) {
  const auto source = source_from(arguments, console);
  return source ? model_from(*source, console) : std::nullopt;
}

bool outputs_can_be_written(const Arguments& arguments, Console& console,
                            const std::vector<std::string>& options) {
  std::string on_standard_output;
  for (const std::string& option : options) {
    const auto path = arguments.text(option);
    if (!path) continue;
    if (*path == "-") {
      if (!on_standard_output.empty()) {
        console.error(on_standard_output + " and " + option + " both go to standard output");
        return false;
      }
      on_standard_output = option;
    }
    if (const auto problem = check_output(*path)) {
      console.tell({*problem});
      return false;
    }
  }
  return true;
}

bool write_to(const Arguments& arguments, Console& console, const std::string& option,
              const std::string& bytes) {
  const auto path = arguments.text(option);
  if (!path) return true;
  if (*path == "-") {
    console.out << bytes;
    return true;
  }
  if (const auto problem = write_output(*path, bytes)) {
    console.tell({*problem});
    return false;
  }
  return true;
}

bool takes_standard_output(const Arguments& arguments, const std::vector<std::string>& options) {
  for (const std::string& option : options) {
    if (arguments.text(option) == "-") return true;
  }
  return false;
}

std::vector<OptionRow> settings_rows() {
  return {{"--settings", "FILE", "",
           "settings as a JSON file: a solution, or the object that stands under \"settings\" in one"},
          {"--swing", "MVPPD", "", "swing in mV peak to peak differential"},
          {"--fir", "LIST", "", "FIR taps as POSITION:VALUE, such as -1:-0.05,1:-0.15; the main tap "
                                "may be left to what the others leave"},
          {"--ctle", "STATE", "", "CTLE state (its code)"},
          {"--gain", "CODE", "", "gain code, where the device has one"},
          {"--dfe", "LIST", "adapted", "DFE taps in mV, such as 24,10"},
          {"--phase", "UI", "by the link's rule", "sampling instant after the pulse's peak"}};
}

namespace {

std::vector<std::string> split(const std::string& list) {
  std::vector<std::string> parts{""};
  for (const char c : list) {
    if (c == ',') parts.emplace_back();
    else parts.back() += c;
  }
  return parts;
}

double number_in(const std::string& option, const std::string& word) {
  const auto value = parse_number(trimmed(word));
  if (!value) throw BadArgument{option + ": found " + shown_text(word) + ", wanted a number"};
  return *value;
}

}  // namespace

std::optional<Settings> settings_from(const Arguments& arguments, Console& console,
                                      const EyeModel& model) {
  nlohmann::json object = nlohmann::json::object();
  if (const auto mvppd = arguments.number("--swing", 0, 1e5)) object["swing_mvppd"] = *mvppd;
  if (const auto list = arguments.text("--fir")) {
    object["tx_fir"] = nlohmann::json::array();
    for (const std::string& part : split(*list)) {
      const std::size_t colon = part.find(':');
      const auto position = parse_integer(trimmed(part.substr(0, colon)));
      if (colon == std::string::npos || !position) {
        throw BadArgument{"--fir: found " + shown_text(part) + ", wanted POSITION:VALUE"};
      }
      object["tx_fir"].push_back(
          {{"position", *position}, {"value", number_in("--fir", part.substr(colon + 1))}});
    }
  }
  if (const auto state = arguments.integer("--ctle", -1000000, 1000000)) {
    object["ctle"]["state"] = *state;
  }
  if (const auto gain = arguments.integer("--gain", -1000000, 1000000)) {
    object["ctle"]["gain"] = *gain;
  }
  if (const auto list = arguments.text("--dfe")) {
    object["dfe_mv"] = nlohmann::json::array();
    for (const std::string& part : split(*list)) object["dfe_mv"].push_back(number_in("--dfe", part));
  }
  if (const auto phase = arguments.number("--phase", -2, 2)) object["phase_ui"] = *phase;

  const auto file = arguments.text("--settings");
  Result<GivenSettings> given;
  if (file) {
    if (!object.empty()) {
      throw BadArgument{"--settings: gives every knob; it can't stand beside --" +
                        std::string("swing, --fir, --ctle, --gain, --dfe or --phase")};
    }
    const auto text = read_text_file(*file);
    if (!text) {
      console.tell(text.notes);
      return std::nullopt;
    }
    given = settings_from_json(model.link, text.value->text, *file);
  } else {
    given = settings_from_json(model.link, object.dump(), "the options");
  }
  console.tell(given.notes);
  if (!given) return std::nullopt;
  Settings settings = given.value->settings;
  if (!given.value->has_phase) {
    settings.phase_samples = sampling_instant(model, settings, model.link.sampling).phase_samples;
  }
  if (!given.value->has_dfe) settings.dfe_v = best_dfe(model, settings);
  return settings;
}

}  // namespace tapwright::cli
