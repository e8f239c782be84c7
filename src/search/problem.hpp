#pragma once
// What branch and bound sees of a link: knobs, and a concave function of them.

#include <cstdint>
#include <limits>
#include <span>
#include <vector>

#include "search/cutting_planes.hpp"
#include "tapwright/equalizer/device.hpp"
#include "tapwright/eye/placed_eye.hpp"

namespace tapwright::search {

constexpr double kImpossible = -std::numeric_limits<double>::infinity();

/// One variable: real in [lo, hi], or one of the values.
struct Knob {
  double lo = 0.0;
  double hi = 0.0;
  std::vector<double> values;  ///< ascending; empty = real
  bool inner = false;  ///< real in the bound, but Problem::exact chooses it by itself
};

/// A range of every knob: indices into Knob::values where there are any, real limits else.
struct Box {
  std::vector<int> first, last;
  std::vector<double> lo, hi;

  [[nodiscard]] static Box whole(const std::vector<Knob>& knobs);
  void set_codes(const std::vector<Knob>& knobs, std::size_t knob, int first_code, int last_code);
  /// Number of settings, inner knobs aside; -1 when one of the others is real.
  [[nodiscard]] double num_settings(const std::vector<Knob>& knobs) const;
};

/// A concave function of the knobs, cut by cut, and what single settings are worth. Heights are eye
/// heights in volts.
class Problem {
 public:
  virtual ~Problem() = default;
  [[nodiscard]] virtual const std::vector<Knob>& knobs() const = 0;
  /// The boxes that cover every setting; more than one where a box must not straddle zero.
  [[nodiscard]] virtual std::vector<Box> roots() const { return {Box::whole(knobs())}; }
  /// Rows that hold in the whole box, added after CuttingPlanes::clear().
  virtual void add_rows(const Box&, CuttingPlanes&) {}
  /// height(y) <= a y + b for every y of the box. Returns b.
  virtual double cut(const Box& box, std::span<const double> x, std::span<double> a) = 0;
  /// What a certificate must know about the last cut beside its x: the taps at which its crosstalk
  /// was taken. Empty when there is none.
  [[nodiscard]] virtual std::vector<double> side_point() const { return {}; }
  /// Adds the rows or sharpens the cuts that x still violates; false if there are none. `thorough`
  /// is asked for when everything cheap has converged.
  virtual bool separate(const Box&, std::span<const double>, CuttingPlanes&, bool /*thorough*/) {
    return false;
  }
  /// Height of one setting; kImpossible if the limits forbid it. Below `worth` any value below it
  /// will do, so that costly limits need no look.
  virtual double exact(std::span<const double> x, double worth) = 0;
  /// Second key among equal heights: smaller is better (math.md section 4: larger ratio).
  virtual double signal(std::span<const double> x) = 0;
  /// Single settings are worth what the cuts say: no rounding of other knobs, no sampling rule.
  [[nodiscard]] virtual bool exact_is_concave() const { return true; }
  /// exact() is the best that the inner knobs can do, so that a scored setting is closed.
  [[nodiscard]] virtual bool exact_is_all() const { return true; }
};

/// Where a proof of a bound comes from: the x at which the cuts were made, and their multipliers.
struct Multipliers {
  std::vector<std::vector<double>> points;
  std::vector<double> weights;
  std::vector<std::vector<double>> side_points;  ///< see Problem::side_point; one a point
  std::vector<std::vector<double>> row_points;  ///< where rows beyond the FIR's limits were made
  std::vector<double> row_weights;
};

/// The s_k of a bound, one a cursor of a cell's row.
struct Signs {
  std::vector<double> values;
};

/// A problem for each sampling instant of one swing and CTLE state. Keeps scratch space, so one a
/// thread.
class Cell : public Problem {
 public:
  virtual void move_to(Eigen::Index phase_samples) = 0;
  [[nodiscard]] virtual Place place() const = 0;
  /// The settings that x stands for.
  [[nodiscard]] virtual Settings settings(std::span<const double> x) = 0;
  /// No setting has a height above this; a few operations.
  [[nodiscard]] virtual double quick_bound() const = 0;

  /// Whether the signs of one instant bound the next one too, for the price of one cut.
  [[nodiscard]] virtual bool has_sign_bound() const { return false; }
  /// The signs that multipliers found at the present instant stand for.
  virtual void take_signs(const Multipliers&, Signs&) {}
  /// No setting of the box has a larger height at the present instant. `a` is scratch, (num knobs).
  virtual double sign_bound(const Box&, const Signs&, std::span<double> /*a*/) {
    return std::numeric_limits<double>::infinity();
  }
};

/// Heights are compared in steps of 1e-12 V, so that rounding doesn't decide between equals.
[[nodiscard]] std::int64_t height_key(double height_v);

}  // namespace tapwright::search
