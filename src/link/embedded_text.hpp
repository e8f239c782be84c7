#pragma once
// Files of this folder, put into the program when it is built.

#include <string>

namespace tapwright {

[[nodiscard]] std::string link_schema_text();
[[nodiscard]] std::string example_link_text();

}  // namespace tapwright
