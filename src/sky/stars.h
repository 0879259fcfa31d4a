#pragma once

#include <cstdint>
#include <memory>
#include <optional>
#include <string>
#include <vector>

#include "core/frames.h"

namespace straymark {

/// A star as listed. mag is in the asked-for filter (NaN: not listed in that filter).
struct Star {
    std::string id;
    SkyPoint position;  ///< ICRS at `epoch`
    double mag = 0.0;
    double epoch = 2000.0;      ///< Julian year
    double pm_ra_mas_yr = 0.0;  ///< includes cos(dec)
    double pm_dec_mas_yr = 0.0;
};

/// The indexed star list. Implemented in io/ over the file that `stars import` writes.
/// Const calls may come from several threads at once.
class StarList {
public:
    virtual ~StarList() = default;
    StarList() = default;
    StarList(const StarList&) = delete;
    StarList& operator=(const StarList&) = delete;

    /// All stars within radius_deg of centre and brighter than `faintest` (+infinity: all),
    /// brightest first. `filter`: uses column mag_FILTER, or mag where there is no such column.
    [[nodiscard]] virtual std::vector<Star> within(SkyPoint centre, double radius_deg,
                                                   const std::string& filter,
                                                   double faintest) const = 0;
    /// Does the list say it covers this disc? (A list covers what its import declared or found
    /// populated; see docs/star_list.md.) Fraction of the disc covered, 0..1.
    [[nodiscard]] virtual double coverage(SkyPoint centre, double radius_deg) const = 0;
    [[nodiscard]] virtual std::string digest() const = 0;
    [[nodiscard]] virtual std::int64_t size() const = 0;
};

/// Position at `mjd` by proper motion along the great circle (no parallax, no radial velocity).
SkyPoint propagated(const Star& star, MjdUtc mjd);

}  // namespace straymark
