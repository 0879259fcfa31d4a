#pragma once

#include <cstddef>
#include <cstdint>
#include <optional>
#include <span>
#include <string>
#include <string_view>
#include <vector>

namespace straymark::io {

/// One field (column) of a VOTable, as its FIELD element describes it.
struct VotableField {
    std::string name, unit, datatype;
    std::optional<std::int64_t> elements = 1;  ///< of its array; nothing: as many as a row says
    std::string null;                          ///< the text that stands for no value; may be empty
};

/// Number of elements from an arraysize attribute ("", "3", "2x3", "8*", "*").
/// False where it is not one.
bool parse_array_size(std::string_view text, std::optional<std::int64_t>& elements);

/// One cell: text, and for numbers that came in binary their value.
struct VotableCell {
    std::string text;
    std::optional<double> number;
};

/// Base64 (RFC 4648) as it comes, in pieces and with line breaks.
class Base64Decoder {
public:
    /// Appends the bytes of `text`. False where it holds what base64 does not.
    bool decode(std::string_view text, std::vector<std::byte>& out);

private:
    std::uint32_t bits_ = 0;
    int count_ = 0;
    bool ended_ = false;
};

/// Cuts the rows of a BINARY or BINARY2 stream.
class VotableRowDecoder {
public:
    enum class Outcome { row, incomplete, damaged };

    /// Throws nothing; `usable` says whether all field types are known.
    VotableRowDecoder(const std::vector<VotableField>& fields, bool with_null_flags);
    [[nodiscard]] bool usable() const { return usable_; }

    /// Takes one row from the front of `bytes` and says how many bytes it used.
    Outcome take(std::span<const std::byte> bytes, std::vector<VotableCell>& row,
                 std::size_t& used) const;

private:
    const std::vector<VotableField>& fields_;
    bool with_null_flags_;
    bool usable_ = true;
};

}  // namespace straymark::io
