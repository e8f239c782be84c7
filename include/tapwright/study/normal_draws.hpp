#pragma once
// Standard normal numbers that are the same on every machine.

#include <cstdint>
#include <random>

namespace tapwright {

/// std::normal_distribution differs between standard libraries; the generator below it does not.
///
/// Method: polar method, from pairs of 53-bit fractions of std::mt19937_64.
/// Source: G. Marsaglia, T. A. Bray, SIAM Review 6(3), 1964.
class NormalDraws {
 public:
  /// Streams of one seed are independent: draw number `stream` does not depend on how many others
  /// were drawn before it, or where.
  NormalDraws(std::uint64_t seed, std::uint64_t stream);

  [[nodiscard]] double next();
  /// A draw inside +-limit; those beyond are drawn again. Errors: assert limit > 0.
  [[nodiscard]] double next_within(double limit);

 private:
  std::mt19937_64 random_;
  double spare_ = 0.0;
  bool has_spare_ = false;
};

}  // namespace tapwright
