#include <cmath>
#include <nlohmann/json.hpp>

#include "report/figure_json.hpp"
#include "tapwright/base/text.hpp"

namespace tapwright {
namespace {

using Json = nlohmann::ordered_json;

Json number(double value) { return std::isfinite(value) ? Json(shortened(value)) : Json(nullptr); }

Json list(const Eigen::VectorXd& values) {
  Json out = Json::array();
  for (const double v : values) out.push_back(number(v));
  return out;
}

Json axis_json(const Axis& axis) {
  return {{"label", axis.label},
          {"logarithmic", axis.logarithmic},
          {"min", axis.min ? Json(*axis.min) : Json(nullptr)},
          {"max", axis.max ? Json(*axis.max) : Json(nullptr)}};
}

const char* name_of(Series::Kind kind) {
  switch (kind) {
    case Series::Kind::kLine: return "line";
    case Series::Kind::kPoints: return "points";
    case Series::Kind::kStems: break;
  }
  return "stems";
}

}  // namespace

double shortened(double value) { return parse_number(significant(value, 6)).value_or(value); }

Json json_object_of(const Figure& figure) {
  Json out = {{"id", figure.id}, {"title", figure.title}, {"x", axis_json(figure.x)},
              {"y", axis_json(figure.y)}};
  Json series = Json::array();
  for (const Series& s : figure.series) {
    series.push_back({{"name", s.name}, {"kind", name_of(s.kind)}, {"colour", s.colour},
                      {"dashed", s.dashed}, {"x", list(s.x)}, {"y", list(s.y)}});
  }
  out["series"] = series;
  Json guides = Json::array();
  for (const Guide& g : figure.guides) {
    guides.push_back({{"name", g.name}, {"vertical", g.vertical}, {"at", g.at}});
  }
  out["guides"] = guides;
  Json boxes = Json::array();
  for (const Box& b : figure.boxes) {
    boxes.push_back({{"name", b.name}, {"x_min", b.x_min}, {"x_max", b.x_max}, {"y_min", b.y_min},
                     {"y_max", b.y_max}});
  }
  out["boxes"] = boxes;
  out["field"] = nullptr;
  if (figure.field) {
    const Field& field = *figure.field;
    Json rows = Json::array();
    for (Eigen::Index r = 0; r < field.log10_value.rows(); ++r) {
      Json row = Json::array();
      for (Eigen::Index c = 0; c < field.log10_value.cols(); ++c) {
        const double v = std::max(field.log10_value(r, c), field.floor);
        row.push_back(std::round(10.0 * v) / 10.0);  // a tenth of a decade is finer than the shades
      }
      rows.push_back(std::move(row));
    }
    out["field"] = {{"name", field.name}, {"x_min", field.x_min}, {"x_max", field.x_max},
                    {"y_min", field.y_min}, {"y_max", field.y_max}, {"floor", field.floor},
                    {"top", field.log10_value.maxCoeff()}, {"rows", std::move(rows)}};
  }
  out["bars"] = nullptr;
  if (figure.bars) {
    Json groups = Json::array();
    for (const Bars::Group& g : figure.bars->groups) {
      groups.push_back({{"name", g.name}, {"colour", g.colour}, {"from", list(g.from)}, {"to", list(g.to)}});
    }
    out["bars"] = {{"names", figure.bars->names}, {"groups", groups}, {"overlaid", figure.bars->overlaid}};
  }
  return out;
}

}  // namespace tapwright
