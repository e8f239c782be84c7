// `example` and `schema`: texts that the program carries.

#include <ostream>

#include "cli/command.hpp"
#include "tapwright/link/read_link.hpp"

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
  return {"schema", "print the JSON Schema of link files, every key documented", "", common_rows(),
          [](const Arguments&, Console& console) {
            console.out << link_schema();
            return ExitCode::kOk;
          }};
}

}  // namespace tapwright::cli
