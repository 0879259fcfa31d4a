#pragma once

#include <memory>
#include <span>
#include <string>
#include <vector>

#include "artifacts/mark.h"
#include "artifacts/product.h"
#include "camera/camera.h"
#include "exposure/digest.h"

namespace straymark {

/// What the decision rule will ask, so that a predictor can tell what is too faint to list.
struct DetectionContext {
    double threshold = 1.0;       ///< T of this artifact
    int background_px = 0;        ///< box of detection's background subtraction; 0: none
    double template_noise = 0.0;  ///< template's noise as a fraction of the exposure's
};

/// Predictions for one exposure. The digest it was made from must outlive it. Thread-safe.
class ExposurePrediction {
public:
    virtual ~ExposurePrediction() = default;
    ExposurePrediction() = default;
    ExposurePrediction(const ExposurePrediction&) = delete;
    ExposurePrediction& operator=(const ExposurePrediction&) = delete;
    [[nodiscard]] virtual DetectorMarks marks_on(int detector) const = 0;
};

/// One artifact under one calibration product: digest in, marks out. Thread-safe when const.
class Predictor {
public:
    virtual ~Predictor() = default;
    Predictor() = default;
    Predictor(const Predictor&) = delete;
    Predictor& operator=(const Predictor&) = delete;

    /// The faintest pixel, in units of its amplifier's noise, that a digest must keep for this
    /// product.
    [[nodiscard]] virtual double needed_floor_sigma(const DetectionContext& context) const = 0;
    [[nodiscard]] virtual std::unique_ptr<ExposurePrediction> predict(
        const ExposureDigest& digest, const DetectionContext& context, int threads) const = 0;
};

/// One line of the registry.
struct Artifact {
    ArtifactKind kind;
    std::string name;  ///< as in site files, products and tables
    /// Builds the predictor; throws InputError where the product does not fit the camera.
    std::unique_ptr<Predictor> (*make)(const Camera& camera, const Product& product);
};

/// The one list of artifacts, in bit order (artifacts/registry.cpp). An artifact that is not built
/// yet is listed with make == nullptr: masks say "off".
std::span<const Artifact> registry();

}  // namespace straymark
