#pragma once
// One value of a document that has passed the schema, with its path: what the readers walk over.

#include <optional>
#include <string>
#include <utility>
#include <vector>

#include "base/json_document.hpp"

namespace tapwright {

/// Reads members and collects notes about them. Cheap to copy; the document and the notes live
/// longer than any section of them.
class Section {
 public:
  Section(const JsonDocument& document, std::vector<Diagnostic>& notes)
      : document_(&document), notes_(&notes), value_(&document.root) {}

  [[nodiscard]] const nlohmann::json& value() const { return *value_; }
  [[nodiscard]] const std::string& path() const { return path_; }
  [[nodiscard]] const std::string& file() const { return document_->file; }
  [[nodiscard]] bool has(const char* key) const { return value_->contains(key); }
  [[nodiscard]] std::size_t size() const { return value_->size(); }

  [[nodiscard]] Section at(const char* key) const {
    return {*this, value_->at(key), path_.empty() ? key : path_ + "." + key};
  }
  [[nodiscard]] Section at(std::size_t index) const {
    return {*this, value_->at(index), path_ + "[" + std::to_string(index) + "]"};
  }
  [[nodiscard]] std::vector<Section> items() const {
    std::vector<Section> out;
    out.reserve(size());
    for (std::size_t i = 0; i < size(); ++i) out.push_back(at(i));
    return out;
  }

  [[nodiscard]] double number() const { return value_->get<double>(); }
  /// The schema has made sure that the number is whole and small enough.
  [[nodiscard]] int integer() const { return static_cast<int>(value_->get<double>()); }
  [[nodiscard]] const std::string& text() const { return value_->get_ref<const std::string&>(); }
  [[nodiscard]] double number(const char* key) const { return value_->at(key).get<double>(); }
  [[nodiscard]] int integer(const char* key) const { return at(key).integer(); }
  [[nodiscard]] const std::string& text(const char* key) const {
    return value_->at(key).get_ref<const std::string&>();
  }
  [[nodiscard]] std::optional<double> maybe(const char* key) const {
    return has(key) ? std::optional(number(key)) : std::nullopt;
  }

  void error(const std::string& message) const { add(document_->error(path_, message)); }
  void error(const char* key, const std::string& message) const {
    has(key) ? at(key).error(message) : error(message);
  }
  void warning(const std::string& message) const { add(document_->warning(path_, message)); }
  /// Notes that another room made, each put under this path.
  void adopt(std::vector<Diagnostic> others) const {
    for (Diagnostic& note : others) add(std::move(note));
  }
  /// A warning at this place, made but not added.
  [[nodiscard]] Diagnostic warning_here(const std::string& message) const {
    return document_->warning(path_, message);
  }
  [[nodiscard]] const std::vector<Diagnostic>& notes() const { return *notes_; }
  [[nodiscard]] bool failed() const { return has_error(*notes_); }

 private:
  Section(const Section& parent, const nlohmann::json& value, std::string path)
      : document_(parent.document_),
        notes_(parent.notes_),
        value_(&value),
        path_(std::move(path)) {}
  void add(Diagnostic note) const {
    if (notes_->size() < 10 * kMaxNotes) notes_->push_back(std::move(note));
  }

  const JsonDocument* document_;
  std::vector<Diagnostic>* notes_;
  const nlohmann::json* value_;
  std::string path_;
};

}  // namespace tapwright
