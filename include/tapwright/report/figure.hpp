#pragma once
// A figure as data. The page draws it with its chart library, --figures writes it as SVG; both show
// the same numbers.

#include <Eigen/Core>
#include <optional>
#include <string>
#include <vector>

namespace tapwright {

struct Axis {
  std::string label;  ///< with its unit, such as "voltage (mV)"
  bool logarithmic = false;
  std::optional<double> min;
  std::optional<double> max;
};

/// Shape: x and y have equal size; a non-finite y is a gap.
struct Series {
  enum class Kind { kLine, kPoints, kStems };
  std::string name;
  Kind kind = Kind::kLine;
  Eigen::VectorXd x;
  Eigen::VectorXd y;
  int colour = 0;  ///< index in the palette, 0 ... 5
  bool dashed = false;
};

/// A straight line across the figure, such as a target.
struct Guide {
  std::string name;
  bool vertical = false;
  double at = 0.0;
};

/// A box that must stay clear, such as the target mask.
struct Box {
  std::string name;
  double x_min = 0.0, x_max = 0.0, y_min = 0.0, y_max = 0.0;
};

/// A field of probability density. Shape: log10_value is (num y, num x), x and y evenly spaced over
/// [x_min, x_max] and [y_min, y_max]; drawn from `floor` (paper) to the maximum (full colour).
struct Field {
  double x_min = 0.0, x_max = 0.0, y_min = 0.0, y_max = 0.0;
  Eigen::MatrixXd log10_value;
  double floor = 0.0;
  std::string name;
};

/// Horizontal bars with a name each; groups[g].y has one entry a bar.
struct Bars {
  std::vector<std::string> names;
  struct Group {
    std::string name;
    Eigen::VectorXd from;  ///< where each bar starts; empty = 0
    Eigen::VectorXd to;
    int colour = 0;
  };
  std::vector<Group> groups;
  bool overlaid = false;  ///< groups share one bar each, instead of standing beside each other
};

/// Either `series` (with guides, boxes, a field) or `bars`.
struct Figure {
  std::string id;       ///< file name and anchor: lower-case letters and hyphens
  std::string title;
  std::string summary;  ///< what it shows in a sentence or two, for those who can't see it
  Axis x;
  Axis y;  ///< not used with bars
  std::vector<Series> series;
  std::vector<Guide> guides;
  std::vector<Box> boxes;
  std::optional<Field> field;
  std::optional<Bars> bars;
};

/// Colours as #rrggbb for a light ground, told apart also with a colour-vision deficiency: the
/// palette of M. Okabe and K. Ito, "Color Universal Design" (2008), darkened where it would fall
/// under 3:1 against white.
[[nodiscard]] const std::vector<std::string>& palette();

/// Round tick values inside [min, max], about `wanted` of them: steps of 1, 2 or 5 times a power of
/// ten; powers of ten when logarithmic.
[[nodiscard]] std::vector<double> ticks(double min, double max, int wanted, bool logarithmic);

/// A whole SVG document: 760 by 420, own fonts by name only, no script.
[[nodiscard]] std::string svg_of(const Figure& figure);

}  // namespace tapwright
