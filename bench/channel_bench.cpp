#include <benchmark/benchmark.h>

#include "problems.hpp"
#include "tapwright/base/fft.hpp"
#include "tapwright/channel/touchstone.hpp"
#include "tapwright/equalizer/device.hpp"

namespace tapwright::bench {
namespace {

/// range(0) ports, range(1) points.
void read_touchstone(benchmark::State& state) {
  const auto num_ports = static_cast<int>(state.range(0));
  const std::string text = touchstone_of(num_ports, static_cast<int>(state.range(1)));
  const std::string name = "bench.s" + std::to_string(num_ports) + "p";
  for (auto _ : state) {
    const Result<Network> read = parse_touchstone(text, name);
    if (!read) state.SkipWithError("the text was refused");
    benchmark::DoNotOptimize(read.value->values.data());
  }
  state.SetBytesProcessed(state.iterations() * static_cast<std::int64_t>(text.size()));
}
BENCHMARK(read_touchstone)->Args({2, 10'000})->Args({32, 2'000})->Unit(benchmark::kMillisecond);

void transform_record(benchmark::State& state) {
  const Eigen::VectorXd record = Eigen::VectorXd::LinSpaced(state.range(0), -1.0, 1.0);
  const Eigen::VectorXcd spectrum = real_spectrum(record);
  for (auto _ : state) {
    benchmark::DoNotOptimize(real_record(spectrum, record.size()).data());
  }
}
BENCHMARK(transform_record)->Arg(1 << 14)->Arg(331'776)->Unit(benchmark::kMicrosecond);

/// The pulses of range(0) CTLE states.
void pulses_of_every_state(benchmark::State& state) {
  Size size;
  size.num_ctle = static_cast<int>(state.range(0));
  const Link link = link_of(size);
  for (auto _ : state) {
    benchmark::DoNotOptimize(state_pulses(link.device.receiver, link.channel, {}).data());
  }
}
BENCHMARK(pulses_of_every_state)->Arg(1)->Arg(16)->Arg(256)->Unit(benchmark::kMillisecond);

}  // namespace
}  // namespace tapwright::bench
