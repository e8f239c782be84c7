#pragma once
// What went wrong, or is worth knowing, in something outside the program: a file, a key, an option.

#include <optional>
#include <string>
#include <utility>
#include <vector>

namespace tapwright {

/// One remark about an input: where, what was found, what was wanted.
struct Diagnostic {
  enum class Severity { kError, kWarning };
  Severity severity = Severity::kError;
  std::string file;     ///< as the user spelled it; empty when no file is concerned
  int line = 0;         ///< 1-based; 0 = concerns the whole file
  std::string message;  ///< what was found and what was wanted

  friend bool operator==(const Diagnostic&, const Diagnostic&) = default;
};

/// A value, or the reasons why there is none.
///
/// Errors: `value` is empty exactly when one of the notes is an error.
template <class T>
struct [[nodiscard]] Result {
  std::optional<T> value;
  std::vector<Diagnostic> notes;  ///< file order; warnings may stand beside a value
  explicit operator bool() const { return value.has_value(); }
};

[[nodiscard]] Diagnostic error_at(std::string file, int line, std::string message);
[[nodiscard]] Diagnostic warning_at(std::string file, int line, std::string message);
[[nodiscard]] bool has_error(const std::vector<Diagnostic>& notes);

/// `file:line: error: message`, the form in which people and editors read it; the line is left out
/// when 0, the file when empty.
[[nodiscard]] std::string to_string(const Diagnostic& note);

template <class T>
[[nodiscard]] Result<T> failure(Diagnostic note) {
  return {std::nullopt, {std::move(note)}};
}

}  // namespace tapwright
