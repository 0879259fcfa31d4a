#pragma once

#include <map>
#include <mutex>
#include <string>
#include <vector>

#include "io/product_file.h"
#include "night/ports.h"

namespace straymark::io {

/// The calibration products of one folder: every `*.fits` and `*.json` in it (not in folders below
/// it, nor names that begin with a dot). Looked through at every question; a file is read again
/// only when its size or time of change differs. Thread-safe.
class CalibrationFolder : public CalibrationStore {
public:
    explicit CalibrationFolder(std::string folder);

    /// The product of this kind for the camera's name, for the exposure's read-out mode and filter
    /// (a product that names none serves all), valid at the start of the exposure.
    /// Throws InputError: two are in force (names both); a file in the folder cannot be read and
    /// could be of this kind; the folder does not exist.
    [[nodiscard]] std::optional<Product> in_force(const std::string& kind, const Camera& camera,
                                                  const ExposureHeader& header) const override;

    /// Every product of one kind, by file name. Throws as in_force does.
    [[nodiscard]] std::vector<Product> all(const std::string& kind) const;

private:
    struct Entry;
    std::shared_ptr<const Entry> entry_of(const std::string& path) const;
    std::vector<std::shared_ptr<const Entry>> entries(const std::string& kind) const;

    std::string folder_;
    mutable std::mutex mutex_;
    mutable std::map<std::string, std::shared_ptr<const Entry>> cache_;  // by path
};

}  // namespace straymark::io
