#pragma once
// Files of this folder, put into the program when it is built.

#include <string_view>

namespace tapwright {

extern const std::string_view kLinkSchemaText;
extern const std::string_view kExampleLinkText;

}  // namespace tapwright
