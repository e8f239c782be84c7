#include "tapwright/study/study_file.hpp"

#include <glob.h>

#include <algorithm>
#include <cmath>
#include <filesystem>
#include <functional>
#include <set>
#include <stdexcept>

#include "base/json_document.hpp"
#include "study/study_schema_text.hpp"
#include "tapwright/base/digest.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/channel/text_file.hpp"
#include "tapwright/equalizer/knobs.hpp"
#include "tapwright/study/normal_draws.hpp"

namespace tapwright {
namespace {

using nlohmann::json;
namespace fs = std::filesystem;

constexpr std::int64_t kMostOnAnAxis = 1'000'000'000;
constexpr double kMostDeviations = 3.0;

const json& schema() {
  static const json kSchema = json::parse(kStudySchemaText);
  return kSchema;
}

/// Decimal steps as people write them: 0.1 + 2 * 0.1 is 0.3.
double on_range(const Axis::Range& range, std::int64_t index) {
  const double value = range.from + static_cast<double>(index) * range.step;
  return parse_number(significant(value, 12)).value_or(value);
}

std::string label_of(const json& value) {
  if (value.is_string()) return value.get<std::string>();
  if (value.is_number()) return exact(value.get<double>());
  return value.dump();
}

std::vector<LinkChange> changes_of(const json& object) {
  std::vector<LinkChange> changes;
  for (const auto& [path, value] : object.items()) changes.push_back({path, value.dump()});
  return changes;
}

/// Reads one document into a study and gathers what is wrong with it.
class Reader {
 public:
  Reader(JsonDocument document, std::string base_directory)
      : document_(std::move(document)), base_(std::move(base_directory)) {}

  Result<Study> read(std::string_view text) {
    const json& root = document_.root;
    Study study;
    study.name = root.at("name").get<std::string>();
    study.inputs.push_back({document_.file, sha256_hex(text)});
    if (!read_base(study)) return {std::nullopt, std::move(notes_)};
    std::set<std::string> names;
    for (std::size_t i = 0; i < root.at("axes").size(); ++i) {
      const std::string path = "axes[" + std::to_string(i) + "]";
      const json& axis = root["axes"][i];
      const auto name = axis.at("name").get<std::string>();
      if (!names.insert(name).second) {
        error(path + ".name", shown_text(name) + " names two axes");
      }
      read_axis(study, axis, path);
    }
    if (has_error(notes_)) return {std::nullopt, std::move(notes_)};
    check_size(study);
    choose_switch_axis(study);
    if (has_error(notes_)) return {std::nullopt, std::move(notes_)};
    check_values(study);
    if (has_error(notes_)) return {std::nullopt, std::move(notes_)};
    std::string digests;
    for (const InputFile& input : study.inputs) digests += input.sha256;
    study.sha256 = sha256_hex(digests);
    study.warnings = notes_;
    return {std::move(study), std::move(notes_)};
  }

 private:
  using Add = std::function<void(std::variant<Axis::List, Axis::Range, Axis::Draws>)>;

  void error(const std::string& path, const std::string& message) {
    if (notes_.size() < kMaxNotes) notes_.push_back(document_.error(path, message));
  }

  /// Notes about the link, told as notes about the place in the study that led to them.
  void adopt(const std::string& path, const std::vector<Diagnostic>& others) {
    for (const Diagnostic& note : others) {
      if (note.severity == Diagnostic::Severity::kError) error(path, to_string(note));
    }
  }

  bool read_base(Study& study) {
    const auto name = document_.root.at("link").get<std::string>();
    const std::string path = (fs::path(base_) / name).string();
    const Result<TextFile> file = read_text_file(path, JsonLimits{}.max_bytes);
    if (!file) {
      for (const Diagnostic& note : file.notes) error("link", to_string(note));
      return false;
    }
    study.link = {file.value->text, path, fs::path(path).parent_path().string(),
                  changes_of(document_.root.at("changes")), std::make_shared<LinkCache>()};
    const Result<Link> link = read_link(study.link);
    if (!link) {
      adopt(study.link.changes.empty() ? "link" : "changes", link.notes);
      return false;
    }
    for (const Knob& knob : knobs_of(link.value->device)) study.knobs.push_back(knob.name);
    study.inputs.insert(study.inputs.end(), link.value->inputs.begin(), link.value->inputs.end());
    const auto numbers =
        numbers_in_link(study.link.text, path, study.link.base_directory, study.link.changes);
    if (numbers) numbers_ = *numbers.value;
    return true;
  }

  const LinkNumber* number_at(const std::string& key) const {
    const auto found = std::find_if(numbers_.begin(), numbers_.end(),
                                    [&](const LinkNumber& n) { return n.path == key; });
    return found == numbers_.end() ? nullptr : &*found;
  }

  void read_axis(Study& study, const json& axis, const std::string& path) {
    const auto name = axis.at("name").get<std::string>();
    const std::string key = axis.value("key", "");
    const LinkNumber* known = number_at(key);
    const std::string unit = axis.value("unit", known != nullptr ? known->unit : "");
    const Add add = [&](std::variant<Axis::List, Axis::Range, Axis::Draws> values) {
      study.axes.emplace_back(name, unit, std::move(values));
    };
    if (axis.contains("values")) {
      Axis::List list;
      for (const json& value : axis["values"]) {
        AxisValue one{label_of(value), {}, {{key, value.dump()}}};
        if (value.is_number()) one.number = value.get<double>();
        list.push_back(std::move(one));
      }
      return add(std::move(list));
    }
    if (axis.contains("from")) return read_range(axis, path, key, add);
    if (axis.contains("files")) return read_files(study, axis, path, key, add);
    if (axis.contains("corners")) {
      Axis::List list;
      std::set<std::string> seen;
      for (std::size_t i = 0; i < axis["corners"].size(); ++i) {
        const json& corner = axis["corners"][i];
        const auto label = corner.at("name").get<std::string>();
        if (!seen.insert(label).second) {
          error(path + ".corners[" + std::to_string(i) + "].name",
                shown_text(label) + " names two corners");
        }
        list.push_back({label, {}, changes_of(corner.at("changes"))});
      }
      return add(std::move(list));
    }
    read_draws(axis, path, add);
  }

  void read_range(const json& axis, const std::string& path, const std::string& key,
                  const Add& add) {
    const auto from = axis["from"].get<double>();
    const auto to = axis["to"].get<double>();
    const auto step = axis["step"].get<double>();
    if (to < from) {
      return error(path + ".to", exact(to) + " lies below from, " + exact(from));
    }
    // A whole number of steps may miss the end by rounding.
    const double steps = std::floor((to - from) / step + 1e-9);
    if (steps >= static_cast<double>(kMostOnAnAxis)) {
      return error(path + ".step", "makes " + significant(steps + 1.0, 3) + " values; allowed: " +
                                       std::to_string(kMostOnAnAxis));
    }
    add(Axis::Range{key, from, step, static_cast<std::int64_t>(steps) + 1});
  }

  void read_files(Study& study, const json& axis, const std::string& path, const std::string& key,
                  const Add& add) {
    const auto pattern = axis["files"].get<std::string>();
    glob_t found{};
    const int failed =
        ::glob((fs::path(base_) / pattern).c_str(), GLOB_NOSORT | GLOB_ERR, nullptr, &found);
    std::vector<std::string> files(found.gl_pathv, found.gl_pathv + found.gl_pathc);
    ::globfree(&found);
    if (failed != 0 || files.empty()) {
      return error(path + ".files", shown_text(pattern) + " matches no file in " +
                                        (base_.empty() ? "the working directory" : base_));
    }
    std::sort(files.begin(), files.end());
    Axis::List list;
    for (const std::string& file : files) {
      const Result<TextFile> text = read_text_file(file);
      if (!text) {
        for (const Diagnostic& note : text.notes) error(path + ".files", to_string(note));
        continue;
      }
      study.inputs.push_back({file, text.value->sha256});
      // The link counts names from its own folder.
      const fs::path from_link =
          fs::path(file).is_absolute()
              ? fs::path(file)
              : fs::path(file).lexically_proximate(
                    fs::path(study.link.base_directory.empty() ? "." : study.link.base_directory));
      list.push_back({fs::path(file).filename().string(), {},
                      {{key, json(from_link.string()).dump()}}});
    }
    add(std::move(list));
  }

  void read_draws(const json& axis, const std::string& path, const Add& add) {
    Axis::Draws draws;
    draws.count = static_cast<std::int64_t>(axis["draws"].get<double>());
    draws.seed = static_cast<std::uint64_t>(axis.value("seed", 1.0));
    for (const auto& [key, value] : axis["spread"].items()) {
      const std::string place = path + ".spread";
      const LinkNumber* number = number_at(key);
      if (number == nullptr) {
        std::vector<std::string> known;
        for (const LinkNumber& one : numbers_) known.push_back(one.path);
        const auto near = nearest_word(key, known);
        error(place, shown_text(key) + " is no number of the link that can be drawn" +
                         (near ? "; did you mean " + *near + "?" : ""));
        continue;
      }
      if (!value.is_number() || value < 0) {
        error(place, shown_text(key) + ": found " + shown_value(value) +
                         ", wanted a standard deviation, at least 0");
        continue;
      }
      draws.spread.push_back({key, number->value, value.get<double>()});
    }
    add(std::move(draws));
  }

  void check_size(const Study& study) {
    double product = 1.0;
    for (const Axis& axis : study.axes) product *= static_cast<double>(axis.size());
    if (product > static_cast<double>(kMostSweepPoints)) {
      error("axes", "make " + significant(product, 3) + " points; allowed: " +
                        significant(static_cast<double>(kMostSweepPoints), 3));
    }
  }

  void choose_switch_axis(Study& study) {
    if (!document_.root.contains("switch_along")) {
      for (std::size_t i = 0; i < study.axes.size(); ++i) {
        if (!study.axes[i].has_rising_numbers()) continue;
        study.switch_axis = i;
        return;
      }
      return;
    }
    const auto wanted = document_.root["switch_along"].get<std::string>();
    std::vector<std::string> names;
    for (std::size_t i = 0; i < study.axes.size(); ++i) {
      if (study.axes[i].name() == wanted) {
        study.switch_axis = i;
        return;
      }
      names.push_back(study.axes[i].name());
    }
    const auto near = nearest_word(wanted, names);
    error("switch_along", shown_text(wanted) + " is no axis" +
                              (near ? "; did you mean " + shown_text(*near) + "?" : ""));
  }

  std::string place_of(std::size_t axis, std::int64_t index) const {
    const std::string path = "axes[" + std::to_string(axis) + "]";
    const json& written = document_.root["axes"][axis];
    for (const char* list : {"values", "corners"}) {
      if (written.contains(list)) return path + "." + list + "[" + std::to_string(index) + "]";
    }
    return path;
  }

  /// Every value of every axis with the others at their first: a slip in a key or value shows now
  /// and not hours later.
  void check_values(const Study& study) {
    const auto link_with = [&](const std::vector<LinkChange>& changes) {
      return read_link(study.link, changes);
    };
    const std::size_t num_axes = study.axes.size();
    std::vector<std::int64_t> places(num_axes, 0);
    if (const Result<Link> first = link_with(study.changes(places)); !first) {
      for (std::size_t a = 0; a < num_axes; ++a) {
        const Result<Link> alone = link_with(study.axes[a].at(0).changes);
        if (!alone) return adopt(place_of(a, 0), alone.notes);
      }
      return adopt("axes", first.notes);
    }
    constexpr std::int64_t kMostChecked = 64;
    for (std::size_t a = 0; a < num_axes; ++a) {
      const std::int64_t size = study.axes[a].size();
      const std::int64_t num = std::min(size, kMostChecked);
      for (std::int64_t i = 1; i < num; ++i) {
        places[a] = i * (size - 1) / (num - 1);
        const Result<Link> link = link_with(study.changes(places));
        if (link) continue;
        adopt(place_of(a, places[a]), link.notes);
        break;
      }
      places[a] = 0;
    }
  }

  JsonDocument document_;
  std::string base_;
  std::vector<LinkNumber> numbers_;
  std::vector<Diagnostic> notes_;
};

}  // namespace

std::int64_t Axis::size() const {
  if (const auto* list = std::get_if<List>(&values_)) return static_cast<std::int64_t>(list->size());
  if (const auto* range = std::get_if<Range>(&values_)) return range->count;
  return std::get<Draws>(values_).count;
}

AxisValue Axis::at(std::int64_t index) const {
  if (index < 0 || index >= size()) {
    throw std::out_of_range("Axis::at: index " + std::to_string(index) + " of " +
                            std::to_string(size()));
  }
  if (const auto* list = std::get_if<List>(&values_)) {
    return (*list)[static_cast<std::size_t>(index)];
  }
  if (const auto* range = std::get_if<Range>(&values_)) {
    const double value = on_range(*range, index);
    return {exact(value), value, {{range->key, exact(value)}}};
  }
  const Draws& draws = std::get<Draws>(values_);
  NormalDraws normal(draws.seed, static_cast<std::uint64_t>(index));
  AxisValue value{"draw " + std::to_string(index + 1), {}, {}};
  for (const Draws::Spread& s : draws.spread) {
    value.changes.push_back(
        {s.key, exact(s.centre + s.deviation * normal.next_within(kMostDeviations))});
  }
  return value;
}

bool Axis::has_rising_numbers() const {
  if (std::holds_alternative<Range>(values_)) return true;
  const auto* list = std::get_if<List>(&values_);
  if (list == nullptr) return false;
  for (std::size_t i = 0; i < list->size(); ++i) {
    if (!(*list)[i].number) return false;
    if (i > 0 && !(*(*list)[i].number > *(*list)[i - 1].number)) return false;
  }
  return true;
}

bool Axis::has_names() const {
  return std::holds_alternative<List>(values_) && !has_rising_numbers();
}

std::int64_t Study::num_points() const {
  std::int64_t product = 1;
  for (const Axis& axis : axes) product *= axis.size();
  return product;
}

std::int64_t Study::points_per_switch_value() const {
  return num_points() / axes[switch_axis].size();
}

std::vector<std::int64_t> Study::places(std::int64_t point) const {
  std::vector<std::int64_t> out(axes.size(), 0);
  for (std::size_t i = axes.size(); i-- > 0;) {
    if (i == switch_axis) continue;
    out[i] = point % axes[i].size();
    point /= axes[i].size();
  }
  out[switch_axis] = point;
  return out;
}

std::int64_t Study::point_at(const std::vector<std::int64_t>& places) const {
  std::int64_t point = places[switch_axis];
  for (std::size_t i = 0; i < axes.size(); ++i) {
    if (i != switch_axis) point = point * axes[i].size() + places[i];
  }
  return point;
}

std::vector<LinkChange> Study::changes(const std::vector<std::int64_t>& places) const {
  std::vector<LinkChange> all;
  for (std::size_t i = 0; i < axes.size(); ++i) {
    for (LinkChange& change : axes[i].at(places[i]).changes) all.push_back(std::move(change));
  }
  return all;
}

Result<Study> parse_study(std::string_view text, const std::string& file_name,
                          const std::string& base_directory) {
  Result<JsonDocument> document = parse_json(text, file_name);
  if (!document) return {std::nullopt, std::move(document.notes)};
  std::vector<Diagnostic> notes = check_against_schema(*document.value, schema());
  if (has_error(notes)) return {std::nullopt, std::move(notes)};
  return Reader(std::move(*document.value), base_directory).read(text);
}

Result<Study> read_study(const std::string& path) {
  Result<TextFile> file = read_text_file(path, JsonLimits{}.max_bytes);
  if (!file) return {std::nullopt, std::move(file.notes)};
  return parse_study(file.value->text, path, fs::path(path).parent_path().string());
}

std::string study_schema() { return std::string(kStudySchemaText); }

}  // namespace tapwright
