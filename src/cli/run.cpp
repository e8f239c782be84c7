#include "cli/run.hpp"

#include <ostream>

namespace tapwright::cli {

ExitCode run(const std::vector<std::string>& args, std::ostream& out, std::ostream& err) {
  if (args.size() == 1 && args[0] == "--version") {
    out << "tapwright " TAPWRIGHT_VERSION "\n";
    return ExitCode::kOk;
  }
  err << "tapwright: error: no command\n";
  return ExitCode::kBadInput;
}

}  // namespace tapwright::cli
