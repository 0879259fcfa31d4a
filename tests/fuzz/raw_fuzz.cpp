#include <cstddef>
#include <cstdint>
#include <string>
#include <sys/mman.h>
#include <unistd.h>

#include "core/error.h"
#include "io/raw_reader.h"
#include "io/raw_support.h"

/// Any bytes as a raw file of a small camera: reading all of it ends, with pixels or an InputError.
/// Compressed images get no decoder: the child is tested by its own tests.
extern "C" int LLVMFuzzerTestOneInput(const std::uint8_t* data, std::size_t size) {
    using namespace straymark;
    const io::FileHandle memory(::memfd_create("fuzz", MFD_CLOEXEC));
    if (::write(memory.get(), data, size) != static_cast<ssize_t>(size)) {
        return 0;
    }
    const std::string path = "/proc/self/fd/" + std::to_string(memory.get());
    const Camera camera = test::small_camera(2);
    const auto reader = io::make_raw_reader(camera, "/bin/false");
    try {
        const RawFile file = reader->inspect(path);
        AmplifierFrame frame;
        for (const int detector : file.detectors) {
            const auto pixels = reader->open(file, detector);
            static_cast<void>(pixels->wcs_cards());
            for (const int amplifier : {0, 1}) {
                try {
                    pixels->read(amplifier, frame);
                } catch (const InputError&) {
                }
            }
        }
    } catch (const InputError&) {
    }
    return 0;
}
