#include <cstddef>
#include <cstdint>
#include <cstdlib>
#include <string_view>

#include "io/fits_section.h"

/// Any text as a section: what is read is written and read again as the same section.
extern "C" int LLVMFuzzerTestOneInput(const std::uint8_t* data, std::size_t size) {
    using namespace straymark::io;
    const auto section = parse_section({reinterpret_cast<const char*>(data), size});
    if (section) {
        if (section->box().empty() || parse_section(to_string(*section)) != section) {
            std::abort();
        }
    }
    return 0;
}
