#include <cstddef>
#include <cstdint>
#include <string>

#include "core/error.h"
#include "io/fits_cards.h"
#include "io/fits_scan.h"
#include "io/header_reader.h"
#include "io/raw_support.h"

/// Any bytes as a header: reading it ends, with values or an InputError.
extern "C" int LLVMFuzzerTestOneInput(const std::uint8_t* data, std::size_t size) {
    using namespace straymark;
    std::string cards(reinterpret_cast<const char*>(data), size);
    cards.resize((size + io::kCardBytes - 1) / io::kCardBytes * io::kCardBytes, ' ');
    const io::FitsHeader header(cards);
    for (std::size_t i = 0; i < header.size(); ++i) {
        if (const auto value = io::card_value(header.card(i))) {
            static_cast<void>(value->number());
            static_cast<void>(value->integer());
            static_cast<void>(io::printable(value->text));
        }
    }
    try {
        static_cast<void>(io::described_hdu(header, size % 2 == 0, "fuzz", "HDU 0"));
    } catch (const InputError&) {
    }
    try {
        static_cast<void>(
            io::read_exposure_header(test::small_camera(), "fuzz", {{"HDU 0", header}}));
    } catch (const InputError&) {
    }
    return 0;
}
