#include "io/fits_writer.h"

#include <algorithm>
#include <array>
#include <bit>
#include <cassert>
#include <cmath>
#include <cstring>
#include <fmt/format.h>
#include <limits>
#include <type_traits>

#include "io/byte_order.h"

namespace straymark::io {
namespace {

constexpr std::size_t kChecksumColumn = 11;  // of the string's first character in its card
constexpr std::string_view kChecksumComment = "HDU checksum";
constexpr std::string_view kDatasumComment = "data unit checksum";
constexpr std::string_view kBlankChecksum = "0000000000000000";

/// Sixteen characters that stand for `value` in the sum of their header (appendix J.4): each byte
/// is spread over four characters, kept clear of punctuation, one character later than its byte
/// because a string's first character is the card's twelfth.
std::string encoded_checksum(std::uint32_t value) {
    const auto punctuation = [](int c) { return (c >= ':' && c <= '@') || (c >= '[' && c <= '`'); };
    std::array<char, 16> characters{};
    for (std::size_t i = 0; i < 4; ++i) {
        const int byte = static_cast<int>((value >> (24 - 8 * i)) & 0xFFU);
        std::array<int, 4> part{};
        part.fill(byte / 4 + '0');
        part[0] += byte % 4;
        while (std::any_of(part.begin(), part.end(), punctuation)) {
            for (std::size_t pair = 0; pair < part.size(); pair += 2) {
                if (punctuation(part[pair]) || punctuation(part[pair + 1])) {
                    ++part[pair];
                    --part[pair + 1];
                }
            }
        }
        for (std::size_t j = 0; j < part.size(); ++j) {
            characters[(4 * j + i + 1) % characters.size()] = static_cast<char>(part[j]);
        }
    }
    return {characters.begin(), characters.end()};
}

std::span<const std::byte> bytes_of(const std::string& text) {
    return std::as_bytes(std::span(text));
}

void pad(std::string& header) {
    header.resize((header.size() + kFitsBlock - 1) / kFitsBlock * kFitsBlock, ' ');
}

/// A primary unit without data, in a file of so many bytes.
FitsUnit primary_unit(const HeaderCards& cards, std::size_t file_bytes) {
    HeaderCards all;
    all.add_logical("SIMPLE", true, "FITS 4.0");
    all.add_integer("BITPIX", 8);
    all.add_integer("NAXIS", 0, "no data here; see the extensions");
    all.add_logical("EXTEND", true);
    all.add_integer("FILESIZE", static_cast<std::int64_t>(file_bytes), "bytes of this file");
    all.append_all(cards);
    return finished_unit(std::move(all), {});
}

}  // namespace

std::uint32_t fits_sum(std::span<const std::byte> bytes, std::uint32_t sum) {
    assert(bytes.size() % 4 == 0);
    // The two halves of each word are summed apart, without carries; 2^16 words fit.
    constexpr std::size_t kWords = 1 << 16;
    std::uint64_t total = sum;
    while (!bytes.empty()) {
        const std::size_t count = std::min(bytes.size() / 4, kWords);
        std::uint64_t part = 0;
        for (std::size_t i = 0; i < count; ++i) {
            part += load_big_endian<std::uint32_t>(bytes.data() + 4 * i);
        }
        total += part;
        total = (total & 0xFFFFFFFFU) + (total >> 32U);
        bytes = bytes.subspan(4 * count);
    }
    while (total >> 32U != 0) {
        total = (total & 0xFFFFFFFFU) + (total >> 32U);
    }
    return static_cast<std::uint32_t>(total);
}

FitsUnit finished_unit(HeaderCards cards, std::vector<std::byte> data, std::byte fill) {
    data.resize((data.size() + kFitsBlock - 1) / kFitsBlock * kFitsBlock, fill);
    const std::uint32_t data_sum = fits_sum(data);
    cards.add_text("DATASUM", fmt::format("{}", data_sum), kDatasumComment);
    const std::size_t checksum_at = cards.text().size() + kChecksumColumn;
    cards.add_text("CHECKSUM", kBlankChecksum, kChecksumComment);
    FitsUnit hdu{cards.text() + "END", std::move(data)};
    pad(hdu.header);
    hdu.header.replace(checksum_at, kBlankChecksum.size(),
                       encoded_checksum(~fits_sum(bytes_of(hdu.header), data_sum)));
    return hdu;
}

namespace {

template <typename T>
constexpr char kCode = '?';  // the letter of TFORM
template <>
constexpr char kCode<std::int16_t> = 'I';
template <>
constexpr char kCode<std::int32_t> = 'J';
template <>
constexpr char kCode<std::int64_t> = 'K';
template <>
constexpr char kCode<float> = 'E';
template <>
constexpr char kCode<double> = 'D';

/// One column made ready: its TFORM, its bytes in a row, and what writes row after row.
struct PlacedColumn {
    std::string format;
    std::size_t bytes = 0;
    std::size_t rows = 0;
};

/// Writes the columns of one table; the heap grows behind the rows.
class TableData {
public:
    explicit TableData(const std::vector<TableColumn>& columns) {
        for (const TableColumn& column : columns) {
            placed_.push_back(std::visit([](const auto& v) { return place(v); }, column.values));
            assert(placed_.back().rows == placed_.front().rows);
            row_bytes_ += placed_.back().bytes;
        }
        bytes_.resize(row_bytes_ * rows());
        std::size_t offset = 0;
        for (std::size_t i = 0; i < columns.size(); ++i) {
            std::visit([&](const auto& v) { fill(v, offset, placed_[i].bytes); },
                       columns[i].values);
            offset += placed_[i].bytes;
        }
    }

    [[nodiscard]] std::size_t rows() const { return placed_.front().rows; }
    [[nodiscard]] std::size_t row_bytes() const { return row_bytes_; }
    [[nodiscard]] std::size_t heap_bytes() const { return bytes_.size() - row_bytes_ * rows(); }
    [[nodiscard]] const PlacedColumn& placed(std::size_t column) const { return placed_[column]; }
    [[nodiscard]] std::vector<std::byte> take() { return std::move(bytes_); }

private:
    template <typename T>
    static PlacedColumn place(const std::vector<T>& values) {
        return {std::string("1") + kCode<T>, sizeof(T), values.size()};
    }
    static PlacedColumn place(const std::vector<bool>& values) { return {"1L", 1, values.size()}; }
    static PlacedColumn place(const std::vector<std::string>& values) {
        std::size_t longest = 1;
        for (const std::string& text : values) {
            longest = std::max(longest, printable_text(text).size());
        }
        return {fmt::format("{}A", longest), longest, values.size()};
    }
    static PlacedColumn place(const std::vector<std::vector<float>>& values) {
        std::size_t longest = 0;
        for (const std::vector<float>& array : values) {
            longest = std::max(longest, array.size());
        }
        return {fmt::format("1PE({})", longest), 2 * sizeof(std::int32_t), values.size()};
    }

    template <typename T>
    void fill(const std::vector<T>& values, std::size_t offset, std::size_t /*bytes*/) {
        for (std::size_t row = 0; row < values.size(); ++row) {
            store_big_endian(cell(row, offset), values[row]);
        }
    }
    void fill(const std::vector<bool>& values, std::size_t offset, std::size_t /*bytes*/) {
        for (std::size_t row = 0; row < values.size(); ++row) {
            *cell(row, offset) = static_cast<std::byte>(values[row] ? 'T' : 'F');
        }
    }
    void fill(const std::vector<std::string>& values, std::size_t offset, std::size_t bytes) {
        for (std::size_t row = 0; row < values.size(); ++row) {
            const std::string text = printable_text(values[row]);
            std::memset(cell(row, offset), ' ', bytes);
            std::memcpy(cell(row, offset), text.data(), text.size());
        }
    }
    void fill(const std::vector<std::vector<float>>& values, std::size_t offset,
              std::size_t /*bytes*/) {
        for (std::size_t row = 0; row < values.size(); ++row) {
            const std::size_t heap = heap_bytes();
            assert(heap <= std::numeric_limits<std::int32_t>::max());
            store_big_endian(cell(row, offset), static_cast<std::int32_t>(values[row].size()));
            store_big_endian(cell(row, offset) + sizeof(std::int32_t),
                             static_cast<std::int32_t>(heap));
            bytes_.resize(bytes_.size() + values[row].size() * sizeof(float));
            std::byte* to = bytes_.data() + row_bytes_ * rows() + heap;
            for (const float value : values[row]) {
                store_big_endian(to, value);
                to += sizeof value;
            }
        }
    }
    std::byte* cell(std::size_t row, std::size_t offset) {
        return bytes_.data() + row * row_bytes_ + offset;
    }

    std::vector<PlacedColumn> placed_;
    std::size_t row_bytes_ = 0;
    std::vector<std::byte> bytes_;
};

}  // namespace

HeaderCards binary_table_cards(std::size_t row_bytes, std::size_t rows, std::size_t heap_bytes,
                               std::size_t columns) {
    HeaderCards cards;
    cards.add_text("XTENSION", "BINTABLE", "binary table");
    cards.add_integer("BITPIX", 8);
    cards.add_integer("NAXIS", 2);
    cards.add_integer("NAXIS1", static_cast<std::int64_t>(row_bytes), "bytes in a row");
    cards.add_integer("NAXIS2", static_cast<std::int64_t>(rows), "rows");
    cards.add_integer("PCOUNT", static_cast<std::int64_t>(heap_bytes), "bytes behind the rows");
    cards.add_integer("GCOUNT", 1);
    cards.add_integer("TFIELDS", static_cast<std::int64_t>(columns), "columns");
    return cards;
}

FitsUnit table_unit(std::string_view name, const std::vector<TableColumn>& columns,
                    const HeaderCards& cards) {
    assert(!columns.empty() && columns.size() <= 999);
    TableData data(columns);
    HeaderCards all =
        binary_table_cards(data.row_bytes(), data.rows(), data.heap_bytes(), columns.size());
    for (std::size_t i = 0; i < columns.size(); ++i) {
        all.add_text(fmt::format("TTYPE{}", i + 1), columns[i].name);
        all.add_text(fmt::format("TFORM{}", i + 1), data.placed(i).format);
        if (!columns[i].unit.empty()) {
            all.add_text(fmt::format("TUNIT{}", i + 1), columns[i].unit);
        }
    }
    all.add_text("EXTNAME", name);
    all.append_all(cards);
    return finished_unit(std::move(all), data.take());
}

void write_fits(const std::string& path, const HeaderCards& primary,
                std::span<const FitsUnit> extensions) {
    std::size_t extension_bytes = 0;
    for (const FitsUnit& unit : extensions) {
        extension_bytes += unit.header.size() + unit.data.size();
    }
    // The length of the header does not depend on the number it states.
    const FitsUnit draft = primary_unit(primary, 0);
    const FitsUnit first = primary_unit(primary, draft.header.size() + extension_bytes);
    std::vector<std::span<const std::byte>> pieces = {bytes_of(first.header)};
    for (const FitsUnit& unit : extensions) {
        pieces.push_back(bytes_of(unit.header));
        pieces.emplace_back(unit.data);
    }
    OutputFile file(path);
    file.write_all(pieces);
    file.commit();
}

std::optional<FitsHeader> whole_primary_header(const InputFile& file) {
    constexpr std::int64_t kLongest = std::int64_t{1} << 20;
    constexpr std::uint32_t kWhole = 0xFFFFFFFF;
    std::string text;
    for (bool ended = false; !ended;) {
        const auto begin = text.size();
        const auto end = static_cast<std::int64_t>(begin + kFitsBlock);
        if (end > std::min(file.size(), kLongest)) {
            return std::nullopt;
        }
        text.resize(begin + kFitsBlock);
        file.read_at(static_cast<std::int64_t>(begin),
                     std::as_writable_bytes(std::span(text).subspan(begin)));
        for (std::size_t card = begin; card < text.size() && !ended; card += kFitsCard) {
            ended = std::string_view(text).substr(card, 8) == "END     ";
        }
    }
    FitsHeader header(text);
    const std::optional<CardValue> size = header.find("FILESIZE");
    if (fits_sum(bytes_of(text)) != kWhole || !size || size->integer() != file.size()) {
        return std::nullopt;
    }
    return header;
}

}  // namespace straymark::io
