#pragma once
#include <string_view>

namespace tapwright {

extern const std::string_view kPageStyle;
extern const std::string_view kPageScript;
extern const std::string_view kTrialScript;
extern const std::string_view kChartLibrary;  ///< Chart.js 3, MIT licence, its notice inside

}  // namespace tapwright
