// `example` and `schema`: texts that the program carries.

#include <ostream>

#include "cli/command.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/link/read_link.hpp"
#include "tapwright/study/study_file.hpp"

namespace tapwright::cli {

Command example_command() {
  return {"example", "print a commented link file to start from",
          "It is the link that the other commands take when no file is named.", common_rows(),
          [](const Arguments&, Console& console) {
            console.out << example_link();
            return ExitCode::kOk;
          }};
}

Command schema_command() {
  std::vector<OptionRow> rows = {{"WHAT", "", "link", "link or study"}};
  for (OptionRow& row : common_rows()) rows.push_back(std::move(row));
  return {"schema", "print the JSON Schema of link or study files, every key documented", "", rows,
          [](const Arguments& arguments, Console& console) {
            const std::string what = arguments.text("WHAT").value_or("link");
            if (what != "link" && what != "study") {
              throw BadArgument{"found " + shown_text(what) + ", wanted link or study"};
            }
            console.out << (what == "link" ? link_schema() : study_schema());
            return ExitCode::kOk;
          }};
}

}  // namespace tapwright::cli
