#include <ostream>

#include "cli/link_input.hpp"
#include "tapwright/report/solution_report.hpp"

namespace tapwright::cli {
namespace {

const std::vector<std::string> kOutputs = {"--json"};

ExitCode run_score(const Arguments& arguments, Console& console) {
  if (!outputs_can_be_written(arguments, console, kOutputs)) return ExitCode::kBadInput;
  const auto model = model_from(arguments, console);
  if (!model) return ExitCode::kBadInput;
  const auto settings = settings_from(arguments, console, *model);
  if (!settings) return ExitCode::kBadInput;

  Solution given;
  given.settings = *settings;
  given.score = score(*model, *settings);
  const SolutionReport report = report_on(*model, std::move(given));
  if (!write_to(arguments, console, "--json", json_of(report))) return ExitCode::kBadInput;
  if (!takes_standard_output(arguments, kOutputs)) console.out << text_of(report);
  return report.solution.score.target_met() ? ExitCode::kOk : ExitCode::kTargetMissed;
}

}  // namespace

Command score_command() {
  return {"score",
          "what a given setting is worth on a link",
          "The setting comes from a file or from options. A sampling instant or DFE that is left out "
          "is adapted, as hardware would.",
          [] {
            std::vector<OptionRow> rows = {{"LINK", "", "the built-in sample", "link file"}, set_row()};
            for (OptionRow& row : settings_rows()) rows.push_back(std::move(row));
            rows.push_back({"--json", "FILE", "", "write the score as JSON; - is standard output"});
            for (OptionRow& row : common_rows()) rows.push_back(std::move(row));
            return rows;
          }(),
          run_score};
}

}  // namespace tapwright::cli
