#pragma once
#include <string>
#include <string_view>

namespace tapwright {

/// SHA-256 of the bytes, as 64 lower-case hexadecimal digits; the same as `sha256sum` prints.
[[nodiscard]] std::string sha256_hex(std::string_view bytes);

}  // namespace tapwright
