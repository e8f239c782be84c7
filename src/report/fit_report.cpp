#include "tapwright/report/fit_report.hpp"

#include <algorithm>
#include <cmath>
#include <nlohmann/json.hpp>
#include <numbers>
#include <vector>

#include "report/text_table.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"

namespace tapwright {
namespace {

using Json = nlohmann::ordered_json;

/// What the prediction loses and delays at one measured frequency.
struct Row {
  double frequency_hz = 0.0;
  double loss_db = 0.0;
  double return_loss_db = 0.0;
  double delay_s = 0.0;
};

/// At 1, 2, 5, 10 ... times a power of ten, as far as the fit is good.
std::vector<Row> rows_of(const FitReport& report) {
  const Eigen::VectorXd& f = report.predicted.frequencies_hz;
  const Eigen::VectorXcd s21 = report.predicted.parameter(1, 0);
  const Eigen::VectorXcd s11 = report.predicted.parameter(0, 0);
  const double delay_s = line_delay_s(report.fit.model, report.predicted_length_m, 1e9) +
                         (report.fit.ends ? 2 * report.fit.ends->delay_s : 0.0);
  std::vector<Row> rows;
  double decade = 1e8;
  for (int i = 0; decade < 1e12; ++i) {
    const double wanted = decade * (i % 3 == 0 ? 1 : i % 3 == 1 ? 2 : 5);
    if (i % 3 == 2) decade *= 10;
    if (wanted > report.fit.top_hz) break;
    const double* const end = f.data() + f.size();
    const double* found = std::lower_bound(f.data(), end, wanted * (1 - 1e-9));
    if (found == end || *found > 1.2 * wanted) continue;
    const Eigen::Index k = found - f.data();
    // The phase counts whole turns from the delay that the model itself has.
    const double turns = std::round(f[k] * delay_s + std::arg(s21[k]) / (2 * std::numbers::pi)) -
                         std::arg(s21[k]) / (2 * std::numbers::pi);
    rows.push_back({f[k], -ratio_to_amplitude_db(std::abs(s21[k])),
                    -ratio_to_amplitude_db(std::abs(s11[k])), turns / f[k]});
  }
  return rows;
}

Json channel_of(const FitReport& report) {
  const AnnexLine& model = report.fit.model;
  const double scale = 100.0 / report.reference_ohm;
  Json line = {{"length_m", report.predicted_length_m},
               {"a1_sqrt_ns_per_mm", model.a1_sqrt_s_per_m * 1e-3 / std::sqrt(1e-9)},
               {"a2_ns_per_mm", model.a2_s_per_m * 1e6},
               {"tau_ns_per_mm", model.tau_s_per_m * 1e6},
               {"impedance_ohm", model.z_c_ohm * scale}};
  if (model.dispersion) {
    line["dispersion"] = {{"rise", model.dispersion->rise},
                          {"knee_ghz", hz_to_ghz(model.dispersion->knee_hz)}};
  }
  if (!report.fit.ends) return {{"line", line}};
  const Json end = {
      {"lumped", Json::array({{{"section",
                                {{"impedance_ohm", report.fit.ends->z_c_ohm * scale},
                                 {"delay_ps", s_to_ps(report.fit.ends->delay_s)}}}}})}};
  return {{"cascade", Json::array({end, {{"line", line}}, end})}};
}

}  // namespace

std::string text_of(const FitReport& report) {
  const LineFit& fit = report.fit;
  const AnnexLine& model = fit.model;
  std::string text = "Line fitted to " + printable_text(report.file, 200) + ", " +
                     significant(fit.length_m, 6) + " m, up to " +
                     significant(hz_to_ghz(fit.top_hz), 4) + " GHz\n\n";
  std::vector<std::vector<std::string>> rows = {
      {"impedance", fixed(model.z_c_ohm, 2) + " ohm"},
      {"delay", fixed(line_delay_s(model, 1.0, 1e9) * 1e9, 4) + " ns/m at 1 GHz"},
      {"skin-effect loss",
       fixed(ratio_to_amplitude_db(std::exp(model.a1_sqrt_s_per_m * std::sqrt(1e9))), 4) +
           " dB/m at 1 GHz, as sqrt(f)"},
      {"dielectric loss",
       fixed(ratio_to_amplitude_db(std::exp(model.a2_s_per_m * 1e9)), 4) + " dB/m at 1 GHz, as f"}};
  if (model.dispersion) {
    rows.push_back({"dispersion", "permittivity rises by " +
                                      fixed(100 * model.dispersion->rise, 1) + " % about " +
                                      significant(hz_to_ghz(model.dispersion->knee_hz), 3) +
                                      " GHz"});
  }
  if (fit.ends) {
    rows.push_back({"each end", fixed(fit.ends->z_c_ohm, 2) + " ohm for " +
                                    fixed(s_to_ps(fit.ends->delay_s), 1) + " ps"});
  }
  rows.push_back({"residual, RMS", significant(fit.residual_s21, 3) + " in s21 (" +
                                       significant(fit.residual_db, 2) + " dB), " +
                                       significant(fit.residual_s11, 3) + " in s11 and s22"});
  // The first column is wide enough for the longest name; values read better from the left.
  for (const auto& row : rows) {
    text += "  " + row[0] + std::string(18 - row[0].size(), ' ') + row[1] + "\n";
  }
  text += "\nPredicted for " + significant(report.predicted_length_m, 6) + " m" +
          (fit.ends ? " between such ends" : "") + "\n";
  std::vector<std::vector<std::string>> table{{"GHz", "loss dB", "return loss dB", "delay ns"}};
  for (const Row& row : rows_of(report)) {
    table.push_back({significant(hz_to_ghz(row.frequency_hz), 4), fixed(row.loss_db, 3),
                     fixed(row.return_loss_db, 1), fixed(row.delay_s * 1e9, 4)});
  }
  text += table_text(table);
  return text + "\nFor a link file\n  \"channel\": " + channel_of(report).dump() + "\n";
}

std::string json_of(const FitReport& report) {
  const LineFit& fit = report.fit;
  Json out;
  out["format"] = "tapwright.fit/1";
  out["version"] = TAPWRIGHT_VERSION;
  out["file"] = report.file;
  out["length_m"] = fit.length_m;
  out["reference_ohm"] = report.reference_ohm;
  out["top_ghz"] = hz_to_ghz(fit.top_hz);
  out["residual"] = {
      {"s21", fit.residual_s21}, {"s11", fit.residual_s11}, {"s21_db", fit.residual_db}};
  out["predicted"]["length_m"] = report.predicted_length_m;
  out["predicted"]["points"] = Json::array();
  for (const Row& row : rows_of(report)) {
    out["predicted"]["points"].push_back({{"frequency_ghz", hz_to_ghz(row.frequency_hz)},
                                          {"loss_db", row.loss_db},
                                          {"return_loss_db", row.return_loss_db},
                                          {"delay_ns", row.delay_s * 1e9}});
  }
  out["channel"] = channel_of(report);
  return out.dump(2, ' ', false, Json::error_handler_t::replace) + "\n";
}

}  // namespace tapwright
