#include <algorithm>
#include <cmath>
#include <numbers>

#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"
#include "tapwright/eye/whole_eye.hpp"
#include "tapwright/report/html_report.hpp"
#include "tapwright/report/pulse_report.hpp"

namespace tapwright {
namespace {

constexpr double kLeastProbability = 1e-18;  // what the bathtubs and the field show

std::string mv(double v) { return fixed(v_to_mv(v), 1) + " mV"; }

Figure pulse_figure(const SolutionReport& report) {
  const PulseReport pulse = pulse_report(*report.model, report.solution.settings);
  const PulseResponse& plain = pulse.unequalised;
  const int per_ui = plain.samples_per_ui();
  const Eigen::Index first = std::max<Eigen::Index>(0, pulse.sample_index - 6 * per_ui);
  const Eigen::Index last = std::min(plain.size(), pulse.sample_index + 20 * per_ui + 1);
  const Eigen::Index n = last - first;
  Eigen::VectorXd x(n);
  for (Eigen::Index i = 0; i < n; ++i) {
    x[i] = static_cast<double>(first + i - pulse.sample_index) / per_ui;
  }
  Figure f;
  f.id = "pulse";
  f.title = "Pulse response and cursors";
  f.x = {"time from the sampling instant (UI)", false, -6.0, 20.0};
  f.y = {"voltage (mV)", false, {}, {}};
  const auto kind = per_ui > 1 ? Series::Kind::kLine : Series::Kind::kPoints;
  f.series.push_back({"before FIR and DFE", kind, x, 1e3 * plain.samples_v().segment(first, n), 0, true});
  f.series.push_back({"after FIR", kind, x, 1e3 * pulse.equalised.samples_v().segment(first, n), 1, false});
  const CursorRow& residual = report.solution.score.residual_v;
  const Eigen::Index from = std::max<Eigen::Index>(0, residual.main_index - 6);
  const Eigen::Index count = std::min(residual.values.size(), residual.main_index + 21) - from;
  Eigen::VectorXd k(count);
  for (Eigen::Index i = 0; i < count; ++i) k[i] = static_cast<double>(from + i - residual.main_index);
  f.series.push_back({"cursors after DFE", Series::Kind::kStems, k, 1e3 * residual.values.segment(from, count), 2, false});
  f.summary = "One symbol sent alone, at the slicer. The main cursor is " + mv(report.solution.score.main_cursor_v) +
              "; all other cursors after the DFE add up to " + mv(report.solution.score.isi_independent_v) + ".";
  return f;
}

std::vector<Figure> eye_figures(const SolutionReport& report) {
  const EyeModel& model = *report.model;
  const Target& target = model.link.target;
  const WholeEye eye = whole_eye(model, report.solution.settings);
  std::vector<Figure> figures;

  // Levels in groups, so that the page stays small.
  constexpr Eigen::Index kGroups = 128;
  const Eigen::Index per_group = std::max<Eigen::Index>(1, eye.levels_v.size() / kGroups);
  const Eigen::Index num_rows = eye.levels_v.size() / per_group;
  Figure f;
  f.id = "eye";
  f.title = "Eye, probability density";
  f.x = {"phase from the sampling instant (UI)", false, {}, {}};
  f.y = {"voltage (mV)", false, {}, {}};
  Field field;
  field.name = "probability density";
  field.x_min = eye.phases_ui[0];
  field.x_max = eye.phases_ui[eye.phases_ui.size() - 1];
  field.log10_value.resize(num_rows, eye.phases_ui.size());
  for (Eigen::Index r = 0; r < num_rows; ++r) {
    for (Eigen::Index c = 0; c < eye.phases_ui.size(); ++c) {
      const double mass = eye.density.col(c).segment(r * per_group, per_group).sum();
      field.log10_value(r, c) = std::log10(std::max(mass, 1e-30));
    }
  }
  const auto centre = [&](Eigen::Index r) { return eye.levels_v.segment(r * per_group, per_group).mean(); };
  field.y_min = v_to_mv(centre(0));
  field.y_max = v_to_mv(centre(num_rows - 1));
  field.floor = std::log10(std::max(target.error_ratio, kLeastProbability)) - 1.0;
  f.y.min = field.y_min;
  f.y.max = field.y_max;
  f.field = std::move(field);
  const Eigen::VectorXd contour_v = eye.contour_v(target.error_ratio);
  Eigen::VectorXd upper = 1e3 * contour_v;
  for (double& v : upper) {
    if (!(v > 0.0)) v = std::numeric_limits<double>::quiet_NaN();
  }
  const std::string at = significant(target.error_ratio, 3);
  f.series.push_back({"contour at " + at, Series::Kind::kLine, eye.phases_ui, upper, 1, false});
  f.series.push_back({"", Series::Kind::kLine, eye.phases_ui, -upper, 1, false});
  if (target.eye_height_v > 0.0 || target.eye_width_ui > 0.0) {
    const double w = std::max(target.eye_width_ui, 0.02) / 2.0;
    const double h = v_to_mv(std::max(target.eye_height_v, 1e-3)) / 2.0;
    f.boxes.push_back({"target", -w, w, -h, h});
  }
  const auto& score = report.solution.score;
  f.summary = "How likely the received voltage is at each phase of the unit interval, for independent symbols. At error "
              "ratio " + at + " the eye is " + (score.height.at_error_ratio_v ? mv(*score.height.at_error_ratio_v) : "-") +
              " high" + (score.eye_width_ui ? " and " + fixed(*score.eye_width_ui, 3) + " UI wide." : ".");
  figures.push_back(std::move(f));

  const auto clipped = [](Eigen::VectorXd p) {
    for (double& v : p) {
      v = std::max(v, 1e-3 * kLeastProbability);  // the axis ends before it
    }
    return p;
  };
  Figure time;
  time.id = "bathtub-phase";
  time.title = "Bathtub over phase";
  time.x = {"phase from the sampling instant (UI)", false, {}, {}};
  time.y = {"error ratio", true, kLeastProbability, 1.0};
  time.series.push_back({"threshold in the middle", Series::Kind::kLine, eye.phases_ui, clipped(eye.bathtub_over_phase()), 0, false});
  time.guides.push_back({"target " + at, false, target.error_ratio});
  time.summary = "Error ratio at each phase with the slicer's threshold in the middle. Curves end at 1e-18.";
  figures.push_back(std::move(time));
  Figure level;
  level.id = "bathtub-voltage";
  level.title = "Bathtub over voltage";
  level.x = {"slicer threshold off the middle (mV)", false, {}, {}};
  level.y = {"error ratio", true, kLeastProbability, 1.0};
  level.series.push_back({"at the sampling instant", Series::Kind::kLine, 1e3 * eye.levels_v, clipped(eye.bathtub_over_level()), 0, false});
  level.guides.push_back({"target " + at, false, target.error_ratio});
  level.summary = "Error ratio at the sampling instant as the slicer's threshold moves. Curves end at 1e-18.";
  figures.push_back(std::move(level));
  return figures;
}

Figure frequency_figure(const SolutionReport& report) {
  const Link& link = report.model->link;
  const ReceivedSpectrum& channel = link.channel;
  const double ui_s = channel.ui_s;
  const double df_hz = channel.df_hz();
  constexpr int kPoints = 240;
  const double top_hz = std::min(1.5 / ui_s, df_hz * static_cast<double>(channel.values.size() - 1));
  Eigen::VectorXd f_hz(kPoints);
  for (int i = 0; i < kPoints; ++i) f_hz[i] = top_hz * (i + 0.5) / kPoints;
  const CtleState& state = link.device.receiver.ctle[report.solution.settings.ctle_index];
  Eigen::VectorXcd receiver = response(state, f_hz);
  if (link.device.receiver.bandwidth_hz) {
    receiver = receiver.cwiseProduct(noise_filter_response(*link.device.receiver.bandwidth_hz, f_hz));
  }
  Eigen::VectorXd line(kPoints), ctle(kPoints), fir(kPoints), whole(kPoints);
  const auto& taps = link.device.transmitter.fir.taps;
  const auto db = [](double ratio) {
    const double d = ratio_to_amplitude_db(std::max(ratio, 1e-9));
    return d < -80.0 ? std::numeric_limits<double>::quiet_NaN() : d;
  };
  for (int i = 0; i < kPoints; ++i) {
    const auto bin = static_cast<Eigen::Index>(std::lround(f_hz[i] / df_hz));
    const double x = std::numbers::pi * static_cast<double>(bin) * df_hz * ui_s;
    const double sinc = x == 0.0 ? 1.0 : std::sin(x) / x;
    // The spectrum holds the pulse's own sinc; near its zero there is nothing to divide by.
    const double h = std::abs(sinc) < 0.03 ? std::numeric_limits<double>::quiet_NaN()
                                           : std::abs(channel.values[bin]) / (channel.samples_per_ui * std::abs(sinc));
    std::complex<double> c = 0.0;
    for (std::size_t t = 0; t < taps.size(); ++t) {
      c += report.solution.settings.fir[static_cast<Eigen::Index>(t)] *
           std::polar(1.0, -2.0 * std::numbers::pi * f_hz[i] * ui_s * taps[t].position);
    }
    line[i] = std::isnan(h) ? h : db(h);
    ctle[i] = channel.at_slicer ? 0.0 : db(std::abs(receiver[i]));
    fir[i] = db(std::abs(c));
    whole[i] = line[i] + ctle[i] + fir[i];
  }
  const Eigen::VectorXd x = f_hz * 1e-9;
  Figure f;
  f.id = "frequency";
  f.title = "Frequency response";
  f.x = {"frequency (GHz)", false, 0.0, {}};
  f.y = {"magnitude (dB)", false, {}, {}};
  f.series.push_back({"channel and edge filter", Series::Kind::kLine, x, line, 0, false});
  f.series.push_back({"transmitter FIR", Series::Kind::kLine, x, fir, 1, true});
  f.series.push_back({"CTLE and noise filter", Series::Kind::kLine, x, ctle, 2, true});
  f.series.push_back({"whole path", Series::Kind::kLine, x, whole, 3, false});
  f.guides.push_back({"half the symbol rate", true, 0.5e-9 / ui_s});
  f.summary = "The channel's loss, what FIR and CTLE add to it, and the whole path.";
  return f;
}

Figure budget_figure(const SolutionReport& report) {
  const Score& s = report.solution.score;
  struct Part {
    std::string name;
    double cost_v;
  };
  std::vector<Part> cursors;
  const CursorRow& r = s.residual_v;
  for (Eigen::Index i = 0; i < r.values.size(); ++i) {
    if (i == r.main_index) continue;
    const auto k = i - r.main_index;
    cursors.push_back({"cursor " + std::string(k > 0 ? "+" : "") + std::to_string(k), std::abs(r.values[i])});
  }
  std::stable_sort(cursors.begin(), cursors.end(), [](const Part& a, const Part& b) { return a.cost_v > b.cost_v; });
  constexpr std::size_t kNamed = 6;
  std::vector<Part> parts;
  double others_v = s.isi_independent_v;
  for (std::size_t i = 0; i < std::min(kNamed, cursors.size()); ++i) {
    if (cursors[i].cost_v < 5e-4 * std::abs(s.signal_v)) break;
    parts.push_back(cursors[i]);
    others_v -= cursors[i].cost_v;
  }
  parts.push_back({"all other cursors", std::max(0.0, others_v)});
  if (s.isi_independent_v - s.isi_v > 1e-9) {
    parts.push_back({"sequences the line code forbids", s.isi_v - s.isi_independent_v});
  }
  for (std::size_t i = 0; i < s.aggressors_v.size(); ++i) {
    parts.push_back({"crosstalk: " + printable_text(report.model->link.crosstalk[i].name, 40), s.aggressors_v[i]});
  }
  if (s.dual_dirac_v > 0.0) parts.push_back({"dual-Dirac jitter", s.dual_dirac_v});
  if (s.gaussian_v > 0.0) parts.push_back({"noise and random jitter", s.gaussian_v});
  if (s.sensitivity_v > 0.0) parts.push_back({"slicer sensitivity", s.sensitivity_v});

  Figure f;
  f.id = "budget";
  f.title = "Where the eye goes, worst case";
  f.x = {"inner eye height (mV)", false, {}, {}};
  Bars bars;
  Bars::Group keep{"opens", {}, {}, 2};
  Bars::Group lose{"takes", {}, {}, 1};
  const std::size_t n = parts.size() + 2;
  const double nan = std::numeric_limits<double>::quiet_NaN();
  for (Bars::Group* g : {&keep, &lose}) {
    g->from = Eigen::VectorXd::Zero(static_cast<Eigen::Index>(n));
    g->to = Eigen::VectorXd::Constant(static_cast<Eigen::Index>(n), nan);
  }
  bars.names.push_back("main cursor");
  keep.to[0] = v_to_mv(2.0 * s.signal_v);
  double level_v = 2.0 * s.signal_v;
  for (std::size_t i = 0; i < parts.size(); ++i) {
    const auto at = static_cast<Eigen::Index>(i + 1);
    Bars::Group& group = parts[i].cost_v < 0.0 ? keep : lose;
    bars.names.push_back(parts[i].name);
    group.from[at] = v_to_mv(level_v);
    level_v -= 2.0 * parts[i].cost_v;
    group.to[at] = v_to_mv(level_v);
  }
  bars.names.push_back("eye that is left");
  keep.to[static_cast<Eigen::Index>(n) - 1] = v_to_mv(level_v);
  bars.groups = {keep, lose};
  bars.overlaid = true;
  f.bars = std::move(bars);
  f.summary = "From the " + mv(2.0 * s.signal_v) + " that the main cursor opens to the " + mv(level_v) +
              " that are left at the sampling instant in the worst case.";
  return f;
}

double objective_of(const SolutionReport& report, const Score& s) {
  return report.model->link.objective == ObjectiveKind::kWorstCase
             ? s.height.worst_case_v
             : s.height.at_error_ratio_v.value_or(s.height.worst_case_v);
}

std::optional<Figure> methods_figure(const SolutionReport& report) {
  Bars bars;
  std::vector<double> heights;
  for (const Compared& c : report.solution.compared) {
    if (!c.score) continue;
    bars.names.push_back(c.name);
    heights.push_back(v_to_mv(objective_of(report, *c.score)));
  }
  if (heights.empty()) return std::nullopt;
  bars.names.push_back("this answer");
  heights.push_back(v_to_mv(objective_of(report, report.solution.score)));
  bars.groups.push_back({"eye height", {}, Eigen::Map<const Eigen::VectorXd>(heights.data(), static_cast<Eigen::Index>(heights.size())), 0});
  Figure f;
  f.id = "methods";
  f.title = "Methods compared";
  f.x = {"eye height (mV)", false, {}, {}};
  f.bars = std::move(bars);
  if (report.model->link.target.eye_height_v > 0.0) {
    f.guides.push_back({"target", true, v_to_mv(report.model->link.target.eye_height_v)});
  }
  f.summary = "Eye height by each method on the same link; negative means closed.";
  return f;
}

std::optional<Figure> steps_figure(const SolutionReport& report) {
  struct Row {
    std::string name;
    double down, up, largest;
  };
  std::vector<Row> rows;
  const double nan = std::numeric_limits<double>::quiet_NaN();
  for (const KnobSensitivity& k : report.sensitivity) {
    if (!k.down && !k.up) continue;
    const double down = k.down ? v_to_mv(k.down->fixed_v) : nan;
    const double up = k.up ? v_to_mv(k.up->fixed_v) : nan;
    rows.push_back({k.knob.name + " (" + k.shown + ")", down, up,
                    std::max(std::isnan(down) ? 0.0 : std::abs(down), std::isnan(up) ? 0.0 : std::abs(up))});
  }
  if (rows.empty()) return std::nullopt;
  std::stable_sort(rows.begin(), rows.end(), [](const Row& a, const Row& b) { return a.largest > b.largest; });
  const auto n = static_cast<Eigen::Index>(rows.size());
  Bars bars;
  Bars::Group down{"one code down", {}, Eigen::VectorXd(n), 0};
  Bars::Group up{"one code up", {}, Eigen::VectorXd(n), 1};
  for (Eigen::Index i = 0; i < n; ++i) {
    const Row& row = rows[static_cast<std::size_t>(i)];
    bars.names.push_back(row.name);
    down.to[i] = row.down;
    up.to[i] = row.up;
  }
  bars.groups = {down, up};
  Figure f;
  f.id = "steps";
  f.title = "One code either way, largest first";
  f.x = {"change of eye height (mV)", false, {}, {}};
  f.bars = std::move(bars);
  f.summary = "What one code up or down on each knob does to the eye, all else fixed.";
  return f;
}

}  // namespace

std::vector<Figure> figures_of(const SolutionReport& report) {
  std::vector<Figure> figures{pulse_figure(report)};
  if (report.model->input.samples_per_ui() >= kLeastSamplesPerUi) {
    for (Figure& f : eye_figures(report)) figures.push_back(std::move(f));
    figures.push_back(frequency_figure(report));
  }
  figures.push_back(budget_figure(report));
  if (auto f = methods_figure(report)) figures.push_back(std::move(*f));
  if (auto f = steps_figure(report)) figures.push_back(std::move(*f));
  return figures;
}

}  // namespace tapwright
