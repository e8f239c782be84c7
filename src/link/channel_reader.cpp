#include "link/channel_reader.hpp"

#include <algorithm>

#include "tapwright/base/fft.hpp"
#include "tapwright/base/units.hpp"

namespace tapwright {
namespace {

/// Whether the record has the receiver's filters in it already.
bool is_at_slicer(const Section& record, int samples_per_ui) {
  if (!record.has("taken_at")) return samples_per_ui == 1;
  const bool at_slicer = record.text("taken_at") == "slicer";
  if (!at_slicer && samples_per_ui == 1) {
    record.error("taken_at",
                 "a record with one sample per UI can't be filtered; allowed: "
                 "\"slicer\"");
  }
  return at_slicer;
}

ReceivedSpectrum read_pulse(const Section& pulse, const PulseConditions& conditions) {
  ReceivedSpectrum spectrum;
  spectrum.samples_per_ui = pulse.integer("samples_per_ui");
  spectrum.ui_s = conditions.ui_s;
  spectrum.at_slicer = is_at_slicer(pulse, spectrum.samples_per_ui);

  const nlohmann::json& samples = pulse.value().at("samples_v");
  const auto size = static_cast<Eigen::Index>(samples.size());
  const Eigen::Index per_ui = spectrum.samples_per_ui;
  const Eigen::Index num_ui = (size + per_ui - 1) / per_ui;
  // Room behind the pulse, so that what the receiver's filters make of it does not come round.
  const Eigen::Index room = spectrum.at_slicer ? 0 : std::max<Eigen::Index>(num_ui, 128);
  const Eigen::Index padded = quick_transform_size(std::max(num_ui + room, conditions.min_num_ui));
  spectrum.num_samples = padded * per_ui;
  const double launch_v = mvppd_to_peak_v(pulse.number("at_swing_mvppd"));
  Eigen::VectorXd record = Eigen::VectorXd::Zero(spectrum.num_samples);
  for (Eigen::Index i = 0; i < size; ++i) {
    record[i] = samples[static_cast<std::size_t>(i)].get<double>() / launch_v;
  }
  if (record.maxCoeff() <= 0.0) {
    pulse.error("samples_v", "no sample is above 0; a pulse needs a positive peak");
  }
  spectrum.values = real_spectrum(record);
  return spectrum;
}

}  // namespace

std::optional<int> samples_per_ui_of(const Section& channel) {
  if (!channel.has("pulse")) return std::nullopt;
  return channel.at("pulse").integer("samples_per_ui");
}

std::optional<ReceivedSpectrum> read_channel(const Section& channel,
                                             const PulseConditions& conditions,
                                             [[maybe_unused]] InputFiles& files) {
  ReceivedSpectrum spectrum = read_pulse(channel.at("pulse"), conditions);
  if (channel.failed()) return std::nullopt;
  return spectrum;
}

}  // namespace tapwright
