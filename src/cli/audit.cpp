#include <map>
#include <ostream>

#include "cli/link_input.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"
#include "tapwright/channel/text_file.hpp"
#include "tapwright/link/read_link.hpp"
#include "tapwright/report/audit_report.hpp"

namespace tapwright::cli {
namespace {

const std::vector<std::string> kOutputs = {"--json", "--csv", "--registers", "--html"};

std::string beside(const std::string& table, const std::string& name) {
  if (name.starts_with('/')) return name;
  const std::size_t slash = table.rfind('/');
  return slash == std::string::npos ? name : table.substr(0, slash + 1) + name;
}

std::string json_text(const std::string& text) {
  std::string out = "\"";
  for (const char c : text) out += c == '"' || c == '\\' ? std::string("\\") + c : std::string(1, c);
  return out + "\"";
}

/// A model a lane: its own link, or the one for all with its own Touchstone file. Lanes that share a
/// channel share the work.
std::optional<std::vector<EyeModel>> models_of(const std::vector<ReadBackLane>& lanes, const std::string& table,
                                               const std::string& link_file, const std::vector<LinkChange>& changes,
                                               const EyeModel& base, Console& console) {
  std::map<std::string, EyeModel> known;
  std::vector<EyeModel> models;
  for (const ReadBackLane& lane : lanes) {
    if (lane.link.empty() && lane.channel.empty()) {
      models.push_back(base);
      continue;
    }
    const std::string key = lane.link.empty() ? "channel " + lane.channel : "link " + lane.link;
    auto found = known.find(key);
    if (found == known.end()) {
      std::vector<LinkChange> with = changes;
      std::string file = link_file;
      if (lane.link.empty()) {
        // Relative to the table; the reader counts from the link file, so the path is made absolute
        // enough by going through the table's folder.
        with.push_back({"channel.touchstone.file", json_text(absolute_path(beside(table, lane.channel)))});
      } else {
        file = beside(table, lane.link);
      }
      const Result<Link> link = read_link(file, with);
      if (!link) {
        console.tell({error_at(table, lane.line, "lane " + shown_text(lane.lane) + ": its channel can't be used:")});
        console.tell(link.notes);
        return std::nullopt;
      }
      found = known.emplace(key, prepare(*link.value)).first;
    }
    models.push_back(found->second);
  }
  return models;
}

ExitCode run_audit(const Arguments& arguments, Console& console) {
  const RunControl control = run_control(arguments, console);
  AuditOptions options;
  options.tolerance_db = arguments.number("--tolerance-db", 0, 60).value_or(options.tolerance_db);
  if (const auto mv = arguments.number("--tolerance-mv", 0, 1e5)) options.tolerance_v = mv_to_v(*mv);
  if (!outputs_can_be_written(arguments, console, kOutputs)) return ExitCode::kBadInput;

  const std::string table = *arguments.text("TABLE");
  const auto text = read_text_file(table);
  if (!text) {
    console.tell(text.notes);
    return ExitCode::kBadInput;
  }
  const auto base = model_from(arguments, console);
  if (!base) return ExitCode::kBadInput;
  const auto lanes = parse_read_back(text.value->text, table, base->link);
  console.tell(lanes.notes);
  if (!lanes) return ExitCode::kBadInput;
  const auto models = models_of(*lanes.value, table, arguments.text("LINK").value_or(""), changes_from(arguments), *base, console);
  if (!models) return ExitCode::kBadInput;

  std::vector<EyeScan> scans;
  if (const auto file = arguments.text("--scan")) {
    const auto scan_text = read_text_file(*file);
    if (!scan_text) {
      console.tell(scan_text.notes);
      return ExitCode::kBadInput;
    }
    auto parsed = parse_eye_scans(scan_text.value->text, *file);
    console.tell(parsed.notes);
    if (!parsed) return ExitCode::kBadInput;
    scans = std::move(*parsed.value);
  }

  auto audit = audit_lanes(*lanes.value, *models, table, options, control);
  console.tell(audit.notes);
  if (!audit) return ExitCode::kBadInput;
  if (console.stop.stop_requested()) {
    console.error("stopped; nothing was written");
    return ExitCode::kStopped;
  }
  AuditReport report{&*models, table, options, std::move(*audit.value), {}};
  for (const EyeScan& scan : scans) {
    LaneFit fit{scan.lane, {}, ""};
    std::size_t at = scan.lane.empty() && report.audit.lanes.size() == 1 ? 0 : report.audit.lanes.size();
    for (std::size_t i = 0; i < report.audit.lanes.size(); ++i) {
      if (report.audit.lanes[i].lane == scan.lane) at = i;
    }
    if (at == report.audit.lanes.size()) {
      console.tell({error_at(*arguments.text("--scan"), 0, "lane " + shown_text(scan.lane) + " is not in " + table)});
      return ExitCode::kBadInput;
    }
    try {
      fit.fit = fit_scan((*models)[at], report.audit.lanes[at].read_back, scan, control);
    } catch (const std::invalid_argument& reason) {
      fit.why_not = reason.what();
    }
    report.fits.push_back(std::move(fit));
  }
  control.report(1.0, "audit");
  const std::pair<const char*, std::string (*)(const AuditReport&)> writers[] = {
      {"--json", json_of}, {"--csv", csv_of}, {"--registers", register_csv_of}, {"--html", html_of}};
  for (const auto& [option, write] : writers) {
    if (arguments.has(option) && !write_to(arguments, console, option, write(report))) return ExitCode::kBadInput;
  }
  if (!takes_standard_output(arguments, kOutputs)) console.out << text_of(report);
  return report.audit.passed() ? ExitCode::kOk : ExitCode::kTargetMissed;
}

}  // namespace

Command audit_command() {
  return {"audit",
          "compare codes read back from hardware with the best",
          "TABLE holds one row a lane, as CSV or JSON: columns lane, swing, fir:-1, fir:1, ctle, gain, dfe:1, ... "
          "(register codes; a column may be missing), or the fields of the link's register map; phase_ui; link or "
          "channel (the lane's own link file or Touchstone file, relative to the table); eye_height_mv and eye_width_ui "
          "as measured. The exit code is 1 when a lane fails.",
          [] {
            std::vector<OptionRow> rows = {
                {"TABLE", "", "", "codes read back, one row a lane", false, true},
                {"LINK", "", "the built-in sample", "link file for all lanes that name none"},
                set_row(),
                {"--tolerance-db", "DB", "1", "a lane fails when its gap to the best is larger"},
                {"--tolerance-mv", "MV", "none", "likewise in millivolt"},
                {"--scan", "FILE", "", "eye scan, bathtub or error counts to fit gain, noise and jitter to: CSV with "
                                       "offset_mv, phase_ui, errors, bits (and lane)"},
                {"--json", "FILE", "", "write the audit as JSON; - is standard output"},
                {"--csv", "FILE", "", "write one row a lane as CSV"},
                {"--registers", "FILE", "", "write the best setting of each lane as register writes, CSV"},
                {"--html", "FILE", "", "write a report to look at"},
                threads_row()};
            for (OptionRow& row : common_rows()) rows.push_back(std::move(row));
            return rows;
          }(),
          run_audit};
}

}  // namespace tapwright::cli
