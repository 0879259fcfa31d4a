#pragma once

#include <cstdint>
#include <string>
#include <vector>

#include "camera/camera.h"
#include "support/fits_builder.h"

/// A small camera, and raw files of it, for the tests of reading.

namespace straymark::test {

inline Amplifier half_detector(const std::string& id, const std::string& suffix, PixelBox section,
                               Corner corner, int prescan) {
    Amplifier amplifier;
    amplifier.id = id;
    amplifier.suffix = suffix;
    amplifier.readout = {section, corner, SerialAxis::x, prescan};
    return amplifier;
}

/// `detectors` detectors of 8 x 6 pixels, two amplifiers each: a01 the left half, read from the
/// lower left; a02 the right half, read from the upper right.
inline Camera small_camera(int detectors = 1, int prescan = 0) {
    Camera camera;
    camera.name = "petrel";
    camera.filters["r"] = {622.0, 138.0, 25.9, 0.1};
    camera.types = {{ExposureType::sky, {"OBJECT"}}, {ExposureType::dark, {"DARK"}}};
    camera.readout_s = 20.0;
    camera.headers.id = "OBS_ID";
    camera.headers.type = "IMAGETYP";
    camera.headers.start = {"MJD-OBS", {}};
    camera.headers.exposure = "EXPTIME";
    camera.headers.filter = "FILTER";
    camera.headers.ra = "RA";
    camera.headers.dec = "DEC";
    camera.raw.hdu = "{detector}_{amplifier}";
    camera.raw.data = "DATASEC";
    camera.raw.order = PixelOrder::readout;
    for (int d = 0; d < detectors; ++d) {
        Detector detector;
        detector.id = fmt::format("d{}", d + 1);
        detector.width = 8;
        detector.height = 6;
        detector.amplifiers = {
            half_detector("a01", "A", {0, 0, 4, 6}, Corner::lower_left, prescan),
            half_detector("a02", "B", {4, 0, 8, 6}, Corner::upper_right, prescan)};
        camera.detectors.push_back(detector);
    }
    return camera;
}

inline std::vector<std::string> exposure_cards(const std::string& id = "n1-001") {
    return {text_card("OBS_ID", id), text_card("IMAGETYP", "object"), card("MJD-OBS", "60310.25"),
            card("EXPTIME", "30.0"), text_card("FILTER", "r"),        card("RA", "150.5"),
            card("DEC", "-30.25")};
}

/// width x height pixels, value 1000 * (y + 1) + (x + 1), FITS pixel (1, 1) first: each names its
/// own place.
inline std::vector<std::int16_t> place_pixels(int width, int height) {
    std::vector<std::int16_t> pixels;
    for (int y = 1; y <= height; ++y) {
        for (int x = 1; x <= width; ++x) {
            pixels.push_back(static_cast<std::int16_t>(1000 * y + x));
        }
    }
    return pixels;
}

}  // namespace straymark::test
