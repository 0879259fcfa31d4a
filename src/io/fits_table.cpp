#include "io/fits_table.h"

#include <algorithm>
#include <charconv>
#include <cmath>
#include <fmt/format.h>
#include <limits>
#include <span>
#include <utility>

#include "core/error.h"
#include "io/byte_order.h"
#include "io/fits_writer.h"

namespace straymark::io {
namespace {

constexpr std::int64_t kMostFields = 999;  // FITS 4.0 section 7.3.1
/// A row may unpack to many times its bytes (strings); a table larger than this is no product.
constexpr std::size_t kMostCells = std::size_t{1} << 28;
constexpr const char* kFetchAgain = "the file is damaged; fetch it again, or remake its sums";

/// Bytes of one element by the letter of TFORM; 0: a letter that does not exist.
std::int64_t element_bytes(char code) {
    switch (code) {
        case 'L':
        case 'A':
        case 'B':
            return 1;
        case 'I':
            return 2;
        case 'J':
        case 'E':
            return 4;
        case 'K':
        case 'D':
        case 'C':
        case 'P':
            return 8;
        case 'M':
        case 'Q':
            return 16;
        default:
            return 0;
    }
}

std::int64_t field_bytes(const TableField& field) {
    return field.code == 'X' ? (field.repeat + 7) / 8 : field.repeat * element_bytes(field.code);
}

std::string lower_case(std::string_view text) {
    std::string lower(text);
    std::transform(lower.begin(), lower.end(), lower.begin(), [](char c) {
        return c >= 'A' && c <= 'Z' ? static_cast<char>(c - 'A' + 'a') : c;
    });
    return lower;
}

/// "rT..." with r absent for 1; false: not a format.
bool parse_format(std::string_view text, TableField& field) {
    field.repeat = 1;
    const auto [end, error] = std::from_chars(text.data(), text.data() + text.size(), field.repeat);
    const bool counted = error == std::errc();
    if ((!counted && error != std::errc::invalid_argument) || field.repeat < 0 ||
        field.repeat > std::numeric_limits<std::int32_t>::max()) {
        return false;
    }
    text.remove_prefix(counted ? static_cast<std::size_t>(end - text.data()) : 0);
    if (text.empty()) {
        return false;
    }
    field.code = text.front();
    return field.code == 'X' || element_bytes(field.code) > 0;
}

template <typename T>
constexpr char kCode = '?';
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

std::int64_t integer_at(const std::byte* at, char code) {
    switch (code) {
        case 'L':
            return *at == static_cast<std::byte>('T') ? 1 : 0;
        case 'B':
            return std::to_integer<std::int64_t>(*at);
        case 'I':
            return load_big_endian<std::int16_t>(at);
        case 'J':
            return load_big_endian<std::int32_t>(at);
        default:
            return load_big_endian<std::int64_t>(at);
    }
}

/// `ours`: every unit carries CHECKSUM.
void check_sums(const InputFile& file, const FitsHdu& hdu, bool ours) {
    constexpr std::uint32_t kWhole = 0xFFFFFFFF;
    const FitsHeader header = read_header(file, hdu);
    const auto refuse = [&](const char* keyword) {
        throw InputError({file.path(), fmt::format("{}, keyword {}", place_of(hdu), keyword),
                          "a sum that does not hold", "the sum of what is there", kFetchAgain});
    };
    const std::uint32_t data = data_checksum(file, hdu);
    if (hdu.data_sum && *hdu.data_sum != data) {
        refuse("DATASUM");
    }
    if (header.find("CHECKSUM")) {
        std::vector<std::byte> bytes(static_cast<std::size_t>(hdu.data_offset - hdu.header_offset));
        file.read_at(hdu.header_offset, bytes);
        if (fits_sum(bytes, data) != kWhole) {
            refuse("CHECKSUM");
        }
    } else if (ours) {
        refuse("CHECKSUM");
    }
}

}  // namespace

bool TableField::scalar() const {
    constexpr std::string_view kNumbers = "LBIJKED";
    return code == 'A' || (repeat == 1 && kNumbers.find(code) != std::string_view::npos);
}

std::vector<FitsHdu> sound_units(const InputFile& file) {
    FitsStructure structure = scan_fits(file);
    if (!structure.notes.empty()) {
        throw InputError(
            {file.path(), "", structure.notes.front(), "whole units and no more", kFetchAgain});
    }
    const std::optional<CardValue> size =
        read_header(file, structure.hdus.front()).find("FILESIZE");
    if (size && size->integer() != file.size()) {
        throw InputError({file.path(), "HDU 0 (primary), keyword FILESIZE",
                          fmt::format("{} bytes", file.size()), size->text, kFetchAgain});
    }
    for (const FitsHdu& hdu : structure.hdus) {
        check_sums(file, hdu, size.has_value());
    }
    return std::move(structure.hdus);
}

std::optional<BinaryTable> BinaryTable::read(const InputFile& file, const FitsHdu& hdu) {
    const FitsHeader header = read_header(file, hdu);
    const std::optional<CardValue> type = header.find("XTENSION");
    if (hdu.kind != HduKind::other || !type || trimmed(type->text) != "BINTABLE") {
        return std::nullopt;
    }
    BinaryTable table(file.path(), place_of(hdu));
    table.name_ = hdu.name;
    table.read_layout(header);
    // The scanner has compared the size of the data with that of the file.
    table.data_.resize(table.row_bytes_ * table.rows_);
    file.read_at(hdu.data_offset, table.data_);
    return table;
}

void BinaryTable::refuse(const std::string& place, const std::string& found,
                         const std::string& expected, const std::string& advice) const {
    throw InputError({path_, fmt::format("{}, {}", place_, place), found, expected, advice});
}

void BinaryTable::read_layout(const FitsHeader& header) {
    const auto integer = [&](const std::string& keyword, std::int64_t most) {
        const std::optional<CardValue> value = header.find(keyword);
        const std::optional<std::int64_t> number = value ? value->integer() : std::nullopt;
        if (!number || *number < 0 || *number > most) {
            refuse("keyword " + keyword,
                   value ? fmt::format("'{}'", printable(value->text)) : "no such card",
                   fmt::format("an integer from 0 to {}", most));
        }
        return *number;
    };
    constexpr std::int64_t kLargest = std::numeric_limits<std::int32_t>::max();
    row_bytes_ = static_cast<std::size_t>(integer("NAXIS1", kLargest));
    rows_ = static_cast<std::size_t>(integer("NAXIS2", kLargest));
    const std::int64_t count = integer("TFIELDS", kMostFields);
    if (rows_ * static_cast<std::size_t>(std::max<std::int64_t>(count, 1)) > kMostCells ||
        (row_bytes_ == 0 && rows_ > 0)) {
        refuse("keyword NAXIS2", fmt::format("{} rows of {} columns", rows_, count),
               fmt::format("at most {} cells, in rows that hold something", kMostCells));
    }
    std::int64_t offset = 0;
    for (std::int64_t i = 1; i <= count; ++i) {
        fields_.push_back(read_field(header, i));
        fields_.back().offset = static_cast<std::size_t>(offset);
        offset += field_bytes(fields_.back());
    }
    if (offset != static_cast<std::int64_t>(row_bytes_)) {
        refuse("keyword NAXIS1", fmt::format("{} bytes in a row", row_bytes_),
               fmt::format("{}, the sum of the columns", offset));
    }
}

TableField BinaryTable::read_field(const FitsHeader& header, std::int64_t number) const {
    const auto text = [&](const char* stem) {
        const std::optional<CardValue> value = header.find(fmt::format("{}{}", stem, number));
        return value ? std::string(trimmed(value->text)) : std::string();
    };
    const auto real = [&](const char* stem, double otherwise) {
        const std::string keyword = fmt::format("{}{}", stem, number);
        const std::optional<CardValue> value = header.find(keyword);
        if (!value) {
            return otherwise;
        }
        if (!value->number()) {
            refuse("keyword " + keyword, fmt::format("'{}'", printable(value->text)),
                   "a finite number");
        }
        return *value->number();
    };
    TableField field;
    field.name = lower_case(text("TTYPE"));
    if (field.name.empty() || find(field.name) != nullptr) {
        refuse(fmt::format("keyword TTYPE{}", number), fmt::format("'{}'", printable(field.name)),
               "a name that no other column has");
    }
    if (!parse_format(text("TFORM"), field)) {
        refuse(fmt::format("keyword TFORM{}", number),
               fmt::format("'{}'", printable(text("TFORM"))), "a format of FITS 4.0 section 7.3.1");
    }
    field.scale = real("TSCAL", 1.0);
    field.zero = real("TZERO", 0.0);
    if (const std::optional<CardValue> null = header.find(fmt::format("TNULL{}", number))) {
        field.null = null->integer();
    }
    return field;
}

const TableField* BinaryTable::find(std::string_view field) const {
    const auto found = std::find_if(fields_.begin(), fields_.end(),
                                    [field](const TableField& f) { return f.name == field; });
    return found == fields_.end() ? nullptr : &*found;
}

template <typename T>
std::vector<T> BinaryTable::stored(std::string_view field) const {
    const TableField* const found = find(field);
    if (found == nullptr || found->code != kCode<T> || found->repeat != 1 || !found->plain()) {
        refuse(fmt::format("column '{}'", field),
               found == nullptr ? "no such column" : fmt::format("format {}", found->code),
               fmt::format("format 1{}, not scaled", kCode<T>));
    }
    std::vector<T> values(rows_);
    for (std::size_t row = 0; row < rows_; ++row) {
        values[row] = load_big_endian<T>(cell(row, *found));
    }
    return values;
}

template std::vector<std::int16_t> BinaryTable::stored(std::string_view) const;
template std::vector<std::int32_t> BinaryTable::stored(std::string_view) const;
template std::vector<std::int64_t> BinaryTable::stored(std::string_view) const;
template std::vector<float> BinaryTable::stored(std::string_view) const;
template std::vector<double> BinaryTable::stored(std::string_view) const;

std::vector<std::string> BinaryTable::strings(std::string_view field) const {
    const TableField* const found = find(field);
    if (found == nullptr || found->code != 'A') {
        refuse(fmt::format("column '{}'", field), found == nullptr ? "no such column" : "numbers",
               "strings");
    }
    std::vector<std::string> values(rows_);
    for (std::size_t row = 0; row < rows_; ++row) {
        const auto* const begin = reinterpret_cast<const char*>(cell(row, *found));
        std::string_view text(begin, static_cast<std::size_t>(found->repeat));
        text = text.substr(0, text.find('\0'));  // ends the string, FITS 4.0 section 7.3.3.1
        text = text.substr(0, text.find_last_not_of(' ') + 1);
        if (!std::all_of(text.begin(), text.end(), [](char c) { return c >= ' ' && c <= '~'; })) {
            refuse(fmt::format("column '{}', row {}", field, row + 1),
                   fmt::format("'{}'", printable(text)), "printable ASCII");
        }
        values[row] = text;
    }
    return values;
}

BinaryTable::Values BinaryTable::values(const TableField& field) const {
    if (field.code == 'A') {
        return strings(field.name);
    }
    const bool real = field.code == 'E' || field.code == 'D';
    if (!real && field.plain()) {
        std::vector<std::int64_t> values(rows_);
        for (std::size_t row = 0; row < rows_; ++row) {
            values[row] = integer_at(cell(row, field), field.code);
        }
        return values;
    }
    std::vector<double> values(rows_);
    for (std::size_t row = 0; row < rows_; ++row) {
        const std::byte* const at = cell(row, field);
        double value = std::numeric_limits<double>::quiet_NaN();
        if (field.code == 'E') {
            value = load_big_endian<float>(at);
        } else if (field.code == 'D') {
            value = load_big_endian<double>(at);
        } else if (const std::int64_t whole = integer_at(at, field.code); whole != field.null) {
            value = static_cast<double>(whole);
        }
        values[row] = field.zero + field.scale * value;
    }
    return values;
}

}  // namespace straymark::io
