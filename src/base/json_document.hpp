#pragma once
// JSON read from outside: where each value stood, and the check against a schema.

#include <functional>
#include <map>
#include <nlohmann/json.hpp>
#include <string>
#include <string_view>
#include <vector>

#include "tapwright/base/diagnostic.hpp"

namespace tapwright {

/// Where a value stood.
struct JsonPlace {
  std::string file;
  int line = 0;
};

/// A JSON text and the places of its values. A path reads `transmitter.fir[0].min`; the root's path
/// is empty.
struct JsonDocument {
  nlohmann::json root;
  std::string file;
  /// By path: every member of an object and every list or object inside a list.
  std::map<std::string, JsonPlace, std::less<>> places;

  /// The place of the value, or of the nearest value around it whose place is known.
  [[nodiscard]] JsonPlace place(std::string_view path) const;
  /// `message` prefixed with the path, at the value's place.
  [[nodiscard]] Diagnostic error(std::string_view path, const std::string& message) const;
  [[nodiscard]] Diagnostic warning(std::string_view path, const std::string& message) const;
};

struct JsonLimits {
  std::size_t max_bytes = std::size_t{64} << 20;
  int max_depth = 32;
};

/// At most this many notes come out of one document.
constexpr std::size_t kMaxNotes = 20;

/// Parses JSON in which comments of both C kinds may stand. Opens nothing; `file_name` only labels
/// the notes. Refused: syntax errors, a key given twice in one object, a text or nesting beyond the
/// limits, a number too large for a double.
[[nodiscard]] Result<JsonDocument> parse_json(std::string_view text, std::string_view file_name,
                                              const JsonLimits& limits = {});

/// Called with path, value and the schema that the value was found to follow.
using JsonVisitor =
    std::function<void(const std::string&, const nlohmann::json&, const nlohmann::json&)>;

/// Checks the document against the part of `schema` at `start` (such as `#/$defs/device`) and fills
/// in each missing member that has a `default`. Returns what is wrong, at most kMaxNotes notes.
///
/// The subset of JSON Schema 2020-12 understood: type, const, enum, minimum, maximum,
/// exclusiveMinimum, exclusiveMaximum, minLength, maxLength, items, prefixItems, minItems,
/// maxItems, properties, required, additionalProperties, minProperties, maxProperties,
/// dependentRequired, oneOf, and $ref within the schema. Of oneOf, the branch to judge by is the
/// one whose type and required members fit best.
///
/// Errors: std::invalid_argument when the schema itself uses anything else.
[[nodiscard]] std::vector<Diagnostic> check_against_schema(JsonDocument& document,
                                                           const nlohmann::json& schema,
                                                           const std::string& start = "#",
                                                           const JsonVisitor& visit = {});

/// Sets the value at `path`, making objects on the way where there are none. A list index must
/// exist already.
///
/// Returns: nothing, or why it can't be done.
[[nodiscard]] std::vector<Diagnostic> set_value(JsonDocument& document, const std::string& path,
                                                const nlohmann::json& value);

/// The value as a message shows it: numbers and texts as they are, the rest by kind.
[[nodiscard]] std::string shown_value(const nlohmann::json& value);

}  // namespace tapwright
