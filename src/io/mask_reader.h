#pragma once

#include <cstdint>
#include <map>
#include <optional>
#include <string>
#include <vector>

#include "io/checked_fits.h"
#include "mask/mask_file.h"

namespace straymark::io {

/// A mask file read back (docs/mask_file.md). What it says of itself is taken from the file alone:
/// the values of the bits come from its BITS table. One object belongs to one thread.
class MaskFile {
public:
    /// One detector's image in the file.
    struct Image {
        std::string detector;
        int width = 0;
        int height = 0;
    };

    /// Reads the primary header and what the file holds. Throws InputError: not there, not a mask
    /// file, damaged.
    explicit MaskFile(const std::string& path);

    [[nodiscard]] const std::string& path() const { return file_.path(); }
    [[nodiscard]] const std::string& exposure() const { return exposure_; }  ///< OBS_ID
    [[nodiscard]] const std::vector<Image>& images() const { return images_; }
    /// A card of the primary header; nothing where absent.
    [[nodiscard]] std::optional<std::string> card(const std::string& keyword) const;

    /// Bits of one detector, pixel (x, y) at [y * width + x]. Throws InputError: no such image,
    /// sums that do not match, pixels of another type.
    [[nodiscard]] std::vector<MaskPixel> bits(const std::string& detector) const;
    /// Bit values by name.
    [[nodiscard]] std::map<std::string, std::int32_t> bit_values() const;
    [[nodiscard]] std::vector<MarkRow> marks() const;
    [[nodiscard]] std::vector<DetectionRow> detection() const;
    [[nodiscard]] std::vector<PsfRow> psfs() const;
    [[nodiscard]] std::vector<AssessedRow> assessed() const;
    /// Of the detection that the mask was made for; nothing where DETECTION has no row.
    [[nodiscard]] std::optional<int> background_px() const;

private:
    CheckedFits file_;
    std::string exposure_;
    std::vector<Image> images_;
};

}  // namespace straymark::io
