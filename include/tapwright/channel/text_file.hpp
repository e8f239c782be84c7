#pragma once
// Reading a whole input file.

#include <cstddef>
#include <string>

#include "tapwright/base/diagnostic.hpp"

namespace tapwright {

/// The bytes of a file and their SHA-256, so that a result can name its input.
struct TextFile {
  std::string text;
  std::string sha256;  ///< 64 lower-case hexadecimal digits
};

constexpr std::size_t kLargestInputFile = std::size_t{2} << 30;

/// Reads a regular file or a pipe to its end.
///
/// Errors: one note when the path does not exist, is a directory, may not be read, fails while it
///         is read, or holds more than `max_bytes` (at most that much is kept in memory).
[[nodiscard]] Result<TextFile> read_text_file(const std::string& path,
                                              std::size_t max_bytes = kLargestInputFile);

/// The digest alone, without holding the file in memory. Errors: as read_text_file.
[[nodiscard]] Result<std::string> file_sha256(const std::string& path,
                                              std::size_t max_bytes = kLargestInputFile);

}  // namespace tapwright
