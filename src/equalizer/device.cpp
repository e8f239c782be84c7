#include "tapwright/equalizer/device.hpp"

#include <algorithm>
#include <stdexcept>

#include "tapwright/base/fft.hpp"

namespace tapwright {
namespace {

void require_one_grid(const ReceivedSpectrum& a, const ReceivedSpectrum& b) {
  if (a.num_samples != b.num_samples || a.samples_per_ui != b.samples_per_ui || a.ui_s != b.ui_s) {
    throw std::invalid_argument("state_pulses: victim and aggressor records differ in grid");
  }
}

PulseResponse record_of(const ReceivedSpectrum& spectrum, const Eigen::VectorXcd* filter,
                        RecordTransform& transform) {
  return PulseResponse(
      transform.record(filter != nullptr && !spectrum.at_slicer
                           ? spectrum.values.cwiseProduct(*filter).eval()
                           : spectrum.values),
      spectrum.samples_per_ui, spectrum.ui_s);
}

}  // namespace

std::vector<StatePulses> state_pulses(const Receiver& receiver, const ReceivedSpectrum& victim,
                                      const std::vector<ReceivedSpectrum>& aggressors) {
  for (const ReceivedSpectrum& aggressor : aggressors) require_one_grid(victim, aggressor);
  const Eigen::VectorXd f_hz =
      Eigen::VectorXd::LinSpaced(victim.values.size(), 0.0,
                                 static_cast<double>(victim.values.size() - 1) * victim.df_hz());
  Eigen::VectorXcd noise_filter = Eigen::VectorXcd::Ones(f_hz.size());
  if (receiver.bandwidth_hz) noise_filter = noise_filter_response(*receiver.bandwidth_hz, f_hz);

  RecordTransform transform(victim.num_samples);
  std::vector<StatePulses> states;
  states.reserve(receiver.ctle.size());
  for (const CtleState& state : receiver.ctle) {
    const Eigen::VectorXcd filter = noise_filter.cwiseProduct(response(state, f_hz));
    StatePulses pulses{record_of(victim, &filter, transform), {}, receiver.noise_rms_v.value_or(0.0)};
    for (const ReceivedSpectrum& aggressor : aggressors) {
      pulses.aggressors.push_back(record_of(aggressor, &filter, transform));
    }
    if (receiver.noise_density_v2_per_hz) {
      pulses.noise_v =
          filtered_noise_v(*receiver.noise_density_v2_per_hz, receiver.bandwidth_hz, state);
    }
    states.push_back(std::move(pulses));
  }
  return states;
}

PulseResponse input_pulse(const ReceivedSpectrum& victim) {
  RecordTransform transform(victim.num_samples);
  return record_of(victim, nullptr, transform);
}

double peak_input_v(const FirLimits& limits, const Eigen::VectorXd& taps,
                    const PulseResponse& input) {
  const PulseResponse q = apply(limits, taps, input).pulse;
  double peak_v = 0.0;
  for (int phase = 0; phase < q.samples_per_ui(); ++phase) {
    double sum_v = 0.0;
    for (Eigen::Index i = phase; i < q.size(); i += q.samples_per_ui()) {
      sum_v += std::abs(q.samples_v()[i]);
    }
    peak_v = std::max(peak_v, sum_v);
  }
  return peak_v;
}

}  // namespace tapwright
