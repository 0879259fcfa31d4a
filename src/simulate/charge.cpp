#include "simulate/charge.h"

#include <algorithm>
#include <cmath>

#include "core/random.h"
#include "simulate/streams.h"

namespace straymark::simulate {
namespace {

// Below this mean the normal's shape is no longer good enough for photon noise.
constexpr double kFewPhotons = 100.0;

// A minimum-ionising particle frees some 80 electron-hole pairs per micrometre of silicon (Bichsel
// 1988, Rev. Mod. Phys. 60, 663); detectors and pixels are of the order of 15 micrometres.
constexpr double kTrack_e_per_px = 1200.0;
constexpr double kMedianTrack_px = 6.0;

/// Photon noise about `mean`: exact for few photons, otherwise a normal with the Poisson law's
/// third moment (Cornish-Fisher).
double noisy_photons(RandomStream& stream, double mean) {
    if (mean < kFewPhotons) {
        return mean > 0.0 ? stream.poisson(mean) : 0.0;
    }
    const double z = stream.normal();
    return mean + std::sqrt(mean) * z + (z * z - 1.0) / 6.0;
}

/// One way of the flow: from `start` by `step`, `carry` picked up where a pixel holds more than
/// `full` (a share of its excess), put down where there is room. Returns what is left at the end.
double flow(std::span<double> column, bool backwards, double full, double share, double carry) {
    const std::size_t n = column.size();
    for (std::size_t i = 0; i < n; ++i) {
        double& pixel = column[backwards ? n - 1 - i : i];
        if (pixel > full) {
            const double taken = share * (pixel - full);
            pixel -= taken;
            carry += taken;
        } else {
            const double put = std::min(carry, full - pixel);
            pixel += put;
            carry -= put;
        }
    }
    return carry;
}

/// Returns the charge lost.
double bleed_column(std::span<double> column, double full) {
    const double at_far_end = flow(column, false, full, 0.5, 0.0);
    const double at_near_end = flow(column, true, full, 1.0, at_far_end);
    return flow(column, false, full, 1.0, at_near_end);
}

}  // namespace

void collect_row(const Illumination& what, int row, std::span<float> light,
                 std::span<float> charge) {
    RandomStream response(what.seed, stream_of(Purpose::pixel_response, 0, what.detector, row));
    RandomStream photons(what.seed, stream_of(Purpose::photons, what.exposure, what.detector, row));
    for (std::size_t x = 0; x < light.size(); ++x) {
        const double sensitivity =
            what.pixel_response > 0.0 ? std::max(0.0, 1.0 + what.pixel_response * response.normal())
                                      : 1.0;
        const double expected = sensitivity * (what.even_e + static_cast<double>(light[x]));
        light[x] = static_cast<float>(sensitivity * static_cast<double>(light[x]));
        charge[x] = static_cast<float>(noisy_photons(photons, expected));
    }
}

void add_cosmic_rays(const Illumination& what, double mean_tracks, int width, int height,
                     Image& charge) {
    RandomStream stream(what.seed, stream_of(Purpose::cosmic_rays, what.exposure, what.detector));
    const double tracks = stream.poisson(mean_tracks);
    constexpr double kStep_px = 0.1;
    for (double track = 0.0; track < tracks; track += 1.0) {
        double x = width * stream.uniform() - 0.5;
        double y = height * stream.uniform() - 0.5;
        const double angle = 2.0 * std::numbers::pi * stream.uniform();
        // Most come steeply; the length over the surface has a long tail.
        const double length_px = kMedianTrack_px * std::exp(stream.normal());
        const double e_per_px = kTrack_e_per_px * std::exp(0.5 * stream.normal());
        for (double along = 0.0; along < length_px; along += kStep_px) {
            const auto column = static_cast<int>(std::lround(x));
            const auto row = static_cast<int>(std::lround(y));
            if (column >= 0 && column < width && row >= 0 && row < height) {
                charge[static_cast<std::size_t>(row) * width + column] +=
                    static_cast<float>(e_per_px * kStep_px);
            }
            x += kStep_px * std::cos(angle);
            y += kStep_px * std::sin(angle);
        }
    }
}

double bleed(const Chip& chip, Image& charge) {
    const auto full = static_cast<float>(chip.full_well_e);
    const int columns = chip.bleeds_along_x ? chip.height : chip.width;
    const int length = chip.bleeds_along_x ? chip.width : chip.height;
    const auto index = [&](int column, int place) {
        return chip.bleeds_along_x ? static_cast<std::size_t>(column) * chip.width + place
                                   : static_cast<std::size_t>(place) * chip.width + column;
    };
    std::vector<bool> overfull(columns, false);
    for (int y = 0; y < chip.height; ++y) {
        for (int x = 0; x < chip.width; ++x) {
            if (charge[static_cast<std::size_t>(y) * chip.width + x] > full) {
                overfull[chip.bleeds_along_x ? y : x] = true;
            }
        }
    }
    std::vector<double> buffer(length);
    double lost = 0.0;
    for (int column = 0; column < columns; ++column) {
        if (!overfull[column]) {
            continue;
        }
        for (int place = 0; place < length; ++place) {
            buffer[place] = charge[index(column, place)];
        }
        lost += bleed_column(buffer, full);
        for (int place = 0; place < length; ++place) {
            charge[index(column, place)] = std::min(full, static_cast<float>(buffer[place]));
        }
    }
    return lost;
}

}  // namespace straymark::simulate
