#pragma once

#include <map>
#include <optional>
#include <string>
#include <vector>

#include "io/checked_fits.h"
#include "score/truth.h"

namespace straymark::io {

/// The known truth of one simulated exposure (docs/judging.md). Const calls may come
/// from several threads at once.
class TruthFile {
public:
    /// Throws InputError: not there, another format, damaged, tables that contradict the images.
    explicit TruthFile(const std::string& path);

    [[nodiscard]] const std::string& path() const { return file_.path(); }
    [[nodiscard]] const std::string& exposure() const { return exposure_; }  ///< OBS_ID
    [[nodiscard]] const std::vector<std::string>& detectors() const { return detectors_; }

    /// Of the truth of `kind` on a detector; nothing where there is none.
    [[nodiscard]] std::optional<ImageSize> size(const std::string& id,
                                                const std::string& kind) const;

    /// The truth of `kind` ("crosstalk") on one detector. Throws InputError where its images are
    /// missing, damaged or hold values that are not finite.
    [[nodiscard]] score::TrueDetector detector(const std::string& id,
                                               const std::string& kind) const;

private:
    void read_amplifiers();
    void read_echoes();
    [[nodiscard]] score::TruePsf psf(const std::string& id) const;
    void check_cover(const score::TrueDetector& detector) const;

    CheckedFits file_;
    std::string exposure_;
    std::vector<std::string> detectors_;
    std::map<std::string, std::vector<score::TrueAmplifier>> amplifiers_;  ///< by detector
    std::map<std::string, std::vector<score::TrueEcho>> echoes_;           ///< by victim's detector
};

/// The `*.truth.fits` files of a folder, or of its subfolder "truth", in order of name. Throws
/// InputError where there is none.
std::vector<std::string> truth_files_in(const std::string& folder);

}  // namespace straymark::io
