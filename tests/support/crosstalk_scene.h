#pragma once

#include <cstdint>
#include <map>
#include <random>
#include <string>
#include <vector>

#include "artifacts/artifact.h"
#include "camera/camera.h"
#include "exposure/digest.h"
#include "support/test_shapes.h"

/// A small camera with amplifiers in all corners, both serial axes and a prescan, a digest of
/// random blobs for it, and a product: the ground on which crosstalk is tested.

namespace straymark::test {

constexpr int kSide = 120;  ///< of a detector
constexpr int kPrescan = 5;
constexpr double kSaturation = 60000.0;

inline Camera scene_camera() {
    Camera camera;
    camera.name = "scene";
    camera.telescope.focal_length_mm = 8000.0;
    camera.focal_plane.pixel_um = 15.0;
    const PixelBox quarter[] = {
        {0, 0, 60, 60}, {60, 0, 120, 60}, {0, 60, 60, 120}, {60, 60, 120, 120}};
    const Corner corners[] = {Corner::lower_left, Corner::lower_right, Corner::upper_left,
                              Corner::upper_right};
    for (int d = 0; d < 2; ++d) {
        Detector detector;
        detector.id = d == 0 ? "d1" : "d2";
        detector.width = detector.height = kSide;
        detector.board = d == 0 ? "b1" : "b2";
        detector.serial = d == 0 ? SerialAxis::x : SerialAxis::y;
        for (int a = 0; a < 4; ++a) {
            Amplifier amplifier;
            amplifier.id = "a" + std::to_string(a + 1);
            amplifier.readout = ReadoutGeometry(quarter[a], corners[a], detector.serial, kPrescan);
            amplifier.clock = "main";
            amplifier.gain_e_per_adu = 1.0 + 0.2 * a + 0.1 * d;
            amplifier.read_noise_e = 5.0;
            amplifier.saturation_adu = kSaturation;
            detector.amplifiers.push_back(amplifier);
        }
        camera.detectors.push_back(detector);
    }
    return camera;
}

/// Pixels of one amplifier as a dense picture in clock order, ticks from the first data tick.
using ClockPicture = std::vector<std::vector<float>>;  // [row][tick]

inline AmplifierDigest digest_of_picture(const ClockPicture& picture, double noise_adu,
                                         double floor_adu) {
    AmplifierDigest digest;
    digest.state = AmplifierState::ok;
    digest.noise_adu = noise_adu;
    digest.floor_adu = floor_adu;
    for (int row = 0; row < static_cast<int>(picture.size()); ++row) {
        const auto& line = picture[static_cast<std::size_t>(row)];
        for (int t = 0; t < static_cast<int>(line.size());) {
            if (static_cast<double>(line[static_cast<std::size_t>(t)]) < floor_adu) {
                ++t;
                continue;
            }
            ReadoutRun run{row, t + kPrescan, 0, static_cast<std::uint32_t>(digest.values.size())};
            int clipped_from = -1;
            for (; t < static_cast<int>(line.size()) &&
                   static_cast<double>(line[static_cast<std::size_t>(t)]) >= floor_adu;
                 ++t, ++run.length) {
                const float value = line[static_cast<std::size_t>(t)];
                digest.values.push_back(value);
                const bool clipped = static_cast<double>(value) >= kSaturation;
                if (clipped && clipped_from < 0) {
                    clipped_from = t;
                }
                if (!clipped && clipped_from >= 0) {
                    digest.saturated.push_back({row, clipped_from + kPrescan, t - clipped_from});
                    clipped_from = -1;
                }
            }
            if (clipped_from >= 0) {
                digest.saturated.push_back({row, clipped_from + kPrescan, t - clipped_from});
            }
            digest.runs.push_back(run);
        }
    }
    return digest;
}

struct Scene {
    Camera camera = scene_camera();
    std::map<std::pair<int, int>, ClockPicture> pictures;  ///< (detector, amplifier)
    ExposureDigest digest;
    Product product;
};

/// A product with these pair rows; every column a crosstalk product has.
struct PairRow {
    std::string victim, source;
    double coefficient = 0.0, error = 0.0;
    std::string status = "detected";
};

inline Product product_of(const std::vector<PairRow>& rows) {
    Product product;
    product.path = "scene.fits";
    product.kind = "crosstalk";
    product.camera = "scene";
    product.version = "1";
    ProductTable pairs;
    pairs.rows = rows.size();
    std::vector<std::string> victim, source, status;
    std::vector<double> coefficient, error;
    for (const PairRow& row : rows) {
        victim.push_back(row.victim);
        source.push_back(row.source);
        coefficient.push_back(row.coefficient);
        error.push_back(row.error);
        status.push_back(row.status);
    }
    pairs.columns = {{"victim", victim},
                     {"source", source},
                     {"coefficient", coefficient},
                     {"error", error},
                     {"status", status}};
    product.tables["PAIRS"] = pairs;
    ProductTable priors;
    priors.rows = 3;
    priors.columns = {{"stratum", std::vector<std::string>{"device", "board", "rest"}},
                      {"mean", std::vector<double>{0.0, 0.0, 0.0}},
                      {"spread", std::vector<double>{1e-4, 1e-5, 1e-6}}};
    product.tables["PRIORS"] = priors;
    return product;
}

inline std::vector<std::string> amplifier_names(const Camera& camera) {
    std::vector<std::string> names;
    for (const Detector& detector : camera.detectors) {
        for (const Amplifier& amplifier : detector.amplifiers) {
            names.push_back(detector.id + "/" + amplifier.id);
        }
    }
    return names;
}

/// Random blobs, some clipped, some at the borders, on every amplifier; all pairs measured, with
/// random coefficients of either sign; lags, bends and clipped values for some.
inline Scene random_scene(unsigned seed, double floor_adu = 50.0, double noise_adu = 10.0) {
    Scene scene;
    std::mt19937 random(seed);
    std::uniform_real_distribution<double> uniform(0.0, 1.0);
    scene.digest.detectors.resize(2);
    for (int d = 0; d < 2; ++d) {
        DetectorDigest& detector = scene.digest.detectors[static_cast<std::size_t>(d)];
        detector.present = true;
        detector.raw_file = "scene.fits";
        detector.psf = moffat_psf(8, 3.0, 3.0);
        for (int a = 0; a < 4; ++a) {
            ClockPicture picture(60, std::vector<float>(60, 0.0F));
            for (int blob = 0; blob < 4; ++blob) {
                const double cx = std::floor(uniform(random) * 60.0);
                const double cy = std::floor(uniform(random) * 60.0);
                const double peak = std::pow(10.0, 2.5 + 3.0 * uniform(random));
                for (int y = 0; y < 60; ++y) {
                    for (int x = 0; x < 60; ++x) {
                        const double r2 = (x - cx) * (x - cx) + (y - cy) * (y - cy);
                        float& pixel =
                            picture[static_cast<std::size_t>(y)][static_cast<std::size_t>(x)];
                        pixel = static_cast<float>(std::min(
                            kSaturation, static_cast<double>(pixel) + peak * std::exp(-r2 / 4.0)));
                    }
                }
            }
            detector.amplifiers.push_back(digest_of_picture(picture, noise_adu, floor_adu));
            scene.pictures[{d, a}] = std::move(picture);
        }
    }
    std::vector<PairRow> rows;
    const std::vector<std::string> names = amplifier_names(scene.camera);
    for (const std::string& victim : names) {
        for (const std::string& source : names) {
            if (victim != source) {
                const double size = std::pow(10.0, -4.5 + 1.5 * uniform(random));
                rows.push_back({victim, source, uniform(random) < 0.5 ? size : -size, 0.05 * size});
            }
        }
    }
    scene.product = product_of(rows);
    ProductTable lags;
    lags.rows = 3;
    lags.columns = {{"victim", std::vector<std::string>{"d1/a1", "d2/a3", "d2/a3"}},
                    {"source", std::vector<std::string>{"d1/a2", "d1/a4", "d1/a4"}},
                    {"lag", std::vector<std::int64_t>{1, -1, 3}},
                    {"coefficient", std::vector<double>{-4e-4, 2e-4, 1e-4}},
                    {"error", std::vector<double>{2e-5, 1e-5, 1e-5}}};
    scene.product.tables["LAGS"] = lags;
    const double nan = std::nan("");
    ProductTable bends;
    bends.rows = 2;
    bends.columns = {{"victim", std::vector<std::string>{"d1/a3", "d2/a1"}},
                     {"source", std::vector<std::string>{"d2/a2", "d1/a1"}},
                     {"onset_adu", std::vector<double>{20000.0, nan}},
                     {"c1", std::vector<double>{-3e-4, nan}},
                     {"c2", std::vector<double>{1e-9, nan}},
                     {"c3", std::vector<double>{-2e-14, nan}},
                     {"error", std::vector<double>{0.1, nan}},
                     {"clipped", std::vector<double>{7e-4, -5e-4}},
                     {"clipped_error", std::vector<double>{3e-5, 2e-5}}};
    scene.product.tables["BENDS"] = bends;
    return scene;
}

}  // namespace straymark::test
