#include "cli/run.hpp"

#include <unistd.h>

#include <CLI/CLI.hpp>
#include <algorithm>
#include <cstdlib>
#include <iostream>
#include <new>

#include "cli/command.hpp"
#include "cli/help.hpp"
#include "tapwright/base/text.hpp"

namespace tapwright::cli {
namespace {

/// CLI11 only splits the words; texts and numbers are checked by the commands, in our words.
std::optional<Arguments> parse(const Command& command, std::vector<std::string> words,
                               Console& console) {
  CLI::App app;
  app.set_help_flag();
  std::map<std::string, std::vector<std::string>> texts;
  std::map<std::string, std::string> places;
  std::map<std::string, bool> switches;
  for (const OptionRow& row : command.rows) {
    if (row.value.empty() && row.name.starts_with("--")) {
      app.add_flag(row.name, switches[row.name]);
    } else if (!row.name.starts_with("--") && !row.repeats) {
      app.add_option(row.name, places[row.name])->required(row.required);
    } else {
      auto* option = app.add_option(row.name, texts[row.name]);
      option->required(row.required);
      if (!row.repeats) option->expected(1)->take_last();
      else option->expected(1, -1)->allow_extra_args(!row.name.starts_with("--"));
    }
  }
  try {
    std::reverse(words.begin(), words.end());  // CLI11 takes them from the back
    app.parse(words);
  } catch (const CLI::ParseError& problem) {
    std::string message = problem.what();
    for (char& c : message) c = c == '\n' ? ' ' : c;
    for (const std::string& word : words) {
      if (!word.starts_with("--")) continue;
      std::vector<std::string> names;
      for (const OptionRow& row : command.rows) names.push_back(row.name);
      const std::string name = word.substr(0, word.find('='));
      if (std::find(names.begin(), names.end(), name) != names.end()) continue;
      message = "no option " + printable_text(name, 60);
      if (const auto near = nearest_word(name, names)) message += "; did you mean " + *near + "?";
    }
    console.error(message);
    return std::nullopt;
  }
  for (auto it = texts.begin(); it != texts.end();) {
    it = it->second.empty() ? texts.erase(it) : std::next(it);
  }
  for (const auto& [name, word] : places) {
    if (!word.empty()) texts[name] = {word};
  }
  for (const auto& [name, on] : switches) {
    if (on) texts[name] = {};
  }
  return Arguments(std::move(texts));
}

ExitCode run_command(const Command& command, const std::vector<std::string>& words,
                     Console& console) {
  if (std::find(words.begin(), words.end(), "--help") != words.end()) {
    console.out << help_of(command);
    return ExitCode::kOk;
  }
  const auto arguments = parse(command, words, console);
  if (!arguments) return ExitCode::kBadInput;
  console.quiet = arguments->has("--quiet");
  return command.run(*arguments, console);
}

ExitCode dispatch(const std::vector<std::string>& args, Console& console) {
  if (args.empty()) {
    console.err << help_of_program();
    return ExitCode::kBadInput;
  }
  if (args[0] == "--help" || args[0] == "-h" || args[0] == "help") {
    console.out << help_of_program();
    return ExitCode::kOk;
  }
  if (args[0] == "--version") {
    console.out << version_text();
    return ExitCode::kOk;
  }
  if (args[0] == "--manual") {
    console.out << manual_page();
    return ExitCode::kOk;
  }
  if (args[0] == "--completions") {
    console.out << bash_completions();
    return ExitCode::kOk;
  }
  std::vector<std::string> names;
  for (const Command& command : commands()) {
    if (command.name == args[0]) {
      console.command = command.name;
      return run_command(command, {args.begin() + 1, args.end()}, console);
    }
    names.push_back(command.name);
  }
  console.err << "tapwright: error: no command " << shown_text(args[0]);
  if (const auto near = nearest_word(args[0], names)) console.err << "; did you mean " << *near << '?';
  console.err << " (tapwright --help lists them)\n";
  return ExitCode::kBadInput;
}

}  // namespace

ExitCode run(const std::vector<std::string>& args, std::ostream& out, std::ostream& err,
             std::stop_token stop) {
  // NO_COLOR also asks for no drawing, see no-color.org.
  const char* no_color = std::getenv("NO_COLOR");
  const bool plain = no_color != nullptr && *no_color != '\0';
  Console console{out, err, stop, false, &err == &std::cerr && !plain && isatty(STDERR_FILENO) == 1,
                  ""};
  ExitCode code = ExitCode::kInternal;
  try {
    code = dispatch(args, console);
  } catch (const BadArgument& problem) {
    console.error(problem.message);
    return ExitCode::kBadInput;
  } catch (const std::bad_alloc&) {
    console.error("out of memory");
    return ExitCode::kBadInput;
  } catch (const std::exception& fault) {
    console.error(std::string("a fault of the program: ") + fault.what());
    return ExitCode::kInternal;
  }
  out.flush();
  if (!out) {
    console.error("standard output: could not be written whole (closed pipe or full disk)");
    return ExitCode::kBadInput;
  }
  return code;
}

}  // namespace tapwright::cli
