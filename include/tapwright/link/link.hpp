#pragma once
// A complete and valid link: everything the later rooms need, nothing they must check again.

#include <array>
#include <optional>
#include <string>
#include <vector>

#include "tapwright/base/diagnostic.hpp"
#include "tapwright/channel/ports.hpp"
#include "tapwright/channel/received_spectrum.hpp"
#include "tapwright/equalizer/device.hpp"

namespace tapwright {

enum class LineCodeKind { kNone, k8b10b, k64b66b, kManchester, kStateMachine };
enum class SamplingRule { kBest, kMuellerMuller, kEdge };
enum class ObjectiveKind { kWorstCase, kAtErrorRatio };

/// A user-given code: in state s, word w (probability p) sends `symbols` (+1 / -1 or levels) and
/// goes to `next`. All words of a machine are equally long.
struct StateMachine {
  struct Edge {
    int from = 0;
    int to = 0;
    std::vector<double> symbols;
    double probability = 0.0;  ///< given the state; the sum over a state's edges is 1
  };
  int num_states = 0;
  std::vector<Edge> edges;
};

struct LineCodeSpec {
  LineCodeKind kind = LineCodeKind::kNone;
  StateMachine machine;  ///< for kStateMachine only
};

struct Signal {
  double symbol_rate_bd = 0.0;
  int levels = 2;
  double level_mismatch = 1.0;  ///< R_LM, PAM-4 only
  LineCodeSpec line_code;
  std::optional<std::array<int, 2>> span_ui;  ///< as given; the chosen one stands in Link::span_ui
  [[nodiscard]] double ui_s() const { return 1.0 / symbol_rate_bd; }
};

/// Units: UI. Source: IEEE 802.3 Annex 93A for the dual-Dirac reading (peak, not peak to peak).
struct Jitter {
  double random_ui = 0.0;  ///< RMS, independent from symbol to symbol
  double dual_dirac_peak_ui = 0.0;
  double common_random_ui = 0.0;  ///< RMS, common to all symbols (receiver clock)
};

struct Target {
  double error_ratio = 1e-12;
  double eye_height_v = 0.0;
  double eye_width_ui = 0.0;
};

struct Aggressor {
  std::string name;
  bool near_end = false;
  ReceivedSpectrum spectrum;
  std::optional<double> amplitude_v;         ///< none = the victim's swing
  std::optional<Eigen::VectorXd> fixed_fir;  ///< none = the victim's taps
  double ui_ratio = 1.0;                     ///< aggressor UI / victim UI
};

/// One field of a register map.
struct RegisterField {
  std::string field;
  unsigned long long address = 0;
  int high_bit = 0;
  int low_bit = 0;
  std::string knob;                             ///< "swing", "fir:-1", "ctle", "gain", "dfe:1"
  std::vector<std::array<long long, 2>> table;  ///< code -> field value; empty = the code itself
};

struct InputFile {
  std::string path;
  std::string sha256;
  /// Of a Touchstone file on the way from driver to receiver: the ports that it was read between.
  std::optional<PortMap> ports = std::nullopt;
};

struct Link {
  std::string name;
  Signal signal;
  int samples_per_ui = 32;
  ReceivedSpectrum channel;
  std::vector<Aggressor> crosstalk;
  Device device;
  Jitter jitter;
  Target target;
  ObjectiveKind objective = ObjectiveKind::kWorstCase;
  SamplingRule sampling = SamplingRule::kBest;
  double mask_width_ui = 0.0;
  /// AC coupling; part of the pulses where 2 pi f T >= 1e-3. Of a lower corner only the wander counts.
  std::optional<double> high_pass_hz;
  std::vector<RegisterField> registers;
  std::vector<InputFile> inputs;
  std::vector<Diagnostic> warnings;  ///< what was assumed or looks odd in the input
};

}  // namespace tapwright
