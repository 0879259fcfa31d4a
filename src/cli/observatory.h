#pragma once

#include <memory>
#include <string>

#include "io/calibration_store.h"
#include "night/build.h"
#include "night/ports.h"
#include "night/site.h"
#include "sky/stars.h"

namespace straymark::cli {

/// A site with its stores opened: what every command on exposures works with.
class OpenSite {
public:
    /// Throws InputError where site, camera or a table is not usable. A star list that is missing
    /// or damaged is not fatal: `stars_problem` says what is wrong and stars() is null.
    explicit OpenSite(const std::string& site_file);

    [[nodiscard]] const Site& site() const { return site_; }
    [[nodiscard]] const StarList* stars() const { return stars_.get(); }
    [[nodiscard]] const std::string& stars_problem() const { return stars_problem_; }
    [[nodiscard]] const io::CalibrationFolder& calibrations() const { return *calibrations_; }
    /// Reads the whole star list; throws InputError where it is damaged.
    void verify_stars() const;
    [[nodiscard]] NightPorts ports();

private:
    Site site_;
    std::unique_ptr<StarList> stars_;
    std::string stars_problem_;
    std::unique_ptr<RawReader> raw_;
    std::unique_ptr<io::CalibrationFolder> calibrations_;
    std::unique_ptr<DigestStore> digests_;
    std::unique_ptr<MaskStore> masks_;
};

}  // namespace straymark::cli
