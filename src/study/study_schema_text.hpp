#pragma once
// A file of this folder, put into the program when it is built.

#include <string_view>

namespace tapwright {

extern const std::string_view kStudySchemaText;

}  // namespace tapwright
