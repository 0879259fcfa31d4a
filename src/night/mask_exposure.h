#pragma once

#include <array>
#include <map>
#include <string>
#include <vector>

#include "night/build.h"
#include "night/predictors.h"

namespace straymark {

using PredictorsInForce = std::array<PredictorInForce, kArtifactKinds>;

/// Fingerprint of everything that decides the bits of one exposure's masks.
std::string build_key(const Site& site, const PredictorsInForce& predictors,
                      const std::string& star_digest,
                      const std::vector<std::string>& input_digests);

/// The pixels each predictor needs, as the floor of a digest in units of the noise, within what
/// makes sense: never into the noise, never so high that the next calibration needs the pixels
/// again.
double digest_floor_sigma(const PredictorsInForce& predictors);

/// All marks of one exposure, one detector at a time; every artifact that cannot look says why.
class ExposureMarks {
public:
    /// All must outlive it.
    ExposureMarks(const Site& site, const PredictorsInForce& predictors,
                  const ExposureDigest& digest, int threads);
    [[nodiscard]] std::array<DetectorMarks, kArtifactKinds> on(int detector) const;

private:
    const Site& site_;
    const PredictorsInForce& predictors_;
    std::array<std::unique_ptr<ExposurePrediction>, kArtifactKinds> predictions_;
};

/// Writes the masks of one exposure, a file for each raw file of the digest; fills the report.
void write_masks(const Site& site, MaskStore& store, const PredictorsInForce& predictors,
                 const ExposureDigest& digest, const std::string& key, int threads,
                 ExposureReport& report);

/// Science detectors of each raw file that a digest was made from, by file name.
std::map<std::string, std::vector<int>> detectors_by_file(const Camera& camera,
                                                          const ExposureDigest& digest);

}  // namespace straymark
