#include "tapwright/base/diagnostic.hpp"

#include <algorithm>

namespace tapwright {

Diagnostic error_at(std::string file, int line, std::string message) {
  return {Diagnostic::Severity::kError, std::move(file), line, std::move(message)};
}

Diagnostic warning_at(std::string file, int line, std::string message) {
  return {Diagnostic::Severity::kWarning, std::move(file), line, std::move(message)};
}

bool has_error(const std::vector<Diagnostic>& notes) {
  return std::any_of(notes.begin(), notes.end(), [](const Diagnostic& note) {
    return note.severity == Diagnostic::Severity::kError;
  });
}

std::string to_string(const Diagnostic& note) {
  std::string text;
  if (!note.file.empty()) {
    text = note.file;
    if (note.line > 0) text += ":" + std::to_string(note.line);
    text += ": ";
  }
  text += note.severity == Diagnostic::Severity::kError ? "error: " : "warning: ";
  return text + note.message;
}

}  // namespace tapwright
