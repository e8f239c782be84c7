#include "tapwright/channel/quality.hpp"

#include <Eigen/Eigenvalues>
#include <Eigen/QR>
#include <Eigen/SVD>
#include <algorithm>
#include <cmath>
#include <complex>
#include <limits>
#include <numbers>
#include <stdexcept>

#include "tapwright/base/fft.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"
#include "tapwright/channel/network_operations.hpp"
#include "tapwright/channel/received_spectrum.hpp"

namespace tapwright {
namespace {

using Complex = std::complex<double>;
using Eigen::Index;
using Eigen::MatrixXcd;
using Eigen::VectorXcd;
using Eigen::VectorXd;

constexpr double kTwoPi = 2.0 * std::numbers::pi;

double largest_singular_value(const MatrixXcd& s) {
  const MatrixXcd gram = s.adjoint() * s;
  const Eigen::SelfAdjointEigenSolver<MatrixXcd> solver(gram, Eigen::EigenvaluesOnly);
  return std::sqrt(std::max(0.0, solver.eigenvalues()[gram.rows() - 1]));
}

/// Share of clockwise turning of one parameter's polar plot.
double clockwise_share(const Network& network, Index row) {
  double clockwise = 0.0;
  double all = 0.0;
  for (Index k = 0; k + 2 < network.num_points(); ++k) {
    const Complex first = network.values(row, k + 1) - network.values(row, k);
    const Complex second = network.values(row, k + 2) - network.values(row, k + 1);
    const double turn = second.real() * first.imag() - second.imag() * first.real();
    clockwise += std::max(turn, 0.0);
    all += std::abs(turn);
  }
  return all > 0.0 ? clockwise / all : 1.0;
}

Index nearest_point(const VectorXd& frequencies_hz, double wanted_hz) {
  Index at = 0;
  (frequencies_hz.array() - wanted_hz).abs().minCoeff(&at);
  return at;
}

double loss_db(Complex value) {
  return -ratio_to_amplitude_db(std::max(std::abs(value), std::numeric_limits<double>::min()));
}

/// Smooth laws for a path's loss and phase, fitted with the magnitude as weight (as 93A.3 does for
/// the loss): loss a0 + a1 sqrt(f) + a2 f + a4 f^2 in dB, lag b0 sqrt(f) + b1 f + b2 f ln f in
/// radians, f in GHz.
struct PathFit {
  Eigen::Vector4d loss = Eigen::Vector4d::Zero();
  Eigen::Vector3d lag = Eigen::Vector3d::Zero();

  static Eigen::RowVector4d loss_terms(double f_ghz) {
    return {1.0, std::sqrt(f_ghz), f_ghz, f_ghz * f_ghz};
  }
  static Eigen::RowVector3d lag_terms(double f_ghz) {
    return {std::sqrt(f_ghz), f_ghz, f_ghz > 0.0 ? f_ghz * std::log(f_ghz) : 0.0};
  }
  [[nodiscard]] double loss_db(double frequency_hz) const {
    return loss_terms(hz_to_ghz(frequency_hz)) * loss;
  }
  [[nodiscard]] double lag_rad(double frequency_hz) const {
    return lag_terms(hz_to_ghz(frequency_hz)) * lag;
  }
};

PathFit fitted(const VectorXd& frequencies_hz, const VectorXcd& through, double delay_s,
               Index count) {
  Eigen::MatrixXd loss_rows(count, 4);
  Eigen::MatrixXd lag_rows(count, 3);
  VectorXd loss(count);
  VectorXd lag(count);
  // The mean delay is taken out before the phase is followed from point to point.
  const auto still = [&](Index k) {
    return through[k] * std::polar(1.0, kTwoPi * frequencies_hz[k] * delay_s);
  };
  double phase = std::arg(still(0));
  for (Index k = 0; k < count; ++k) {
    const double f_ghz = hz_to_ghz(frequencies_hz[k]);
    const double weight = std::abs(through[k]);
    if (k > 0) phase += std::arg(still(k) * std::conj(still(k - 1)));
    loss_rows.row(k) = weight * PathFit::loss_terms(f_ghz);
    lag_rows.row(k) = weight * PathFit::lag_terms(f_ghz);
    loss[k] = weight * loss_db(through[k]);
    lag[k] = weight * (kTwoPi * frequencies_hz[k] * delay_s - phase);
  }
  return {loss_rows.completeOrthogonalDecomposition().solve(loss),
          lag_rows.completeOrthogonalDecomposition().solve(lag)};
}

/// Worst-case eye height of a pulse, the best of all phases within one UI of its peak.
double worst_case_eye_v(const VectorXd& pulse, Index per_ui) {
  Index peak = 0;
  pulse.maxCoeff(&peak);
  double best = -std::numeric_limits<double>::infinity();
  for (Index at = std::max<Index>(peak - per_ui / 2, 0);
       at <= std::min(peak + per_ui / 2, pulse.size() - 1); ++at) {
    double sum = 0.0;
    for (Index i = at % per_ui; i < pulse.size(); i += per_ui) sum += std::abs(pulse[i]);
    best = std::max(best, 2.0 * (pulse[at] - (sum - std::abs(pulse[at]))));
  }
  return best;
}

std::optional<double> eye_of(const VectorXd& frequencies_hz, const VectorXcd& through,
                             double symbol_rate_bd) {
  TimeGrid grid;
  grid.ui_s = 1.0 / symbol_rate_bd;
  FrequencyResponse response;
  response.frequencies_hz = frequencies_hz;
  response.values = through;
  const auto spectrum = received_spectrum(response, grid, {}, "");
  if (!spectrum) return std::nullopt;
  return worst_case_eye_v(real_record(spectrum.value->values, spectrum.value->num_samples),
                          grid.samples_per_ui);
}

/// Boundaries of a path, one a section of dt one way, the first `lead` of them before the port.
struct Boundaries {
  VectorXd reflection;  ///< coming from the left
  double dt_s = 0.0;    ///< one way
  Index lead = 0;
};

/// Layer peeling of a port's reflection, under a taper that is 1 up to the share `flat` of the band
/// and falls as a raised cosine behind.
Boundaries peeled(const Network& two_port, int port, double until_s, double flat) {
  const VectorXd& f = two_port.frequencies_hz;
  const Index points = f.size();
  const double top = f[points - 1];
  const double step = (f.tail(points - 1) - f.head(points - 1)).minCoeff();
  // Even steps from 0 to the top; twice the band gives one sample per round trip of a section.
  const auto half = std::min<Index>(static_cast<Index>(std::ceil(top / step - 1e-6)), 1 << 20);
  const VectorXd even = VectorXd::LinSpaced(half + 1, 0.0, top);
  const Index below = std::lower_bound(even.data(), even.data() + half + 1, f[0]) - even.data();
  const Network end = resampled(with_ports(two_port, {port + 1}), even.tail(half + 1 - below));
  VectorXcd spectrum(half + 1);
  spectrum.tail(half + 1 - below) = end.values.row(0).transpose();
  for (Index k = 0; k < below; ++k) {
    const Complex lowest = end.values(0, 0);
    spectrum[k] = {lowest.real(), lowest.imag() * even[k] / even[below]};
  }
  spectrum[0] = spectrum[0].real();
  for (Index k = 0; k <= half; ++k) {
    const double share = std::max(0.0, (even[k] / top - flat) / (1.0 - flat));
    spectrum[k] *= 0.5 + 0.5 * std::cos(std::numbers::pi * share);
  }
  const VectorXd record = real_record(spectrum, 2 * half);

  Boundaries boundaries;
  boundaries.dt_s = 1.0 / (4.0 * top);
  // A raised cosine over the whole band spreads an impulse over three samples, 1/4 1/2 1/4; a
  // flatter taper rings for longer. What comes before time 0 stands at the record's end.
  boundaries.lead = std::min<Index>(flat == 0.0 ? 1 : 4, half);
  const Index lead = boundaries.lead;
  const Index count =
      std::clamp<Index>(static_cast<Index>(std::ceil(until_s / boundaries.dt_s)) + 1 + lead,
                        lead + 1, std::min<Index>(2 * half, 1 << 13));
  VectorXd backward(count);
  backward.head(lead) = record.tail(lead);
  backward.tail(count - lead) = record.head(count - lead);
  VectorXd forward = VectorXd::Zero(count);
  forward[0] = 1.0;
  boundaries.reflection.resize(count);
  for (Index n = 0; n < count; ++n) {
    const Index left = count - n;
    const double k = std::clamp(backward[0] / forward[0], -0.999, 0.999);
    boundaries.reflection[n] = k;
    if (left == 1) break;
    // Across the boundary, then one section on: the backward wave moves up by one sample.
    const double scale = 1.0 / std::sqrt(1.0 - k * k);
    const VectorXd ahead = scale * (forward.head(left) - k * backward.head(left));
    backward.head(left - 1) =
        scale * (backward.segment(1, left - 1) - k * forward.segment(1, left - 1));
    forward.head(left) = ahead;
  }
  return boundaries;
}

/// What the boundaries let through, of sections that delay by dt and lose nepers each.
Complex transmitted(const VectorXd& reflection, Complex section) {
  Complex back = 0.0;
  Complex through = 1.0;
  for (Index n = reflection.size() - 1; n >= 0; --n) {
    const double k = reflection[n];
    back *= section * section;
    const Complex loop = 1.0 / (1.0 + k * back);
    through *= std::sqrt(1.0 - k * k) * loop * section;
    back = (k + back) * loop;
  }
  return through;
}

/// A layered model of the path, with its boundaries and its fitted loss and lag spread evenly, but
/// with a uniform line from `begin` to `end`.
VectorXcd layered_through(const VectorXd& frequencies_hz, const Boundaries& boundaries, Index begin,
                          Index end, const PathFit& fit, double delay_s, double symbol_rate_bd) {
  const double share = boundaries.dt_s / delay_s;  // of the path in one section
  const auto nepers = [&](double frequency_hz) {
    return share * std::max(0.0, fit.loss_db(frequency_hz)) /
           ratio_to_amplitude_db(std::numbers::e);
  };
  // The peeled boundaries carry the loss of the way to them and back; that in the middle of the
  // pulse's band is taken off.
  VectorXd k = boundaries.reflection;
  const double grow = 2.0 * nepers(symbol_rate_bd / 4.0);
  for (Index n = boundaries.lead; n < k.size(); ++n) {
    k[n] = std::clamp(k[n] * std::exp(grow * static_cast<double>(n - boundaries.lead)), -0.9, 0.9);
  }
  k.segment(begin, end - begin).setZero();
  VectorXcd through(frequencies_hz.size());
  for (Index i = 0; i < through.size(); ++i) {
    const double f = frequencies_hz[i];
    through[i] = transmitted(k, std::polar(std::exp(-nepers(f)), -share * fit.lag_rad(f)));
  }
  return through;
}

std::optional<WorstReflection> worst_reflection_of(const Network& path, const PathFit& fit,
                                                   double delay_s, double symbol_rate_bd) {
  if (!(delay_s > 0.0)) return std::nullopt;
  const VectorXd& f = path.frequencies_hz;
  const double top = f[f.size() - 1];
  // The models reach well behind the end, since loss smears what comes from there.
  const Boundaries boundaries = peeled(path, 0, 1.5 * delay_s + 4.0 / top, 0.5);
  const VectorXd& k = boundaries.reflection;
  const auto path_end = static_cast<Index>(std::ceil(delay_s / boundaries.dt_s)) + boundaries.lead;
  const Index n = std::min(k.size(), path_end + 4);
  // The taper spreads a boundary over some three sections; a small part has two boundaries of
  // opposite sign close together.
  Index at = 0;
  double largest = 0.0;
  for (Index i = 0; i < n; ++i) {
    const Index first = std::max<Index>(i - 1, 0);
    const double sum = std::abs(k.segment(first, std::min<Index>(i + 2, n) - first).sum());
    if (sum > largest) {
      largest = sum;
      at = i;
    }
  }
  if (largest < 1e-4) return std::nullopt;
  const Index begin = std::max<Index>(at - 4, 0);
  const Index end = std::min<Index>(at + 5, k.size());
  WorstReflection worst;
  worst.delay_s =
      std::clamp(static_cast<double>(at - boundaries.lead) * boundaries.dt_s, 0.0, delay_s);
  worst.share = worst.delay_s / delay_s;
  double there = path.reference_ohm[0].real();
  for (Index i = 0; i < end; ++i) {
    if (i == begin) worst.impedance_before_ohm = there;
    there *= (1.0 + k[i]) / (1.0 - k[i]);
    if (i < begin) continue;
    const double reflection =
        (there - worst.impedance_before_ohm) / (there + worst.impedance_before_ohm);
    if (std::abs(reflection) > std::abs(worst.reflection)) {
      worst.reflection = reflection;
      worst.impedance_ohm = there;
    }
  }
  // The difference of two models counts, not the measured path: what a model can't show is missing
  // from both.
  // As many frequencies as the models' echoes need, whatever the file has.
  const auto steps = std::max<Index>(1000, static_cast<Index>(std::ceil(8.0 * delay_s * top)));
  const VectorXd grid = VectorXd::LinSpaced(steps + 1, 0.0, top);
  const auto eye_without = [&](Index from, Index to) {
    return eye_of(grid, layered_through(grid, boundaries, from, to, fit, delay_s, symbol_rate_bd),
                  symbol_rate_bd);
  };
  const auto with = eye_without(0, 0);
  const auto without = eye_without(begin, end);
  if (with && without) worst.eye_cost_v = *without - *with;
  return worst;
}

/// Delay of the - line's output behind the + line's when the pair is driven differentially.
double skew_of(const Network& network, const PortMap& map, double top_hz) {
  const auto driven = [&](int out) {
    return VectorXcd(network.parameter(out - 1, map.in[0] - 1) -
                     network.parameter(out - 1, map.in[1] - 1));
  };
  const VectorXcd plus = driven(map.out[0]);
  const VectorXcd minus = -driven(map.out[1]);
  const VectorXd& f = network.frequencies_hz;
  double phase = 0.0;
  double turned = 0.0;
  double weight = 0.0;
  Complex last = 1.0;
  for (Index k = 0; k < f.size() && (f[k] <= top_hz || k < 2); ++k) {
    const Complex ratio = minus[k] * std::conj(plus[k]);
    if (std::abs(ratio) == 0.0) continue;
    phase += std::arg(ratio * std::conj(last));
    last = ratio / std::abs(ratio);
    turned += std::abs(ratio) * f[k] * phase;
    weight += std::abs(ratio) * f[k] * f[k];
  }
  return weight > 0.0 ? -turned / (kTwoPi * weight) : 0.0;
}

}  // namespace

DataQuality measure_data(const Network& network) {
  const Index points = network.num_points();
  const int n = network.num_ports();
  if (points < 3) throw std::invalid_argument("measure_data: at least three points are needed");
  DataQuality quality;
  double active = 0.0;
  double one_way = 0.0;
  for (Index k = 0; k < points; ++k) {
    const MatrixXcd s = network.at(k);
    const double gain = largest_singular_value(s);
    if (gain > quality.largest_gain) {
      quality.largest_gain = gain;
      quality.largest_gain_hz = network.frequencies_hz[k];
    }
    active += std::max(0.0, gain - 1.00001) / 0.1;
    if (n > 1) {
      const double difference = (s - s.transpose()).cwiseAbs().sum() / (double(n) * (n - 1));
      one_way += std::max(0.0, difference - 1e-6) / 0.1;
    }
  }
  const auto percent = [&](double lost) {
    return 100.0 * std::max(0.0, 1.0 - lost / static_cast<double>(points));
  };
  quality.passivity_percent = percent(active);
  quality.reciprocity_percent = percent(one_way);
  double least = 1.0;
  for (Index row = 0; row < network.values.rows(); ++row) {
    least = std::min(least, clockwise_share(network, row));
  }
  quality.causality_percent = 100.0 * least;
  quality.num_points = points;
  quality.lowest_hz = network.frequencies_hz[0];
  quality.highest_hz = network.frequencies_hz[points - 1];
  quality.largest_step_hz =
      (network.frequencies_hz.tail(points - 1) - network.frequencies_hz.head(points - 1))
          .maxCoeff();
  return quality;
}

ImpedanceProfile impedance_profile(const Network& two_port, int port, double until_s) {
  if (two_port.num_ports() != 2 || (port != 0 && port != 1) || two_port.num_points() < 8 ||
      !(until_s > 0.0)) {
    throw std::invalid_argument(
        "impedance_profile: wanted a two-port of 8 points or more, port 0 or 1, until_s > 0");
  }
  Boundaries boundaries = peeled(two_port, port, until_s, 0.0);
  const Index count = boundaries.reflection.size();
  ImpedanceProfile profile;
  profile.delay_s.resize(count);
  profile.impedance_ohm.resize(count);
  // A raised cosine's step takes 1 / top from 10 to 90 %, seen there and back.
  profile.resolution_s = 2.0 * boundaries.dt_s;
  double impedance_ohm = two_port.reference_ohm[port].real();
  for (Index n = 0; n < count; ++n) {
    const double k = boundaries.reflection[n];
    impedance_ohm *= (1.0 + k) / (1.0 - k);
    profile.delay_s[n] = static_cast<double>(n - boundaries.lead) * boundaries.dt_s;
    profile.impedance_ohm[n] = impedance_ohm;
  }
  profile.reflection = std::move(boundaries.reflection);
  return profile;
}

Result<PathQuality> measure_path(const Network& network, const PortMap& map, double symbol_rate_bd,
                                 std::string_view label) {
  const auto fail = [&](const std::string& message) {
    return failure<PathQuality>(error_at(std::string(label), 0, message));
  };
  if (!(symbol_rate_bd > 0.0) || !std::isfinite(symbol_rate_bd)) {
    return fail("found symbol rate " + exact(symbol_rate_bd) + " Bd; wanted > 0");
  }
  Result<Network> through = through_path(network, map, label);
  if (!through) return {std::nullopt, std::move(through.notes)};
  const Network& path = *through.value;
  const VectorXd& f = path.frequencies_hz;
  if (f.size() < 8) {
    return fail("found " + std::to_string(f.size()) + " points; wanted 8 or more");
  }
  const double top = f[f.size() - 1];
  const VectorXcd s21 = path.parameter(1, 0);
  PathQuality quality;
  quality.delay_s = mean_delay_s(path, 1, 0);
  quality.turns_per_step =
      quality.delay_s * (f.tail(f.size() - 1) - f.head(f.size() - 1)).maxCoeff();
  quality.top_over_symbol_rate = top / symbol_rate_bd;
  const Index nyquist = nearest_point(f, symbol_rate_bd / 2.0);
  quality.insertion_loss_db = loss_db(s21[nyquist]);
  quality.insertion_loss_hz = f[nyquist];
  const Index count = std::max<Index>(
      8, std::upper_bound(f.data(), f.data() + f.size(), 0.75 * symbol_rate_bd) - f.data());
  for (const int port : {0, 1}) {
    Index at = 0;
    path.parameter(port, port).head(count).cwiseAbs().maxCoeff(&at);
    (port == 0 ? quality.return_loss_in_db : quality.return_loss_out_db) =
        loss_db(path.at(at)(port, port));
    (port == 0 ? quality.return_loss_in_hz : quality.return_loss_out_hz) = f[at];
  }
  const PathFit fit = fitted(f, s21, quality.delay_s, count);
  for (Index k = 0; k < count; ++k) {
    const double distance_db = std::abs(loss_db(s21[k]) - fit.loss_db(f[k]));
    if (distance_db > quality.ripple_db) {
      quality.ripple_db = distance_db;
      quality.ripple_hz = f[k];
    }
  }
  if (map.in.size() == 2) {
    quality.skew_s = skew_of(network, map, symbol_rate_bd / 2.0);
    const Network modes = *mixed_mode(network, map, label).value;
    quality.mode_conversion_db = -loss_db(modes.at(nyquist)(3, 0));
  }
  quality.worst_reflection = worst_reflection_of(path, fit, quality.delay_s, symbol_rate_bd);
  return {std::move(quality), {}};
}

std::vector<QualityRow> quality_rows(const DataQuality& data, const PathQuality& path,
                                     double launch_v) {
  using Verdict = QualityRow::Verdict;
  std::vector<QualityRow> rows;
  const auto add = [&](std::string name, std::string value, Verdict verdict, std::string remark) {
    rows.push_back({std::move(name), std::move(value), verdict, std::move(remark)});
  };
  const auto graded = [](double value, double good, double acceptable, double doubtful) {
    return value >= good         ? Verdict::kGood
           : value >= acceptable ? Verdict::kAcceptable
           : value >= doubtful   ? Verdict::kDoubtful
                                 : Verdict::kPoor;
  };
  const auto ghz = [](double hz) { return significant(hz_to_ghz(hz), 4) + " GHz"; };

  add("passivity", fixed(data.passivity_percent, 2) + " %",
      graded(data.passivity_percent, 99.9, 99.0, 80.0),
      data.largest_gain > 1.00001
          ? "largest gain " + fixed(data.largest_gain, 4) + " at " + ghz(data.largest_gain_hz)
          : "");
  add("reciprocity", fixed(data.reciprocity_percent, 2) + " %",
      graded(data.reciprocity_percent, 99.9, 99.0, 80.0), "");
  add("causality", fixed(data.causality_percent, 1) + " %",
      graded(data.causality_percent, 80.0, 50.0, 20.0), "");
  const bool has_dc = data.lowest_hz == 0.0;
  add("lowest frequency", has_dc ? "DC" : significant(data.lowest_hz * 1e-6, 4) + " MHz",
      data.lowest_hz <= 10e6   ? Verdict::kGood
      : data.lowest_hz <= 50e6 ? Verdict::kAcceptable
                               : Verdict::kDoubtful,
      has_dc ? "" : "below it the response is extrapolated");
  add("frequency step",
      significant(data.largest_step_hz * 1e-6, 4) + " MHz, " + fixed(path.turns_per_step, 3) +
          " turns",
      path.turns_per_step < 0.1    ? Verdict::kGood
      : path.turns_per_step < 0.25 ? Verdict::kAcceptable
      : path.turns_per_step < 0.5  ? Verdict::kDoubtful
                                   : Verdict::kPoor,
      path.turns_per_step < 0.25 ? "" : "half a turn of phase per step is the limit");
  add("top frequency",
      ghz(data.highest_hz) + ", " + fixed(path.top_over_symbol_rate, 2) + " x symbol rate",
      graded(path.top_over_symbol_rate, 1.0, 0.75, 0.5),
      path.top_over_symbol_rate >= 1.0 ? "" : "what lies above is a guess");
  add("delay", fixed(s_to_ps(path.delay_s), 1) + " ps", Verdict::kGood, "");
  add("insertion loss", fixed(path.insertion_loss_db, 2) + " dB", Verdict::kGood,
      "at " + ghz(path.insertion_loss_hz));
  const double return_loss_db = std::min(path.return_loss_in_db, path.return_loss_out_db);
  add("return loss",
      fixed(path.return_loss_in_db, 1) + " dB in, " + fixed(path.return_loss_out_db, 1) + " dB out",
      graded(return_loss_db, 12.0, 8.0, 5.0),
      "worst at " + ghz(path.return_loss_in_hz) + " and " + ghz(path.return_loss_out_hz));
  add("ripple of the loss", fixed(path.ripple_db, 2) + " dB",
      graded(-path.ripple_db, -1.0, -2.0, -4.0), "worst at " + ghz(path.ripple_hz));
  if (path.skew_s) {
    const double ui = std::abs(*path.skew_s) * data.highest_hz / path.top_over_symbol_rate;
    add("intra-pair skew", fixed(s_to_ps(*path.skew_s), 2) + " ps", graded(-ui, -0.05, -0.15, -0.3),
        fixed(ui, 3) + " UI; > 0: the - line is later");
  }
  if (path.mode_conversion_db) {
    add("mode conversion",
        *path.mode_conversion_db < -100.0 ? "under -100 dB"
                                          : fixed(*path.mode_conversion_db, 1) + " dB",
        graded(-*path.mode_conversion_db, 30.0, 20.0, 12.0),
        "differential to common, at " + ghz(path.insertion_loss_hz));
  }
  if (path.worst_reflection) {
    const WorstReflection& worst = *path.worst_reflection;
    const double cost_mv = v_to_mv(worst.eye_cost_v * launch_v);
    add("worst reflection",
        fixed(worst.impedance_before_ohm, 1) + " to " + fixed(worst.impedance_ohm, 1) + " ohm at " +
            fixed(s_to_ps(worst.delay_s), 0) + " ps",
        graded(-std::abs(worst.reflection), -0.05, -0.1, -0.2),
        fixed(100.0 * worst.share, 0) + " % of the way; costs about " + fixed(cost_mv, 1) +
            " mV of the unequalised worst-case eye");
  }
  return rows;
}

PassiveRepair nearest_passive(const Network& network) {
  PassiveRepair repair{network, 0, 0.0};
  for (Index k = 0; k < network.num_points(); ++k) {
    const MatrixXcd s = network.at(k);
    if (largest_singular_value(s) <= 1.0) continue;
    const Eigen::JacobiSVD<MatrixXcd> svd(s, Eigen::ComputeFullU | Eigen::ComputeFullV);
    const double excess = svd.singularValues()[0] - 1.0;
    if (excess <= 0.0) continue;
    const VectorXd cut = svd.singularValues().cwiseMin(1.0);
    repair.network.at(k) = svd.matrixU() * cut.asDiagonal() * svd.matrixV().adjoint();
    ++repair.num_changed;
    repair.largest_change = std::max(repair.largest_change, excess);
  }
  return repair;
}

}  // namespace tapwright
