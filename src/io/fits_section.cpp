#include "io/fits_section.h"

#include <algorithm>
#include <array>
#include <charconv>
#include <fmt/format.h>

namespace straymark::io {
namespace {

constexpr int kLargestEnd = 1'000'000'000;

void skip_blanks(std::string_view& text) {
    text.remove_prefix(std::min(text.find_first_not_of(' '), text.size()));
}

bool take(std::string_view& text, char expected) {
    skip_blanks(text);
    if (!text.starts_with(expected)) {
        return false;
    }
    text.remove_prefix(1);
    return true;
}

bool take_end(std::string_view& text, int& value) {
    skip_blanks(text);
    const auto [end, error] = std::from_chars(text.data(), text.data() + text.size(), value);
    if (error != std::errc() || value < 1 || value > kLargestEnd) {
        return false;
    }
    text.remove_prefix(static_cast<std::size_t>(end - text.data()));
    return true;
}

}  // namespace

PixelBox FitsSection::box() const {
    const auto [x_low, x_high] = std::minmax(x1, x2);
    const auto [y_low, y_high] = std::minmax(y1, y2);
    return {x_low - 1, y_low - 1, x_high, y_high};
}

std::optional<FitsSection> parse_section(std::string_view text) {
    FitsSection section;
    const bool well_formed = take(text, '[') && take_end(text, section.x1) && take(text, ':') &&
                             take_end(text, section.x2) && take(text, ',') &&
                             take_end(text, section.y1) && take(text, ':') &&
                             take_end(text, section.y2) && take(text, ']');
    skip_blanks(text);
    if (!well_formed || !text.empty()) {
        return std::nullopt;
    }
    return section;
}

std::string to_string(const FitsSection& section) {
    return fmt::format("[{}:{},{}:{}]", section.x1, section.x2, section.y1, section.y2);
}

std::string section_text(const PixelBox& box) {
    return to_string(FitsSection{box.x0 + 1, box.x1, box.y0 + 1, box.y1});
}

}  // namespace straymark::io
