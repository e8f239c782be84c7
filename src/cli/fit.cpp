#include <ostream>

#include "cli/link_input.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/channel/ports.hpp"
#include "tapwright/channel/touchstone.hpp"
#include "tapwright/report/fit_report.hpp"

namespace tapwright::cli {
namespace {

const std::vector<std::string> kOutputs = {"--json", "--touchstone"};

/// A list such as 1,3; empty where the option is not given.
std::vector<int> port_list(const Arguments& arguments, const std::string& option) {
  std::vector<int> ports;
  const auto list = arguments.text(option);
  if (!list) return ports;
  std::string_view rest = *list;
  while (true) {
    const std::size_t comma = rest.find(',');
    const auto port = parse_integer(trimmed(rest.substr(0, comma)));
    if (!port || *port < 1 || *port > 1000) {
      throw BadArgument{option + ": found " + shown_text(*list) +
                        ", wanted one port or two, such as 1,3"};
    }
    ports.push_back(static_cast<int>(*port));
    if (comma == std::string_view::npos) return ports;
    rest.remove_prefix(comma + 1);
  }
}

ExitCode run_fit(const Arguments& arguments, Console& console) {
  if (!outputs_can_be_written(arguments, console, kOutputs)) return ExitCode::kBadInput;
  const std::string file = *arguments.text("FILE");
  const double length_m = *arguments.number("--length-m", 1e-6, 1e4);
  const auto top_ghz = arguments.number("--top-ghz", 1e-6, 1e4);
  const double predicted_m = arguments.number("--predict-m", 0, 1e4).value_or(length_m);
  PortMap map{port_list(arguments, "--in"), port_list(arguments, "--out")};
  if (map.in.empty() != map.out.empty()) throw BadArgument{"--in and --out go together"};

  const Result<TouchstoneFile> measured = read_touchstone(file);
  console.tell(measured.notes);
  if (!measured) return ExitCode::kBadInput;
  const Network& network = measured.value->network;
  if (map.in.empty()) {
    const auto maps = guess_ports(network, file);
    console.tell(maps.notes);
    if (!maps) return ExitCode::kBadInput;
    map = maps.value->front();
  }
  const Result<Network> path = through_path(network, map, file);
  console.tell(path.notes);
  if (!path) return ExitCode::kBadInput;
  const Result<LineFit> fit =
      fit_line(*path.value, length_m, file, top_ghz ? std::optional(*top_ghz * 1e9) : std::nullopt);
  console.tell(fit.notes);
  if (!fit) return ExitCode::kBadInput;

  const double reference_ohm = path.value->reference_ohm[0].real();
  const FitReport report{
      file, *fit.value, reference_ohm, predicted_m,
      predicted_network(*fit.value, predicted_m, path.value->frequencies_hz, reference_ohm)};
  if (!write_to(arguments, console, "--json", json_of(report))) return ExitCode::kBadInput;
  if (arguments.has("--touchstone") &&
      !write_to(arguments, console, "--touchstone", write_touchstone(report.predicted))) {
    return ExitCode::kBadInput;
  }
  if (!takes_standard_output(arguments, kOutputs)) console.out << text_of(report);
  return ExitCode::kOk;
}

}  // namespace

Command fit_command() {
  return {"fit", "a line model from a measured piece of known length",
          "Loss, delay, impedance and, where they are seen, dispersion and the transitions at both "
          "ends; and what another length of the same line would do. The last lines are a channel "
          "for a link file.",
          [] {
            std::vector<OptionRow> rows = {
                {"FILE", "", "", "Touchstone file", false, true},
                {"--length-m", "M", "", "its length in metres", false, true},
                {"--in", "PORTS", "guessed", "near port, or two for a pair, such as 1,3"},
                {"--out", "PORTS", "guessed", "far port, or two for a pair, such as 2,4"},
                {"--top-ghz", "GHZ", "reflection of -15 dB", "highest frequency to fit"},
                {"--predict-m", "M", "the same", "length to predict"},
                {"--touchstone", "FILE", "",
                 "write the prediction as a two-port; - is standard output"},
                {"--json", "FILE", "", "write the result as JSON; - is standard output"}};
            for (OptionRow& row : common_rows()) rows.push_back(std::move(row));
            return rows;
          }(),
          run_fit};
}

}  // namespace tapwright::cli
