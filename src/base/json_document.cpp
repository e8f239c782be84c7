#include "base/json_document.hpp"

#include <algorithm>
#include <cmath>
#include <optional>
#include <stdexcept>

#include "tapwright/base/text.hpp"

namespace tapwright {
namespace {

using nlohmann::json;

std::string member_path(const std::string& path, const std::string& key) {
  return path.empty() ? key : path + "." + key;
}

std::string element_path(const std::string& path, std::size_t index) {
  return path + "[" + std::to_string(index) + "]";
}

std::string at_path(std::string_view path, const std::string& message) {
  return path.empty() ? message : std::string(path) + ": " + message;
}

/// How far the parser has read, and on which line that is.
struct Progress {
  const char* counted = nullptr;
  const char* consumed = nullptr;
  int line_at_counted = 1;

  /// Line of the character read last. A number is known to end only once the character behind it
  /// is read; when that is a line feed, its own line is still the number's.
  int line() {
    const char* last = consumed == nullptr || consumed == counted ? counted : consumed - 1;
    line_at_counted += static_cast<int>(std::count(counted, last, '\n'));
    counted = last;
    return line_at_counted;
  }
};

/// Hands out the characters one by one and notes how many were taken.
class CountingIterator {
 public:
  using iterator_category = std::input_iterator_tag;
  using value_type = char;
  using difference_type = std::ptrdiff_t;
  using pointer = const char*;
  using reference = const char&;

  CountingIterator(const char* at, Progress* progress) : at_(at), progress_(progress) {}
  reference operator*() const { return *at_; }
  CountingIterator& operator++() {
    progress_->consumed = ++at_;
    return *this;
  }
  CountingIterator operator++(int) {
    CountingIterator before = *this;
    ++*this;
    return before;
  }
  bool operator==(const CountingIterator& other) const { return at_ == other.at_; }
  bool operator!=(const CountingIterator& other) const { return at_ != other.at_; }

 private:
  const char* at_;
  Progress* progress_;
};

/// Builds the document from the parser's events.
class Builder : public nlohmann::json_sax<json> {
 public:
  Builder(JsonDocument& document, std::vector<Diagnostic>& notes, Progress& progress, int max_depth)
      : document_(document), notes_(notes), progress_(progress), max_depth_(max_depth) {}

  bool null() override { return add(nullptr); }
  bool boolean(bool value) override { return add(value); }
  bool number_integer(number_integer_t value) override { return add(value); }
  bool number_unsigned(number_unsigned_t value) override { return add(value); }
  bool number_float(number_float_t value, const string_t&) override { return add(value); }
  bool string(string_t& value) override { return add(std::move(value)); }
  bool binary(binary_t&) override { return false; }
  bool start_object(std::size_t) override { return open(json::object()); }
  bool start_array(std::size_t) override { return open(json::array()); }
  bool end_object() override { return close(); }
  bool end_array() override { return close(); }

  bool key(string_t& value) override {
    Level& top = levels_.back();
    const std::string path = member_path(top.path, value);
    const int line = progress_.line();
    if (top.value->contains(value)) {
      const int first = document_.place(path).line;
      notes_.push_back(error_at(
          document_.file, line,
          at_path(top.path, "key " + shown_text(value) + " is given twice, first on line " +
                                std::to_string(first))));
      if (notes_.size() >= kMaxNotes) return false;
    } else {
      document_.places.emplace(path, JsonPlace{document_.file, line});
    }
    top.key = std::move(value);
    return true;
  }

  bool parse_error(std::size_t, const std::string&,
                   const nlohmann::json::exception& problem) override {
    // "[json.exception.parse_error.101] parse error at line 3, column 5: syntax error while ..."
    std::string text = problem.what();
    if (const auto at = text.find("] "); at != std::string::npos) text.erase(0, at + 2);
    if (text.starts_with("parse error at ")) {
      if (const auto at = text.find(": "); at != std::string::npos) text.erase(0, at + 2);
    }
    for (char& c : text) {
      if (static_cast<unsigned char>(c) < 0x20 || static_cast<unsigned char>(c) > 0x7E) c = '?';
    }
    notes_.push_back(error_at(document_.file, progress_.line(), "not JSON: " + text));
    return false;
  }

 private:
  struct Level {
    json* value = nullptr;
    std::string path;
    std::string key;
  };

  std::string path_of_next() const {
    if (levels_.empty()) return "";
    const Level& top = levels_.back();
    return top.value->is_object() ? member_path(top.path, top.key)
                                  : element_path(top.path, top.value->size());
  }

  json* insert(json&& value) {
    if (levels_.empty()) {
      document_.root = std::move(value);
      return &document_.root;
    }
    Level& top = levels_.back();
    if (top.value->is_object()) return &((*top.value)[top.key] = std::move(value));
    top.value->push_back(std::move(value));
    return &top.value->back();
  }

  bool add(json&& value) {
    insert(std::move(value));
    return true;
  }

  bool open(json&& value) {
    if (levels_.size() >= static_cast<std::size_t>(max_depth_)) {
      notes_.push_back(error_at(
          document_.file, progress_.line(),
          "lists and objects are nested deeper than " + std::to_string(max_depth_) + " levels"));
      return false;
    }
    std::string path = path_of_next();
    if (!levels_.empty() && levels_.back().value->is_array()) {
      document_.places.emplace(path, JsonPlace{document_.file, progress_.line()});
    }
    json* added = insert(std::move(value));
    levels_.push_back({added, std::move(path), {}});
    return true;
  }

  bool close() {
    levels_.pop_back();
    return true;
  }

  JsonDocument& document_;
  std::vector<Diagnostic>& notes_;
  Progress& progress_;
  int max_depth_;
  std::vector<Level> levels_;
};

std::string listed(const std::vector<std::string>& words, const char* last_link) {
  std::string out;
  for (std::size_t i = 0; i < words.size(); ++i) {
    if (i > 0) out += i + 1 == words.size() ? std::string(" ") + last_link + " " : ", ";
    out += words[i];
  }
  return out;
}

std::string kind_of(const json& value) {
  switch (value.type()) {
    case json::value_t::null:
      return "null";
    case json::value_t::boolean:
      return "boolean";
    case json::value_t::string:
      return "string";
    case json::value_t::array:
      return "array";
    case json::value_t::object:
      return "object";
    default:
      return "number";
  }
}

bool is_whole(const json& value) {
  if (value.is_number_integer()) return true;
  if (!value.is_number_float()) return false;
  const auto number = value.get<double>();
  return std::abs(number) < 9e15 && number == std::floor(number);
}

bool has_type(const json& value, const std::string& type) {
  return type == "integer" ? is_whole(value) : kind_of(value) == type;
}

std::string type_in_words(const std::string& type) {
  if (type == "integer") return "a whole number";
  if (type == "array") return "a list";
  if (type == "object") return "an object";
  if (type == "string") return "a text";
  if (type == "boolean") return "true or false";
  return type == "null" ? "null" : "a " + type;
}

/// "above 0 and at most 1 UI".
std::string range_in_words(const json& schema) {
  std::vector<std::string> parts;
  const auto add = [&](const char* keyword, const char* words) {
    if (schema.contains(keyword)) parts.push_back(words + exact(schema[keyword].get<double>()));
  };
  add("minimum", "at least ");
  add("exclusiveMinimum", "above ");
  add("maximum", "at most ");
  add("exclusiveMaximum", "below ");
  std::string out = listed(parts, "and");
  if (schema.contains("unit")) out += " " + schema["unit"].get<std::string>();
  return out;
}

class Checker {
 public:
  Checker(JsonDocument& document, const json& schema, const JsonVisitor& visit)
      : document_(document), schema_(schema), visit_(visit) {}

  void check(json& value, const json& given_schema, const std::string& path) {
    const json& schema = resolved(given_schema);
    know_keywords(schema);
    if (!type_fits(value, schema)) {
      std::vector<std::string> words;
      for (const std::string& type : types(schema)) words.push_back(type_in_words(type));
      return error(path, shown_value(value) + " is not " + listed(words, "or"));
    }
    if (schema.contains("const") && value != schema["const"]) {
      return error(path, shown_value(value) + " must be " + shown_value(schema["const"]));
    }
    if (schema.contains("enum") && !check_enum(value, schema, path)) return;
    if (value.is_number()) check_range(value, schema, path);
    if (value.is_string()) check_length(value, schema, path);
    if (value.is_array()) check_list(value, schema, path);
    if (value.is_object()) check_object(value, schema, path);
    if (schema.contains("oneOf")) check_one_of(value, schema, path);
    const bool is_choice = schema.contains("oneOf") && !is_groups(schema["oneOf"]);
    if (visit_ && !is_choice) visit_(path, value, schema);
  }

  std::vector<Diagnostic> take() {
    std::stable_sort(notes_.begin(), notes_.end(),
                     [](const Diagnostic& a, const Diagnostic& b) { return a.line < b.line; });
    if (notes_.size() > kMaxNotes) notes_.resize(kMaxNotes);
    return std::move(notes_);
  }

  const json& resolved(const json& schema) const {
    if (!schema.contains("$ref")) return schema;
    return resolved(schema_.at(json::json_pointer(schema["$ref"].get<std::string>().substr(1))));
  }

 private:
  void error(const std::string& path, const std::string& message) {
    // Notes are put into the file's order before the cut; this keeps their number bounded.
    if (notes_.size() < 50 * kMaxNotes) notes_.push_back(document_.error(path, message));
  }

  static void know_keywords(const json& schema) {
    static const std::vector<std::string> kKnown = {"$comment",
                                                    "$defs",
                                                    "$id",
                                                    "$schema",
                                                    "additionalProperties",
                                                    "const",
                                                    "default",
                                                    "dependentRequired",
                                                    "description",
                                                    "enum",
                                                    "examples",
                                                    "exclusiveMaximum",
                                                    "exclusiveMinimum",
                                                    "items",
                                                    "maxItems",
                                                    "maxLength",
                                                    "maxProperties",
                                                    "maximum",
                                                    "minItems",
                                                    "minLength",
                                                    "minProperties",
                                                    "minimum",
                                                    "oneOf",
                                                    "prefixItems",
                                                    "properties",
                                                    "required",
                                                    "title",
                                                    "type",
                                                    "unit",
                                                    "vary",
                                                    "vary_step"};
    for (const auto& [keyword, unused] : schema.items()) {
      if (!std::binary_search(kKnown.begin(), kKnown.end(), keyword)) {
        throw std::invalid_argument("schema keyword \"" + keyword + "\" is not understood");
      }
    }
  }

  static std::vector<std::string> types(const json& schema) {
    if (!schema.contains("type")) return {};
    if (schema["type"].is_string()) return {schema["type"].get<std::string>()};
    return schema["type"].get<std::vector<std::string>>();
  }

  static bool type_fits(const json& value, const json& schema) {
    const std::vector<std::string> allowed = types(schema);
    return allowed.empty() || std::any_of(allowed.begin(), allowed.end(),
                                          [&](const auto& type) { return has_type(value, type); });
  }

  bool check_enum(const json& value, const json& schema, const std::string& path) {
    const json& allowed = schema["enum"];
    if (std::find(allowed.begin(), allowed.end(), value) != allowed.end()) return true;
    std::vector<std::string> shown;
    std::vector<std::string> texts;
    for (const json& one : allowed) {
      shown.push_back(shown_value(one));
      if (one.is_string()) texts.push_back(one.get<std::string>());
    }
    std::string message = shown_value(value) + " is not one of " + listed(shown, "or");
    if (value.is_string()) {
      if (const auto near = nearest_word(lowercase(value.get<std::string>()), texts)) {
        message += "; did you mean " + shown_text(*near) + "?";
      }
    }
    error(path, message);
    return false;
  }

  void check_range(const json& value, const json& schema, const std::string& path) {
    const auto number = value.get<double>();
    const auto limit = [&](const char* keyword) { return schema[keyword].get<double>(); };
    if ((schema.contains("minimum") && number < limit("minimum")) ||
        (schema.contains("maximum") && number > limit("maximum")) ||
        (schema.contains("exclusiveMinimum") && number <= limit("exclusiveMinimum")) ||
        (schema.contains("exclusiveMaximum") && number >= limit("exclusiveMaximum"))) {
      error(path, shown_value(value) + " is out of range; allowed: " + range_in_words(schema));
    }
  }

  void check_length(const json& value, const json& schema, const std::string& path) {
    const std::size_t size = value.get_ref<const std::string&>().size();
    if (schema.contains("minLength") && size < schema["minLength"].get<std::size_t>()) {
      error(path, "the text may not be empty");
    }
    if (schema.contains("maxLength") && size > schema["maxLength"].get<std::size_t>()) {
      error(path, "the text is " + std::to_string(size) + " bytes long; allowed: at most " +
                      std::to_string(schema["maxLength"].get<std::size_t>()));
    }
  }

  void check_list(json& value, const json& schema, const std::string& path) {
    const std::size_t size = value.size();
    const std::size_t least = schema.value("minItems", std::size_t{0});
    const std::size_t most = schema.value("maxItems", size);
    if (size < least || size > most) {
      const std::string wanted =
          least == most                  ? std::to_string(least)
          : !schema.contains("maxItems") ? "at least " + std::to_string(least)
          : least == 0                   ? "at most " + std::to_string(most)
                                         : std::to_string(least) + " to " + std::to_string(most);
      error(path, "the list has " + std::to_string(size) +
                      (size == 1 ? " entry; allowed: " : " entries; allowed: ") + wanted);
    }
    const std::size_t num_prefix =
        schema.contains("prefixItems") ? schema["prefixItems"].size() : 0;
    for (std::size_t i = 0; i < size; ++i) {
      if (i < num_prefix) {
        check(value[i], schema["prefixItems"][i], element_path(path, i));
      } else if (schema.contains("items")) {
        check(value[i], schema["items"], element_path(path, i));
      }
    }
  }

  void check_object(json& value, const json& schema, const std::string& path) {
    const json none = json::object();
    const json& properties = schema.contains("properties") ? schema["properties"] : none;
    check_member_count(value, schema, properties, path);
    for (auto& [key, member] : value.items()) {
      if (properties.contains(key)) {
        check(member, properties[key], member_path(path, key));
      } else if (schema.contains("additionalProperties") && !schema["additionalProperties"]) {
        unknown_key(key, properties, path);
      }
    }
    if (schema.contains("required")) {
      for (const json& key : schema["required"]) {
        if (!value.contains(key.get_ref<const std::string&>())) {
          error(path, "key " + shown_value(key) + " is missing" + summary(properties, key));
        }
      }
    }
    if (schema.contains("dependentRequired")) {
      for (const auto& [key, needed] : schema["dependentRequired"].items()) {
        for (const json& other : needed) {
          if (value.contains(key) && !value.contains(other.get_ref<const std::string&>())) {
            error(path,
                  "key " + shown_text(key) + " needs key " + shown_value(other) + " beside it");
          }
        }
      }
    }
    for (const auto& [key, member] : properties.items()) {
      const json* given = annotation(member, "default");
      if (given != nullptr && !value.contains(key)) {
        value[key] = *given;
        check(value[key], member, member_path(path, key));  // fills the defaults within
      }
    }
  }

  void check_member_count(const json& value, const json& schema, const json& properties,
                          const std::string& path) {
    const std::size_t least = schema.value("minProperties", std::size_t{0});
    const std::size_t most = schema.value("maxProperties", value.size());
    if (value.size() >= least && value.size() <= most) return;
    std::vector<std::string> allowed;
    for (const auto& [key, unused] : properties.items()) allowed.push_back(shown_text(key));
    std::vector<std::string> found;
    for (const auto& [key, unused] : value.items()) found.push_back(shown_text(key));
    error(path, (found.empty() ? "is empty" : "has keys " + listed(found, "and")) + "; allowed: " +
                    (least == most ? "exactly one" : "one") + " of " + listed(allowed, "or"));
  }

  void unknown_key(const std::string& key, const json& properties, const std::string& path) {
    std::vector<std::string> known;
    for (const auto& [name, unused] : properties.items()) known.push_back(name);
    std::string message = "unknown key " + shown_text(key);
    // The slip made most: a unit left out.
    const auto longer = std::find_if(known.begin(), known.end(), [&](const std::string& name) {
      return !key.empty() && name.starts_with(key + "_");
    });
    const auto near = longer != known.end() ? *longer : nearest_word(key, known).value_or("");
    if (!near.empty()) {
      message += "; did you mean " + shown_text(near) + "?";
    } else {
      message += "; known here: " + listed(known, "and");
    }
    Diagnostic note = document_.error(path, message);
    note.line = document_.place(member_path(path, key)).line;
    if (notes_.size() < 50 * kMaxNotes) notes_.push_back(std::move(note));
  }

  /// A keyword that stands beside a $ref goes before the same keyword behind it.
  const json* annotation(const json& schema, const char* keyword) const {
    if (schema.contains(keyword)) return &schema[keyword];
    const json& target = resolved(schema);
    return target.contains(keyword) ? &target[keyword] : nullptr;
  }

  /// " (symbol rate)", from the member's title.
  std::string summary(const json& properties, const json& key) const {
    const auto& name = key.get_ref<const std::string&>();
    if (!properties.contains(name)) return "";
    const json* title = annotation(properties[name], "title");
    return title != nullptr ? " (" + title->get<std::string>() + ")" : "";
  }

  void check_one_of(json& value, const json& schema, const std::string& path) {
    const json& branches = schema["oneOf"];
    if (is_groups(branches)) return check_groups(value, branches, path);

    const json* best = nullptr;
    int best_fit = -1;
    std::vector<std::string> words;
    for (const json& given_branch : branches) {
      const json& branch = resolved(given_branch);
      const std::vector<std::string> branch_types = types(branch);
      for (const std::string& type : branch_types) {
        const std::string word = type_in_words(type);
        if (std::find(words.begin(), words.end(), word) == words.end()) words.push_back(word);
      }
      if (!type_fits(value, branch)) continue;
      const int fit = how_well(value, branch);
      if (fit > best_fit) {
        best_fit = fit;
        best = &branch;
      }
    }
    if (best == nullptr) return error(path, shown_value(value) + " is not " + listed(words, "or"));
    check(value, *best, path);
  }

  /// Members that the branch knows count for it, members it requires but lacks against it; of
  /// lists, the kind of the first entry decides.
  int how_well(const json& value, const json& branch) const {
    if (value.is_array() && !value.empty()) {
      const json* first = branch.contains("prefixItems") ? &branch["prefixItems"][0]
                          : branch.contains("items")     ? &branch["items"]
                                                         : nullptr;
      if (first == nullptr) return 1;
      const json& item = resolved(*first);
      if (item.contains("oneOf")) {
        return std::any_of(item["oneOf"].begin(), item["oneOf"].end(),
                           [&](const json& one) { return type_fits(value[0], resolved(one)); })
                   ? 2
                   : 0;
      }
      return type_fits(value[0], item) ? 2 : 0;
    }
    if (!value.is_object() || !branch.contains("properties")) return 1;
    int fit = 100;
    for (const auto& [key, unused] : value.items())
      fit += branch["properties"].contains(key) ? 3 : 0;
    if (branch.contains("required")) {
      for (const json& key : branch["required"]) {
        fit -= value.contains(key.get_ref<const std::string&>()) ? 0 : 1;
      }
    }
    if (branch.contains("oneOf") && is_groups(branch["oneOf"])) {
      fit -= satisfied_groups(value, branch["oneOf"]).empty() ? 1 : 0;
    }
    return fit;
  }

  /// Groups of keys of which exactly one must be there.
  static bool is_groups(const json& branches) {
    return std::all_of(branches.begin(), branches.end(), [](const json& branch) {
      return branch.size() == 1 && branch.contains("required");
    });
  }

  static std::string group_name(const json& branch) {
    std::vector<std::string> keys;
    for (const json& key : branch["required"]) keys.push_back(shown_value(key));
    return listed(keys, "with");
  }

  static std::vector<std::string> satisfied_groups(const json& value, const json& branches) {
    std::vector<std::string> satisfied;
    for (const json& branch : branches) {
      const json& keys = branch["required"];
      if (std::all_of(keys.begin(), keys.end(), [&](const json& key) {
            return value.contains(key.get_ref<const std::string&>());
          })) {
        satisfied.push_back(group_name(branch));
      }
    }
    return satisfied;
  }

  void check_groups(const json& value, const json& branches, const std::string& path) {
    if (!value.is_object()) return;
    const std::vector<std::string> satisfied = satisfied_groups(value, branches);
    if (satisfied.size() == 1) return;
    if (satisfied.empty()) {
      std::vector<std::string> names;
      for (const json& branch : branches) names.push_back(group_name(branch));
      return error(path, "needs " + listed(names, "or"));
    }
    error(path, "has both " + listed(satisfied, "and") + "; allowed: one of them");
  }

  JsonDocument& document_;
  const json& schema_;
  const JsonVisitor& visit_;
  std::vector<Diagnostic> notes_;
};

}  // namespace

JsonPlace JsonDocument::place(std::string_view path) const {
  while (true) {
    if (const auto found = places.find(path); found != places.end()) return found->second;
    const auto cut = path.find_last_of(".[");
    if (cut == std::string_view::npos) return {file, 0};
    path = path.substr(0, cut);
  }
}

Diagnostic JsonDocument::error(std::string_view path, const std::string& message) const {
  const JsonPlace where = place(path);
  return error_at(where.file, where.line, at_path(path, message));
}

Diagnostic JsonDocument::warning(std::string_view path, const std::string& message) const {
  const JsonPlace where = place(path);
  return warning_at(where.file, where.line, at_path(path, message));
}

std::string shown_value(const json& value) {
  switch (value.type()) {
    case json::value_t::string:
      return shown_text(value.get_ref<const std::string&>());
    case json::value_t::number_float:
      return exact(value.get<double>());
    case json::value_t::number_integer:
    case json::value_t::number_unsigned:
    case json::value_t::boolean:
    case json::value_t::null:
      return value.dump();
    case json::value_t::array:
      return "a list";
    default:
      return "an object";
  }
}

Result<JsonDocument> parse_json(std::string_view text, std::string_view file_name,
                                const JsonLimits& limits) {
  JsonDocument document;
  document.file = std::string(file_name);
  if (text.size() > limits.max_bytes) {
    return failure<JsonDocument>(error_at(document.file, 0,
                                          "the file has " + std::to_string(text.size()) +
                                              " bytes; allowed: at most " +
                                              std::to_string(limits.max_bytes)));
  }
  Progress progress{text.data(), text.data(), 1};
  std::vector<Diagnostic> notes;
  Builder builder(document, notes, progress, limits.max_depth);
  const char* const end = text.data() + text.size();
  json::sax_parse(CountingIterator(text.data(), &progress), CountingIterator(end, &progress),
                  &builder, json::input_format_t::json, true, true);
  if (has_error(notes)) return {std::nullopt, std::move(notes)};
  return {std::move(document), {}};
}

std::vector<Diagnostic> check_against_schema(JsonDocument& document, const json& schema,
                                             const std::string& start, const JsonVisitor& visit) {
  Checker checker(document, schema, visit);
  checker.check(document.root, schema.at(json::json_pointer(start.substr(1))), "");
  return checker.take();
}

std::vector<Diagnostic> set_value(JsonDocument& document, const std::string& path,
                                  const json& value) {
  const auto refuse = [&](const std::string& why) {
    return std::vector<Diagnostic>{
        error_at(document.file, 0, "can't set " + shown_text(path) + ": " + why)};
  };
  json* at = &document.root;
  std::string_view rest = path;
  std::string walked;
  if (rest.empty()) return refuse("the path is empty");
  while (!rest.empty()) {
    if (rest.front() == '[') {
      const auto close = rest.find(']');
      const auto index =
          close == std::string_view::npos ? std::nullopt : parse_integer(rest.substr(1, close - 1));
      if (!index || *index < 0) return refuse("a list index must be a whole number in brackets");
      if (!at->is_array() || static_cast<std::size_t>(*index) >= at->size()) {
        return refuse(walked + (at->is_array()
                                    ? " has " + std::to_string(at->size()) + " entries, from [0]"
                                    : " is not a list"));
      }
      walked += rest.substr(0, close + 1);
      at = &(*at)[static_cast<std::size_t>(*index)];
      rest.remove_prefix(close + 1);
      if (!rest.empty() && rest.front() == '.') rest.remove_prefix(1);
      continue;
    }
    const auto stop = std::min(rest.find_first_of(".["), rest.size());
    const std::string key(rest.substr(0, stop));
    if (key.empty()) return refuse("a key is empty");
    if (at->is_null()) *at = json::object();
    if (!at->is_object())
      return refuse((walked.empty() ? "the file" : walked) + " is not an object");
    walked = member_path(walked, key);
    at = &(*at)[key];
    rest.remove_prefix(stop);
    if (!rest.empty() && rest.front() == '.') rest.remove_prefix(1);
  }
  *at = value;
  // What was known of lines within the replaced value is no longer true.
  const auto first = document.places.lower_bound(path);
  auto last = first;
  while (last != document.places.end() && last->first.starts_with(path)) ++last;
  document.places.erase(first, last);
  document.places.emplace(path, JsonPlace{document.file, 0});
  return {};
}

}  // namespace tapwright
