#include "cli/observatory.h"

#include "core/error.h"
#include "io/calibration_store.h"
#include "io/digest_store.h"
#include "io/mask_store.h"
#include "io/raw_reader.h"
#include "io/site_file.h"
#include "io/star_file.h"

namespace straymark::cli {

OpenSite::OpenSite(const std::string& site_file) : site_(io::load_site(site_file)) {
    try {
        stars_ = io::open_star_list(site_.stars_path);
    } catch (const InputError& error) {
        stars_problem_ = error.what();
    }
    raw_ = io::make_raw_reader(site_.camera);
    calibrations_ = std::make_unique<io::CalibrationFolder>(site_.calibrations_path);
    digests_ = std::make_unique<io::DigestFolder>(site_.digests_path);
    masks_ = std::make_unique<io::MaskFolder>(site_.masks_path);
}

void OpenSite::verify_stars() const {
    io::verify_star_list(site_.stars_path);
}

NightPorts OpenSite::ports() {
    return {*raw_, *calibrations_, *digests_, *masks_, stars_.get()};
}

}  // namespace straymark::cli
