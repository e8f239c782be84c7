// Reading Touchstone text: a two-port of 10 000 points and a 32-port of 2 000, in full precision.

#include <benchmark/benchmark.h>

#include <random>

#include "tapwright/channel/touchstone.hpp"

namespace tapwright {
namespace {

std::string sample_text(int ports, int points) {
  std::mt19937_64 random(1);
  Network network = empty_network(Eigen::VectorXd::LinSpaced(points, 1e6, 1e10),
                                  Eigen::VectorXcd::Constant(ports, 50.0));
  const auto uniform = [&] { return static_cast<double>(random() >> 11) * 0x1p-52 - 1.0; };
  for (auto& value : network.values.reshaped()) value = {uniform(), uniform()};
  return write_touchstone(network);
}

void read_touchstone_text(benchmark::State& state) {
  const int ports = static_cast<int>(state.range(0));
  const std::string text = sample_text(ports, static_cast<int>(state.range(1)));
  for (auto _ : state) {
    benchmark::DoNotOptimize(parse_touchstone(text, "sample", ports).value->values.data());
  }
  state.SetBytesProcessed(state.iterations() * static_cast<std::int64_t>(text.size()));
}
BENCHMARK(read_touchstone_text)
    ->ArgNames({"ports", "points"})
    ->Args({2, 10000})
    ->Args({32, 2000})
    ->Unit(benchmark::kMillisecond);

}  // namespace
}  // namespace tapwright
