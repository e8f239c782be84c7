#include "tapwright/link/register_writes.hpp"

#include <algorithm>

#include "tapwright/equalizer/knobs.hpp"

namespace tapwright {

RegisterWrites register_writes(const Link& link, const Settings& settings) {
  RegisterWrites out;
  const auto all = readings(link.device, settings);
  for (const RegisterField& field : link.registers) {
    const auto note = [&](const std::string& what) {
      out.notes.push_back(warning_at("", 0, "register field " + field.field + ": " + what));
    };
    const auto reading = std::find_if(
        all.begin(), all.end(), [&](const KnobReading& r) { return r.knob.name == field.knob; });
    if (reading == all.end() || !reading->code) {
      note("knob " + field.knob + (reading == all.end() ? " does not exist" : " has no codes"));
      continue;
    }
    long long value = *reading->code;
    if (!field.table.empty()) {
      const auto row = std::find_if(field.table.begin(), field.table.end(),
                                    [&](const auto& r) { return r[0] == value; });
      if (row == field.table.end()) {
        note("its table has no row for code " + std::to_string(value));
        continue;
      }
      value = (*row)[1];
    }
    const int width = field.high_bit - field.low_bit + 1;
    const long long span = width >= 62 ? 1LL << 62 : 1LL << width;
    if (value >= span || value < -span / 2) {
      note("value " + std::to_string(value) + " does not fit " + std::to_string(width) + " bits");
      continue;
    }
    const auto mask = static_cast<unsigned long long>(span - 1);
    out.writes.push_back({field.field, field.address, field.high_bit, field.low_bit,
                          static_cast<unsigned long long>(value) & mask});
  }
  return out;
}

}  // namespace tapwright
