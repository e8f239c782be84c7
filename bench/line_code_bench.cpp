// Kernels of the line codes: 200 cursors, 20 before the main one.

#include <benchmark/benchmark.h>

#include <random>

#include "tapwright/eye/baseline_wander.hpp"
#include "tapwright/eye/coded_distribution.hpp"
#include "tapwright/eye/coded_worst_case.hpp"

namespace tapwright {
namespace {

constexpr Eigen::Index kCursors = 200;
constexpr Eigen::Index kMain = 20;

Eigen::VectorXd sample_row() {
  std::mt19937_64 random(1);
  Eigen::VectorXd row(kCursors);
  for (Eigen::Index i = 0; i < kCursors; ++i) {
    const double u = static_cast<double>(random() >> 11) * 0x1p-52 - 1.0;
    row[i] = 0.08 * u / (1.0 + 0.3 * static_cast<double>(std::abs(i - kMain)));
  }
  row[kMain] = 0.4;
  return row;
}

LineCode code_of(std::int64_t which) {
  return which == 0   ? LineCode::code_8b10b()
         : which == 1 ? LineCode::code_64b66b()
                      : LineCode::manchester();
}

void all_positions_worst_case(benchmark::State& state) {
  Eigen::VectorXd row = sample_row();
  CodedIsi work(code_of(state.range(0)), kCursors, kMain);
  for (auto _ : state) {
    row[kMain + 1] += 1e-9;
    benchmark::DoNotOptimize(work.worst(row));
  }
}
BENCHMARK(all_positions_worst_case)
    ->ArgName("8b10b_64b66b_manchester")
    ->DenseRange(0, 2)
    ->Unit(benchmark::kMicrosecond);

void worst_case_with_its_sequence(benchmark::State& state) {
  Eigen::VectorXd row = sample_row();
  CodedIsi work(LineCode::code_8b10b(), kCursors, kMain);
  for (auto _ : state) {
    row[kMain + 1] += 1e-9;
    benchmark::DoNotOptimize(work.cut(row).signs.data());
  }
}
BENCHMARK(worst_case_with_its_sequence)->Unit(benchmark::kMicrosecond);

void level_at_an_error_ratio(benchmark::State& state) {
  const LineCode code = LineCode::code_8b10b();
  CodedDisturbance disturbance{sample_row(), kMain, {}};
  disturbance.others.sigma_v = 1e-3 * static_cast<double>(state.range(0));
  for (auto _ : state) benchmark::DoNotOptimize(exceeded_level_v(code, disturbance, 1e-12));
}
BENCHMARK(level_at_an_error_ratio)
    ->ArgName("noise_mv")
    ->Arg(1)
    ->Arg(5)
    ->Arg(20)
    ->Unit(benchmark::kMicrosecond);

void grid_at_an_error_ratio(benchmark::State& state) {
  const LineCode code = LineCode::code_8b10b();
  CodedDisturbance disturbance{sample_row(), kMain, {}};
  disturbance.others.sigma_v = 5e-3;
  for (auto _ : state) {
    benchmark::DoNotOptimize(coded_grid(code, disturbance, 1e-4).exceeded_level_v(1e-12));
  }
}
BENCHMARK(grid_at_an_error_ratio)->Unit(benchmark::kMillisecond);

void wander(benchmark::State& state) {
  const LineCode code = LineCode::code_8b10b();
  const Eigen::VectorXd row = sample_row();
  for (auto _ : state) {
    benchmark::DoNotOptimize(baseline_wander(code, row, kMain, 100e3, 160e-12).worst_v);
  }
}
BENCHMARK(wander)->Unit(benchmark::kMillisecond);

}  // namespace
}  // namespace tapwright
