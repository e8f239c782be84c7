#pragma once
#include <nlohmann/json.hpp>

#include "tapwright/eye/eye_model.hpp"
#include "tapwright/search/solution.hpp"

namespace tapwright {

/// The object that stands under "settings" in a solution file.
[[nodiscard]] nlohmann::ordered_json settings_json(const EyeModel& model, const Settings& settings);
/// "proven", "bounded", "exhausted" or "none".
[[nodiscard]] const char* name_of(Proof::Kind kind);
/// A cell of CSV, quoted when it has to be.
[[nodiscard]] std::string csv_cell(const std::string& text);

}  // namespace tapwright
