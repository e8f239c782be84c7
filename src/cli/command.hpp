#pragma once
// What a command is: rows of options that feed the parser, the help, the manual page and the shell
// completions alike, and a function that runs it.

#include <functional>
#include <iosfwd>
#include <map>
#include <optional>
#include <string>
#include <vector>

#include "cli/run.hpp"
#include "tapwright/base/diagnostic.hpp"
#include "tapwright/base/run_control.hpp"

namespace tapwright::cli {

/// One option or positional argument.
struct OptionRow {
  std::string name;      ///< "--json", or "LINK" for a positional argument
  std::string value;     ///< name of its value, "" for a switch
  std::string fallback;  ///< default as shown; "" = none
  std::string help;
  bool repeats = false;
  bool required = false;
};

/// What the user typed for one command.
class Arguments {
 public:
  explicit Arguments(std::map<std::string, std::vector<std::string>> values)
      : values_(std::move(values)) {}
  [[nodiscard]] bool has(const std::string& name) const { return values_.contains(name); }
  [[nodiscard]] std::optional<std::string> text(const std::string& name) const;
  [[nodiscard]] std::vector<std::string> texts(const std::string& name) const;
  /// The option as a number inside [min, max].
  ///
  /// Errors: BadArgument, naming option, found and wanted.
  [[nodiscard]] std::optional<double> number(const std::string& name, double min, double max) const;
  [[nodiscard]] std::optional<long long> integer(const std::string& name, long long min,
                                                 long long max) const;

 private:
  std::map<std::string, std::vector<std::string>> values_;
};

/// Where a command reads its mood and writes its words.
struct Console {
  std::ostream& out;
  std::ostream& err;
  std::stop_token stop;
  bool quiet = false;
  bool live = false;  ///< stderr is a terminal, so that progress may be drawn
  std::string command;

  /// Writes the notes, one a line, at most twenty; warnings only unless quiet.
  void tell(const std::vector<Diagnostic>& notes) const;
  /// A note that concerns no file.
  void error(const std::string& message) const;
};

/// Thrown by Arguments, caught by run(): something the user typed.
struct BadArgument {
  std::string message;
};

struct Command {
  std::string name;
  std::string summary;  ///< one line
  std::string details;  ///< paragraphs for the manual page and --help
  std::vector<OptionRow> rows;
  std::function<ExitCode(const Arguments&, Console&)> run;
};

/// Every command, in the order of the help.
[[nodiscard]] const std::vector<Command>& commands();

/// Threads, stop and a progress line that shows only on a terminal and only after a second.
[[nodiscard]] RunControl run_control(const Arguments& arguments, const Console& console);

/// Rows that several commands share.
[[nodiscard]] std::vector<OptionRow> common_rows();
[[nodiscard]] OptionRow threads_row();
[[nodiscard]] OptionRow set_row();

// One file a command.
[[nodiscard]] Command solve_command();
[[nodiscard]] Command score_command();
[[nodiscard]] Command audit_command();
[[nodiscard]] Command pulse_command();
[[nodiscard]] Command fit_command();
[[nodiscard]] Command sweep_command();
[[nodiscard]] Command example_command();
[[nodiscard]] Command schema_command();

}  // namespace tapwright::cli
