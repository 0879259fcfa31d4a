#pragma once

#include <optional>

#include "core/frames.h"

/// Instants as headers give them, brought to UTC by ERFA (leap seconds of its built-in table).

namespace straymark {

enum class TimeScale { utc, tai, tt };

/// A date and time of day of the proleptic Gregorian calendar.
struct CivilTime {
    int year = 2000, month = 1, day = 1, hour = 0, minute = 0;
    double second = 0.0;
};

/// Given: MJD on the International Atomic or Terrestrial scale, 1960 or later. Returned: the
/// instant in UTC (ERFA taiutc, tttai).
MjdUtc utc_from_tai(double mjd_tai);
MjdUtc utc_from_tt(double mjd_tt);

/// MJD on `scale` to UTC.
MjdUtc utc_from_mjd(double mjd, TimeScale scale);

/// Date and time of day on `scale` to UTC (ERFA dtf2d). A second 60 is accepted on UTC where a leap
/// second was inserted. Nothing where there is no such date or time of day, or before 1960, when
/// UTC began.
std::optional<MjdUtc> utc_from_civil(const CivilTime& time, TimeScale scale);

}  // namespace straymark
