/// Times the making of one exposure's masks, up to the mask in memory, from its pixels and from its
/// digest. Usage: mask_in_memory SITE RAW. Prints the medians of seven runs and their ratio.

#include <algorithm>
#include <chrono>
#include <fmt/core.h>
#include <vector>

#include "cli/observatory.h"
#include "exposure/measure.h"
#include "night/mask_exposure.h"

using namespace straymark;

namespace {

template <typename Body>
double median_ms(const Body& body) {
    constexpr int kRuns = 7;
    std::vector<double> times;
    for (int i = 0; i < kRuns; ++i) {
        const auto start = std::chrono::steady_clock::now();
        body();
        times.push_back(
            std::chrono::duration<double, std::milli>(std::chrono::steady_clock::now() - start)
                .count());
    }
    std::sort(times.begin(), times.end());
    return times[kRuns / 2];
}

void paint(const Site& site, const PredictorsInForce& predictors, const ExposureDigest& digest,
           int threads, DetectorMask& mask) {
    const ExposureMarks marks(site, predictors, digest, threads);
    for (int d = 0; d < static_cast<int>(digest.detectors.size()); ++d) {
        const auto at = static_cast<std::size_t>(d);
        decide(site.camera.detectors[at], digest.detectors[at], marks.on(d), {}, site.decision,
               threads, mask);
    }
}

}  // namespace

int main(int argc, char** argv) {
    if (argc != 3) {
        fmt::print(stderr, "usage: mask_in_memory SITE RAW\n");
        return 2;
    }
    constexpr int kThreads = 2;
    cli::OpenSite open(argv[1]);
    const NightPorts ports = open.ports();
    const Site& site = open.site();
    PredictorShelf shelf(site, ports.calibrations);
    const RawFile file = ports.raw.inspect(argv[2]);
    const PredictorsInForce predictors = shelf.in_force(file.header);
    DetectorMask mask;
    const double from_pixels = median_ms([&] {
        ExposureDigest digest;
        digest.header = file.header;
        digest.detectors.resize(site.camera.detectors.size());
        for (const int d : file.detectors) {
            const auto frame = ports.raw.open(file, d);
            digest.detectors[static_cast<std::size_t>(d)] = measure_detector(
                site.camera, d, *frame, {digest_floor_sigma(predictors)}, kThreads);
        }
        share_psf(digest);
        keep_usable_wcs(site.camera, digest);
        refine_pointing(site.camera, ports.stars, digest);
        paint(site, predictors, digest, kThreads, mask);
    });
    const double from_digest = median_ms([&] {
        const auto digest = ports.digests.load(file.header.id);
        paint(site, predictors, *digest, kThreads, mask);
    });
    fmt::print(
        "mask in memory: {:.1f} ms from pixels, {:.1f} ms from the digest, ratio {:.1f} "
        "(asked: at least 5)\n",
        from_pixels, from_digest, from_pixels / from_digest);
    return 0;
}
