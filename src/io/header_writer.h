#pragma once

#include <cstddef>
#include <cstdint>
#include <string>
#include <string_view>

/// Header cards of FITS 4.0, as this program writes them: one function formats them all.

namespace straymark::io {

inline constexpr std::size_t kFitsCard = 80;

/// Text as FITS may hold it (printable ASCII): every other byte becomes "%HH".
std::string printable_text(std::string_view text);

/// Text that survives a FITS string exactly: besides what `printable_text` replaces, '%' and a
/// trailing blank (which FITS drops) become "%HH". `restored_text` is the inverse.
std::string escaped_text(std::string_view text);
std::string restored_text(std::string_view text);

/// The cards of one header, in order. Keywords have 1 to 8 characters of A-Z, 0-9, '-', '_';
/// comments are short (at most 47 characters; asserted).
class HeaderCards {
public:
    void add_logical(std::string_view keyword, bool value, std::string_view comment = {});
    void add_integer(std::string_view keyword, std::int64_t value, std::string_view comment = {});
    /// Shortest decimal that reads back as the same number. Precondition: finite (FITS has no
    /// other).
    void add_real(std::string_view keyword, double value, std::string_view comment = {});
    /// Passed through `printable_text`; of any length (CONTINUE, FITS 4.0 section 4.2.1.2).
    void add_text(std::string_view keyword, std::string_view value, std::string_view comment = {});
    /// A card made elsewhere, verbatim. Left out, returning false, where its keyword is already
    /// here or belongs to the structure of a header-data unit. Throws InputError where it is not
    /// printable ASCII of at most 80 characters.
    bool add_card(std::string_view card);

    [[nodiscard]] bool holds(std::string_view keyword) const;
    void append_all(const HeaderCards& others) { text_ += others.text_; }
    /// All cards, 80 characters each.
    [[nodiscard]] const std::string& text() const { return text_; }

private:
    void append(std::string_view keyword, std::string_view value, std::string_view comment);
    std::string text_;
};

}  // namespace straymark::io
