#include "tapwright/search/certificate.hpp"

#include <Eigen/Core>
#include <algorithm>
#include <cmath>
#include <limits>
#include <map>
#include <optional>
#include <stdexcept>
#include <tuple>
#include <vector>

#include "tapwright/base/normal.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"
#include "tapwright/eye/placed_eye.hpp"
#include "tapwright/eye/sampling.hpp"

// Nothing here includes a header of src/search: a fault of the solver can't hide in its checker.

namespace tapwright {
namespace {

constexpr double kRelative = 1e-9;
constexpr double kAbsoluteV = 1e-12;
constexpr double kEmpty = -std::numeric_limits<double>::infinity();

/// A bound on half the eye height at 1 V launch: slopes by all taps, and a constant.
struct Linear {
  Eigen::VectorXd slopes;
  double constant = 0.0;
};

/// A range of every tap, in the order of FirLimits::taps; the remainder's entries are not used.
struct TapBox {
  std::vector<int> first, last;  ///< codes
  Eigen::VectorXd lo, hi;
};

/// The largest slopes * c + constant over lo <= c <= hi and sum |c| <= limit; with a remainder tap
/// that one is limit - sum of the others', whose signs the box must fix. kEmpty if nothing is there.
double largest_in_box(const FirLimits& limits, const TapBox& box, Linear bound) {
  const auto n = static_cast<Eigen::Index>(limits.taps.size());
  double most_sum = limits.peak_limit;
  double least_sum = 0.0;
  Eigen::Index remainder = -1;
  for (Eigen::Index i = 0; i < n; ++i) {
    const FirTap& tap = limits.taps[static_cast<std::size_t>(i)];
    if (!tap.is_remainder) continue;
    remainder = i;
    const double least = tap.position == 0 && limits.min_main ? std::max(tap.min, *limits.min_main)
                                                              : tap.min;
    most_sum = limits.peak_limit - least;
    least_sum = limits.peak_limit - tap.max;
  }
  if (remainder >= 0) {
    const double slope = bound.slopes[remainder];
    bound.constant += slope * limits.peak_limit;
    for (Eigen::Index i = 0; i < n; ++i) {
      if (i == remainder) continue;
      if (box.lo[i] < 0.0 && box.hi[i] > 0.0) {
        throw std::invalid_argument("a box straddles zero beside a remainder tap");
      }
      bound.slopes[i] -= (box.lo[i] >= 0.0 ? 1.0 : -1.0) * slope;
    }
  }
  // Each tap starts at its smallest magnitude; moving out by dx uses dx of the sum and gains.
  struct Way {
    double gain = 0.0;
    double room = 0.0;
  };
  std::vector<Way> ways;
  double value = bound.constant;
  double sum = 0.0;
  for (Eigen::Index i = 0; i < n; ++i) {
    if (i == remainder) continue;
    const double start = std::clamp(0.0, box.lo[i], box.hi[i]);
    value += bound.slopes[i] * start;
    sum += std::abs(start);
    const bool both = box.lo[i] < 0.0 && box.hi[i] > 0.0;
    const bool up = both ? bound.slopes[i] > 0.0 : box.lo[i] >= 0.0;
    ways.push_back({up ? bound.slopes[i] : -bound.slopes[i],
                    up ? box.hi[i] - start : start - box.lo[i]});
  }
  // Decimal limits are not exact in binary, and codes count in steps of 1e-9 (keeps_limits).
  constexpr double kSlack = 1e-9;
  if (sum > most_sum + kSlack) return kEmpty;
  std::sort(ways.begin(), ways.end(), [](const Way& a, const Way& b) { return a.gain > b.gain; });
  double budget = std::max(0.0, most_sum - sum);
  double owed = std::max(0.0, least_sum - sum);
  for (const Way& way : ways) {
    const double step = std::min(way.room, way.gain > 0.0 ? budget : owed);
    value += way.gain * step;
    budget -= step;
    owed = std::max(0.0, owed - step);
  }
  return owed > kSlack ? kEmpty : value;
}

/// One swing, CTLE state and sampling instant, everything in volts at 1 V launch.
///
/// The points of a proof often lie where a cursor is zero but for rounding, and its weights fit one
/// of the two signs. So q_k is added up at 1 V launch in the order of the taps, as whoever wrote the
/// points did; another sign leaves the bound valid but looser.
class Cell {
 public:
  Cell(const EyeModel& model, const Place& place) : model_(model), place_(place) {
    const Link& link = model.link;
    amplitude_v_ = link.device.transmitter.swings.at(place.swing_index).value;
    row_ = victim_row(model, place.ctle_index, place.phase_samples);
    eye_.model = &model;
    eye_.place = place;
    eye_.amplitude_v = amplitude_v_;
    quantile_ = gaussian_quantile_of_tail(link.target.error_ratio);
    noise_v_ = model.states.at(place.ctle_index).noise_v / amplitude_v_;
    if (link.device.transmitter.snr_db) {
      transmitter_ratio_ = 1.0 / amplitude_db_to_ratio(*link.device.transmitter.snr_db);
    }
    for (const FirTap& tap : link.device.transmitter.fir.taps) {
      first_ = std::min(first_, tap.position);
      last_ = std::max(last_, tap.position);
    }
    const int per_ui = model.input.samples_per_ui();
    if (per_ui >= kLeastSamplesPerUi &&
        (link.jitter.dual_dirac_peak_ui > 0.0 || link.jitter.random_ui > 0.0)) {
      slope_ = victim_row(model, place.ctle_index, place.phase_samples + 1);
      slope_->values -= victim_row(model, place.ctle_index, place.phase_samples - 1).values;
      slope_->values *= per_ui / 2.0;
    }
  }

  /// The multipliers of a convex combination of points.
  struct Signs {
    std::vector<double> isi;     ///< per cursor first_k() ... last_k()
    std::vector<double> jitter;  ///< likewise
    double noise_constant = 0.0;
    Eigen::VectorXd noise_slopes;
    Linear crosstalk;
  };

  [[nodiscard]] Signs signs(const Certificate::Multipliers& from) const {
    const auto n = num_taps();
    Signs s{std::vector<double>(num_cursors(), 0.0), std::vector<double>(num_cursors(), 0.0), 0.0,
            Eigen::VectorXd::Zero(n), {Eigen::VectorXd::Zero(n), 0.0}};
    double total = 0.0;
    for (std::size_t j = 0; j < from.points.size(); ++j) {
      const Eigen::VectorXd& c = from.points[j];
      const double weight = from.weights.at(j);
      if (!(weight >= 0.0) || c.size() != n) throw std::invalid_argument("a multiplier is no weight");
      total += weight;
      for (std::size_t i = 0; i < num_cursors(); ++i) {
        const int k = first_k() + static_cast<int>(i);
        const double q = tap_sum(row_, c, k);
        const bool in_reach = dfe_at(k) != nullptr &&
                              std::abs(q) <= dfe_limit(*dfe_at(k), tap_sum(row_, c, 0));
        if (k != 0 && !in_reach) {
          s.isi[i] += q < 0.0 ? -weight : weight;
        }
        if (slope_) s.jitter[i] += tap_sum(*slope_, c, k) < 0.0 ? -weight : weight;
      }
      const double sigma = sigma_at(c);
      if (sigma > 0.0) {
        s.noise_constant += weight * noise_v_ * noise_v_ / sigma;
        s.noise_slopes += weight / sigma * noise_form_times(c);
      }
      if (j < from.crosstalk_points.size() && from.crosstalk_points[j].size() == n) {
        const Eigen::VectorXd& at = from.crosstalk_points[j];
        const CrosstalkPeak peak = crosstalk_peak(eye_, at);
        s.crosstalk.slopes += weight / amplitude_v_ * peak.supergradient;
        s.crosstalk.constant +=
            weight / amplitude_v_ * (peak.worst_v - peak.supergradient.dot(at));
      }
    }
    // Without points: no ISI counted at all, but the receiver's noise is there in any case.
    if (from.points.empty()) {
      s.noise_constant = noise_v_;
    } else if (std::abs(total - 1.0) > 1e-9) {
      throw std::invalid_argument("weights add up to " + exact(total) + ", not 1");
    } else {
      // What the weights miss of 1 by rounding: scale down to be safe.
      const double scale = 1.0 / std::max(1.0, total);
      for (double& value : s.isi) value *= scale;
      for (double& value : s.jitter) value *= scale;
      s.noise_constant *= scale;
      s.noise_slopes *= scale;
      s.crosstalk.slopes *= scale;
      s.crosstalk.constant *= scale;
    }
    return s;
  }

  /// Half the eye height is at most the result, for every setting.
  [[nodiscard]] Linear bound(const Signs& s) const {
    const Jitter& jitter = model_.link.jitter;
    Linear out{signal_share(model_.link.signal) * by_tap(row_, 0),
               -model_.link.device.receiver.sensitivity_v / amplitude_v_};
    for (std::size_t i = 0; i < num_cursors(); ++i) {
      const int k = first_k() + static_cast<int>(i);
      if (s.isi[i] != 0.0 && k != 0) {
        out.slopes -= s.isi[i] * by_tap(row_, k);
        if (const DfeTap* tap = dfe_at(k)) {
          const double limit = limit_at_one_volt(*tap) * std::abs(s.isi[i]);
          if (tap->relative) {
            out.slopes += limit * by_tap(row_, 0);
          } else {
            out.constant += limit;
          }
        }
      }
      if (slope_) out.slopes -= jitter.dual_dirac_peak_ui * s.jitter[i] * by_tap(*slope_, k);
    }
    out.constant -= quantile_ * s.noise_constant;
    out.slopes -= quantile_ * s.noise_slopes;
    out.slopes -= s.crosstalk.slopes;
    out.constant -= s.crosstalk.constant;
    return out;
  }

  /// Eye height of one setting, DFE at the nearest it can do.
  [[nodiscard]] double height(const Eigen::VectorXd& c) const {
    const double main = tap_sum(row_, c, 0);
    if (!(main > 0.0)) return kEmpty;
    double worst = 0.0;
    for (int k = first_k(); k <= last_k(); ++k) {
      const double q = tap_sum(row_, c, k);
      const DfeTap* tap = dfe_at(k);
      if (k != 0) {
        worst += std::abs(q - (tap != nullptr ? settled_v(*tap, q * amplitude_v_,
                                                          main * amplitude_v_) / amplitude_v_
                                              : 0.0));
      }
      if (slope_) {
        worst += model_.link.jitter.dual_dirac_peak_ui * std::abs(tap_sum(*slope_, c, k));
      }
    }
    if (!model_.link.crosstalk.empty()) worst += crosstalk_peak(eye_, c).worst_v / amplitude_v_;
    return eye_volts() * (signal_share(model_.link.signal) * main - worst -
                          quantile_ * sigma_at(c) -
                          model_.link.device.receiver.sensitivity_v / amplitude_v_);
  }

  [[nodiscard]] const Place& place() const { return place_; }
  [[nodiscard]] double amplitude_v() const { return amplitude_v_; }
  /// Eye height in volts per volt of half the eye height at 1 V launch.
  [[nodiscard]] double eye_volts() const { return 2.0 * amplitude_v_; }

 private:
  [[nodiscard]] Eigen::Index num_taps() const {
    return static_cast<Eigen::Index>(model_.link.device.transmitter.fir.taps.size());
  }
  [[nodiscard]] int first_k() const { return -model_.span_ui[0] + first_; }
  [[nodiscard]] int last_k() const { return model_.span_ui[1] + last_; }
  [[nodiscard]] std::size_t num_cursors() const {
    return static_cast<std::size_t>(last_k() - first_k() + 1);
  }
  [[nodiscard]] Eigen::VectorXd by_tap(const CursorRow& row, int k) const {
    Eigen::VectorXd out(num_taps());
    const auto& taps = model_.link.device.transmitter.fir.taps;
    for (std::size_t i = 0; i < taps.size(); ++i) {
      out[static_cast<Eigen::Index>(i)] = row.at(k - taps[i].position);
    }
    return out;
  }
  [[nodiscard]] double tap_sum(const CursorRow& row, const Eigen::VectorXd& c, int k) const {
    const auto& taps = model_.link.device.transmitter.fir.taps;
    double q = 0.0;
    for (std::size_t i = 0; i < taps.size(); ++i) {
      q += c[static_cast<Eigen::Index>(i)] * row.at(k - taps[i].position);
    }
    return q;
  }
  [[nodiscard]] const DfeTap* dfe_at(int k) const {
    for (const DfeTap& tap : model_.link.device.receiver.dfe) {
      if (tap.position == k) return &tap;
    }
    return nullptr;
  }
  /// Signed: below zero a relative limit is linear on, so that the bound stays concave.
  [[nodiscard]] double dfe_limit(const DfeTap& tap, double main) const {
    return tap.relative ? limit_at_one_volt(tap) * main : limit_at_one_volt(tap);
  }
  [[nodiscard]] double limit_at_one_volt(const DfeTap& tap) const {
    return tap.relative ? limit_v(tap, 1.0) : limit_v(tap, 1.0) / amplitude_v_;
  }
  /// sigma^2 = noise_v_^2 + c' F c; this is F c.
  [[nodiscard]] Eigen::VectorXd noise_form_times(const Eigen::VectorXd& c) const {
    Eigen::VectorXd out = transmitter_ratio_ * transmitter_ratio_ * tap_sum(row_, c, 0) *
                          by_tap(row_, 0);
    const double random = model_.link.jitter.random_ui;
    if (!slope_ || random == 0.0) return out;
    for (int k = first_k(); k <= last_k(); ++k) {
      out += random * random * symbol_variance(model_.link.signal.levels) *
             tap_sum(*slope_, c, k) * by_tap(*slope_, k);
    }
    return out;
  }
  [[nodiscard]] double sigma_at(const Eigen::VectorXd& c) const {
    return std::sqrt(noise_v_ * noise_v_ + std::max(0.0, c.dot(noise_form_times(c))));
  }

  const EyeModel& model_;
  Place place_;
  double amplitude_v_ = 0.0;
  CursorRow row_;
  std::optional<CursorRow> slope_;
  PlacedEye eye_;
  double quantile_ = 0.0;
  double noise_v_ = 0.0;
  double transmitter_ratio_ = 0.0;
  int first_ = 0;
  int last_ = 0;
};

/// limit - peak(c) <= the result, at 1 V launch, by the phase and signs that count at `point`.
Linear input_bound(const EyeModel& model, const Eigen::VectorXd& point, double amplitude_v) {
  const auto& taps = model.link.device.transmitter.fir.taps;
  const Eigen::Index per_ui = model.input.samples_per_ui();
  const auto n = static_cast<Eigen::Index>(taps.size());
  const Eigen::Index reach = 64 * per_ui;  // no FIR is longer
  double most = -1.0;
  Linear best{Eigen::VectorXd::Zero(n), 0.0};
  for (Eigen::Index phase = 0; phase < per_ui; ++phase) {
    Eigen::VectorXd slopes = Eigen::VectorXd::Zero(n);
    for (Eigen::Index t = phase - reach; t < model.input.size() + reach; t += per_ui) {
      double q = 0.0;
      for (Eigen::Index i = 0; i < n; ++i) {
        q += point[i] * model.input.at(t - taps[static_cast<std::size_t>(i)].position * per_ui);
      }
      for (Eigen::Index i = 0; i < n; ++i) {
        const double p = model.input.at(t - taps[static_cast<std::size_t>(i)].position * per_ui);
        slopes[i] += q < 0.0 ? -p : p;
      }
    }
    if (slopes.dot(point) > most) {
      most = slopes.dot(point);
      best.slopes = -slopes;
    }
  }
  best.constant = model.link.device.receiver.peak_input_v.value_or(0.0) / amplitude_v;
  return best;
}

class Check {
 public:
  Check(const EyeModel& model, const Certificate& certificate)
      : model_(model), certificate_(certificate), limits_(model.link.device.transmitter.fir) {}

  CertificateCheck run() {
    result_.bound_v = kEmpty;
    try {
      require_scope();
      require_cover();
      for (std::size_t i = 0; i < certificate_.cells.size(); ++i) check_cell(i);
      const double allowed =
          certificate_.bound_v + std::max(kAbsoluteV, kRelative * std::abs(certificate_.bound_v));
      if (result_.bound_v > allowed) {
        throw std::invalid_argument("a box may reach " + exact(result_.bound_v) +
                                    " V, above the bound of " + exact(certificate_.bound_v) + " V");
      }
      result_.holds = true;
    } catch (const std::exception& error) {
      result_.reason = error.what();
    }
    return result_;
  }

 private:
  void require_scope() const {
    const Link& link = model_.link;
    if (link.objective != ObjectiveKind::kWorstCase ||
        link.signal.line_code.kind != LineCodeKind::kNone || link.mask_width_ui != 0.0 ||
        link.jitter.common_random_ui != 0.0) {
      throw std::invalid_argument(
          "certificates are for the worst case of independent symbols at one phase");
    }
  }

  void require_cover() const {
    std::map<std::tuple<std::size_t, std::size_t, Eigen::Index>, int> seen;
    for (const Certificate::Cell& cell : certificate_.cells) {
      ++seen[{cell.swing_index, cell.ctle_index, cell.phase_samples}];
    }
    const std::size_t num_swings = model_.link.device.transmitter.swings.size();
    for (std::size_t swing = 0; swing < num_swings; ++swing) {
      for (std::size_t ctle = 0; ctle < model_.states.size(); ++ctle) {
        for (const Eigen::Index phase : candidate_phases(model_)) {
          if (!seen.contains({swing, ctle, phase})) {
            throw std::invalid_argument("nothing is said about swing " + std::to_string(swing) +
                                        ", CTLE state " + std::to_string(ctle) + ", phase " +
                                        std::to_string(phase));
          }
        }
      }
    }
  }

  [[nodiscard]] Place place_of(const Certificate::Cell& cell) const {
    return {cell.swing_index, cell.ctle_index, cell.phase_samples};
  }

  void check_cell(std::size_t index) {
    const Certificate::Cell& cell = certificate_.cells[index];
    const Cell here(model_, place_of(cell));
    TapBox box;
    const auto n = static_cast<Eigen::Index>(limits_.taps.size());
    box.lo = box.hi = Eigen::VectorXd::Zero(n);
    for (Eigen::Index i = 0; i < n; ++i) {
      const FirTap& tap = limits_.taps[static_cast<std::size_t>(i)];
      int first = 0;
      double lo = tap.min;
      if (tap.position == 0 && limits_.min_main) {
        lo = std::max(lo, *limits_.min_main);
        while (first < static_cast<int>(tap.codes.size()) &&
               tap.codes[static_cast<std::size_t>(first)].value < *limits_.min_main - 0.5e-9) {
          ++first;
        }
      }
      box.first.push_back(first);
      box.last.push_back(static_cast<int>(tap.codes.size()) - 1);
      box.lo[i] = lo;
      box.hi[i] = tap.max;
      if (!tap.codes.empty()) set_range(box, i, first, box.last.back());
    }
    std::size_t node = 0;
    check_box(index, here, node, box);
    if (node != cell.nodes.size()) throw std::invalid_argument("a cell has nodes left over");
    ++result_.num_cells;
  }

  void set_range(TapBox& box, Eigen::Index i, int first, int last) const {
    const auto index = static_cast<std::size_t>(i);
    const std::vector<Code>& codes = limits_.taps[index].codes;
    if (first < 0 || last < first || last >= static_cast<int>(codes.size())) {
      throw std::invalid_argument("a split leaves no codes");
    }
    box.first[index] = first;
    box.last[index] = last;
    box.lo[i] = codes[static_cast<std::size_t>(first)].value;
    box.hi[i] = codes[static_cast<std::size_t>(last)].value;
  }

  void check_box(std::size_t index, const Cell& here, std::size_t& position, const TapBox& box) {
    const Certificate::Cell& cell = certificate_.cells[index];
    if (position >= cell.nodes.size()) throw std::invalid_argument("a cell's tree ends early");
    const Certificate::Node& node = cell.nodes[position++];
    switch (node.kind) {
      case Certificate::Node::Kind::kSplit: {
        const Eigen::Index tap = node.tap;
        if (tap < 0 || tap >= box.lo.size()) throw std::invalid_argument("a split names no tap");
        TapBox lower = box;
        TapBox upper = box;
        if (node.at < 0) {
          if (!limits_.taps[static_cast<std::size_t>(tap)].codes.empty() || box.lo[tap] > 0.0 ||
              box.hi[tap] < 0.0) {
            throw std::invalid_argument("a split at zero lies outside its box");
          }
          lower.hi[tap] = upper.lo[tap] = 0.0;
        } else {
          set_range(lower, tap, box.first[static_cast<std::size_t>(tap)], node.at - 1);
          set_range(upper, tap, node.at, box.last[static_cast<std::size_t>(tap)]);
        }
        check_box(index, here, position, lower);
        check_box(index, here, position, upper);
        return;
      }
      case Certificate::Node::Kind::kBound: {
        const Certificate::Multipliers& from = certificate_.multipliers.at(node.multipliers);
        const Certificate::Cell& source = certificate_.cells.at(from.cell);
        const Cell::Signs signs = from.cell == index ? here.signs(from)
                                                     : Cell(model_, place_of(source)).signs(from);
        Linear bound = here.bound(signs);
        bound.slopes *= here.eye_volts();
        bound.constant *= here.eye_volts();
        add_input(from, here, bound);
        result_.bound_v = std::max(result_.bound_v, largest_in_box(limits_, box, bound));
        ++result_.num_boxes;
        return;
      }
      case Certificate::Node::Kind::kEmpty: {
        Linear bound{Eigen::VectorXd::Zero(box.lo.size()), 0.0};
        const double by_limits = largest_in_box(limits_, box, bound);
        if (by_limits != kEmpty) {
          add_input(certificate_.multipliers.at(node.multipliers), here, bound);
          if (!(largest_in_box(limits_, box, bound) < 0.0)) {
            throw std::invalid_argument("a box called empty is not");
          }
        }
        ++result_.num_boxes;
        return;
      }
      case Certificate::Node::Kind::kScored:
        score_box(here, box);
        return;
    }
  }

  void add_input(const Certificate::Multipliers& from, const Cell& here, Linear& bound) const {
    for (std::size_t j = 0; j < from.input_points.size(); ++j) {
      const double weight = from.input_weights.at(j);
      if (!(weight >= 0.0) || !model_.link.device.receiver.peak_input_v) {
        throw std::invalid_argument("a multiplier of the receiver's input is no weight");
      }
      const Linear input = input_bound(model_, from.input_points[j], here.amplitude_v());
      bound.slopes += weight * input.slopes;
      bound.constant += weight * input.constant;
    }
  }

  void score_box(const Cell& here, const TapBox& box) {
    std::vector<int> code = box.first;
    Eigen::VectorXd taps = Eigen::VectorXd::Zero(box.lo.size());
    for (;;) {
      for (std::size_t i = 0; i < code.size(); ++i) {
        const FirTap& tap = limits_.taps[i];
        if (tap.is_remainder) continue;
        if (tap.codes.empty()) throw std::invalid_argument("a tap without codes can't be scored");
        taps[static_cast<Eigen::Index>(i)] = tap.codes[static_cast<std::size_t>(code[i])].value;
      }
      const Eigen::VectorXd all = with_remainder(limits_, taps);
      if (keeps_limits(limits_, all)) score_setting(here, all);
      std::size_t i = 0;
      while (i < code.size() && ++code[i] > box.last[i]) {
        code[i] = box.first[i];
        ++i;
      }
      if (i == code.size()) return;
    }
  }

  void score_setting(const Cell& here, const Eigen::VectorXd& taps) {
    ++result_.num_settings;
    const double height_v = here.height(taps);
    if (height_v <= std::max(result_.bound_v, certificate_.bound_v)) {
      result_.bound_v = std::max(result_.bound_v, height_v);
      return;
    }
    const std::optional<double> limit_v = model_.link.device.receiver.peak_input_v;
    if (limit_v && peak_input_v(limits_, taps, model_.input) * here.amplitude_v() >
                       *limit_v * (1.0 + 1e-12)) {
      return;
    }
    if (model_.link.sampling != SamplingRule::kBest) {
      Settings settings;
      settings.swing_index = here.place().swing_index;
      settings.ctle_index = here.place().ctle_index;
      settings.fir = taps;
      const SamplingInstant instant = sampling_instant(model_, settings, model_.link.sampling);
      if (instant.rule_held && instant.phase_samples != here.place().phase_samples) return;
    }
    result_.bound_v = std::max(result_.bound_v, height_v);
  }

  const EyeModel& model_;
  const Certificate& certificate_;
  const FirLimits& limits_;
  CertificateCheck result_;
};

}  // namespace

CertificateCheck check_certificate(const EyeModel& model, const Certificate& certificate) {
  return Check(model, certificate).run();
}

}  // namespace tapwright
