#pragma once

#include <functional>
#include <string>
#include <vector>

#include "night/plan.h"
#include "night/ports.h"
#include "night/site.h"
#include "sky/stars.h"

namespace straymark {

/// Everything a night reads from and writes to. All must outlive the call; stars may be null where
/// the list could not be opened (then `stars_problem` says why and what depends on it is
/// unassessed).
struct NightPorts {
    const RawReader& raw;
    const CalibrationStore& calibrations;
    DigestStore& digests;
    MaskStore& masks;
    const StarList* stars = nullptr;
};

enum class BuildStatus {
    built,       ///< masks written
    up_to_date,  ///< masks of exactly these inputs were there already
    no_mask,     ///< a dark, flat or focus frame: gets none
    failed,      ///< nothing written; see `message`
};

struct ExposureReport {
    std::string id;
    std::string type;
    BuildStatus status = BuildStatus::failed;
    std::string message;
    std::vector<std::string> masks;  ///< paths
    std::vector<std::string> notes;  ///< fallbacks taken, oddities
    double flagged_fraction = 0.0;   ///< of the pixels of its worst mask, by any predictor
    double marginal_fraction = 0.0;
    double unassessed_fraction = 0.0;
    std::string pointing;  ///< one line: refined from how many stars, or why not

    void add_mask(const std::string& path, const MaskSummary& summary);
};

struct BuildReport {
    std::vector<ExposureReport> exposures;  ///< in time order
    std::vector<Skipped> skipped;

    /// Something handed over has no mask though it should, or more is unassessed than accepted.
    [[nodiscard]] bool incomplete(double accepted_unassessed_fraction) const;
    /// Exposures should have been masked, and none was.
    [[nodiscard]] bool nothing_done() const;
};

/// Called after each exposure: how many are done, of how many.
using BuildProgress = std::function<void(int done, int total)>;

/// One mask file for each raw file that holds a science detector, in time order. One bad exposure
/// never stops the others. Running it again does nothing where all inputs are the same.
/// Memory: the digests of one exposure and one detector's pixels for each thread.
BuildReport build_from_raw(const Site& site, const NightPorts& ports,
                           const std::vector<std::string>& raw_files, int threads,
                           const BuildProgress& progress);

/// The same masks again from the digests that were kept, without a pixel. ids: empty for all.
BuildReport build_from_digests(const Site& site, const NightPorts& ports,
                               const std::vector<std::string>& ids, int threads,
                               const BuildProgress& progress);

/// Version of what decides a bit, part of every mask's build key: raise it when results change.
inline constexpr const char* kResultsVersion = "1";

}  // namespace straymark
