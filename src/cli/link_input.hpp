#pragma once
// What most commands start and end with: a link made ready, and outputs checked and written.

#include <optional>
#include <string>

#include "cli/command.hpp"
#include "tapwright/eye/eye_model.hpp"
#include "tapwright/link/read_link.hpp"
#include "tapwright/link/settings_file.hpp"
#include "tapwright/study/link_source.hpp"

namespace tapwright::cli {

/// Reads the link named by LINK, or the built-in sample when there is none, with every --set
/// applied; tells what is wrong. Empty when the link can't be used.
[[nodiscard]] std::optional<EyeModel> model_from(const Arguments& arguments, Console& console);

/// Every --set as a change. Errors: BadArgument.
[[nodiscard]] std::vector<LinkChange> changes_from(const Arguments& arguments);

/// `path` from the root, so that it can be named in a link file elsewhere.
[[nodiscard]] std::string absolute_path(const std::string& path);
/// The text of that link file with the changes, to be read again with more of them; empty after
/// telling why not.
[[nodiscard]] std::optional<LinkSource> source_from(const Arguments& arguments, Console& console);
[[nodiscard]] std::optional<EyeModel> model_from(const LinkSource& source, Console& console);

/// Checks every output option before the long work; false after telling what is wrong. Two outputs
/// may not both go to standard output.
[[nodiscard]] bool outputs_can_be_written(const Arguments& arguments, Console& console,
                                          const std::vector<std::string>& options);

/// Writes `bytes` where `option` says; "-" is standard output. False after telling why not.
[[nodiscard]] bool write_to(const Arguments& arguments, Console& console, const std::string& option,
                            const std::string& bytes);

/// True when one of the options goes to standard output, which then carries no text report.
[[nodiscard]] bool takes_standard_output(const Arguments& arguments,
                                         const std::vector<std::string>& options);

/// Settings by --settings FILE or by --swing, --fir, --ctle, --gain, --dfe, --phase; what is left
/// out is adapted. Empty after telling what is wrong.
[[nodiscard]] std::optional<Settings> settings_from(const Arguments& arguments, Console& console,
                                                    const EyeModel& model);
[[nodiscard]] std::vector<OptionRow> settings_rows();

}  // namespace tapwright::cli
