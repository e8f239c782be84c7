// Link files: no crash, no exception, a value exactly when no note is an error.

#include <cstdint>
#include <cstdlib>

#include "tapwright/link/read_link.hpp"

extern "C" int LLVMFuzzerTestOneInput(const std::uint8_t* data, std::size_t size) {
  if (size > 20000) return 0;
  const std::string_view text(reinterpret_cast<const char*>(data), size);
  // No file of such a folder can be opened: the fuzzer looks at the reader, not at the disk.
  const auto link = tapwright::parse_link(text, "link.json", "/nonexistent");
  if (link.value.has_value() == tapwright::has_error(link.notes)) std::abort();
  if (link.notes.size() > 20) std::abort();
  return 0;
}
