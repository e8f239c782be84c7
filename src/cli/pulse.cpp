#include <algorithm>
#include <ostream>

#include "cli/link_input.hpp"
#include "tapwright/eye/sampling.hpp"
#include "tapwright/report/pulse_report.hpp"

namespace tapwright::cli {
namespace {

const std::vector<std::string> kOutputs = {"--json", "--csv"};

/// No setting asked for: the largest swing, FIR flat, the first CTLE state, DFE off.
Settings plain_settings(const EyeModel& model) {
  const Device& device = model.link.device;
  Settings s;
  s.swing_index = device.transmitter.swings.size() - 1;
  s.fir = Eigen::VectorXd::Zero(static_cast<Eigen::Index>(device.transmitter.fir.taps.size()));
  s.fir[static_cast<Eigen::Index>(device.transmitter.fir.main_index())] = 1.0;
  s.dfe_v = Eigen::VectorXd::Zero(static_cast<Eigen::Index>(device.receiver.dfe.size()));
  return s;
}

ExitCode run_pulse(const Arguments& arguments, Console& console) {
  if (!outputs_can_be_written(arguments, console, kOutputs)) return ExitCode::kBadInput;
  const auto model = model_from(arguments, console);
  if (!model) return ExitCode::kBadInput;
  bool asked = false;
  for (const OptionRow& row : settings_rows()) asked = asked || arguments.has(row.name);
  const auto settings = asked ? settings_from(arguments, console, *model) : plain_settings(*model);
  if (!settings) return ExitCode::kBadInput;

  PulseReport report = pulse_report(*model, *settings);
  Result<std::vector<FileQuality>> files = measure_files(model->link);
  if (!files) console.tell(files.notes);
  if (!files) return ExitCode::kBadInput;
  report.files = std::move(*files.value);
  if (!write_to(arguments, console, "--json", json_of(report))) return ExitCode::kBadInput;
  if (!write_to(arguments, console, "--csv", csv_of(report))) return ExitCode::kBadInput;
  if (!takes_standard_output(arguments, kOutputs)) console.out << text_of(report);
  return ExitCode::kOk;
}

}  // namespace

Command pulse_command() {
  return {"pulse",
          "the pulse response and cursors that a link has, and the quality of its files",
          "Without a setting: largest swing, FIR flat, first CTLE state, DFE off.",
          [] {
            std::vector<OptionRow> rows = {{"LINK", "", "the built-in sample", "link file"}, set_row()};
            for (OptionRow& row : settings_rows()) rows.push_back(std::move(row));
            rows.push_back({"--json", "FILE", "", "write pulse and cursors as JSON; - is standard output"});
            rows.push_back({"--csv", "FILE", "", "write the pulse as CSV; - is standard output"});
            for (OptionRow& row : common_rows()) rows.push_back(std::move(row));
            return rows;
          }(),
          run_pulse};
}

}  // namespace tapwright::cli
