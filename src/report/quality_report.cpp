#include "tapwright/report/quality_report.hpp"

#include <algorithm>
#include <nlohmann/json.hpp>

#include "report/text_table.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"

namespace tapwright {
namespace {

std::string verdict_text(QualityRow::Verdict verdict) {
  switch (verdict) {
    case QualityRow::Verdict::kGood:
      return "good";
    case QualityRow::Verdict::kAcceptable:
      return "acceptable";
    case QualityRow::Verdict::kDoubtful:
      return "doubtful";
    case QualityRow::Verdict::kPoor:
      break;
  }
  return "poor";
}

std::string ports_text(const std::vector<int>& ports) {
  std::string text = std::to_string(ports[0]);
  if (ports.size() > 1) text += " and " + std::to_string(ports[1]);
  return text;
}

std::string padded(std::string text, std::size_t width) {
  text.resize(std::max(text.size(), width), ' ');
  return text;
}

}  // namespace

std::string text_of(const std::vector<FileQuality>& files, double launch_v) {
  std::string text;
  for (const FileQuality& file : files) {
    text += "\nQuality of " + printable_text(file.path, 200) + ", from port " +
            ports_text(file.ports.in) + " to " + ports_text(file.ports.out) + "\n";
    const std::vector<QualityRow> rows = quality_rows(file.data, file.through, launch_v);
    std::size_t name_width = 0;
    for (const QualityRow& row : rows) name_width = std::max(name_width, row.name.size());
    const std::string indent(name_width + 16, ' ');
    for (const QualityRow& row : rows) {
      text += "  " + padded(row.name, name_width + 2) + padded(verdict_text(row.verdict), 12) +
              row.value + "\n";
      if (!row.remark.empty()) text += item_text(indent, row.remark);
    }
  }
  return text;
}

std::string json_of(const std::vector<FileQuality>& files, double launch_v) {
  nlohmann::ordered_json all = nlohmann::ordered_json::array();
  for (const FileQuality& file : files) {
    const DataQuality& data = file.data;
    const PathQuality& path = file.through;
    nlohmann::ordered_json one = {{"file", file.path},
                                  {"ports", {{"in", file.ports.in}, {"out", file.ports.out}}},
                                  {"passivity_percent", data.passivity_percent},
                                  {"reciprocity_percent", data.reciprocity_percent},
                                  {"causality_percent", data.causality_percent},
                                  {"largest_gain", data.largest_gain},
                                  {"largest_gain_ghz", hz_to_ghz(data.largest_gain_hz)},
                                  {"num_points", data.num_points},
                                  {"lowest_ghz", hz_to_ghz(data.lowest_hz)},
                                  {"highest_ghz", hz_to_ghz(data.highest_hz)},
                                  {"largest_step_ghz", hz_to_ghz(data.largest_step_hz)},
                                  {"turns_per_step", path.turns_per_step},
                                  {"top_over_symbol_rate", path.top_over_symbol_rate},
                                  {"delay_ps", s_to_ps(path.delay_s)},
                                  {"insertion_loss_db", path.insertion_loss_db},
                                  {"insertion_loss_ghz", hz_to_ghz(path.insertion_loss_hz)},
                                  {"return_loss_in_db", path.return_loss_in_db},
                                  {"return_loss_in_ghz", hz_to_ghz(path.return_loss_in_hz)},
                                  {"return_loss_out_db", path.return_loss_out_db},
                                  {"return_loss_out_ghz", hz_to_ghz(path.return_loss_out_hz)},
                                  {"ripple_db", path.ripple_db},
                                  {"ripple_ghz", hz_to_ghz(path.ripple_hz)}};
    if (path.skew_s) one["skew_ps"] = s_to_ps(*path.skew_s);
    if (path.mode_conversion_db) one["mode_conversion_db"] = *path.mode_conversion_db;
    if (path.worst_reflection) {
      const WorstReflection& worst = *path.worst_reflection;
      one["worst_reflection"] = {{"delay_ps", s_to_ps(worst.delay_s)},
                                 {"share", worst.share},
                                 {"impedance_before_ohm", worst.impedance_before_ohm},
                                 {"impedance_ohm", worst.impedance_ohm},
                                 {"reflection", worst.reflection},
                                 {"eye_cost_mv", v_to_mv(worst.eye_cost_v * launch_v)}};
    }
    all.push_back(std::move(one));
  }
  return all.dump(2, ' ', false, nlohmann::ordered_json::error_handler_t::replace);
}

}  // namespace tapwright
