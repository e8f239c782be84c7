#include "cli/help.hpp"

#include <Eigen/Core>
#include <algorithm>

namespace tapwright::cli {
namespace {

constexpr std::size_t kWidth = 80;

/// `text` in lines of at most kWidth, each behind `indent` spaces; empty lines part paragraphs.
std::string wrapped(const std::string& text, std::size_t indent) {
  std::string out;
  std::string line;
  const auto flush = [&] {
    if (!line.empty()) out += std::string(indent, ' ') + line + '\n';
    line.clear();
  };
  std::size_t at = 0;
  while (at < text.size()) {
    if (text[at] == '\n') {
      flush();
      if (text.compare(at, 2, "\n\n") == 0) out += '\n';
      while (at < text.size() && text[at] == '\n') ++at;
      continue;
    }
    const std::size_t end = std::min(text.find_first_of(" \n", at), text.size());
    const std::string word = text.substr(at, end - at);
    if (!line.empty() && indent + line.size() + 1 + word.size() > kWidth) flush();
    line += (line.empty() ? "" : " ") + word;
    at = end;
    while (at < text.size() && text[at] == ' ') ++at;
  }
  flush();
  return out;
}

bool is_option(const OptionRow& row) { return row.name.starts_with("--"); }

std::string usage(const Command& command) {
  std::string text = "tapwright " + command.name;
  for (const OptionRow& row : command.rows) {
    if (is_option(row)) continue;
    text += row.required ? " " + row.name : " [" + row.name + "]";
    if (row.repeats) text += "...";
  }
  return text + " [options]";
}

std::string spelled(const OptionRow& row) {
  return row.value.empty() ? row.name : row.name + " " + row.value;
}

std::string help_text(const OptionRow& row) {
  return row.fallback.empty() ? row.help : row.help + " (default: " + row.fallback + ")";
}

/// Text made safe for roff: backslashes, and a dot or quote at the start of a line.
std::string roff(const std::string& text) {
  std::string out;
  for (std::size_t i = 0; i < text.size(); ++i) {
    const bool at_start = i == 0 || text[i - 1] == '\n';
    if (at_start && (text[i] == '.' || text[i] == '\'')) out += "\\&";
    if (text[i] == '\\') out += "\\e";
    else if (text[i] == '-') out += "\\-";
    else if (text[i] == '\n' && text.compare(i, 2, "\n\n") == 0) { out += "\n.PP\n"; ++i; }
    else out += text[i];
  }
  return out;
}

constexpr const char* kJob =
    "Finds the transmitter FIR, receiver CTLE and DFE settings that open the eye of a serial link "
    "most, and proves how good they are.";

constexpr const char* kExitCodes =
    "0  done, and the target is met\n1  done, and the target is not met\n"
    "2  input that can't be used, or output that can't be written\n3  a fault of the program\n"
    "130  stopped by Ctrl-C\n";

}  // namespace

std::string help_of_program() {
  std::string text = wrapped(kJob, 0) + "\nUse: tapwright COMMAND [options]\n\nCommands\n";
  for (const Command& command : commands()) {
    text += "  " + command.name + std::string(10 - command.name.size(), ' ') + command.summary + '\n';
  }
  text += "\ntapwright COMMAND --help tells the options of one command. Others: --version,\n"
          "--manual (the manual page), --completions (for bash).\n\nExit codes\n";
  std::string codes = kExitCodes;
  std::size_t at = 0;
  while (at < codes.size()) {
    const std::size_t end = codes.find('\n', at);
    text += "  " + codes.substr(at, end - at) + '\n';
    at = end + 1;
  }
  return text;
}

std::string help_of(const Command& command) {
  std::string text = "Use: " + usage(command) + "\n\n" + wrapped(command.summary + ".", 0);
  if (!command.details.empty()) text += '\n' + wrapped(command.details, 0);
  text += "\nArguments and options\n";
  std::size_t column = 0;
  for (const OptionRow& row : command.rows) column = std::max(column, spelled(row).size() + 4);
  column = std::min<std::size_t>(column, 26);
  for (const OptionRow& row : command.rows) {
    std::string head = "  " + spelled(row);
    const std::string body = wrapped(help_text(row), column);
    if (head.size() + 2 > column) text += head + '\n' + body;
    else text += head + body.substr(head.size());
  }
  return text;
}

std::string version_text() {
  std::string text = "tapwright " TAPWRIGHT_VERSION "\n";
#if defined(__clang__)
  text += "compiler  Clang " __clang_version__ "\n";
#else
  text += "compiler  GCC " __VERSION__ "\n";
#endif
  text += "build     " TAPWRIGHT_BUILD_TYPE "\n";
  text += "Eigen     " + std::to_string(EIGEN_WORLD_VERSION) + "." +
          std::to_string(EIGEN_MAJOR_VERSION) + "." + std::to_string(EIGEN_MINOR_VERSION) + "\n";
  return text;
}

std::string manual_page() {
  std::string text = ".TH TAPWRIGHT 1 \"\" \"tapwright " TAPWRIGHT_VERSION
                     "\" \"User Commands\"\n.SH NAME\ntapwright \\- equalizer tap optimizer for serial "
                     "links\n.SH SYNOPSIS\n.B tapwright\n.I COMMAND\n[options]\n.SH DESCRIPTION\n" +
                     roff(kJob) + "\n.SH COMMANDS\n";
  for (const Command& command : commands()) {
    text += ".SS \"" + roff(usage(command)) + "\"\n" + roff(command.summary) + ".\n";
    if (!command.details.empty()) text += ".PP\n" + roff(command.details) + "\n";
    for (const OptionRow& row : command.rows) {
      text += ".TP\n.B " + roff(row.name) +
              (row.value.empty() ? "" : " \\fI" + roff(row.value) + "\\fR") + "\n" +
              roff(help_text(row)) + "\n";
    }
  }
  text += ".SH EXIT STATUS\n.nf\n" + roff(kExitCodes) +
          ".fi\n.SH ENVIRONMENT\n.TP\n.B NO_COLOR\nwhen set and not empty, nothing is drawn on the "
          "terminal\n.SH CAUTIONS\nA prediction is no measurement: confirm with an error\\-ratio test, "
          "and keep launch and input amplitudes inside the absolute limits of the devices.\n";
  return text;
}

std::string bash_completions() {
  std::string names;
  std::string cases;
  for (const Command& command : commands()) {
    names += (names.empty() ? "" : " ") + command.name;
    std::string options;
    for (const OptionRow& row : command.rows) {
      if (is_option(row)) options += (options.empty() ? "" : " ") + row.name;
    }
    cases += "    " + command.name + ") words=\"" + options + "\" ;;\n";
  }
  return "# bash completion for tapwright\n_tapwright() {\n"
         "  local current=${COMP_WORDS[COMP_CWORD]} words=\n"
         "  if [ \"$COMP_CWORD\" -eq 1 ]; then\n"
         "    COMPREPLY=($(compgen -W \"" + names +
         " --help --version --manual --completions\" -- \"$current\")); return\n  fi\n"
         "  case ${COMP_WORDS[1]} in\n" + cases + "  esac\n"
         "  case $current in\n    -*) COMPREPLY=($(compgen -W \"$words\" -- \"$current\")) ;;\n"
         "    *) COMPREPLY=($(compgen -f -- \"$current\")) ;;\n  esac\n}\n"
         "complete -o filenames -F _tapwright tapwright\n";
}

}  // namespace tapwright::cli
