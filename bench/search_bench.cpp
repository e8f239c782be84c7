#include <benchmark/benchmark.h>

#include "problems.hpp"
#include "tapwright/search/solve.hpp"

namespace tapwright::bench {
namespace {

void run_solve(benchmark::State& state, const Size& size, int num_threads = 1) {
  const EyeModel model = prepare(link_of(size));
  SearchOptions options;
  options.compare = false;
  RunControl control;
  control.num_threads = num_threads;
  for (auto _ : state) {
    const Solution solution = solve(model, options, control);
    if (solution.proof.kind != Proof::Kind::kProven) state.SkipWithError("not proven");
    benchmark::DoNotOptimize(solution.score.height.worst_case_v);
  }
}

// From pulses in memory to proof; 64 codes a tap, 256 CTLE states, 32 phases, 5 DFE taps and 200
// cursors unless the name says otherwise.
void proof_by_taps(benchmark::State& state) {
  Size size;
  size.num_fir = static_cast<int>(state.range(0));
  run_solve(state, size);
}
BENCHMARK(proof_by_taps)->Arg(3)->Arg(5)->Arg(7)->Unit(benchmark::kMillisecond);

void proof_by_cursors(benchmark::State& state) {
  Size size;
  size.num_cursors = static_cast<int>(state.range(0));
  run_solve(state, size);
}
BENCHMARK(proof_by_cursors)->RangeMultiplier(2)->Range(50, 800)->Unit(benchmark::kMillisecond);

void proof_by_codes(benchmark::State& state) {
  Size size;
  size.codes_per_tap = static_cast<int>(state.range(0));
  run_solve(state, size);
}
BENCHMARK(proof_by_codes)->RangeMultiplier(4)->Range(16, 1024)->Unit(benchmark::kMillisecond);

void proof_by_ctle_states(benchmark::State& state) {
  Size size;
  size.num_ctle = static_cast<int>(state.range(0));
  run_solve(state, size);
}
BENCHMARK(proof_by_ctle_states)->RangeMultiplier(4)->Range(16, 1024)->Unit(benchmark::kMillisecond);

void proof_by_aggressors(benchmark::State& state) {
  Size size;
  size.num_ctle = 16;
  size.num_aggressors = static_cast<int>(state.range(0));
  run_solve(state, size);
}
BENCHMARK(proof_by_aggressors)->Arg(0)->Arg(1)->Arg(2)->Arg(4)->Unit(benchmark::kMillisecond);

void proof_by_threads(benchmark::State& state) {
  run_solve(state, {}, static_cast<int>(state.range(0)));
}
BENCHMARK(proof_by_threads)->Arg(1)->Arg(2)->Unit(benchmark::kMillisecond)->UseRealTime();

void proof_with_2_mv_dfe_steps(benchmark::State& state) {
  Size size;
  size.dfe_step_v = 2e-3;
  run_solve(state, size);
}
BENCHMARK(proof_with_2_mv_dfe_steps)->Unit(benchmark::kMillisecond);

void proof_with_8b10b(benchmark::State& state) {
  Size size;
  size.line_code = LineCodeKind::k8b10b;
  run_solve(state, size);
}
BENCHMARK(proof_with_8b10b)->Unit(benchmark::kMillisecond);

/// One setting for four lengths at once.
void proof_for_four_channels(benchmark::State& state) {
  std::vector<EyeModel> models;
  for (const double length_m : {0.35, 0.4, 0.45, 0.5}) {
    Size size;
    size.length_m = length_m;
    models.push_back(prepare(link_of(size)));
  }
  for (auto _ : state) {
    const JointSolution solution = solve_together(models);
    if (solution.proof.kind != Proof::Kind::kProven) state.SkipWithError("not proven");
    benchmark::DoNotOptimize(solution.score_of.data());
  }
}
BENCHMARK(proof_for_four_channels)->Unit(benchmark::kMillisecond);

}  // namespace
}  // namespace tapwright::bench
