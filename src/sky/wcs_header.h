#pragma once

#include <string>
#include <vector>

/// What stands between a header that anybody may have written and WCSLIB, whose parser must not see
/// a malformed card.

namespace straymark {

/// One card of the primary celestial coordinate system, parsed and checked.
struct WcsCard {
    std::string keyword;
    bool is_text = false;
    std::string text;     ///< without quotes and trailing blanks
    double number = 0.0;  ///< finite
};

/// The WCS cards among `cards`, in their order. `file` and `place` are for messages.
/// Throws InputError: an unclosed quote, a value of the wrong type or not finite, two cards of one
/// keyword that disagree.
std::vector<WcsCard> parse_wcs_cards(const std::vector<std::string>& cards, const std::string& file,
                                     const std::string& place);

/// Replaces what old headers say by what they mean (TAN with PV cards is TPV), and refuses what
/// WCSLIB would take for something else: projections that are not standard (TNX and ZPX by name) or
/// not ours, frames other than ICRS and FK5 J2000, distortions by two conventions at once, look-up
/// tables. Throws InputError.
void settle_conventions(std::vector<WcsCard>& cards, const std::string& file,
                        const std::string& place);

/// The card as 80 characters of FITS text.
std::string fits_card(const WcsCard& card);

}  // namespace straymark
