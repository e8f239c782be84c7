#pragma once
// A study: many links made from one.

#include <cstdint>
#include <optional>
#include <string>
#include <string_view>
#include <variant>
#include <vector>

#include "tapwright/study/link_source.hpp"

namespace tapwright {

/// One place on an axis.
struct AxisValue {
  std::string label;             ///< as tables show it, without the unit
  std::optional<double> number;  ///< where the axis has numbers
  std::vector<LinkChange> changes;
};

/// One thing that is varied. Long axes are kept as what makes them, not as a list.
class Axis {
 public:
  struct Range {
    std::string key;
    double from = 0.0;
    double step = 0.0;
    std::int64_t count = 0;
  };
  struct Draws {
    std::uint64_t seed = 1;
    std::int64_t count = 0;
    struct Spread {
      std::string key;
      double centre = 0.0;
      double deviation = 0.0;
    };
    std::vector<Spread> spread;
  };
  using List = std::vector<AxisValue>;

  Axis(std::string name, std::string unit, std::variant<List, Range, Draws> values)
      : name_(std::move(name)), unit_(std::move(unit)), values_(std::move(values)) {}

  [[nodiscard]] const std::string& name() const { return name_; }
  [[nodiscard]] const std::string& unit() const { return unit_; }
  [[nodiscard]] std::int64_t size() const;
  /// Errors: std::out_of_range unless 0 <= index < size().
  [[nodiscard]] AxisValue at(std::int64_t index) const;
  /// Whether the values are numbers in rising order.
  [[nodiscard]] bool has_rising_numbers() const;
  /// Whether the values stand for themselves, so that none lies between two others.
  [[nodiscard]] bool has_names() const;

 private:
  std::string name_;
  std::string unit_;
  std::variant<List, Range, Draws> values_;
};

/// Everything that a sweep needs.
///
/// Points are numbered from 0 with the switch axis slowest, then the others in the file's order,
/// the last fastest: so all points of one place on the switch axis follow each other.
struct Study {
  std::string name;
  std::string sha256;  ///< of the study file, the link and every file that either names
  LinkSource link;
  std::vector<Axis> axes;         ///< in the order of the file
  std::size_t switch_axis = 0;    ///< index in `axes`
  std::vector<std::string> knobs;  ///< names of the base link's knobs
  std::vector<InputFile> inputs;   ///< study file first
  std::vector<Diagnostic> warnings;

  [[nodiscard]] std::int64_t num_points() const;
  [[nodiscard]] std::int64_t points_per_switch_value() const;
  /// Place of a point on every axis, in the order of `axes`.
  [[nodiscard]] std::vector<std::int64_t> places(std::int64_t point) const;
  [[nodiscard]] std::int64_t point_at(const std::vector<std::int64_t>& places) const;
  [[nodiscard]] std::vector<LinkChange> changes(const std::vector<std::int64_t>& places) const;
};

constexpr std::int64_t kMostSweepPoints = 1'000'000'000'000;

/// Reads a study file and checks that every value of every axis gives a valid link (of a long axis
/// the ends and some between).
///
/// Errors: notes with file, line, path of the key, what was found and what is allowed.
[[nodiscard]] Result<Study> read_study(const std::string& path);
/// The same from text; relative names count from `base_directory`.
[[nodiscard]] Result<Study> parse_study(std::string_view text, const std::string& file_name,
                                        const std::string& base_directory);

/// The JSON Schema (draft 2020-12) of study files.
[[nodiscard]] std::string study_schema();

}  // namespace tapwright
