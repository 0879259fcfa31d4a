#include <fmt/format.h>
#include <string>
#include <utility>
#include <vector>

#include "core/error.h"
#include "exposure/measure.h"
#include "sky/wcs.h"

namespace straymark {

void keep_usable_wcs(const Camera& camera, ExposureDigest& digest) {
    for (std::size_t d = 0; d < digest.detectors.size(); ++d) {
        DetectorDigest& detector = digest.detectors[d];
        const std::vector<std::string> cards = std::move(detector.header_wcs);
        detector.header_wcs.clear();
        if (!Wcs::present(cards)) {
            continue;
        }
        try {
            detector.header_wcs =
                Wcs(cards, detector.raw_file, "WCS of " + camera.detectors[d].id).cards();
        } catch (const InputError& error) {
            digest.header.notes.push_back(
                fmt::format("the header's WCS is not used: {}", error.what()));
        }
    }
}

}  // namespace straymark
