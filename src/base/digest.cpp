#include "tapwright/base/digest.hpp"

#include <openssl/evp.h>

#include <array>
#include <stdexcept>

namespace tapwright {

struct Sha256::State {
  EVP_MD_CTX* context = EVP_MD_CTX_new();
  State() = default;
  State(const State&) = delete;
  State& operator=(const State&) = delete;
  ~State() { EVP_MD_CTX_free(context); }
  static void require(int success) {
    if (success != 1) throw std::runtime_error("Sha256: the digest library refused");
  }
};

Sha256::Sha256() : state_(std::make_unique<State>()) {
  State::require(EVP_DigestInit_ex(state_->context, EVP_sha256(), nullptr));
}
Sha256::Sha256(Sha256&&) noexcept = default;
Sha256& Sha256::operator=(Sha256&&) noexcept = default;
Sha256::~Sha256() = default;

void Sha256::update(std::string_view bytes) {
  State::require(EVP_DigestUpdate(state_->context, bytes.data(), bytes.size()));
}

std::string Sha256::hex() {
  std::array<unsigned char, EVP_MAX_MD_SIZE> digest{};
  unsigned int length = 0;
  State::require(EVP_DigestFinal_ex(state_->context, digest.data(), &length));
  static constexpr std::string_view kHex = "0123456789abcdef";
  std::string text;
  for (unsigned int i = 0; i < length; ++i) {
    text += kHex[digest[i] >> 4];
    text += kHex[digest[i] & 15];
  }
  return text;
}

std::string sha256_hex(std::string_view bytes) {
  Sha256 digest;
  digest.update(bytes);
  return digest.hex();
}

}  // namespace tapwright
