#pragma once
#include <memory>
#include <string>
#include <string_view>

namespace tapwright {

/// SHA-256 of the bytes, as 64 lower-case hexadecimal digits; the same as `sha256sum` prints.
[[nodiscard]] std::string sha256_hex(std::string_view bytes);

/// The same digest of bytes that come piece by piece.
class Sha256 {
 public:
  Sha256();
  Sha256(Sha256&&) noexcept;
  Sha256& operator=(Sha256&&) noexcept;
  ~Sha256();
  void update(std::string_view bytes);
  /// The digest of all bytes so far; nothing may be added after it.
  [[nodiscard]] std::string hex();

 private:
  struct State;
  std::unique_ptr<State> state_;
};

}  // namespace tapwright
