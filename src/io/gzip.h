#pragma once

#include <cstdint>

#include "io/files.h"

namespace straymark::io {

/// Do these bytes begin as gzip (RFC 1952) does? The name of the file says nothing.
bool is_gzip(const InputFile& file);

/// The expanded bytes in a temporary file without a name, under the name of `file` in messages.
/// Throws InputError where they exceed limit_bytes (nothing beyond is written), or are damaged or
/// cut off; SystemError where there is no room for them.
InputFile expanded(const InputFile& file, std::int64_t limit_bytes);

}  // namespace straymark::io
