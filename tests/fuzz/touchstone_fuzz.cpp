// Any bytes at all give either a network or an error, and a network survives a round trip.
#include <cstddef>
#include <cstdint>
#include <cstdlib>
#include <string_view>

#include "tapwright/channel/touchstone.hpp"

extern "C" int LLVMFuzzerTestOneInput(const std::uint8_t* data, std::size_t size) {
  const std::string_view text(reinterpret_cast<const char*>(data), size);
  for (const char* name : {"f.s1p", "f.s2p", "f.s4p", "f.txt"}) {
    const auto result = tapwright::parse_touchstone(text, name);
    if (result.value.has_value() == tapwright::has_error(result.notes)) std::abort();
    if (!result) continue;
    const auto& network = *result.value;
    const Eigen::Index n = network.num_ports();
    if (network.num_points() < 1 || network.values.rows() != n * n ||
        network.values.cols() != network.num_points() || !network.values.allFinite()) {
      std::abort();
    }
    const auto again = tapwright::parse_touchstone(tapwright::write_touchstone(network), name,
                                                   network.num_ports());
    if (!again || again.value->values != network.values ||
        again.value->frequencies_hz != network.frequencies_hz) {
      std::abort();
    }
  }
  return 0;
}
