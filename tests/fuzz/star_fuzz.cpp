// libFuzzer entry point: any bytes as a star table, and as an indexed star list.

#include <cstddef>
#include <cstdint>
#include <cstdlib>
#include <filesystem>
#include <fstream>
#include <limits>
#include <string>

#include "core/error.h"
#include "io/star_import.h"

namespace {

/// A folder of this process, gone at its end.
struct Folder {
    Folder() {
        std::string pattern =
            (std::filesystem::temp_directory_path() / "straymark-fuzz-XXXXXX").string();
        if (::mkdtemp(pattern.data()) == nullptr) {
            std::abort();
        }
        path = pattern;
    }
    ~Folder() {
        std::error_code ignored;
        std::filesystem::remove_all(path, ignored);
    }
    Folder(const Folder&) = delete;
    Folder& operator=(const Folder&) = delete;
    std::string path;
};

}  // namespace

extern "C" int LLVMFuzzerTestOneInput(const std::uint8_t* data, std::size_t size) {
    using namespace straymark;
    static const Folder folder;
    const std::string source = folder.path + "/stars";
    const std::string list = folder.path + "/list.fits";
    std::ofstream(source, std::ios::binary)
        .write(reinterpret_cast<const char*>(data), static_cast<std::streamsize>(size));
    try {
        io::import_star_list(source, list, {}, nullptr);
    } catch (const InputError&) {
    }
    try {
        const auto stars = io::open_star_list(source);
        static_cast<void>(
            stars->within({10.0, 80.0}, 5.0, "r", std::numeric_limits<double>::infinity()));
        static_cast<void>(stars->coverage({10.0, 80.0}, 5.0));
    } catch (const InputError&) {
    }
    return 0;
}
