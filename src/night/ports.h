#pragma once

#include <memory>
#include <optional>
#include <string>
#include <vector>

#include "artifacts/product.h"
#include "exposure/digest.h"
#include "exposure/frame.h"
#include "mask/mask_file.h"

/// What a night needs from the outside world; io/ implements it, tests may replace it.

namespace straymark {

/// One raw file after a look at its headers.
struct RawFile {
    std::string path;
    std::string digest;  ///< of all its bytes
    ExposureHeader header;
    std::vector<int> detectors;      ///< camera indices it holds, ascending
    std::vector<std::string> notes;  ///< oddities that do not stop it (an extra HDU)
};

class RawReader {
public:
    virtual ~RawReader() = default;
    /// Throws InputError (missing, truncated, growing, not FITS, header unusable, sizes that
    /// disagree with the camera, ...). Thread-safe.
    [[nodiscard]] virtual RawFile inspect(const std::string& path) const = 0;
    [[nodiscard]] virtual std::unique_ptr<DetectorFrame> open(const RawFile& file,
                                                              int detector) const = 0;
};

class CalibrationStore {
public:
    virtual ~CalibrationStore() = default;
    /// The product in force; nothing where there is none. Throws InputError where two are in force
    /// or one cannot be read.
    [[nodiscard]] virtual std::optional<Product> in_force(const std::string& kind,
                                                          const Camera& camera,
                                                          const ExposureHeader& header) const = 0;
};

class DigestStore {
public:
    virtual ~DigestStore() = default;
    virtual void save(const ExposureDigest& digest) = 0;
    /// Nothing where there is none for this exposure id; throws InputError where it is damaged.
    [[nodiscard]] virtual std::optional<ExposureDigest> load(const std::string& id) const = 0;
    /// Exposure ids kept, in time order.
    [[nodiscard]] virtual std::vector<std::string> ids() const = 0;
};

class MaskStore {
public:
    virtual ~MaskStore() = default;
    /// Of the complete mask file for this raw file; nothing where there is no such file.
    [[nodiscard]] virtual std::optional<MaskSummary> existing(
        const std::string& raw_file) const = 0;
    [[nodiscard]] virtual std::unique_ptr<MaskFileWriter> begin(const std::string& raw_file) = 0;
    [[nodiscard]] virtual std::string path_of(const std::string& raw_file) const = 0;
};

}  // namespace straymark
