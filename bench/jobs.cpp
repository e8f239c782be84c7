// Whole jobs, timed: tapwright_jobs JOB REPEATS FOLDER does one of them REPEATS times on one thread,
// leaves the problem in FOLDER (arrays as raw doubles) and prints problem, answer and seconds as JSON
// for bench/compare.py, which does the same job with numpy and scipy.

#include <ctime>
#include <fstream>
#include <functional>
#include <iostream>
#include <map>
#include <nlohmann/json.hpp>

#include "problems.hpp"
#include "tapwright/channel/touchstone.hpp"
#include "tapwright/equalizer/device.hpp"
#include "tapwright/eye/placed_eye.hpp"
#include "tapwright/search/solve.hpp"

namespace tapwright::bench {
namespace {

using Json = nlohmann::ordered_json;

/// Of this process: all jobs run on one thread, and other programs' load must not count.
double processor_seconds() {
  timespec now{};
  clock_gettime(CLOCK_PROCESS_CPUTIME_ID, &now);
  return static_cast<double>(now.tv_sec) + 1e-9 * static_cast<double>(now.tv_nsec);
}

struct Bench {
  int repeats;
  std::string folder;
  Json result;

  void time(const std::function<void()>& job) {
    for (int i = 0; i < repeats; ++i) {
      const double start_s = processor_seconds();
      job();
      result["seconds"].push_back(processor_seconds() - start_s);
    }
  }
  void write(const std::string& name, const double* data, Eigen::Index size) const {
    std::ofstream(folder + "/" + name, std::ios::binary)
        .write(reinterpret_cast<const char*>(data),
               static_cast<std::streamsize>(size) * static_cast<std::streamsize>(sizeof(double)));
  }
};

void read_touchstone(Bench& bench, int num_ports, int num_points) {
  const std::string name = "line.s" + std::to_string(num_ports) + "p";
  const std::string text = touchstone_of(num_ports, num_points);
  std::ofstream(bench.folder + "/" + name, std::ios::binary) << text;
  Network network;
  bench.time([&] {
    std::ifstream file(bench.folder + "/" + name, std::ios::binary);
    const std::string read((std::istreambuf_iterator<char>(file)), std::istreambuf_iterator<char>());
    network = *parse_touchstone(read, name).value;
  });
  bench.result["problem"] = {{"file", name}, {"ports", num_ports}};
  bench.result["answer"] = {network.values.real().sum(), network.values.imag().sum()};
}

/// The CTLE states as rows (DC gain dB, f_z, f_p1, f_p2, low-frequency gain dB, f_lf).
void write_states(const Bench& bench, const Link& link) {
  std::vector<double> rows;
  for (const CtleState& state : link.device.receiver.ctle) {
    const auto& r = std::get<CtleReference>(state.response);
    for (const double x : {r.dc_gain_db, r.f_z_hz, r.f_p1_hz, r.f_p2_hz,
                           r.low_frequency->dc_gain_db, r.low_frequency->f_lf_hz}) {
      rows.push_back(x);
    }
  }
  bench.write("states.f64", rows.data(), static_cast<Eigen::Index>(rows.size()));
  bench.write("spectrum.f64", reinterpret_cast<const double*>(link.channel.values.data()),
              2 * link.channel.values.size());
}

Json problem_of(const Link& link) {
  return {{"num_samples", link.channel.num_samples},
          {"samples_per_ui", link.samples_per_ui},
          {"df_hz", link.channel.df_hz()},
          {"bandwidth_hz", *link.device.receiver.bandwidth_hz},
          {"span_ui", *link.signal.span_ui}};
}

void pulses(Bench& bench) {
  const Link link = link_of({});
  std::vector<StatePulses> states;
  bench.time([&] { states = state_pulses(link.device.receiver, link.channel, {}); });
  write_states(bench, link);
  bench.result["problem"] = problem_of(link);
  for (const StatePulses& state : states) {
    bench.result["answer"].push_back(state.victim.samples_v()[state.peak_index()]);
  }
}

void evaluations(Bench& bench) {
  constexpr Eigen::Index kCursors = 200;
  constexpr Eigen::Index kTaps = 4;
  constexpr Eigen::Index kSettings = 20'000;
  std::srand(1);  // Eigen's Random; only makes the problem
  const Eigen::MatrixXd cursors = Eigen::MatrixXd::Random(kCursors, kTaps);
  const Eigen::MatrixXd settings = Eigen::MatrixXd::Random(kTaps, kSettings);
  Eigen::VectorXd sums(kSettings);
  bench.time([&] {
    for (Eigen::Index i = 0; i < kSettings; ++i) {
      sums[i] = absolute_sum_v(cursors.data(), kCursors, kTaps, settings.col(i).data());
    }
  });
  bench.write("cursors.f64", cursors.data(), cursors.size());
  bench.write("settings.f64", settings.data(), settings.size());
  bench.result["problem"] = {{"taps", kTaps}, {"count", kSettings}};
  bench.result["answer"] = {sums.minCoeff(), sums.maxCoeff(), sums.sum()};
}

void exceeded(Bench& bench) {
  const Disturbance disturbance = disturbance_of(200);
  double level_v = 0.0;
  bench.time([&] { level_v = exceeded_level_v(disturbance, 1e-12); });
  bench.write("symbols.f64", disturbance.symbols_v.data(), disturbance.symbols_v.size());
  bench.result["problem"] = {{"sigma_v", disturbance.sigma_v}, {"probability", 1e-12}};
  bench.result["answer"] = level_v;
}

void proof(Bench& bench, int num_fir) {
  Size size;
  size.num_fir = num_fir;
  const EyeModel model = prepare(link_of(size));
  SearchOptions options;
  options.compare = false;
  Solution solution;
  bench.time([&] { solution = solve(model, options); });
  write_states(bench, model.link);
  Json problem = problem_of(model.link);
  problem["noise_rms_v"] = *model.link.device.receiver.noise_rms_v;
  problem["error_ratio"] = model.link.target.error_ratio;
  problem["amplitude_v"] = model.link.device.transmitter.swings[0].value;
  for (const FirTap& tap : model.link.device.transmitter.fir.taps) {
    problem["taps"].push_back({{"position", tap.position},
                               {"min", tap.min},
                               {"max", tap.max},
                               {"codes", tap.codes.size()}});
  }
  for (const DfeTap& tap : model.link.device.receiver.dfe) problem["dfe_v"].push_back(tap.max);
  bench.result["problem"] = problem;
  bench.result["answer"] = {{"height_v", solution.score.height.worst_case_v},
                            {"proven", solution.proof.kind == Proof::Kind::kProven},
                            {"ctle_index", solution.settings.ctle_index},
                            {"phase_samples", solution.settings.phase_samples}};
}

int run(int argc, char** argv) {
  const std::map<std::string, std::function<void(Bench&)>> jobs = {
      {"read_2_port", [](Bench& b) { read_touchstone(b, 2, 10'000); }},
      {"read_32_port", [](Bench& b) { read_touchstone(b, 32, 2'000); }},
      {"pulses", pulses},
      {"evaluations", evaluations},
      {"exceeded_level", exceeded},
      {"proof_3_taps", [](Bench& b) { proof(b, 3); }},
      {"proof_5_taps", [](Bench& b) { proof(b, 5); }},
  };
  if (argc != 4 || !jobs.contains(argv[1])) {
    std::cerr << "tapwright_jobs JOB REPEATS FOLDER, with JOB one of:";
    for (const auto& [name, job] : jobs) std::cerr << ' ' << name;
    std::cerr << '\n';
    return 2;
  }
  Bench bench{std::stoi(argv[2]), argv[3], Json::object()};
  jobs.at(argv[1])(bench);
  std::cout << bench.result.dump() << '\n';
  return 0;
}

}  // namespace
}  // namespace tapwright::bench

int main(int argc, char** argv) { return tapwright::bench::run(argc, argv); }
