#pragma once

#include <memory>
#include <mutex>
#include <optional>
#include <string>

#include "night/ports.h"

namespace straymark::io {

/// Mask files in one folder, which is created when the first mask begins. Thread-safe: several
/// masks may be written at once.
class MaskFolder : public MaskStore {
public:
    explicit MaskFolder(std::string folder);

    /// Reads only the primary header. A file that is not a complete mask (foreign, cut short,
    /// damaged header) counts as none: the mask is made again.
    [[nodiscard]] std::optional<MaskSummary> existing(const std::string& raw_file) const override;
    [[nodiscard]] std::unique_ptr<MaskFileWriter> begin(const std::string& raw_file) override;
    [[nodiscard]] std::string path_of(const std::string& raw_file) const override;

private:
    std::string folder_;
    std::once_flag prepared_;
};

}  // namespace straymark::io
