#pragma once

#include <cstdint>
#include <optional>
#include <string>
#include <vector>

#include "io/files.h"
#include "io/fits_scan.h"
#include "io/fits_table.h"

namespace straymark::io {

/// A FITS file that this project wrote (masks, truth), found sound as a whole (sound_units) when it
/// is opened, so that a damaged byte is an error and not a wrong pixel. Const calls may come from
/// several threads at once.
class CheckedFits {
public:
    /// Throws InputError: not there, not FITS, damaged.
    explicit CheckedFits(const std::string& path);

    [[nodiscard]] const std::string& path() const { return file_.path(); }
    [[nodiscard]] const std::vector<FitsHdu>& units() const { return units_; }
    /// The unit of this name; null where there is none.
    [[nodiscard]] const FitsHdu* find(const std::string& name) const;
    /// The same; throws InputError naming what is there.
    [[nodiscard]] const FitsHdu& required(const std::string& name) const;
    /// A keyword of the primary header as text; nothing where absent.
    [[nodiscard]] std::optional<std::string> primary_text(const std::string& keyword) const;

    /// The table of this name. Throws InputError where there is none.
    [[nodiscard]] BinaryTable table(const std::string& name) const;

    /// The pixels of an image of two axes, row by row from the first, plain or compressed, decoded
    /// by cfitsio now that their sums are known to hold. int16_image takes no other type. Throw
    /// InputError where the unit holds something else, or has no DATASUM.
    [[nodiscard]] std::vector<float> float_image(const FitsHdu& unit) const;
    [[nodiscard]] std::vector<std::int16_t> int16_image(const FitsHdu& unit) const;

    /// Throws InputError about this file.
    [[noreturn]] void refuse(const std::string& place, const std::string& found,
                             const std::string& expected, const std::string& advice) const;

private:
    template <typename Pixel>
    [[nodiscard]] std::vector<Pixel> decoded(const FitsHdu& unit, int type) const;

    InputFile file_;
    std::vector<FitsHdu> units_;
};

/// Width and height of an image unit, each at most 65,536 and 2^28 pixels in all; nothing where the
/// unit holds no such image.
struct ImageSize {
    int width = 0;
    int height = 0;
};
std::optional<ImageSize> image_size(const FitsHdu& unit);

/// A scalar column as numbers. Throws InputError where there is none, it is text, or a cell is
/// infinite or (unless allowed) not a number.
enum class NotANumber { refused, allowed };
std::vector<double> number_column(const BinaryTable& table, const std::string& name,
                                  NotANumber nan = NotANumber::refused);

}  // namespace straymark::io
