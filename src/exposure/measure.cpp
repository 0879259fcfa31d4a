#include "exposure/measure.h"

#include <algorithm>
#include <cmath>
#include <filesystem>
#include <fmt/format.h>
#include <memory>
#include <mutex>
#include <optional>

#include "core/error.h"
#include "core/parallel.h"
#include "exposure/bias.h"
#include "exposure/bleed.h"
#include "exposure/bright_runs.h"
#include "exposure/detector_stars.h"
#include "exposure/plane.h"
#include "exposure/psf_measure.h"
#include "exposure/sky_mesh.h"
#include "exposure/star_finder.h"
#include "exposure/star_stamp.h"

namespace straymark {
namespace {

/// An amplifier with fewer pixels than this that are neither saturated nor missing says nothing.
constexpr double kLeastUsable = 0.1;
/// Stamps kept of one detector for its point-spread function, shared among the amplifiers.
constexpr int kDetectorStamps = 192;
constexpr int kLeastAmplifierStamps = 12;

/// Buffers of one thread, reused from amplifier to amplifier.
struct Workspace {
    AmplifierFrame frame;
    AmplifierPlane plane;
};

class WorkspacePool {
public:
    std::unique_ptr<Workspace> take() {
        const std::scoped_lock lock(mutex_);
        if (free_.empty()) {
            return std::make_unique<Workspace>();
        }
        std::unique_ptr<Workspace> workspace = std::move(free_.back());
        free_.pop_back();
        return workspace;
    }
    void give_back(std::unique_ptr<Workspace> workspace) {
        const std::scoped_lock lock(mutex_);
        free_.push_back(std::move(workspace));
    }

private:
    std::mutex mutex_;
    std::vector<std::unique_ptr<Workspace>> free_;
};

struct AmplifierMeasurement {
    AmplifierDigest digest;
    std::vector<StarCandidate> stars;
    std::vector<StarStamp> stamps;
};

/// Why these pixels say nothing; nothing where they do.
std::optional<std::string> why_unusable(const AmplifierPlane& raw, const Amplifier& amplifier,
                                        float saturation) {
    const PixelCensus census = take_census(raw, saturation);
    const auto pixels = double(raw.values.size());
    if (census.valid == 0) {
        return "no pixel has a value";
    }
    if (double(census.saturated) >= (1.0 - kLeastUsable) * double(census.valid)) {
        return fmt::format("{:.0f} % of the pixels are saturated (at or above {:g} ADU)",
                           100.0 * double(census.saturated) / double(census.valid),
                           amplifier.saturation_adu);
    }
    if (double(census.valid - census.saturated) < kLeastUsable * pixels) {
        return fmt::format("only {:.1f} % of the pixels have a value below saturation",
                           100.0 * double(census.valid - census.saturated) / pixels);
    }
    return std::nullopt;
}

AmplifierDigest without_pixels(AmplifierState state, std::string reason) {
    AmplifierDigest digest;
    digest.state = state;
    digest.reason = std::move(reason);
    return digest;
}

void measure_stars(const Amplifier& amplifier, const AmplifierPlane& signal, int most_stamps,
                   AmplifierMeasurement& out) {
    const PixelNoise noise{out.digest.noise_adu, amplifier.gain_e_per_adu};
    out.stars = find_stars(signal, noise);
    for (const StarCandidate& star : out.stars) {
        if (static_cast<int>(out.stamps.size()) == most_stamps) {
            break;
        }
        if (star.isolated) {
            const double fwhm = kSigmaToFwhm * star.aperture_px / kApertureSigmas;
            out.stamps.push_back(
                cut_stamp(signal, amplifier.readout, star, noise, psf_radius(fwhm) + 2));
        }
    }
}

AmplifierMeasurement measure_amplifier(const Amplifier& amplifier, const DigestPolicy& policy,
                                       int most_stamps, Workspace& workspace) {
    AmplifierPlane& plane = workspace.plane;
    load_plane(workspace.frame, plane);
    const float saturation = saturation_as_float(amplifier.saturation_adu);
    AmplifierMeasurement out;
    if (auto reason = why_unusable(plane, amplifier, saturation)) {
        out.digest = without_pixels(AmplifierState::unusable, std::move(*reason));
        return out;
    }
    const BiasLevels bias = measure_bias(workspace.frame, plane);
    const SkyLevels sky = measure_sky(plane, bias, saturation);
    if (sky.constant || !(sky.noise_adu > 0.0)) {
        out.digest = without_pixels(
            AmplifierState::unusable,
            fmt::format("the pixels are constant (about {:g} ADU)", bias.mean + sky.mesh.mean()));
        return out;
    }
    out.digest.state = AmplifierState::ok;
    out.digest.bias_adu = bias.mean;
    out.digest.sky_adu = sky.mesh.mean();
    out.digest.noise_adu = sky.noise_adu;
    out.digest.floor_adu = policy.floor_sigma * sky.noise_adu;
    subtract_and_collect(plane, bias, sky.mesh, saturation, out.digest);
    blank_saturated(plane, out.digest);
    measure_stars(amplifier, plane, most_stamps, out);
    return out;
}

/// Reads and measures one amplifier; what cannot be read is recorded, not thrown.
AmplifierMeasurement read_and_measure(const Amplifier& amplifier, int index, DetectorFrame& frame,
                                      const DigestPolicy& policy, int most_stamps,
                                      WorkspacePool& pool) {
    if (amplifier.status == AmplifierStatus::dead) {
        return {without_pixels(AmplifierState::dead, "dead by the camera file"), {}, {}};
    }
    std::unique_ptr<Workspace> workspace = pool.take();
    AmplifierMeasurement measurement;
    try {
        frame.read(index, workspace->frame);
        measurement = measure_amplifier(amplifier, policy, most_stamps, *workspace);
    } catch (const InputError& error) {
        measurement.digest = without_pixels(AmplifierState::missing, error.what());
    }
    pool.give_back(std::move(workspace));
    return measurement;
}

/// Base name of the file and state of the whole, from its amplifiers.
void summarize(const DetectorFrame& frame, DetectorDigest& digest) {
    digest.raw_file = std::filesystem::path(frame.path()).filename().string();
    digest.header_wcs = frame.wcs_cards();
    const auto handed_over = [](const AmplifierDigest& amplifier) {
        return amplifier.state == AmplifierState::ok || amplifier.state == AmplifierState::unusable;
    };
    digest.present = std::any_of(digest.amplifiers.begin(), digest.amplifiers.end(), handed_over);
    if (digest.present) {
        return;
    }
    const auto missing =
        std::find_if(digest.amplifiers.begin(), digest.amplifiers.end(),
                     [](const auto& a) { return a.state == AmplifierState::missing; });
    digest.reason =
        missing != digest.amplifiers.end() ? missing->reason : "every amplifier is dead";
}

}  // namespace

DetectorDigest measure_detector(const Camera& camera, int detector, DetectorFrame& frame,
                                const DigestPolicy& policy, int threads) {
    const Detector& layout = camera.detectors[static_cast<std::size_t>(detector)];
    const int count = static_cast<int>(layout.amplifiers.size());
    const int most_stamps = std::max(kLeastAmplifierStamps, kDetectorStamps / std::max(1, count));
    std::vector<AmplifierMeasurement> measurements(layout.amplifiers.size());
    WorkspacePool pool;
    parallel_for(count, threads, [&](int a) {
        measurements[a] =
            read_and_measure(layout.amplifiers[a], a, frame, policy, most_stamps, pool);
    });

    DetectorDigest digest;
    std::vector<StarStamp> stamps;
    std::vector<std::vector<StarCandidate>> candidates;
    for (AmplifierMeasurement& measurement : measurements) {
        digest.amplifiers.push_back(std::move(measurement.digest));
        candidates.push_back(std::move(measurement.stars));
        std::move(measurement.stamps.begin(), measurement.stamps.end(), std::back_inserter(stamps));
    }
    summarize(frame, digest);
    digest.bleed = find_bleed(layout, digest.amplifiers);
    digest.psf = measure_psf(std::move(stamps));
    digest.stars = detector_stars(layout, candidates, digest.psf);
    return digest;
}

}  // namespace straymark
