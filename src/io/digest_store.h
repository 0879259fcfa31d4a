#pragma once

#include <mutex>
#include <optional>
#include <string>
#include <vector>

#include "night/ports.h"

namespace straymark::io {

/// Digests of exposures in one folder, a FITS file each (docs/digest_file.md). What is loaded
/// equals what was saved, bit for bit. Thread-safe for different exposures.
class DigestFolder : public DigestStore {
public:
    explicit DigestFolder(std::string folder);

    void save(const ExposureDigest& digest) override;
    /// Throws InputError: damaged (sums are checked), of another format version, of another
    /// exposure.
    [[nodiscard]] std::optional<ExposureDigest> load(const std::string& id) const override;
    /// By start of exposure, then id. A file that is damaged is listed too, last, so that loading
    /// says what is wrong; throws InputError where not even its name tells the exposure.
    [[nodiscard]] std::vector<std::string> ids() const override;

    /// The file of an exposure: its id with all but letters, digits, '_', '-', '.' and '+' escaped;
    /// a long id is cut and told from others by a digest.
    [[nodiscard]] std::string path_of(const std::string& id) const;

private:
    std::string folder_;
    std::once_flag prepared_;
};

}  // namespace straymark::io
