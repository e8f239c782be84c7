#pragma once
// A file of records, one a line, that survives being stopped at any moment.

#include <cstdint>
#include <optional>
#include <string>
#include <string_view>

#include "tapwright/base/diagnostic.hpp"

namespace tapwright {

/// Lines that end in a line feed count; what a killed run left behind the last one does not, and is
/// cut off before the next line is added. One process at a time.
class RecordFile {
 public:
  /// Opens `path`, or creates it with `first_line` (whole or not at all).
  ///
  /// Errors: the path can't be opened, read or written, or another process has it open.
  [[nodiscard]] static Result<RecordFile> open(const std::string& path, std::string_view first_line);
  /// For reading only; nothing is created, cut or locked.
  [[nodiscard]] static Result<RecordFile> open_to_read(const std::string& path);
  /// A file without a name that vanishes with the object.
  [[nodiscard]] static Result<RecordFile> temporary(std::string_view first_line);

  RecordFile(RecordFile&& other) noexcept;
  RecordFile& operator=(RecordFile&& other) noexcept;
  RecordFile(const RecordFile&) = delete;
  RecordFile& operator=(const RecordFile&) = delete;
  ~RecordFile();

  [[nodiscard]] const std::string& path() const { return path_; }

  /// Adds a line in one write; after a failure the file is as before.
  [[nodiscard]] std::optional<Diagnostic> append(std::string line);
  /// To be called when all is done: makes it last through a power cut.
  [[nodiscard]] std::optional<Diagnostic> sync();

 private:
  friend class LineReader;
  RecordFile(int descriptor, std::string path) : descriptor_(descriptor), path_(std::move(path)) {}
  [[nodiscard]] Diagnostic problem(const std::string& what) const;

  int descriptor_ = -1;
  std::string path_;  ///< as the user spelled it; empty = temporary
};

/// Hands out a file's whole lines one by one, from the first.
class LineReader {
 public:
  /// `file` must outlive the reader.
  explicit LineReader(const RecordFile& file) : file_(&file) {}

  /// The next whole line, or none; `number()` is then its number from 1.
  [[nodiscard]] std::optional<std::string> next();
  [[nodiscard]] std::int64_t number() const { return number_; }

 private:
  const RecordFile* file_;
  std::int64_t offset_ = 0;
  std::int64_t number_ = 0;
  std::string buffer_;
  std::size_t at_ = 0;
};

}  // namespace tapwright
