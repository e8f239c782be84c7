#pragma once
#include <iosfwd>
#include <stop_token>
#include <string>
#include <vector>

namespace tapwright::cli {

/// 0 done and the target met, 1 done and the target not met, 2 input that can't be used, 3 a fault
/// of the program, 130 stopped by the user (128 + SIGINT, as shells have it).
enum class ExitCode { kOk = 0, kTargetMissed = 1, kBadInput = 2, kInternal = 3, kStopped = 130 };

/// The whole program. Answers go to `out`, all talk to `err`.
///
/// Errors: none thrown; every failure is an exit code and a line on `err`.
ExitCode run(const std::vector<std::string>& args, std::ostream& out, std::ostream& err,
             std::stop_token stop = {});

}  // namespace tapwright::cli
