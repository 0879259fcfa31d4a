#pragma once

#include <map>
#include <string>
#include <vector>

#include "io/mask_reader.h"
#include "io/truth_file.h"
#include "score/found.h"

/// Masks made ready for a score: found by exposure, checked against the truth's detectors.

namespace straymark::io {

/// The `*.mask.fits` files of a folder by the exposure that their own headers name.
struct MaskIndex {
    std::map<std::string, std::vector<std::string>> paths;  ///< by OBS_ID, in order of name
    std::vector<std::string> faults;                        ///< files that cannot be read, and why
};
/// Throws InputError where there is no such folder.
MaskIndex index_masks(const std::string& folder);

/// The mask files of one exposure: one for each raw file, each with some of its detectors.
class ExposureMasks {
public:
    /// Throws InputError: damaged, a detector that the truth does not have or of another size (a
    /// mask of another camera), a detector in two files, made for another background subtraction.
    ExposureMasks(const std::vector<std::string>& paths, const TruthFile& truth,
                  const std::string& kind, int background_px);

    /// Not present where no file holds this detector.
    [[nodiscard]] score::FoundDetector detector(const std::string& id) const;

private:
    struct Loaded {
        MaskFile file;
        score::BitValues values;
        std::vector<MarkRow> marks;
        std::vector<DetectionRow> detection;
    };
    void check_detectors(const Loaded& loaded, const TruthFile& truth) const;

    std::string kind_;
    std::vector<Loaded> files_;
    std::map<std::string, std::size_t> file_of_;  ///< by detector
};

}  // namespace straymark::io
