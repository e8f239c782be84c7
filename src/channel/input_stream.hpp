#pragma once
// A file or pipe read piece by piece, with one clear error for whatever goes wrong.

#include <cstddef>
#include <optional>
#include <string>
#include <string_view>

#include "tapwright/base/diagnostic.hpp"

namespace tapwright {

class InputStream {
 public:
  /// Opens the path; `failure()` tells when that did not work. More than max_bytes are refused.
  InputStream(const std::string& path, std::size_t max_bytes);
  InputStream(const InputStream&) = delete;
  InputStream& operator=(const InputStream&) = delete;
  ~InputStream();

  [[nodiscard]] const std::optional<Diagnostic>& failure() const { return failure_; }
  /// Size of a regular file when it was opened; empty for a pipe.
  [[nodiscard]] std::optional<std::size_t> size() const { return size_; }
  /// Reads up to `count` bytes to `target`; 0 at the end and after a failure.
  std::size_t read(char* target, std::size_t count);

 private:
  void open();
  void fail(std::string message);

  std::string path_;
  std::size_t max_bytes_;
  int descriptor_ = -1;
  std::size_t total_ = 0;
  std::optional<std::size_t> size_;
  std::optional<Diagnostic> failure_;
};

}  // namespace tapwright
