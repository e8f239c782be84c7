// Any bytes at all give either lanes whose codes the device has, or an error.
#include <cstddef>
#include <cstdint>
#include <cstdlib>
#include <string_view>

#include "tapwright/link/read_back.hpp"
#include "tapwright/link/read_link.hpp"
#include "tapwright/study/eye_scan.hpp"

extern "C" int LLVMFuzzerTestOneInput(const std::uint8_t* data, std::size_t size) {
  static const tapwright::Link kLink =
      *tapwright::parse_link(tapwright::example_link(), "example.json", "").value;
  const std::string_view text(reinterpret_cast<const char*>(data), size);
  const auto lanes = tapwright::parse_read_back(text, "table.csv", kLink);
  if (lanes.value.has_value() == tapwright::has_error(lanes.notes)) std::abort();
  if (lanes) {
    for (const tapwright::ReadBackLane& lane : *lanes.value) {
      if (lane.link.empty() && !tapwright::settings_of(lane, kLink, "table.csv")) std::abort();
    }
  }
  const auto scans = tapwright::parse_eye_scans(text, "table.csv");
  if (scans.value.has_value() == tapwright::has_error(scans.notes)) std::abort();
  return 0;
}
