#pragma once

#include <cstdint>
#include <memory>
#include <span>
#include <string>
#include <vector>

#include "core/pixel_box.h"

namespace straymark {

enum class ArtifactKind : std::uint8_t { crosstalk, ghost, spike, persistence };
inline constexpr int kArtifactKinds = 4;

/// A rectangle of one detector into which signals are added, electrons per pixel.
/// values[(y - box.y0) * box.width() + (x - box.x0)]
struct SignalWindow {
    PixelBox box;
    std::span<float> values;
};

/// The predicted signal of one mark: electrons per pixel above the background.
class SignalShape {
public:
    virtual ~SignalShape() = default;
    SignalShape() = default;
    SignalShape(const SignalShape&) = delete;
    SignalShape& operator=(const SignalShape&) = delete;

    /// Nothing is signalled outside; lies within the detector.
    [[nodiscard]] virtual PixelBox bounds() const = 0;
    /// Adds scale * signal of the pixels inside the window. Thread-safe.
    virtual void add_to(const SignalWindow& window, float scale) const = 0;
};

/// One independent source of error of a mark: a 1-sigma change of its signal. Modes of one `group`
/// (an amplifier pair's coefficient, a family's brightness) move together in all marks of a
/// detector; different groups are independent.
struct ErrorMode {
    std::uint64_t group = 0;
    double relative = 0.0;                     ///< of the mark's signal, when `shape` is null
    std::shared_ptr<const SignalShape> shape;  ///< else this signal is one sigma
};

/// Who did it.
struct MarkCause {
    std::string text;          ///< one line, for people: "echo of d1/a03 at (101, 877)"
    std::string source;        ///< "DETECTOR/AMPLIFIER", star id, exposure id
    double source_x_px = 0.0;  ///< place of the cause on its detector, 0-based; NaN: none
    double source_y_px = 0.0;
};

/// One predicted instance of an artifact on one detector.
struct Mark {
    ArtifactKind kind = ArtifactKind::crosstalk;
    MarkCause cause;
    std::shared_ptr<const SignalShape> signal;  ///< best estimate; null: zero
    std::vector<ErrorMode> errors;
    bool measured = true;           ///< false: rests on a prior; its bound makes pixels unassessed
    double strength_e = 0.0;        ///< sum of the signal, electrons
    double strength_error_e = 0.0;  ///< 1 sigma
};

/// The sum of the marks that are each too faint to be listed (response under a quarter of the
/// threshold everywhere). Adds electrons per pixel to the signals and (electrons per pixel)^2 to
/// the variances; measured and unmeasured kept apart.
struct FaintWindows {
    SignalWindow measured, unmeasured, measured_variance, unmeasured_variance;
};
class FaintSum {
public:
    virtual ~FaintSum() = default;
    FaintSum() = default;
    FaintSum(const FaintSum&) = delete;
    FaintSum& operator=(const FaintSum&) = delete;
    [[nodiscard]] virtual std::int64_t count() const = 0;
    /// Does it hold anything unmeasured? If not, add_to leaves those windows alone.
    [[nodiscard]] virtual bool any_unmeasured() const = 0;
    virtual void add_to(const FaintWindows& windows) const = 0;  ///< thread-safe
};

/// A place where a predictor could not look and something that matters could be.
struct UnassessedRegion {
    PixelBox box;
    std::string reason;
};

/// For the ASSESSED table.
enum class AssessmentState : std::uint8_t { off, assessed, partly, unassessed };
struct Assessment {
    AssessmentState state = AssessmentState::off;
    std::string reason;       ///< why off, partly or not
    std::string calibration;  ///< product used
    double truncation_response =
        0.0;  ///< what was left out of the sum could respond with this at most
};

/// All that one predictor says about one detector.
struct DetectorMarks {
    std::vector<Mark> marks;
    std::unique_ptr<const FaintSum> faint;  ///< may be null
    std::vector<UnassessedRegion> regions;
    Assessment assessment;
};

}  // namespace straymark
