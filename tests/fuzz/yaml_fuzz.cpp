// libFuzzer entry: any bytes as a camera or site file's YAML. Bad input may only end in InputError.

#include <cstddef>
#include <cstdint>
#include <string>

#include "core/error.h"
#include "io/camera_detectors.h"
#include "io/yaml.h"

namespace {

/// Reads every value of a tree in every way.
void visit(const straymark::io::YamlValue& value) {
    const auto attempt = [](auto&& read) {
        try {
            read();
        } catch (const straymark::InputError&) {
            // the expected outcome of most reads
        }
    };
    attempt([&] { (void)value.number({-1e6, 1e6, "mm"}); });
    attempt([&] { (void)value.integer(-100, 100); });
    attempt([&] { (void)value.boolean(); });
    attempt([&] { (void)value.text(); });
    attempt([&] { (void)value.choice<int>({{"x", 1}, {"transfer", 2}}); });
    attempt([&] { (void)value.mapping({"format", "name", "focal_length_mm"}); });
    attempt([&] {
        for (const auto& [key, child] : value.entries(0, 1000)) {
            visit(child);
        }
    });
    attempt([&] {
        for (const straymark::io::YamlValue& item : value.items(0, 1000)) {
            visit(item);
        }
    });
}

}  // namespace

extern "C" int LLVMFuzzerTestOneInput(const std::uint8_t* data, std::size_t size) {
    try {
        const std::string text(reinterpret_cast<const char*>(data), size);
        const straymark::io::YamlFile file("fuzz.yaml", text);
        visit(file.root());
        file.require_format("straymark-camera", 1);
        const straymark::io::YamlMapping top =
            file.root().mapping({"layouts", "detectors", "format"});
        (void)straymark::io::read_detectors(top.required("layouts"), top.required("detectors"));
    } catch (const straymark::InputError&) {
        // bad input, said so
    }
    return 0;
}
