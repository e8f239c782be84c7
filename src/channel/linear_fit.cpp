#include "tapwright/channel/linear_fit.hpp"

#include <Eigen/Cholesky>
#include <algorithm>
#include <boost/math/interpolators/cardinal_quintic_b_spline.hpp>
#include <cmath>
#include <string>
#include <utility>
#include <vector>

#include "tapwright/base/fft.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"

namespace tapwright {
namespace {

constexpr Eigen::Index kMostSymbols = 65536;
constexpr Eigen::Index kWindow = 1024;  ///< symbols that are compared with the pattern at once
constexpr std::int64_t kLongestCompared = (std::int64_t{1} << 20);  ///< pattern for correlation
constexpr double kLeastSnrDb = 3.0;  ///< below it there is no trace of the pattern

using Spline = boost::math::interpolators::cardinal_quintic_b_spline<double>;

/// The waveform between its samples by straight lines; good enough for a search.
double at(const Eigen::VectorXd& y, double index) {
  const auto i = static_cast<Eigen::Index>(std::floor(index));
  if (i < 0 || i + 1 >= y.size()) return 0.0;
  return std::lerp(y[i], y[i + 1], index - static_cast<double>(i));
}

/// Where the pattern stands: symbol `offset` + k peaks at sample `peak` + k UI.
struct Place {
  double peak = 0.0;
  std::int64_t offset = 0;
  bool inverted = false;
  double strength = 0.0;
};

/// One sample per UI from `phase` on, without its mean.
Eigen::VectorXd symbol_spaced(const Eigen::VectorXd& y, double phase, double per_ui,
                              Eigen::Index count) {
  Eigen::VectorXd out(count);
  for (Eigen::Index k = 0; k < count; ++k) out[k] = at(y, phase + static_cast<double>(k) * per_ui);
  return out.array() - out.mean();
}

/// By correlation with every place of the pattern; works on a closed eye.
Place place_by_correlation(const Eigen::VectorXd& y, double per_ui, const Pattern& pattern,
                           Eigen::Index count) {
  const auto length = static_cast<Eigen::Index>(period(pattern));
  const Eigen::Index size = quick_transform_size(length + 2 * count);
  Eigen::VectorXd known = Eigen::VectorXd::Zero(size);
  known.head(length + count) = symbols(pattern, 0, length + count);
  const Eigen::VectorXcd known_spectrum = real_spectrum(known);
  Place best;
  constexpr int kPhases = 4;
  for (int p = 0; p < kPhases; ++p) {
    const double phase = per_ui * p / kPhases;
    Eigen::VectorXd seen = Eigen::VectorXd::Zero(size);
    seen.head(count) = symbol_spaced(y, phase, per_ui, count);
    const Eigen::VectorXd match =
        real_record(known_spectrum.cwiseProduct(real_spectrum(seen).conjugate()), size);
    Eigen::Index where = 0;
    const double strength = match.head(length).cwiseAbs().maxCoeff(&where);
    if (strength > best.strength) best = {phase, where, match[where] < 0, strength};
  }
  return best;
}

/// By a stretch of decisions that keeps to the sequence; for sequences too long to compare with.
Place place_by_decisions(const Eigen::VectorXd& y, double per_ui, const Prbs& prbs,
                         Eigen::Index count) {
  constexpr int kPhases = 8;
  const Eigen::Index stretch = prbs.order + 64;
  Place best;
  for (int p = 0; p < kPhases; ++p) {
    const double phase = per_ui * p / kPhases;
    const Eigen::VectorXd seen = symbol_spaced(y, phase, per_ui, count);
    const double strength = seen.cwiseAbs().minCoeff() + 1e-3 * seen.cwiseAbs().mean();
    if (strength <= best.strength) continue;
    for (const bool inverted : {false, true}) {
      std::optional<std::int64_t> index;
      for (Eigen::Index start = 0; start + stretch <= count && !index; ++start) {
        std::vector<std::uint8_t> bits(static_cast<std::size_t>(stretch));
        for (Eigen::Index i = 0; i < stretch; ++i) {
          bits[static_cast<std::size_t>(i)] = (seen[start + i] > 0) != inverted ? 1 : 0;
        }
        index = prbs_index(prbs.order, bits);
        if (index) best = {phase, *index - start, inverted, strength};
      }
    }
  }
  return best;
}

/// Follows the peak of the correlation from window to window; samples per UI by regression.
struct Track {
  double per_ui = 0.0;
  double peak = 0.0;  ///< refined place of symbol `offset`
};

Track follow(const Eigen::VectorXd& y, double per_ui, const Place& place, const Pattern& pattern,
             Eigen::Index num_symbols, Eigen::Index window) {
  constexpr int kSteps = 24;  // on each side, 1/16 UI apart
  const double sign = place.inverted ? -1.0 : 1.0;
  double n = 0, sx = 0, sy = 0, sxx = 0, sxy = 0;
  double late = 0.0, slope = 0.0;  // of the peak against the told rate, in samples
  for (Eigen::Index first = 0; first + window <= num_symbols; first += window) {
    const Eigen::VectorXd known = symbols(pattern, place.offset + first, window);
    const double middle = static_cast<double>(first) + 0.5 * static_cast<double>(window);
    if (n >= 2) late = (sy - slope * sx) / n + slope * middle;
    Eigen::VectorXd match(2 * kSteps + 1);
    for (int s = -kSteps; s <= kSteps; ++s) {
      const double start =
          place.peak + static_cast<double>(first) * per_ui + late + per_ui * s / 16.0;
      match[s + kSteps] = sign * known.dot(symbol_spaced(y, start, per_ui, window));
    }
    Eigen::Index top = 0;
    match.maxCoeff(&top);
    double shift = static_cast<double>(top) - kSteps;
    if (top > 0 && top < 2 * kSteps) {
      const double curve = match[top - 1] - 2 * match[top] + match[top + 1];
      if (curve < 0) shift += 0.5 * (match[top - 1] - match[top + 1]) / curve;
    }
    late += per_ui * shift / 16.0;
    n += 1, sx += middle, sy += late, sxx += middle * middle, sxy += middle * late;
    if (n >= 2) slope = (n * sxy - sx * sy) / (n * sxx - sx * sx);
  }
  if (n == 0) return {per_ui, place.peak};
  return {per_ui + slope, place.peak + (sy - slope * sx) / n};
}

/// The least-squares problem: its matrix depends on the symbols alone.
class Fitter {
 public:
  /// Row k: symbols first + k + num_pre ... first + k - num_post and a 1.
  Fitter(const Pattern& pattern, std::int64_t first, Eigen::Index num_rows, int num_pre,
         int num_post)
      : num_rows_(num_rows),
        num_taps_(num_pre + num_post + 1),
        levels_(symbols(pattern, first - num_post, num_rows + num_taps_ - 1)) {
    Eigen::MatrixXd normal = Eigen::MatrixXd::Zero(num_taps_ + 1, num_taps_ + 1);
    for_blocks([&](Eigen::Index /*row*/, const Eigen::MatrixXd& x) {
      normal.selfadjointView<Eigen::Lower>().rankUpdate(x.transpose());
    });
    solver_.compute(normal.selfadjointView<Eigen::Lower>());
    const Eigen::VectorXd d = solver_.vectorD();
    regular_ = solver_.info() == Eigen::Success && d.minCoeff() > 1e-9 * d.maxCoeff();
  }

  [[nodiscard]] bool regular() const { return regular_; }

  struct Solution {
    Eigen::MatrixXd taps;      ///< (taps + 1, phases); the last row is the constant
    Eigen::MatrixXd residual;  ///< (rows, phases)
  };
  /// Shape: y is (rows, phases).
  [[nodiscard]] Solution solve(const Eigen::MatrixXd& y) const {
    Eigen::MatrixXd right = Eigen::MatrixXd::Zero(num_taps_ + 1, y.cols());
    for_blocks([&](Eigen::Index row, const Eigen::MatrixXd& x) {
      right.noalias() += x.transpose() * y.middleRows(row, x.rows());
    });
    Solution out{solver_.solve(right), y};
    for_blocks([&](Eigen::Index row, const Eigen::MatrixXd& x) {
      out.residual.middleRows(row, x.rows()).noalias() -= x * out.taps;
    });
    return out;
  }

 private:
  template <class Body>
  void for_blocks(const Body& body) const {
    constexpr Eigen::Index kRows = 1024;
    for (Eigen::Index row = 0; row < num_rows_; row += kRows) {
      const Eigen::Index count = std::min(kRows, num_rows_ - row);
      Eigen::MatrixXd x(count, num_taps_ + 1);
      // Tap i is the pulse i UI after its first: symbol k + num_pre - i.
      for (Eigen::Index i = 0; i < num_taps_; ++i) {
        x.col(i) = levels_.segment(row + num_taps_ - 1 - i, count);
      }
      x.col(num_taps_).setOnes();
      body(row, x);
    }
  }

  Eigen::Index num_rows_;
  Eigen::Index num_taps_;
  Eigen::VectorXd levels_;
  Eigen::LDLT<Eigen::MatrixXd> solver_;
  bool regular_ = false;
};

/// The waveform on a grid of `phases` samples per UI: row k, column m is k + m / phases UI after
/// `start`.
Eigen::MatrixXd on_grid(const Spline& spline, double start, double per_ui, Eigen::Index num_rows,
                        int phases) {
  Eigen::MatrixXd y(num_rows, phases);
  for (Eigen::Index k = 0; k < num_rows; ++k) {
    for (int m = 0; m < phases; ++m) {
      y(k, m) = spline(start + per_ui * (static_cast<double>(k) + static_cast<double>(m) / phases));
    }
  }
  return y;
}

/// How far the rate is off, as a ratio: the part of the residual that grows away from the middle
/// along the slope of the waveform.
double rate_error(const Eigen::MatrixXd& y, const Eigen::MatrixXd& residual) {
  const auto phases = static_cast<double>(y.cols());
  const double middle = 0.5 * static_cast<double>(y.rows());
  double moment = 0.0, norm = 0.0;
  for (Eigen::Index k = 0; k + 1 < y.rows(); ++k) {
    for (Eigen::Index m = 0; m < y.cols(); ++m) {
      if (k == 0 && m == 0) continue;
      const double before = m > 0 ? y(k, m - 1) : y(k - 1, y.cols() - 1);
      const double after = m + 1 < y.cols() ? y(k, m + 1) : y(k + 1, 0);
      const double slope = 0.5 * phases * (after - before);  // per UI
      const double lever =
          (static_cast<double>(k) + static_cast<double>(m) / phases - middle) * slope;
      moment += lever * residual(k, m);
      norm += lever * lever;
    }
  }
  return norm > 0 ? moment / norm : 0.0;
}

}  // namespace

Result<LinearFit> fit_pulse(const Capture& waveform, const Pattern& pattern,
                            const LinearFitOptions& options, std::string_view label) {
  const std::string place_name(label);
  const auto fail = [&](std::string message) {
    return failure<LinearFit>(error_at(place_name, 0, std::move(message)));
  };
  if (!(std::isfinite(options.symbol_rate_bd) && options.symbol_rate_bd > 0)) {
    return fail("found a symbol rate of " + exact(options.symbol_rate_bd) + " Bd; wanted above 0");
  }
  if (!(std::isfinite(options.launch_v) && options.launch_v > 0)) {
    return fail("found a launch of " + exact(options.launch_v) + " V; wanted one above 0");
  }
  if (options.samples_per_ui < 1 || options.num_pre_ui < 0 || options.num_post_ui < 1) {
    return fail("wanted at least 1 sample per UI, 0 UI before and 1 UI after the peak");
  }
  if (!(options.rate_tolerance >= 0 && options.rate_tolerance <= 1e-3)) {
    return fail("found a tolerance of the symbol rate of " + exact(options.rate_tolerance) +
                "; wanted 0 to 0.001");
  }
  const double told_per_ui = 1 / (options.symbol_rate_bd * waveform.dt_s);
  if (!(told_per_ui >= 2)) {
    return fail("found " + significant(told_per_ui, 3) +
                " samples per UI in the waveform; wanted 2 or more; is the unit of time right?");
  }
  Result<LinearFit> result;
  const auto warn = [&](std::string message) {
    result.notes.push_back(warning_at(place_name, 0, std::move(message)));
  };
  if (told_per_ui < 4) {
    warn("found " + significant(told_per_ui, 3) +
         " samples per UI; fewer than 4 hardly show the signal between them");
  }

  // All taps and the constant can be told apart only while they are fewer than the pattern's
  // symbols.
  const std::int64_t length = period(pattern);
  const int num_pre = options.num_pre_ui;
  int num_post = options.num_post_ui;
  if (num_pre + num_post + 2 > length) {
    num_post = static_cast<int>(length) - 2 - num_pre;
    if (num_post < 1) {
      return fail("a pattern of " + std::to_string(length) + " symbols can't tell a pulse of " +
                  std::to_string(num_pre) + " UI before its peak; wanted a longer pattern");
    }
    warn("the pattern repeats after " + std::to_string(length) + " symbols; the pulse is cut to " +
         std::to_string(num_post) + " UI after its peak");
  }
  const int num_taps = num_pre + num_post + 1;
  const Eigen::VectorXd& all = waveform.samples_v;
  const auto seen_ui = static_cast<Eigen::Index>(static_cast<double>(all.size() - 1) / told_per_ui);
  const Eigen::Index least_ui = 2 * (Eigen::Index{num_taps} + 1) + 4;
  if (seen_ui < least_ui) {
    return fail("found a waveform of " + std::to_string(seen_ui) + " UI; wanted at least " +
                std::to_string(least_ui) + " for a pulse of " + std::to_string(num_taps) + " UI");
  }
  const Eigen::Index num_symbols = std::min(seen_ui, kMostSymbols);
  const auto used = std::min<Eigen::Index>(
      all.size(),
      static_cast<Eigen::Index>(static_cast<double>(num_symbols + 2) * told_per_ui * 1.001) + 8);
  const Eigen::VectorXd y = all.head(used);

  // Where: offset and rough phase from the start of the record.
  const Eigen::Index window = std::min(kWindow, num_symbols - 4);
  Place place;
  const auto* prbs = std::get_if<Prbs>(&pattern);
  if (length <= kLongestCompared) {
    place = place_by_correlation(y, told_per_ui, pattern, window);
  } else if (prbs != nullptr && !prbs->pam4) {
    place =
        place_by_decisions(y, told_per_ui, *prbs, std::min<Eigen::Index>(4096, num_symbols - 4));
  } else {
    return fail("a pattern of " + std::to_string(length) + " symbols is too long; wanted at most " +
                std::to_string(kLongestCompared));
  }
  const auto no_trace = [&](const std::string& more) {
    return fail("no trace of the pattern found" + more + "; wanted the pattern named, at " +
                significant(options.symbol_rate_bd * 1e-9, 6) + " GBd within " +
                significant(options.rate_tolerance * 1e6, 4) + " ppm");
  };
  if (place.strength <= 0) {
    return no_trace(length > kLongestCompared ? " (one so long needs a stretch of open eye)" : "");
  }

  // How fast: first by following the pattern, then by the residual of the fit itself.
  Track track = follow(y, told_per_ui, place, pattern, num_symbols - 4, window);
  const double start_ui = std::ceil(-track.peak / track.per_ui);
  double start = track.peak + start_ui * track.per_ui;  // first peak inside the record
  const std::int64_t first_symbol = place.offset + static_cast<std::int64_t>(start_ui);
  const double slowest = track.per_ui * (1 + 1e-4);
  const auto num_rows = std::min(
      num_symbols,
      static_cast<Eigen::Index>((static_cast<double>(y.size() - 1) - start) / slowest) - 1);
  const Fitter fitter(pattern, first_symbol, num_rows, num_pre, num_post);
  if (!fitter.regular()) {
    return fail(
        "the pattern's symbols can't tell the taps of a pulse apart; wanted a pattern with "
        "more change in it");
  }
  const Spline spline(y.data(), static_cast<std::size_t>(y.size()), 0.0, 1.0);
  double per_ui = track.per_ui;
  constexpr int kCoarsePhases = 4;
  // Moves the grid back into the record; false when it has become longer than that, which no rate
  // near the one told makes it.
  const auto keep_inside = [&] {
    const double end = static_cast<double>(y.size() - 1);
    start = std::max(std::min(start, end - per_ui * static_cast<double>(num_rows)), 0.0);
    return start + per_ui * static_cast<double>(num_rows) <= end;
  };
  for (int turn = 0; turn < 12; ++turn) {
    if (!keep_inside()) return no_trace("");
    const Eigen::MatrixXd coarse = on_grid(spline, start, per_ui, num_rows, kCoarsePhases);
    const double error = rate_error(coarse, fitter.solve(coarse).residual);
    // Half a UI over the record is as far as a first-order step can be trusted.
    const double most = 0.5 / static_cast<double>(num_rows);
    const double step = std::clamp(error, -most, most);
    const double middle = 0.5 * static_cast<double>(num_rows);
    start += middle * per_ui * step;  // the middle of the record stays where it is
    per_ui *= 1 - step;
    if (std::abs(step) * static_cast<double>(num_rows) < 1e-6) break;
  }
  if (!keep_inside()) return no_trace("");

  const int m = options.samples_per_ui;
  const Eigen::MatrixXd fine = on_grid(spline, start, per_ui, num_rows, m);
  const Fitter::Solution fit = fitter.solve(fine);
  const double sign = place.inverted ? -1.0 : 1.0;
  Eigen::VectorXd samples_v(Eigen::Index{num_taps} * m);
  for (Eigen::Index i = 0; i < num_taps; ++i) {
    samples_v.segment(i * m, m) = sign / options.launch_v * fit.taps.row(i).transpose();
  }
  const double freedom = static_cast<double>(num_rows - num_taps - 1) * m;
  const double error_power = fit.residual.squaredNorm() / freedom;
  const Eigen::RowVectorXd constant = fit.taps.row(num_taps);
  const double total_power =
      (fine.rowwise() - constant).squaredNorm() / static_cast<double>(fine.size());
  const double signal_power = std::max(0.0, total_power - error_power);
  const double snr_db = 10 * std::log10(signal_power / error_power);
  if (!(snr_db >= kLeastSnrDb)) return no_trace("");

  const double found_bd = 1 / (per_ui * waveform.dt_s);
  const double off = found_bd / options.symbol_rate_bd - 1;
  if (std::abs(off) > options.rate_tolerance) {
    return fail("found a symbol rate of " + significant(found_bd * 1e-9, 9) + " GBd, " +
                significant(off * 1e6, 4) + " ppm off; wanted within " +
                significant(options.rate_tolerance * 1e6, 4) + " ppm of " +
                significant(options.symbol_rate_bd * 1e-9, 9) + " GBd");
  }
  if (std::abs(off) > 1e-6) {
    warn("the waveform runs at " + significant(found_bd * 1e-9, 9) + " GBd, " +
         significant(off * 1e6, 3) +
         " ppm from the rate told; the pulse is taken as at the latter");
  }
  if (place.inverted) warn("the waveform is the pattern with its sign changed; it was turned");
  const std::int64_t offset = first_symbol % length;
  result.value = LinearFit{PulseResponse(std::move(samples_v), m, 1 / options.symbol_rate_bd),
                           found_bd,
                           offset < 0 ? offset + length : offset,
                           place.inverted,
                           constant.mean(),
                           std::sqrt(error_power),
                           snr_db,
                           num_rows};
  return result;
}

}  // namespace tapwright
