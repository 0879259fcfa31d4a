#include "io/checked_fits.h"

#include <algorithm>
#include <array>
#include <cmath>
#include <cstddef>
#include <fitsio.h>
#include <fmt/format.h>
#include <memory>
#include <type_traits>
#include <variant>

#include "core/error.h"

namespace straymark::io {
namespace {

struct CloseFits {
    void operator()(fitsfile* file) const {
        int status = 0;
        fits_close_file(file, &status);
        fits_clear_errmsg();
    }
};
using FitsHandle = std::unique_ptr<fitsfile, CloseFits>;

std::string library_message(int status) {
    std::array<char, FLEN_STATUS> text{};
    fits_get_errstatus(status, text.data());
    fits_clear_errmsg();
    return fmt::format("{} (FITS library status {})", text.data(), status);
}

}  // namespace

CheckedFits::CheckedFits(const std::string& path) : file_(path), units_(sound_units(file_)) {}

void CheckedFits::refuse(const std::string& place, const std::string& found,
                         const std::string& expected, const std::string& advice) const {
    throw InputError({path(), place, found, expected, advice});
}

const FitsHdu* CheckedFits::find(const std::string& name) const {
    const auto found = std::find_if(units_.begin(), units_.end(),
                                    [&name](const FitsHdu& unit) { return unit.name == name; });
    return found == units_.end() ? nullptr : &*found;
}

const FitsHdu& CheckedFits::required(const std::string& name) const {
    if (const FitsHdu* unit = find(name)) {
        return *unit;
    }
    std::string names;
    for (const FitsHdu& unit : units_) {
        names += (names.empty() || unit.name.empty() ? "" : ", ") + unit.name;
    }
    refuse("", "extensions " + printable(names), "one named " + name,
           "this is another kind of file, or another version of it");
}

std::optional<std::string> CheckedFits::primary_text(const std::string& keyword) const {
    const std::optional<CardValue> value = read_header(file_, units_.front()).find(keyword);
    return value ? std::optional(value->text) : std::nullopt;
}

BinaryTable CheckedFits::table(const std::string& name) const {
    const FitsHdu& unit = required(name);
    std::optional<BinaryTable> table = BinaryTable::read(file_, unit);
    if (!table) {
        refuse(place_of(unit), "no table", "a binary table", "make the file again");
    }
    return std::move(*table);
}

std::vector<float> CheckedFits::float_image(const FitsHdu& unit) const {
    return decoded<float>(unit, TFLOAT);
}

std::vector<std::int16_t> CheckedFits::int16_image(const FitsHdu& unit) const {
    if (unit.bitpix != SHORT_IMG || unit.scale != 1.0 || unit.zero != 0.0) {
        refuse(place_of(unit), "another kind of image", "signed 16-bit integers",
               "this is not the mask of one exposure");
    }
    return decoded<std::int16_t>(unit, TSHORT);
}

template <typename Pixel>
std::vector<Pixel> CheckedFits::decoded(const FitsHdu& unit, int type) const {
    const std::optional<ImageSize> size = image_size(unit);
    if (!size || !unit.data_sum) {
        refuse(place_of(unit), size ? "no DATASUM" : "no image of two axes",
               "an image as this program writes it", "make the file again");
    }
    // InputFile has opened this very name; the library must not see a home folder in it.
    const std::string name = path().starts_with('/') ? path() : "./" + path();
    std::vector<Pixel> pixels(static_cast<std::size_t>(size->width) *
                              static_cast<std::size_t>(size->height));
    int status = 0;
    fitsfile* opened = nullptr;
    fits_open_diskfile(&opened, name.c_str(), READONLY, &status);
    const FitsHandle handle(opened);
    fits_movabs_hdu(opened, unit.number + 1, nullptr, &status);
    fits_read_img(opened, type, 1, static_cast<LONGLONG>(pixels.size()), nullptr, pixels.data(),
                  nullptr, &status);
    if (status != 0) {
        refuse(place_of(unit), library_message(status), "an image that decodes",
               "make the file again");
    }
    return pixels;
}

std::optional<ImageSize> image_size(const FitsHdu& unit) {
    constexpr std::int64_t kMostSide = 1 << 16;
    constexpr std::int64_t kMostPixels = std::int64_t{1} << 28;
    if (unit.axes.size() != 2 || unit.axes[0] < 1 || unit.axes[1] < 1 || unit.axes[0] > kMostSide ||
        unit.axes[1] > kMostSide || unit.axes[0] * unit.axes[1] > kMostPixels) {
        return std::nullopt;
    }
    return ImageSize{static_cast<int>(unit.axes[0]), static_cast<int>(unit.axes[1])};
}

std::vector<double> number_column(const BinaryTable& table, const std::string& name,
                                  NotANumber nan) {
    const TableField* field = table.find(name);
    if (field == nullptr || !field->scalar()) {
        table.refuse("column " + name, "none", "one number a row", "make the file again");
    }
    std::vector<double> cells = std::visit(
        [&](auto&& values) -> std::vector<double> {
            if constexpr (std::is_convertible_v<decltype(values.front()), double>) {
                return {values.begin(), values.end()};
            } else {
                table.refuse("column " + name, "text", "numbers", "make the file again");
            }
        },
        table.values(*field));
    const auto bad = std::find_if(cells.begin(), cells.end(), [nan](double cell) {
        return std::isinf(cell) || (nan == NotANumber::refused && std::isnan(cell));
    });
    if (bad != cells.end()) {
        table.refuse(fmt::format("row {}, column {}", bad - cells.begin() + 1, name),
                     fmt::format("{}", *bad), "a finite number", "make the file again");
    }
    return cells;
}

}  // namespace straymark::io
