#pragma once

#include <string>

#include "core/value.h"

namespace straymark::io {

/// JSON text of a tree. Numbers that are not finite become null; text that is not UTF-8 has its bad
/// bytes replaced. indent < 0: one line.
std::string to_json(const Value& value, int indent = 2);

}  // namespace straymark::io
