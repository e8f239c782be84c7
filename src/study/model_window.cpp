#include "study/model_window.hpp"

#include <algorithm>

namespace tapwright {
namespace {

PulseResponse cut(const PulseResponse& pulse, Eigen::Index first, Eigen::Index last) {
  first = std::max<Eigen::Index>(0, first);
  last = std::min(pulse.size() - 1, last);
  return {pulse.samples_v().segment(first, last - first + 1), pulse.samples_per_ui(), pulse.ui_s()};
}

}  // namespace

EyeModel within_span(EyeModel model) {
  const Eigen::Index per_ui = model.input.samples_per_ui();
  // Sampling instants lie up to 1.5 UI beside the peak; FIR taps and jitter's slopes reach on.
  Eigen::Index reach = 3;
  for (const FirTap& tap : model.link.device.transmitter.fir.taps) {
    reach = std::max<Eigen::Index>(reach, std::abs(tap.position) + 3);
  }
  const Eigen::Index before = (model.span_ui[0] + reach) * per_ui;
  const Eigen::Index after = (model.span_ui[1] + reach) * per_ui;
  for (StatePulses& state : model.states) {
    const Eigen::Index peak = state.peak_index();
    state.victim = cut(state.victim, peak - before, peak + after);
  }
  // A limit of the input voltage looks at the whole record.
  if (!model.link.device.receiver.peak_input_v) {
    const Eigen::Index peak = model.input.peak_index();
    model.input = cut(model.input, peak - before, peak + after);
  }
  model.link.channel.values = Eigen::VectorXcd();
  for (Aggressor& aggressor : model.link.crosstalk) aggressor.spectrum.values = Eigen::VectorXcd();
  return model;
}

}  // namespace tapwright
