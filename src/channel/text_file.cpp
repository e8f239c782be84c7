#include "tapwright/channel/text_file.hpp"

#include <algorithm>
#include <vector>

#include "channel/input_stream.hpp"
#include "tapwright/base/digest.hpp"

namespace tapwright {

Result<TextFile> read_text_file(const std::string& path, std::size_t max_bytes) {
  InputStream stream(path, max_bytes);
  TextFile file;
  if (!stream.failure()) file.text.reserve(stream.size().value_or(0) + 1);
  // A pipe has no size, and a file may grow meanwhile: read until the end says so.
  constexpr std::size_t kChunk = std::size_t{1} << 16;
  for (std::size_t filled = 0;;) {
    if (filled == file.text.size()) {
      file.text.resize(std::max(file.text.capacity(), filled + kChunk));
    }
    const std::size_t got = stream.read(file.text.data() + filled, file.text.size() - filled);
    filled += got;
    if (got == 0) {
      file.text.resize(filled);
      break;
    }
  }
  if (stream.failure()) return failure<TextFile>(*stream.failure());
  file.sha256 = sha256_hex(file.text);
  return {std::move(file), {}};
}

Result<std::string> file_sha256(const std::string& path, std::size_t max_bytes) {
  InputStream stream(path, max_bytes);
  std::vector<char> chunk(std::size_t{1} << 20);
  Sha256 digest;
  while (const std::size_t got = stream.read(chunk.data(), chunk.size())) {
    digest.update({chunk.data(), got});
  }
  if (stream.failure()) return failure<std::string>(*stream.failure());
  return {digest.hex(), {}};
}

}  // namespace tapwright
