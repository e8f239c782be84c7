#include <cstddef>
#include <cstdint>
#include <cstdlib>
#include <string_view>

#include "tapwright/channel/capture.hpp"

extern "C" int LLVMFuzzerTestOneInput(const std::uint8_t* data, std::size_t size) {
  using namespace tapwright;
  const std::string_view text(reinterpret_cast<const char*>(data), size);
  CaptureFormat without_time;
  without_time.dt_s = 1e-12;
  for (const CaptureFormat& format : {CaptureFormat{}, without_time}) {
    const Result<Capture> capture = parse_capture(text, "fuzz.csv", format);
    if (capture.value.has_value() == has_error(capture.notes)) std::abort();
    if (!capture) continue;
    // A grid near the record's own keeps the work in proportion to the input.
    const TimeGrid grid{8 * capture.value->dt_s, 8};
    const Result<PulseResponse> pulse = pulse_from_pulse(*capture.value, grid, 1.0, "fuzz.csv");
    const Result<PulseResponse> step = pulse_from_step(*capture.value, grid, 1.0, "fuzz.csv");
    if (pulse.value.has_value() == has_error(pulse.notes)) std::abort();
    if (step.value.has_value() == has_error(step.notes)) std::abort();
  }
  return 0;
}
