#pragma once
// Texts made from the option rows: help, manual page, shell completions. One table feeds them all.

#include <string>

#include "cli/command.hpp"

namespace tapwright::cli {

[[nodiscard]] std::string help_of_program();
[[nodiscard]] std::string help_of(const Command& command);
/// Name, version and what it was built with.
[[nodiscard]] std::string version_text();
/// The manual page, in man(7) macros.
[[nodiscard]] std::string manual_page();
/// A completion script for bash.
[[nodiscard]] std::string bash_completions();

}  // namespace tapwright::cli
