#pragma once

#include <cstdint>
#include <vector>

#include "io/star_file.h"
#include "sky/cells.h"

namespace straymark::io {

/// Finds out from the stars alone where a list has been filled: counts them in cells of growing
/// size, until cells are so large that an empty one among full ones means something.
class CoverageFinder {
public:
    CoverageFinder();
    void add(SkyPoint star);
    /// The populated cells of the smallest size at which a populated cell holds
    /// kStarsForCoverage on average and hardly any empty one is surrounded by populated ones.
    /// No cells where no size will do.
    [[nodiscard]] StarCoverage found() const;

    static constexpr double kStarsForCoverage = 8.0;

private:
    struct Level {
        SkyCells cells;
        std::vector<std::uint32_t> stars;
    };
    std::vector<Level> levels_;
    double stars_ = 0.0;
};

/// Fraction of a disc that a list covers, from some 2,000 places spread evenly over it.
class CoverageMap {
public:
    explicit CoverageMap(StarCoverage coverage);
    [[nodiscard]] double fraction(SkyPoint centre, double radius_deg) const;

private:
    [[nodiscard]] bool covers(SkyPoint point) const;
    StarCoverage coverage_;
    SkyCells cells_;
};

}  // namespace straymark::io
