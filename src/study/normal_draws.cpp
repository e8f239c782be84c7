#include "tapwright/study/normal_draws.hpp"

#include <cassert>
#include <cmath>

namespace tapwright {
namespace {

/// Spreads neighbouring numbers over all 64 bits. Source: splitmix64, S. Vigna (public domain),
/// after G. L. Steele, D. Lea, C. H. Flood, OOPSLA 2014; constants from memory.
std::uint64_t scrambled(std::uint64_t x) {
  x += 0x9E3779B97F4A7C15ULL;
  x = (x ^ (x >> 30)) * 0xBF58476D1CE4E5B9ULL;
  x = (x ^ (x >> 27)) * 0x94D049BB133111EBULL;
  return x ^ (x >> 31);
}

double fraction(std::mt19937_64& random) { return static_cast<double>(random() >> 11) * 0x1p-53; }

}  // namespace

NormalDraws::NormalDraws(std::uint64_t seed, std::uint64_t stream)
    : random_(scrambled(scrambled(seed) ^ stream)) {}

double NormalDraws::next() {
  if (has_spare_) {
    has_spare_ = false;
    return spare_;
  }
  double x = 0.0;
  double y = 0.0;
  double square = 0.0;
  do {
    x = 2.0 * fraction(random_) - 1.0;
    y = 2.0 * fraction(random_) - 1.0;
    square = x * x + y * y;
  } while (square >= 1.0 || square == 0.0);
  const double factor = std::sqrt(-2.0 * std::log(square) / square);
  spare_ = y * factor;
  has_spare_ = true;
  return x * factor;
}

double NormalDraws::next_within(double limit) {
  assert(limit > 0.0);
  for (;;) {
    const double z = next();
    if (std::abs(z) <= limit) return z;
  }
}

}  // namespace tapwright
