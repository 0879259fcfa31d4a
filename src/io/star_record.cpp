#include "io/star_record.h"

#include <cassert>

#include "io/byte_order.h"

namespace straymark::io {

void store_star_numbers(const StarRecord& star, std::span<std::byte> to) {
    assert(to.size() == star_number_bytes(star.mags.size()));
    std::byte* at = to.data();
    for (const double value : {star.position.ra_deg, star.position.dec_deg}) {
        store_big_endian(at, value);
        at += sizeof value;
    }
    const auto store = [&at](float value) {
        store_big_endian(at, value);
        at += sizeof value;
    };
    store(star.epoch);
    store(star.pm_ra_mas_yr);
    store(star.pm_dec_mas_yr);
    for (const float mag : star.mags) {
        store(mag);
    }
}

SkyPoint stored_position(const std::byte* numbers) {
    return {load_big_endian<double>(numbers), load_big_endian<double>(numbers + sizeof(double))};
}

}  // namespace straymark::io
