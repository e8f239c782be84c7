#pragma once
#include <nlohmann/json.hpp>
#include <vector>

#include "tapwright/study/sweep.hpp"

namespace tapwright {

/// {"fir:-1": [value, code], "phase": [value]}.
[[nodiscard]] nlohmann::ordered_json json_of(const std::vector<KnobValue>& knobs);
[[nodiscard]] nlohmann::ordered_json json_of(const SweepRecord& record);

}  // namespace tapwright
