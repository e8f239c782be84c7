#pragma once
// The answer as register writes.

#include <string>
#include <vector>

#include "tapwright/link/link.hpp"

namespace tapwright {

struct RegisterWrite {
  std::string field;
  unsigned long long address = 0;
  int high_bit = 0;
  int low_bit = 0;
  unsigned long long value = 0;  ///< field value, already in its (high_bit - low_bit + 1) bits
};

/// One write for every field of the link's register map, in the map's order. Negative codes are
/// two's complement in the width of the field.
///
/// Errors: a note for a knob without codes, a code that the field's table leaves out, or one that
///         does not fit its bits; that field is left out.
struct RegisterWrites {
  std::vector<RegisterWrite> writes;
  std::vector<Diagnostic> notes;
};
[[nodiscard]] RegisterWrites register_writes(const Link& link, const Settings& settings);

}  // namespace tapwright
