#pragma once
// The only place that converts units. Inside the program numbers are base SI, ratios bare.

#include <cmath>

namespace tapwright {

constexpr double kSpeedOfLightMPerS = 299792458.0;

[[nodiscard]] inline double amplitude_db_to_ratio(double db) { return std::pow(10.0, db / 20.0); }
[[nodiscard]] inline double ratio_to_amplitude_db(double ratio) { return 20.0 * std::log10(ratio); }
[[nodiscard]] inline double power_db_to_ratio(double db) { return std::pow(10.0, db / 10.0); }
[[nodiscard]] inline double ratio_to_power_db(double ratio) { return 10.0 * std::log10(ratio); }
[[nodiscard]] constexpr double mv_to_v(double mv) { return mv * 1e-3; }
[[nodiscard]] constexpr double v_to_mv(double v) { return v * 1e3; }
[[nodiscard]] constexpr double ghz_to_hz(double ghz) { return ghz * 1e9; }
[[nodiscard]] constexpr double hz_to_ghz(double hz) { return hz * 1e-9; }
[[nodiscard]] constexpr double ps_to_s(double ps) { return ps * 1e-12; }
[[nodiscard]] constexpr double s_to_ps(double s) { return s * 1e12; }
[[nodiscard]] constexpr double ns_to_s(double ns) { return ns * 1e-9; }
[[nodiscard]] constexpr double pf_to_f(double pf) { return pf * 1e-12; }
[[nodiscard]] constexpr double nh_to_h(double nh) { return nh * 1e-9; }
[[nodiscard]] constexpr double mm_to_m(double mm) { return mm * 1e-3; }
/// Peak-to-peak differential millivolts to peak volts: +-A.
[[nodiscard]] constexpr double mvppd_to_peak_v(double mvppd) { return mvppd * 0.5e-3; }
[[nodiscard]] constexpr double peak_v_to_mvppd(double peak_v) { return peak_v * 2e3; }
/// One-sided density, V^2/GHz to V^2/Hz.
[[nodiscard]] constexpr double v2_per_ghz_to_v2_per_hz(double density) { return density * 1e-9; }

}  // namespace tapwright
