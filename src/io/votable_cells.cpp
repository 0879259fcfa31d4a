#include "io/votable_cells.h"

#include <array>
#include <charconv>
#include <cmath>
#include <fmt/format.h>
#include <utility>

#include "io/byte_order.h"

namespace straymark::io {
namespace {

/// A variable-length cell longer than this is no star's.
constexpr std::int64_t kMostElements = 65536;

/// Bytes of one element; 0 for an unknown type. Bits are packed and handled apart.
std::size_t element_bytes(std::string_view datatype) {
    constexpr std::array<std::pair<std::string_view, std::size_t>, 11> kTypes{
        {{"boolean", 1},
         {"bit", 1},
         {"unsignedByte", 1},
         {"short", 2},
         {"int", 4},
         {"long", 8},
         {"char", 1},
         {"unicodeChar", 2},
         {"float", 4},
         {"double", 8},
         {"floatComplex", 8}}};
    for (const auto& [name, bytes] : kTypes) {
        if (datatype == name) {
            return bytes;
        }
    }
    return datatype == "doubleComplex" ? 16 : 0;
}

VotableCell whole_number(std::int64_t value) {
    return {fmt::format("{}", value), static_cast<double>(value)};
}

/// Text of a char or unicodeChar array up to its first NUL; what is not ASCII becomes '?'.
std::string characters(std::span<const std::byte> bytes, std::size_t width) {
    std::string text;
    for (std::size_t i = 0; i + width <= bytes.size(); i += width) {
        const auto low = static_cast<unsigned char>(bytes[i + width - 1]);
        const bool ascii = low < 0x80 && (width == 1 || bytes[i] == std::byte{});
        if (ascii && low == 0) {
            break;
        }
        text += ascii ? static_cast<char>(low) : '?';
    }
    text.erase(text.find_last_not_of(' ') + 1);
    return text;
}

/// A cell of one element, or a text; other arrays are passed over.
VotableCell decoded(const VotableField& field, std::span<const std::byte> bytes) {
    const std::string_view type = field.datatype;
    const std::size_t width = element_bytes(type);
    if (type == "char" || type == "unicodeChar") {
        return {characters(bytes, width), std::nullopt};
    }
    if (bytes.size() != width) {
        return {};
    }
    if (type == "unsignedByte") {
        return whole_number(std::to_integer<std::int64_t>(bytes[0]));
    }
    if (type == "short") {
        return whole_number(load_big_endian<std::int16_t>(bytes.data()));
    }
    if (type == "int") {
        return whole_number(load_big_endian<std::int32_t>(bytes.data()));
    }
    if (type == "long") {
        return whole_number(load_big_endian<std::int64_t>(bytes.data()));
    }
    if (type == "float") {
        return {"", static_cast<double>(load_big_endian<float>(bytes.data()))};
    }
    if (type == "double") {
        return {"", load_big_endian<double>(bytes.data())};
    }
    return {};
}

int base64_digit(char c) {
    constexpr std::string_view kDigits =
        "ABCDEFGHIJKLMNOPQRSTUVWXYZabcdefghijklmnopqrstuvwxyz0123456789+/";
    const std::size_t at = kDigits.find(c);
    return at == std::string_view::npos ? -1 : static_cast<int>(at);
}

}  // namespace

bool parse_array_size(std::string_view text, std::optional<std::int64_t>& elements) {
    elements = 1;
    while (!text.empty()) {
        if (text.back() == '*') {
            elements.reset();
            return true;
        }
        std::int64_t length = 0;
        const auto [stopped, error] =
            std::from_chars(text.data(), text.data() + text.size(), length);
        if (error != std::errc() || length < 0 || length > kMostElements) {
            return false;
        }
        *elements *= length;
        if (*elements > kMostElements) {
            return false;
        }
        text.remove_prefix(static_cast<std::size_t>(stopped - text.data()));
        if (!text.empty() && text.front() != 'x') {
            return false;
        }
        text.remove_prefix(text.empty() ? 0 : 1);
    }
    return true;
}

bool Base64Decoder::decode(std::string_view text, std::vector<std::byte>& out) {
    for (const char c : text) {
        if (c == ' ' || c == '\t' || c == '\r' || c == '\n') {
            continue;
        }
        if (c == '=') {
            ended_ = true;
            continue;
        }
        const int digit = base64_digit(c);
        if (digit < 0 || ended_) {
            return false;
        }
        bits_ = (bits_ << 6U) | static_cast<std::uint32_t>(digit);
        count_ += 6;
        if (count_ >= 8) {
            count_ -= 8;
            out.push_back(static_cast<std::byte>((bits_ >> static_cast<unsigned>(count_)) & 0xFFU));
        }
    }
    return true;
}

VotableRowDecoder::VotableRowDecoder(const std::vector<VotableField>& fields, bool with_null_flags)
    : fields_(fields), with_null_flags_(with_null_flags) {
    for (const VotableField& field : fields) {
        usable_ = usable_ && element_bytes(field.datatype) > 0;
    }
}

VotableRowDecoder::Outcome VotableRowDecoder::take(std::span<const std::byte> bytes,
                                                   std::vector<VotableCell>& row,
                                                   std::size_t& used) const {
    used = with_null_flags_ ? (fields_.size() + 7) / 8 : 0;
    const std::span<const std::byte> flags = bytes.first(std::min(used, bytes.size()));
    row.assign(fields_.size(), {});
    for (std::size_t i = 0; i < fields_.size(); ++i) {
        const VotableField& field = fields_[i];
        std::int64_t elements = field.elements.value_or(0);
        if (!field.elements) {
            constexpr std::size_t kCountBytes = 4;
            if (bytes.size() < used + kCountBytes) {
                return Outcome::incomplete;
            }
            elements = load_big_endian<std::int32_t>(bytes.data() + used);
            used += kCountBytes;
            if (elements < 0 || elements > kMostElements) {
                return Outcome::damaged;
            }
        }
        const auto count = static_cast<std::size_t>(elements);
        const std::size_t length =
            field.datatype == "bit" ? (count + 7) / 8 : count * element_bytes(field.datatype);
        if (bytes.size() < used + length) {
            return Outcome::incomplete;
        }
        const bool null =
            with_null_flags_ && (std::to_integer<unsigned>(flags[i / 8]) >> (7 - i % 8) & 1U) != 0;
        if (!null) {
            row[i] = decoded(field, bytes.subspan(used, length));
        }
        used += length;
    }
    return Outcome::row;
}

}  // namespace straymark::io
