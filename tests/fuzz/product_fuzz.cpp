// libFuzzer target: any bytes given as a calibration product are read or refused, nothing else.

#include <cstddef>
#include <cstdint>
#include <string>
#include <sys/mman.h>
#include <unistd.h>

#include "core/error.h"
#include "io/product_file.h"

extern "C" int LLVMFuzzerTestOneInput(const std::uint8_t* data, std::size_t size) {
    // A file without a name on any disk; products are read by path.
    const int descriptor = ::memfd_create("product", MFD_CLOEXEC);
    if (descriptor < 0 || ::write(descriptor, data, size) != static_cast<ssize_t>(size)) {
        return -1;
    }
    try {
        static_cast<void>(
            straymark::io::read_product("/proc/self/fd/" + std::to_string(descriptor)));
    } catch (const straymark::InputError&) {
        // the one way to say no
    }
    ::close(descriptor);
    return 0;
}
