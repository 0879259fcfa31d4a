#pragma once

#include <optional>
#include <string_view>

#include "sky/time.h"

namespace straymark::io {

/// "YYYY-MM-DDThh:mm:ss[.s...]" (a blank may stand for the T, a Z may end it). A date alone gives
/// no `time_of_day`. Nothing where the text is something else; ranges are the caller's to check.
struct DateText {
    CivilTime time;
    bool time_of_day = false;
};
std::optional<DateText> parse_date(std::string_view text);

/// "hh:mm:ss[.s...]" into hour, minute and second of `time`; false where it is something else.
bool parse_time_of_day(std::string_view text, CivilTime& time);

/// Three numbers "[+-]a:b:c" (or with blanks, or the letters of hours, degrees, minutes, seconds,
/// between them; the last may be missing) as a + b/60 + c/3600; the sign holds for all, also before
/// a zero. Nothing where the text is something else, or b or c not below 60 (c: not above).
std::optional<double> parse_sexagesimal(std::string_view text);

}  // namespace straymark::io
