#include <benchmark/benchmark.h>

#include "problems.hpp"
#include "tapwright/eye/distribution.hpp"
#include "tapwright/eye/objective.hpp"
#include "tapwright/eye/placed_eye.hpp"
#include "tapwright/eye/score.hpp"
#include "tapwright/eye/whole_eye.hpp"

namespace tapwright::bench {
namespace {

Settings middle_settings(const EyeModel& model) {
  Settings settings;
  const auto& taps = model.link.device.transmitter.fir.taps;
  settings.fir = Eigen::VectorXd::Zero(static_cast<Eigen::Index>(taps.size()));
  settings.fir[static_cast<Eigen::Index>(model.link.device.transmitter.fir.main_index())] = 0.8;
  settings.fir[settings.fir.size() - 1] = -0.1;
  settings.dfe_v =
      Eigen::VectorXd::Zero(static_cast<Eigen::Index>(model.link.device.receiver.dfe.size()));
  return settings;
}

EyeModel small_model(int num_cursors, int num_fir, LineCodeKind code = LineCodeKind::kNone) {
  Size size;
  size.num_ctle = 1;
  size.num_cursors = num_cursors;
  size.num_fir = num_fir;
  size.line_code = code;
  return prepare(link_of(size));
}

/// sum_k |q_k| of range(0) cursors and range(1) taps: the innermost loop of a search.
void raw_evaluation(benchmark::State& state) {
  const Eigen::Index num_cursors = state.range(0);
  const Eigen::Index num_taps = state.range(1);
  const Eigen::MatrixXd cursors = Eigen::MatrixXd::Random(num_cursors, num_taps);
  const Eigen::VectorXd fir = Eigen::VectorXd::LinSpaced(num_taps, -0.1, 0.7);
  for (auto _ : state) {
    benchmark::DoNotOptimize(absolute_sum_v(cursors.data(), num_cursors, num_taps, fir.data()));
  }
  state.SetBytesProcessed(state.iterations() * num_cursors * num_taps * 8);
}
BENCHMARK(raw_evaluation)->Args({50, 4})->Args({200, 4})->Args({800, 4})->Args({200, 8});

void worst_case_height(benchmark::State& state) {
  const EyeModel model = small_model(static_cast<int>(state.range(0)), 4);
  const PlacedEye eye = place_eye(model, {});
  const Settings settings = middle_settings(model);
  for (auto _ : state) {
    benchmark::DoNotOptimize(
        worst_case_height_v(eye, settings.fir.data(), settings.dfe_v.data()));
  }
}
BENCHMARK(worst_case_height)->Arg(200);

/// N(1e-12) of range(0) cursors, through the saddle point.
void exceeded_level(benchmark::State& state) {
  const Disturbance disturbance = disturbance_of(static_cast<int>(state.range(0)));
  for (auto _ : state) benchmark::DoNotOptimize(exceeded_level_v(disturbance, 1e-12));
}
BENCHMARK(exceeded_level)->Arg(50)->Arg(200)->Arg(800)->Unit(benchmark::kMicrosecond);

void exceeded_level_on_a_grid(benchmark::State& state) {
  const Disturbance disturbance = disturbance_of(200);
  for (auto _ : state) {
    benchmark::DoNotOptimize(grid_distribution(disturbance, 20e-6).exceeded_level_v(1e-12));
  }
}
BENCHMARK(exceeded_level_on_a_grid)->Unit(benchmark::kMillisecond);

/// Worst case of 8b10b, all ten positions of the main cursor, range(0) cursors.
void coded_worst_case(benchmark::State& state) {
  const EyeModel model = small_model(static_cast<int>(state.range(0)), 3, LineCodeKind::k8b10b);
  const Settings settings = middle_settings(model);
  for (auto _ : state) benchmark::DoNotOptimize(objective_height_v(model, settings));
}
BENCHMARK(coded_worst_case)->Arg(50)->Arg(200)->Arg(800)->Unit(benchmark::kMicrosecond);

/// 32 phases x 1024 levels.
void whole_eye_of_a_setting(benchmark::State& state) {
  Size size;
  size.num_ctle = 1;
  const EyeModel model = prepare(link_of(size));
  const Settings settings = middle_settings(model);
  for (auto _ : state) benchmark::DoNotOptimize(whole_eye(model, settings).error_ratio.data());
}
BENCHMARK(whole_eye_of_a_setting)->Unit(benchmark::kMillisecond);

}  // namespace
}  // namespace tapwright::bench
