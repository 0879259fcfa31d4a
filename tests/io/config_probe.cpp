// Reads camera and site files as the program does and says for each whether it was accepted:
//   config_probe camera|site FILE...
// One line a file: "ok", or "error: " and the message. tests/io/schema_test.py compares this with
// what the published JSON Schemas say.

#include <cstdio>
#include <cstring>
#include <span>
#include <string>

#include "core/error.h"
#include "io/camera_file.h"
#include "io/site_file.h"

namespace {

std::string verdict(bool camera, const char* path) {
    try {
        if (camera) {
            (void)straymark::io::load_camera(path);
        } else {
            (void)straymark::io::load_site(path);
        }
        return "ok";
    } catch (const straymark::InputError& error) {
        return std::string("error: ") + error.what();
    }
}

}  // namespace

int main(int argc, char** argv) {
    const std::span<char*> arguments(argv, static_cast<std::size_t>(argc));
    if (arguments.size() < 2) {
        return 2;
    }
    const bool camera = std::strcmp(arguments[1], "camera") == 0;
    for (const char* path : arguments.subspan(2)) {
        std::puts(verdict(camera, path).c_str());
    }
    return 0;
}
