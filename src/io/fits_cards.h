#pragma once

#include <cstdint>
#include <optional>
#include <string>
#include <string_view>

/// Header cards of a FITS file (FITS 4.0, section 4), read by our own strict eyes: no library sees
/// a raw header before these do.

namespace straymark::io {

inline constexpr std::size_t kCardBytes = 80;

/// The value field of one card.
struct CardValue {
    std::string text;     ///< strings: quotes undone, trailing blanks removed; others: as written
    bool quoted = false;  ///< a character string
    bool closed = true;   ///< its closing quote is there; false: the card is damaged

    /// The value as a number or logical, also where the writer quoted it. Nothing where the text is
    /// something else, out of range or not finite. Exponents may be written with D.
    [[nodiscard]] std::optional<std::int64_t> integer() const;
    [[nodiscard]] std::optional<double> number() const;
    [[nodiscard]] std::optional<bool> logical() const;
};

/// The cards of one header, END left out, as they stand in the file.
class FitsHeader {
public:
    FitsHeader() = default;
    /// cards: a multiple of 80 bytes; what follows an END card is dropped.
    explicit FitsHeader(std::string cards);

    [[nodiscard]] std::size_t size() const { return cards_.size() / kCardBytes; }
    [[nodiscard]] std::string_view card(std::size_t index) const;
    /// Value of the first card with this keyword (letter case matters not); strings continued on
    /// CONTINUE cards are joined. A keyword of more than 8 characters, or with blanks, is sought
    /// among HIERARCH cards. Nothing where there is no such card, or it has no value.
    [[nodiscard]] std::optional<CardValue> find(std::string_view keyword) const;

private:
    [[nodiscard]] std::optional<std::size_t> index_of(std::string_view keyword) const;
    std::string cards_;
};

/// The value of one card of 80 characters; nothing for a commentary card or an empty value.
std::optional<CardValue> card_value(std::string_view card);

/// Text from a file made fit for a message: control and non-ASCII bytes become '?', long text is
/// cut with "...".
std::string printable(std::string_view text);
/// The same between quotes.
std::string quoted(std::string_view text);
/// ASCII letters only.
std::string upper_case(std::string_view text);
std::string_view trimmed(std::string_view text);

}  // namespace straymark::io
