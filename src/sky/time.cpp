#include "sky/time.h"

#include <erfa.h>
#include <erfam.h>

namespace straymark {

namespace {
constexpr int kFirstYearOfUtc = 1960;
}

MjdUtc utc_from_tai(double mjd_tai) {
    double utc_1 = 0.0;
    double utc_2 = 0.0;
    // A "dubious year" is reported, not refused: the table ends where it ends.
    eraTaiutc(ERFA_DJM0, mjd_tai, &utc_1, &utc_2);
    return {(utc_1 - ERFA_DJM0) + utc_2};
}

MjdUtc utc_from_tt(double mjd_tt) {
    double tai_1 = 0.0;
    double tai_2 = 0.0;
    eraTttai(ERFA_DJM0, mjd_tt, &tai_1, &tai_2);
    return utc_from_tai((tai_1 - ERFA_DJM0) + tai_2);
}

MjdUtc utc_from_mjd(double mjd, TimeScale scale) {
    switch (scale) {
        case TimeScale::tai:
            return utc_from_tai(mjd);
        case TimeScale::tt:
            return utc_from_tt(mjd);
        case TimeScale::utc:
            break;
    }
    return {mjd};
}

std::optional<MjdUtc> utc_from_civil(const CivilTime& time, TimeScale scale) {
    double jd_1 = 0.0;
    double jd_2 = 0.0;
    const int status = eraDtf2d(scale == TimeScale::utc ? "UTC" : "TAI", time.year, time.month,
                                time.day, time.hour, time.minute, time.second, &jd_1, &jd_2);
    // 1: a year beyond the leap second table, which is no error of the header. 2 and 3: the time is
    // after the end of that day.
    if ((status != 0 && status != 1) || time.year < kFirstYearOfUtc) {
        return std::nullopt;
    }
    return utc_from_mjd((jd_1 - ERFA_DJM0) + jd_2, scale);
}

}  // namespace straymark
