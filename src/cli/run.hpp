#pragma once
#include <iosfwd>
#include <string>
#include <vector>

namespace tapwright::cli {

/// 0 done and the target met, 1 done and the target not met, 2 input that can't be used, 3 a fault
/// of the program.
enum class ExitCode { kOk = 0, kTargetMissed = 1, kBadInput = 2, kInternal = 3 };

/// The whole program. Answers go to `out`, all talk to `err`.
ExitCode run(const std::vector<std::string>& args, std::ostream& out, std::ostream& err);

}  // namespace tapwright::cli
