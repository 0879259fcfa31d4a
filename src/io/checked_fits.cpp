#include "io/checked_fits.h"

#include <algorithm>
#include <array>
#include <cassert>
#include <cmath>
#include <cstddef>
#include <cstring>
#include <fitsio.h>
#include <fmt/format.h>
#include <string_view>
#include <utility>

#include "core/error.h"
#include "io/files.h"

namespace straymark::io {
namespace {

/// No detector has more; a compressed image of zeros could claim any number.
constexpr std::int64_t kMostPixels = std::int64_t{1} << 28;
constexpr std::int64_t kMostSide = 1 << 16;
constexpr int kMostParts = 20000;

std::string fits_message(int status) {
    std::array<char, FLEN_STATUS> text{};
    fits_get_errstatus(status, text.data());
    fits_clear_errmsg();
    return fmt::format("{} (FITS library status {})", text.data(), status);
}

}  // namespace

struct CheckedFits::Handle {
    fitsfile* file = nullptr;
    Handle() = default;
    Handle(const Handle&) = delete;
    Handle& operator=(const Handle&) = delete;
    ~Handle() {
        if (file != nullptr) {
            int status = 0;
            fits_close_file(file, &status);
            fits_clear_errmsg();
        }
    }
};

CheckedFits::CheckedFits(std::string path, Sums sums)
    : path_(std::move(path)), sums_(sums), handle_(std::make_unique<Handle>()) {
    check_is_plain_fits();
    // A plain name that the library cannot take for a home folder or an option.
    const std::string name = path_.starts_with('/') ? path_ : "./" + path_;
    if (name.size() >= FLEN_FILENAME) {
        refuse("", fmt::format("a name of {} characters", name.size()),
               fmt::format("fewer than {}", FLEN_FILENAME), "use a shorter path");
    }
    int status = 0;
    if (fits_open_diskfile(&handle_->file, name.c_str(), READONLY, &status) != 0) {
        refuse("", fits_message(status), "a FITS file", "make it again");
    }
    scan_parts();
    verified_.assign(parts_.size(), false);
}

void CheckedFits::check_is_plain_fits() {
    const InputFile file(path_);  // exactly this name, a regular file
    bytes_ = file.size();
    constexpr std::string_view kStart = "SIMPLE  =";
    std::array<char, kStart.size()> start{};
    if (bytes_ >= static_cast<std::int64_t>(start.size())) {
        file.read_at(0, std::as_writable_bytes(std::span(start)));
    }
    // The library would unpack other formats, into memory without a bound.
    if (std::string_view(start.data(), start.size()) != kStart) {
        refuse("", "another kind of file", "a FITS file", "give a file that this program wrote");
    }
}

CheckedFits::~CheckedFits() = default;
CheckedFits::CheckedFits(CheckedFits&&) noexcept = default;
CheckedFits& CheckedFits::operator=(CheckedFits&&) noexcept = default;

void CheckedFits::refuse(const std::string& place, const std::string& found,
                         const std::string& expected, const std::string& advice) const {
    throw InputError({path_, place, found, expected, advice});
}

std::string CheckedFits::place_of(int part) const {
    const std::string& name = parts_[static_cast<std::size_t>(part)].name;
    return name.empty() ? fmt::format("HDU {}", part + 1)
                        : fmt::format("HDU {} ({})", part + 1, name);
}

void CheckedFits::scan_parts() {
    int status = 0;
    int count = 0;
    if (fits_get_num_hdus(handle_->file, &count, &status) != 0 || count > kMostParts) {
        refuse("", status != 0 ? fits_message(status) : fmt::format("{} HDUs", count),
               fmt::format("at most {} whole HDUs", kMostParts), "make the file again");
    }
    for (int number = 1; number <= count; ++number) {
        FitsPart part;
        int type = 0;
        std::array<char, FLEN_VALUE> name{};
        std::array<long, 2> sides{};
        long rows = 0;
        int axes = 0;
        fits_movabs_hdu(handle_->file, number, &type, &status);
        if (fits_read_key(handle_->file, TSTRING, "EXTNAME", name.data(), nullptr, &status) ==
            KEY_NO_EXIST) {
            status = 0;
        }
        part.is_image = type == IMAGE_HDU;
        if (part.is_image) {
            fits_get_img_dim(handle_->file, &axes, &status);
            fits_get_img_size(handle_->file, 2, sides.data(), &status);
        } else {
            fits_get_num_rows(handle_->file, &rows, &status);
        }
        LONGLONG data_start = 0;
        LONGLONG data_end = 0;
        fits_get_hduaddrll(handle_->file, nullptr, &data_start, &data_end, &status);
        part.name = name.data();
        parts_.push_back(part);
        if (status != 0) {
            refuse(place_of(number - 1), fits_message(status), "a whole HDU",
                   "make the file again");
        }
        if (data_end > bytes_ || rows > bytes_) {
            refuse(place_of(number - 1), fmt::format("data up to byte {}", data_end),
                   fmt::format("a file of more than its {} bytes", bytes_),
                   "the file is truncated; make it again");
        }
        if (axes == 2) {
            if (sides[0] > kMostSide || sides[1] > kMostSide ||
                std::int64_t{sides[0]} * sides[1] > kMostPixels) {
                refuse(place_of(number - 1), fmt::format("{} x {} pixels", sides[0], sides[1]),
                       "the size of a detector", "make the file again");
            }
            parts_.back().width = static_cast<int>(sides[0]);
            parts_.back().height = static_cast<int>(sides[1]);
        }
        parts_.back().rows = rows;
    }
}

std::optional<int> CheckedFits::find(const std::string& name) const {
    const auto found = std::find_if(parts_.begin(), parts_.end(),
                                    [&name](const FitsPart& part) { return part.name == name; });
    if (found == parts_.end()) {
        return std::nullopt;
    }
    return static_cast<int>(found - parts_.begin());
}

int CheckedFits::required(const std::string& name) const {
    if (const std::optional<int> part = find(name)) {
        return *part;
    }
    std::string names;
    for (const FitsPart& part : parts_) {
        names += (names.empty() || part.name.empty() ? "" : ", ") + part.name;
        constexpr std::size_t kEnough = 300;
        if (names.size() > kEnough) {
            names += ", ...";
            break;
        }
    }
    refuse("", fmt::format("extensions {}", names.empty() ? "none" : names),
           fmt::format("one named {}", name), "this is another kind of file, or it is damaged");
}

std::optional<std::string> CheckedFits::primary_text(const std::string& keyword) const {
    enter(0);
    verify(0);
    int status = 0;
    char* value = nullptr;  // allocated by the library, for text may go on over many cards
    if (fits_read_key_longstr(handle_->file, keyword.c_str(), &value, nullptr, &status) != 0) {
        fits_clear_errmsg();
        return std::nullopt;
    }
    std::string text(value);
    fits_free_memory(value, &status);
    return text;
}

void CheckedFits::enter(int part) const {
    assert(part >= 0 && static_cast<std::size_t>(part) < parts_.size());
    int status = 0;
    if (fits_movabs_hdu(handle_->file, part + 1, nullptr, &status) != 0) {
        refuse(place_of(part), fits_message(status), "a whole HDU", "make the file again");
    }
}

void CheckedFits::verify(int part) const {
    if (verified_[static_cast<std::size_t>(part)]) {
        return;
    }
    int status = 0;
    int data_state = 0;  // 1: the sum holds, 0: not stated, -1: it does not hold
    int whole_state = 0;
    fits_verify_chksum(handle_->file, &data_state, &whole_state, &status);
    if (status != 0) {
        refuse(place_of(part), fits_message(status), "data that can be read", "make it again");
    }
    if (data_state < 0 || whole_state < 0) {
        refuse(place_of(part), "data that do not match their checksum", "the data as written",
               "the file is damaged; make it again");
    }
    if (sums_ == Sums::required && (data_state == 0 || whole_state == 0)) {
        refuse(place_of(part), "no DATASUM and CHECKSUM", "both",
               "the file was not written whole, or by other software; make it again");
    }
    verified_[static_cast<std::size_t>(part)] = true;
}

namespace {

template <typename Pixel>
constexpr int kPixelType = 0;
template <>
constexpr int kPixelType<float> = TFLOAT;
template <>
constexpr int kPixelType<std::int16_t> = TSHORT;

template <typename Pixel>
std::vector<Pixel> read_pixels(fitsfile* file, const FitsPart& part, int& status) {
    std::vector<Pixel> pixels(static_cast<std::size_t>(part.width) *
                              static_cast<std::size_t>(part.height));
    int any_null = 0;
    fits_read_img(file, kPixelType<Pixel>, 1, static_cast<LONGLONG>(pixels.size()), nullptr,
                  pixels.data(), &any_null, &status);
    return pixels;
}

}  // namespace

std::vector<float> CheckedFits::float_image(int part) const {
    enter(part);
    verify(part);
    int status = 0;
    std::vector<float> pixels =
        read_pixels<float>(handle_->file, parts_[static_cast<std::size_t>(part)], status);
    if (status != 0) {
        refuse(place_of(part), fits_message(status), "an image of numbers", "make it again");
    }
    return pixels;
}

std::vector<std::int16_t> CheckedFits::int16_image(int part) const {
    enter(part);
    verify(part);
    int status = 0;
    int bits = 0;
    fits_get_img_equivtype(handle_->file, &bits, &status);
    if (status == 0 && bits != SHORT_IMG) {
        refuse(place_of(part), fmt::format("pixels of type {}", bits), "signed 16-bit integers",
               "this is not a mask of one exposure");
    }
    std::vector<std::int16_t> pixels =
        read_pixels<std::int16_t>(handle_->file, parts_[static_cast<std::size_t>(part)], status);
    if (status != 0) {
        refuse(place_of(part), fits_message(status), "an image of 16-bit integers",
               "make it again");
    }
    return pixels;
}

int CheckedFits::column_of(int part, const std::string& name) const {
    enter(part);
    verify(part);
    int status = 0;
    int column = 0;
    // The name is taken as a template: ours have no wildcard.
    std::string copy = name;
    if (parts_[static_cast<std::size_t>(part)].is_image ||
        fits_get_colnum(handle_->file, CASEINSEN, copy.data(), &column, &status) != 0) {
        fits_clear_errmsg();
        refuse(place_of(part), "no such column", fmt::format("a column named {}", name),
               "this is another kind of file, or of another version");
    }
    return column;
}

std::vector<std::string> CheckedFits::text_column(int part, const std::string& name) const {
    const int column = column_of(part, name);
    const auto rows = static_cast<std::size_t>(parts_[static_cast<std::size_t>(part)].rows);
    int status = 0;
    int type = 0;
    long repeat = 0;
    long width = 0;
    fits_get_coltype(handle_->file, column, &type, &repeat, &width, &status);
    if (status != 0 || type != TSTRING) {
        refuse(place_of(part), fmt::format("column {} of another type", name), "text",
               "this is another kind of file, or of another version");
    }
    std::vector<std::string> cells;
    cells.reserve(rows);
    std::vector<char> buffer(static_cast<std::size_t>(std::max(repeat, width)) + 1);
    for (std::size_t row = 0; row < rows; ++row) {
        char* cell = buffer.data();
        int any_null = 0;
        std::fill(buffer.begin(), buffer.end(), '\0');
        fits_read_col(handle_->file, TSTRING, column, static_cast<LONGLONG>(row) + 1, 1, 1, nullptr,
                      static_cast<void*>(&cell), &any_null, &status);
        cells.emplace_back(cell);
    }
    if (status != 0) {
        refuse(place_of(part), fits_message(status), fmt::format("text in column {}", name),
               "make it again");
    }
    return cells;
}

std::vector<double> CheckedFits::number_column(int part, const std::string& name,
                                               bool allow_nan) const {
    const int column = column_of(part, name);
    const std::int64_t rows = parts_[static_cast<std::size_t>(part)].rows;
    std::vector<double> cells(static_cast<std::size_t>(rows));
    int status = 0;
    int any_null = 0;
    if (rows > 0) {
        fits_read_col(handle_->file, TDOUBLE, column, 1, 1, rows, nullptr, cells.data(), &any_null,
                      &status);
    }
    if (status != 0) {
        refuse(place_of(part), fits_message(status), fmt::format("numbers in column {}", name),
               "make it again");
    }
    const auto bad = std::find_if(cells.begin(), cells.end(), [allow_nan](double cell) {
        return std::isinf(cell) || (!allow_nan && std::isnan(cell));
    });
    if (bad != cells.end()) {
        refuse(fmt::format("{}, row {}, column {}", place_of(part), bad - cells.begin() + 1, name),
               fmt::format("{}", *bad), "a finite number", "make it again");
    }
    return cells;
}

std::vector<std::vector<float>> CheckedFits::array_column(int part, const std::string& name) const {
    const int column = column_of(part, name);
    std::vector<std::vector<float>> cells(
        static_cast<std::size_t>(parts_[static_cast<std::size_t>(part)].rows));
    int status = 0;
    for (std::size_t row = 0; row < cells.size() && status == 0; ++row) {
        LONGLONG length = 0;
        LONGLONG offset = 0;
        fits_read_descriptll(handle_->file, column, static_cast<LONGLONG>(row) + 1, &length,
                             &offset, &status);
        if (status == 0 && (length < 0 || length > bytes_)) {
            refuse(place_of(part), fmt::format("an array of {} values in column {}", length, name),
                   "arrays within the file", "make it again");
        }
        if (status == 0 && length > 0) {
            cells[row].resize(static_cast<std::size_t>(length));
            int any_null = 0;
            fits_read_col(handle_->file, TFLOAT, column, static_cast<LONGLONG>(row) + 1, 1, length,
                          nullptr, cells[row].data(), &any_null, &status);
        }
    }
    if (status != 0) {
        refuse(place_of(part), fits_message(status), fmt::format("arrays in column {}", name),
               "make it again");
    }
    return cells;
}

}  // namespace straymark::io
