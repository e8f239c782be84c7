#pragma once
#include <string>
#include <string_view>

namespace tapwright {

/// Text made safe between tags and in quoted attributes of HTML, SVG and XML. Control characters
/// that XML forbids and broken UTF-8 become U+FFFD; bidirectional controls are isolated by the page.
[[nodiscard]] std::string markup_escaped(std::string_view text);

/// JSON text made safe inside a <script> element: '<', '>', '&', U+2028 and U+2029 become \u
/// escapes, which leaves the JSON's meaning.
[[nodiscard]] std::string script_escaped(std::string_view json);

}  // namespace tapwright
