#include <algorithm>
#include <ostream>

#include "cli/link_input.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/report/html_report.hpp"
#include "tapwright/report/output_file.hpp"
#include "tapwright/report/solution_report.hpp"
#include "tapwright/search/solve.hpp"
#include "tapwright/study/parameter_sensitivity.hpp"

namespace tapwright::cli {
namespace {

const std::vector<std::string> kOutputs = {"--json", "--html"};

ExitCode run_solve(const Arguments& arguments, Console& console) {
  const RunControl control = run_control(arguments, console);
  SearchOptions options;
  options.max_nodes = arguments.integer("--max-nodes", 1, 1'000'000'000'000).value_or(options.max_nodes);
  options.max_seconds = arguments.number("--max-seconds", 0.001, 1e7);
  if (!outputs_can_be_written(arguments, console, kOutputs)) return ExitCode::kBadInput;
  if (const auto folder = arguments.text("--figures")) {
    if (const auto problem = check_output(*folder + "/eye.svg")) {
      console.tell({*problem});
      return ExitCode::kBadInput;
    }
  }
  const std::string extent = arguments.text("--sensitivity").value_or("all");
  if (extent != "all" && extent != "knobs") {
    throw BadArgument{"--sensitivity: found " + shown_text(extent) + ", wanted knobs or all"};
  }
  ParameterStudyOptions study;
  const auto draws = arguments.integer("--draws", 0, 1'000'000);
  study.seed = static_cast<std::uint64_t>(arguments.integer("--seed", 0, 1LL << 53).value_or(1));
  const auto source = source_from(arguments, console);
  const auto model = source ? model_from(*source, console) : std::nullopt;
  if (!model) return ExitCode::kBadInput;
  // A draw transforms the record once: fewer of them where it is long keep a plain solve quick.
  const long long affordable =
      std::clamp<long long>(2'000'000 / model->link.channel.num_samples, 6, 40);
  study.num_draws = static_cast<int>(draws.value_or(affordable));

  SolutionReport report = report_on(*model, solve(*model, options, control));
  if (extent == "all" && !control.stopped()) {
    report.parameters = parameter_study(*model, *source, report.solution.settings,
                                        report.sensitivity, study, control);
  }
  control.report(1.0, "search");
  if (console.stop.stop_requested()) {
    console.error("stopped; nothing was written");
    return ExitCode::kStopped;
  }
  if (arguments.has("--json") && !write_to(arguments, console, "--json", json_of(report))) {
    return ExitCode::kBadInput;
  }
  if (arguments.has("--html") && !write_to(arguments, console, "--html", html_of(report))) {
    return ExitCode::kBadInput;
  }
  if (const auto folder = arguments.text("--figures")) {
    for (const Figure& figure : figures_of(report)) {
      if (const auto problem = write_output(*folder + "/" + figure.id + ".svg", svg_of(figure))) {
        console.tell({*problem});
        return ExitCode::kBadInput;
      }
    }
  }
  if (!takes_standard_output(arguments, kOutputs)) console.out << text_of(report);
  return report.solution.score.target_met() ? ExitCode::kOk : ExitCode::kTargetMissed;
}

}  // namespace

Command solve_command() {
  return {"solve",
          "the settings that open the eye of a link most, and how sure that is",
          "LINK is a link file (tapwright example prints one to start from, tapwright schema every key). "
          "Without it the built-in sample is solved. The answer goes to standard output as text; "
          "the exit code is 1 when it misses the link's target.",
          [] {
            std::vector<OptionRow> rows = {
                {"LINK", "", "the built-in sample", "link file"},
                set_row(),
                {"--json", "FILE", "", "write the answer as JSON (tapwright.solution/1); - is standard output"},
                {"--html", "FILE", "", "write a report to look at, one file that opens offline"},
                {"--figures", "DIR", "", "write the report's figures as SVG files into a directory"},
                {"--max-nodes", "N", "50000000", "boxes of FIR codes to look at before settling for a bound"},
                {"--max-seconds", "S", "none", "likewise in seconds; the answer may then differ between runs"},
                {"--sensitivity", "EXTENT", "all",
                 "knobs: each knob one code off; all: also each parameter of channel and devices off, "
                 "alone and together"},
                {"--draws", "N", "6 to 40, by the record's length", "random draws of all parameters at once, for the yield"},
                {"--seed", "N", "1", "seed of the draws"},
                threads_row()};
            for (OptionRow& row : common_rows()) rows.push_back(std::move(row));
            return rows;
          }(),
          run_solve};
}

}  // namespace tapwright::cli
