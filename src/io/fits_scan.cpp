#include "io/fits_scan.h"

#include <algorithm>
#include <array>
#include <cstddef>
#include <fmt/format.h>
#include <limits>
#include <span>
#include <utility>

#include "core/error.h"
#include "io/fits_writer.h"

namespace straymark::io {
namespace {

constexpr std::int64_t kMostCards = 100'000;
constexpr std::size_t kMostHdus = 20'000;
constexpr std::int64_t kMostAxes = 999;  // FITS 4.0, section 4.4.1
constexpr std::int64_t kLargestAxis = std::numeric_limits<std::int32_t>::max();
constexpr const char* kFetchAgain = "the file is truncated or still being written; fetch it again";

/// Reads one header and says what is wrong with it in the file's and HDU's name.
class HeaderView {
public:
    HeaderView(const FitsHeader& header, const std::string& file, const std::string& place)
        : header_(header), file_(file), place_(place) {}

    [[noreturn]] void refuse(const std::string& keyword, const std::string& found,
                             const std::string& expected) const {
        throw InputError({file_, place_ + (keyword.empty() ? "" : ", keyword " + keyword), found,
                          expected, "the header is damaged; fetch the file again"});
    }
    [[nodiscard]] std::int64_t integer(const std::string& keyword, std::int64_t low,
                                       std::int64_t high,
                                       std::optional<std::int64_t> otherwise = {}) const {
        const std::optional<CardValue> value = header_.find(keyword);
        if (!value && otherwise) {
            return *otherwise;
        }
        const std::optional<std::int64_t> number = value ? value->integer() : std::nullopt;
        if (!number || *number < low || *number > high) {
            refuse(keyword, value ? quoted(value->text) : "no such card",
                   fmt::format("an integer from {} to {}", low, high));
        }
        return *number;
    }
    [[nodiscard]] double number(const std::string& keyword, double otherwise) const {
        const std::optional<CardValue> value = header_.find(keyword);
        if (!value) {
            return otherwise;
        }
        const std::optional<double> number = value->number();
        if (!number) {
            refuse(keyword, quoted(value->text), "a number");
        }
        return *number;
    }
    [[nodiscard]] bool logical(const std::string& keyword) const {
        const std::optional<CardValue> value = header_.find(keyword);
        return value && value->logical().value_or(false);
    }
    [[nodiscard]] int bitpix(const std::string& keyword) const {
        const std::int64_t bits = integer(keyword, -64, 64);
        constexpr std::array<std::int64_t, 6> kAllowed{8, 16, 32, 64, -32, -64};
        if (std::find(kAllowed.begin(), kAllowed.end(), bits) == kAllowed.end()) {
            refuse(keyword, std::to_string(bits), "8, 16, 32, 64, -32 or -64");
        }
        return static_cast<int>(bits);
    }
    [[nodiscard]] std::vector<std::int64_t> axes(const std::string& prefix) const {
        const std::int64_t count = integer(prefix, 0, kMostAxes);
        std::vector<std::int64_t> lengths;
        for (std::int64_t axis = 1; axis <= count; ++axis) {
            lengths.push_back(integer(fmt::format("{}{}", prefix, axis), 0, kLargestAxis));
        }
        return lengths;
    }
    /// bytes per element x groups x (parameters + elements), checked against overflow.
    [[nodiscard]] std::int64_t product(std::int64_t element, std::int64_t groups,
                                       std::int64_t parameters,
                                       const std::vector<std::int64_t>& lengths) const {
        std::int64_t total = lengths.empty() ? 0 : 1;
        bool overflow = false;
        for (const std::int64_t length : lengths) {
            overflow = __builtin_mul_overflow(total, length, &total) || overflow;
        }
        overflow = __builtin_add_overflow(total, parameters, &total) || overflow;
        overflow = __builtin_mul_overflow(total, groups, &total) || overflow;
        overflow = __builtin_mul_overflow(total, element, &total) || overflow;
        if (overflow || total > std::numeric_limits<std::int64_t>::max() - kFitsBlockBytes) {
            refuse("NAXIS1", "axes whose product overflows", "a size that a file can have");
        }
        return total;
    }

private:
    const FitsHeader& header_;
    const std::string& file_;
    const std::string& place_;
};

/// Axes of length 1 behind the second mean nothing; an axis of length 0 means no pixels.
std::vector<std::int64_t> image_axes(std::vector<std::int64_t> lengths) {
    while (lengths.size() > 2 && lengths.back() == 1) {
        lengths.pop_back();
    }
    const bool empty = lengths.size() < 2 || std::count(lengths.begin(), lengths.end(), 0) > 0;
    return empty ? std::vector<std::int64_t>{} : lengths;
}

std::optional<std::uint32_t> data_sum_of(const FitsHeader& header) {
    const std::optional<CardValue> value = header.find("DATASUM");
    const std::optional<std::int64_t> sum = value ? value->integer() : std::nullopt;
    if (!sum || *sum < 0 || *sum > std::numeric_limits<std::uint32_t>::max()) {
        return std::nullopt;
    }
    return static_cast<std::uint32_t>(*sum);
}

void describe_image(const FitsHeader& header, const HeaderView& view, FitsHdu& hdu) {
    hdu.scale = view.number("BSCALE", 1.0);
    hdu.zero = view.number("BZERO", 0.0);
    if (const std::optional<CardValue> blank = header.find("BLANK"); blank && hdu.bitpix > 0) {
        hdu.blank = blank->integer();
    }
}

bool is_xtension(std::string_view text) {
    return text.substr(0, 9) == "XTENSION=";
}

/// Reads a file block by block as far as one header goes.
FitsHeader header_at(const InputFile& file, std::int64_t offset, const std::string& place,
                     std::int64_t& card_count) {
    std::string cards;
    while (true) {
        const std::int64_t at = offset + static_cast<std::int64_t>(cards.size());
        const std::int64_t length = std::min(kFitsBlockBytes, file.size() - at);
        if (length < static_cast<std::int64_t>(kCardBytes)) {
            throw InputError({file.path(), place,
                              fmt::format("{} cards and no END", cards.size() / kCardBytes),
                              "a header that ends with END", kFetchAgain});
        }
        const std::size_t before = cards.size();
        const std::size_t whole = static_cast<std::size_t>(length) / kCardBytes * kCardBytes;
        cards.resize(before + whole);
        file.read_at(at, std::as_writable_bytes(std::span(cards)).subspan(before));
        for (std::size_t i = before; i < cards.size(); i += kCardBytes) {
            if (std::string_view(cards).substr(i, 8) == "END     ") {
                card_count = static_cast<std::int64_t>(i / kCardBytes) + 1;
                return FitsHeader(std::move(cards));
            }
        }
        if (static_cast<std::int64_t>(cards.size() / kCardBytes) > kMostCards) {
            throw InputError({file.path(), place, fmt::format("more than {} cards", kMostCards),
                              "a header that ends with END", "this is not a raw exposure"});
        }
    }
}

/// Is there another HDU at `offset`? What stands behind the last one may be anything.
bool another_hdu(const InputFile& file, std::int64_t offset, std::vector<std::string>& notes) {
    const std::int64_t left = file.size() - offset;
    if (left <= 0) {
        return false;
    }
    constexpr std::string_view kStart = "XTENSION";
    std::string start(
        static_cast<std::size_t>(std::min(left, static_cast<std::int64_t>(kStart.size()))), '\0');
    file.read_at(offset, std::as_writable_bytes(std::span(start)));
    if (start == kStart.substr(0, start.size())) {
        return true;
    }
    notes.push_back(fmt::format("{} bytes after the last HDU are no HDU and were not read", left));
    return false;
}

void check_start(const InputFile& file) {
    constexpr std::string_view kStart = "SIMPLE  =";
    std::string start(kStart.size(), '\0');
    if (file.size() >= kFitsBlockBytes) {
        file.read_at(0, std::as_writable_bytes(std::span(start)));
    }
    if (start != kStart) {
        throw InputError(
            {file.path(), "byte 0",
             file.size() < kFitsBlockBytes ? fmt::format("{} bytes", file.size()) : quoted(start),
             "a FITS file, which begins with 'SIMPLE  =' and has 2880 bytes or more",
             "give a raw exposure in FITS"});
    }
}

}  // namespace

std::int64_t FitsHdu::image_bytes() const {
    std::int64_t total = has_pixels() ? pixel_bytes() : 0;
    for (const std::int64_t length : axes) {
        if (__builtin_mul_overflow(total, length, &total)) {
            return std::numeric_limits<std::int64_t>::max();
        }
    }
    return total;
}

std::string place_of(const FitsHdu& hdu) {
    if (!hdu.name.empty()) {
        return fmt::format("HDU {} ({})", hdu.number, printable(hdu.name));
    }
    return hdu.number == 0 ? "HDU 0 (primary)" : fmt::format("HDU {}", hdu.number);
}

FitsHdu described_hdu(const FitsHeader& header, bool primary, const std::string& file,
                      const std::string& place) {
    const HeaderView view(header, file, place);
    FitsHdu hdu;
    hdu.bitpix = view.bitpix("BITPIX");
    const std::vector<std::int64_t> lengths = view.axes("NAXIS");
    const std::int64_t largest = std::numeric_limits<std::int64_t>::max();
    const std::int64_t parameters = view.integer("PCOUNT", 0, largest, 0);
    const std::int64_t groups = view.integer("GCOUNT", 1, largest, 1);
    if (primary && view.logical("GROUPS")) {
        view.refuse("GROUPS", "T (random groups)", "images");
    }
    hdu.data_bytes = view.product(hdu.pixel_bytes(), groups, parameters, lengths);
    hdu.data_sum = data_sum_of(header);
    if (const std::optional<CardValue> name = header.find("EXTNAME")) {
        hdu.name = trimmed(name->text);
    }
    const std::optional<CardValue> extension = header.find("XTENSION");
    const std::string type(extension ? trimmed(extension->text) : std::string_view());
    if (primary || type == "IMAGE") {
        hdu.kind = HduKind::image;
        hdu.axes = image_axes(lengths);
    } else if (type == "BINTABLE" && view.logical("ZIMAGE")) {
        hdu.kind = HduKind::compressed_image;
        hdu.bitpix = view.bitpix("ZBITPIX");
        hdu.axes = image_axes(view.axes("ZNAXIS"));
        hdu.was_primary = header.find("ZSIMPLE").has_value();
        const std::optional<CardValue> compression = header.find("ZCMPTYPE");
        hdu.compression = compression ? trimmed(compression->text) : std::string_view("not stated");
        if (upper_case(hdu.name) == "COMPRESSED_IMAGE") {
            hdu.name.clear();  // what compression calls an image that had no name
        }
    }
    if (hdu.has_pixels()) {
        describe_image(header, view, hdu);
    }
    return hdu;
}

FitsStructure scan_fits(const InputFile& file) {
    check_start(file);
    FitsStructure structure;
    std::int64_t offset = 0;
    do {
        if (structure.hdus.size() >= kMostHdus) {
            throw InputError({file.path(), "", fmt::format("more than {} HDUs", kMostHdus),
                              "a raw exposure", "this is not a raw exposure"});
        }
        const int number = static_cast<int>(structure.hdus.size());
        const std::string place = number == 0 ? "HDU 0 (primary)" : fmt::format("HDU {}", number);
        std::int64_t cards = 0;
        const FitsHeader header = header_at(file, offset, place, cards);
        if (number > 0 && !is_xtension(header.card(0))) {
            throw InputError({file.path(), place, quoted(header.card(0)), "a card XTENSION",
                              "the header is damaged; fetch the file again"});
        }
        FitsHdu hdu = described_hdu(header, number == 0, file.path(), place);
        hdu.number = number;
        hdu.header_offset = offset;
        hdu.header_cards = cards;
        const std::int64_t header_bytes = cards * static_cast<std::int64_t>(kCardBytes);
        hdu.data_offset =
            offset + (header_bytes + kFitsBlockBytes - 1) / kFitsBlockBytes * kFitsBlockBytes;
        const std::int64_t there = std::max<std::int64_t>(0, file.size() - hdu.data_offset);
        if (hdu.data_bytes > there) {
            throw InputError({file.path(), place_of(hdu), fmt::format("{} bytes of data", there),
                              fmt::format("{} by its header", hdu.data_bytes), kFetchAgain});
        }
        const std::int64_t padding =
            (kFitsBlockBytes - hdu.data_bytes % kFitsBlockBytes) % kFitsBlockBytes;
        if (padding > there - hdu.data_bytes) {
            structure.notes.push_back("the last block of the file is not full");
        }
        offset = hdu.data_offset + hdu.data_bytes + padding;
        if (hdu.kind != HduKind::other && !hdu.name.empty()) {
            structure.images_by_name.emplace(upper_case(hdu.name), number);
        }
        structure.hdus.push_back(std::move(hdu));
    } while (another_hdu(file, offset, structure.notes));
    return structure;
}

FitsHeader read_header(const InputFile& file, const FitsHdu& hdu) {
    std::string cards(static_cast<std::size_t>(hdu.header_cards) * kCardBytes, '\0');
    file.read_at(hdu.header_offset, std::as_writable_bytes(std::span(cards)));
    return FitsHeader(std::move(cards));
}

std::uint32_t data_checksum(const InputFile& file, const FitsHdu& hdu) {
    const std::int64_t padded =
        (hdu.data_bytes + kFitsBlockBytes - 1) / kFitsBlockBytes * kFitsBlockBytes;
    const std::int64_t end = std::min(file.size(), hdu.data_offset + padded);
    std::array<std::byte, 1 << 14> block{};
    std::uint32_t sum = 0;
    for (std::int64_t at = hdu.data_offset; at < end;) {
        const std::int64_t length = std::min(end - at, static_cast<std::int64_t>(block.size()));
        block.fill({});
        file.read_at(at, std::span(block).first(static_cast<std::size_t>(length)));
        sum = fits_sum(block, sum);
        at += length;
    }
    return sum;
}

}  // namespace straymark::io
