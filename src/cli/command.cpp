#include "cli/command.hpp"

#include <algorithm>
#include <chrono>
#include <memory>
#include <mutex>
#include <ostream>
#include <thread>

#include "tapwright/base/text.hpp"

namespace tapwright::cli {

std::optional<std::string> Arguments::text(const std::string& name) const {
  const auto found = values_.find(name);
  if (found == values_.end() || found->second.empty()) return std::nullopt;
  return found->second.back();
}

std::vector<std::string> Arguments::texts(const std::string& name) const {
  const auto found = values_.find(name);
  return found == values_.end() ? std::vector<std::string>{} : found->second;
}

std::optional<double> Arguments::number(const std::string& name, double min, double max) const {
  const auto given = text(name);
  if (!given) return std::nullopt;
  const auto value = parse_number(*given);
  if (!value || *value < min || *value > max) {
    throw BadArgument{name + ": found " + shown_text(*given) + ", wanted a number from " +
                      exact(min) + " to " + exact(max)};
  }
  return value;
}

std::optional<long long> Arguments::integer(const std::string& name, long long min,
                                            long long max) const {
  const auto given = text(name);
  if (!given) return std::nullopt;
  const auto value = parse_integer(*given);
  if (!value || *value < min || *value > max) {
    throw BadArgument{name + ": found " + shown_text(*given) + ", wanted a whole number from " +
                      std::to_string(min) + " to " + std::to_string(max)};
  }
  return value;
}

void Console::tell(const std::vector<Diagnostic>& notes) const {
  constexpr std::size_t kMost = 20;
  std::size_t told = 0;
  std::size_t left = 0;
  for (const Diagnostic& note : notes) {
    if (quiet && note.severity == Diagnostic::Severity::kWarning) continue;
    if (told < kMost) {
      err << to_string(note) << '\n';
      ++told;
    } else {
      ++left;
    }
  }
  if (left > 0) err << "... and " << left << " more\n";
}

void Console::error(const std::string& message) const {
  err << "tapwright " << command << ": error: " << message << '\n';
}

std::vector<OptionRow> common_rows() {
  return {{"--quiet", "", "", "no warnings, no progress; errors only", false, false},
          {"--help", "", "", "this help", false, false}};
}

OptionRow threads_row() {
  return {"--threads", "N", "all cores", "threads to work with; the answer is the same for any number",
          false, false};
}

OptionRow set_row() {
  return {"--set", "KEY=VALUE", "",
          "take VALUE (JSON) for one key of the link file, such as "
          "--set channel.line.length_m=4.5; may repeat",
          true, false};
}

RunControl run_control(const Arguments& arguments, const Console& console) {
  RunControl control;
  control.stop = console.stop;
  const long long cores = std::max(1u, std::thread::hardware_concurrency());
  control.num_threads =
      static_cast<int>(arguments.integer("--threads", 1, 256).value_or(std::min(cores, 256LL)));
  if (!console.live || console.quiet) return control;

  using Clock = std::chrono::steady_clock;
  struct Line {
    std::mutex mutex;
    Clock::time_point start = Clock::now();
    Clock::time_point last = start;
  };
  control.progress = [line = std::make_shared<Line>(), &err = console.err](double share,
                                                                          std::string_view stage) {
    const std::scoped_lock lock(line->mutex);
    const auto now = Clock::now();
    using std::chrono::duration;
    const double spent_s = duration<double>(now - line->start).count();
    const bool ended = share >= 1.0;
    if (spent_s < 1.0 || (!ended && duration<double>(now - line->last).count() < 0.1)) return;
    line->last = now;
    if (ended) {
      err << "\r\x1b[K" << std::flush;
      return;
    }
    err << "\r\x1b[K" << stage << "  " << fixed(100.0 * share, 0) << " %";
    if (share > 0.02) err << ", " << fixed(spent_s * (1.0 - share) / share, 0) << " s left";
    err << std::flush;
  };
  return control;
}

const std::vector<Command>& commands() {
  static const std::vector<Command> all = {solve_command(),
                                           score_command(),
                                           audit_command(),
                                           sweep_command(),
                                           pulse_command(),
                                           fit_command(),
                                           example_command(),
                                           schema_command()};
  return all;
}

}  // namespace tapwright::cli
