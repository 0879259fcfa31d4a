#pragma once

#include <algorithm>
#include <cmath>
#include <fmt/format.h>
#include <random>
#include <string>
#include <vector>

#include "io/star_import.h"
#include "sky/projection.h"

namespace straymark::test {

struct RowOfStar {
    std::string id;
    SkyPoint position;
    double mag = 0.0;
};

/// Stars spread over the whole sky and, as many again, near RA 0 and both poles.
inline std::vector<RowOfStar> random_stars(int count, unsigned seed) {
    std::mt19937 random(seed);
    std::uniform_real_distribution<double> unit(0.0, 1.0);
    std::vector<RowOfStar> out;
    for (int i = 0; i < count; ++i) {
        SkyPoint place{360.0 * unit(random), std::asin(2.0 * unit(random) - 1.0) * 180.0 / M_PI};
        if (i % 4 == 1) {
            place.ra_deg = std::fmod(359.5 + unit(random), 360.0);
        } else if (i % 4 == 2) {
            place.dec_deg = (i % 8 == 2 ? 1.0 : -1.0) * (90.0 - 2.0 * unit(random));
        }
        // Decimals that a CSV file keeps.
        place = {std::round(place.ra_deg * 1e6) / 1e6, std::round(place.dec_deg * 1e6) / 1e6};
        out.push_back({fmt::format("S{}", i),
                       {place.ra_deg < 360.0 ? place.ra_deg : 0.0, place.dec_deg},
                       std::round(1000.0 * (5.0 + 15.0 * unit(random))) / 1000.0});
    }
    return out;
}

inline std::string csv_of(const std::vector<RowOfStar>& stars) {
    std::string text = "id,ra,dec,mag\n";
    for (const RowOfStar& star : stars) {
        text += fmt::format("{},{},{},{}\n", star.id, star.position.ra_deg, star.position.dec_deg,
                            star.mag);
    }
    return text;
}

inline io::StarImportReport import_stars(const std::string& from, const std::string& to,
                                         const io::StarImportSettings& settings = {}) {
    return io::import_star_list(from, to, settings, nullptr);
}

}  // namespace straymark::test
