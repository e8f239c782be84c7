#include "search/sign_sums.hpp"

#include <cstddef>
#include <cstdint>
#include <cstring>

// Four lanes by hand instead of automatic vectorisation: without -ffast-math a compiler may not
// reorder the sums, and with it results would differ between machines. The vector types are lowered
// to whatever the processor has; this file is compiled without contraction to fused operations.
#if defined(__x86_64__) && !defined(__SANITIZE_ADDRESS__) && !defined(__SANITIZE_THREAD__)
#define TAPWRIGHT_CLONES [[gnu::target_clones("avx2", "default")]]
#else
#define TAPWRIGHT_CLONES
#endif

namespace tapwright::search {
namespace {

using Lanes = double __attribute__((vector_size(32)));
using Bits = std::int64_t __attribute__((vector_size(32)));

template <int kTaps>
[[gnu::always_inline]] inline void run(const PaddedRow& row, const double* taps,
                                       const int* positions, double* sums) {
  constexpr std::int64_t kSignBit = INT64_MIN;
  // The pragmas keep the small arrays in registers; a cast between vector types keeps the bits.
  const double* from[kTaps];
  Lanes total[kTaps];
#pragma GCC unroll 8
  for (int i = 0; i < kTaps; ++i) {
    from[i] = row.data - positions[i];
    total[i] = Lanes{0.0, 0.0, 0.0, 0.0};
  }
  for (int k = 0; k < row.count; k += 4) {
    Lanes p[kTaps];
    Lanes q = {0.0, 0.0, 0.0, 0.0};
#pragma GCC unroll 8
    for (int i = 0; i < kTaps; ++i) {
      std::memcpy(&p[i], from[i] + k, sizeof(Lanes));
      q += taps[i] * p[i];
    }
    const Bits sign = (Bits)q & kSignBit;
#pragma GCC unroll 8
    for (int i = 0; i < kTaps; ++i) total[i] += (Lanes)((Bits)p[i] ^ sign);
  }
#pragma GCC unroll 8
  for (int i = 0; i < kTaps; ++i) {
    sums[i] = (total[i][0] + total[i][1]) + (total[i][2] + total[i][3]);
  }
}

template <int kTaps>
[[gnu::always_inline]] inline void run_weighted(const PaddedRow& row, const double* weights,
                                                const int* positions, double* sums) {
  const double* from[kTaps];
  Lanes total[kTaps];
#pragma GCC unroll 8
  for (int i = 0; i < kTaps; ++i) {
    from[i] = row.data - positions[i];
    total[i] = Lanes{0.0, 0.0, 0.0, 0.0};
  }
  for (int k = 0; k < row.count; k += 4) {
    Lanes weight;
    std::memcpy(&weight, weights + k, sizeof(Lanes));
#pragma GCC unroll 8
    for (int i = 0; i < kTaps; ++i) {
      Lanes p;
      std::memcpy(&p, from[i] + k, sizeof(Lanes));
      total[i] += weight * p;
    }
  }
#pragma GCC unroll 8
  for (int i = 0; i < kTaps; ++i) {
    sums[i] = (total[i][0] + total[i][1]) + (total[i][2] + total[i][3]);
  }
}

/// Any number of taps, at two passes over a buffer.
void run_any(const PaddedRow& row, std::span<const double> taps, std::span<const int> positions,
             std::span<double> sums) {
  for (double& sum : sums) sum = 0.0;
  for (int k = 0; k < row.count; ++k) {
    double q = 0.0;
    for (std::size_t i = 0; i < taps.size(); ++i) q += taps[i] * row.data[k - positions[i]];
    for (std::size_t i = 0; i < taps.size(); ++i) {
      const double p = row.data[k - positions[i]];
      sums[i] += q < 0.0 ? -p : p;
    }
  }
}

TAPWRIGHT_CLONES void run_few(const PaddedRow& row, const double* taps, const int* positions,
                              double* sums, std::size_t num_taps) {
  switch (num_taps) {
    case 1: return run<1>(row, taps, positions, sums);
    case 2: return run<2>(row, taps, positions, sums);
    case 3: return run<3>(row, taps, positions, sums);
    case 4: return run<4>(row, taps, positions, sums);
    case 5: return run<5>(row, taps, positions, sums);
    case 6: return run<6>(row, taps, positions, sums);
    case 7: return run<7>(row, taps, positions, sums);
    default: return run<8>(row, taps, positions, sums);
  }
}

TAPWRIGHT_CLONES void run_few_weighted(const PaddedRow& row, const double* weights,
                                       const int* positions, double* sums, std::size_t num_taps) {
  switch (num_taps) {
    case 1: return run_weighted<1>(row, weights, positions, sums);
    case 2: return run_weighted<2>(row, weights, positions, sums);
    case 3: return run_weighted<3>(row, weights, positions, sums);
    case 4: return run_weighted<4>(row, weights, positions, sums);
    case 5: return run_weighted<5>(row, weights, positions, sums);
    case 6: return run_weighted<6>(row, weights, positions, sums);
    case 7: return run_weighted<7>(row, weights, positions, sums);
    default: return run_weighted<8>(row, weights, positions, sums);
  }
}

}  // namespace

void weighted_sums(const PaddedRow& row, std::span<const double> weights,
                   std::span<const int> positions, std::span<double> sums) {
  if (positions.size() <= 8) {
    return run_few_weighted(row, weights.data(), positions.data(), sums.data(), positions.size());
  }
  for (std::size_t i = 0; i < positions.size(); ++i) {
    sums[i] = 0.0;
    for (int k = 0; k < row.count; ++k) {
      sums[i] += weights[static_cast<std::size_t>(k)] * row.data[k - positions[i]];
    }
  }
}

void sign_sums(const PaddedRow& row, std::span<const double> taps, std::span<const int> positions,
               std::span<double> sums) {
  if (taps.size() > 8) return run_any(row, taps, positions, sums);
  run_few(row, taps.data(), positions.data(), sums.data(), taps.size());
}

}  // namespace tapwright::search
