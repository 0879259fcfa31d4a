#pragma once

#include <cstdint>
#include <map>
#include <optional>
#include <string>
#include <vector>

#include "io/files.h"
#include "io/fits_cards.h"

/// The structure of a FITS file, by our own eyes: which HDUs there are, what each says of its data,
/// and whether the file holds what its headers promise. Nothing is allocated on a header's word.

namespace straymark::io {

inline constexpr std::int64_t kFitsBlockBytes = 2880;

enum class HduKind { image, compressed_image, other };

struct FitsHdu {
    int number = 0;    ///< 0: primary
    std::string name;  ///< EXTNAME; empty: none
    HduKind kind = HduKind::other;
    bool was_primary = false;  ///< a compressed image that stood in the primary HDU before
    int bitpix = 8;            ///< of the stored data; of the image where that is compressed
    /// Of the image, x first, no more than its leading axes longer than 1 and at least two; empty:
    /// no pixels.
    std::vector<std::int64_t> axes;
    double scale = 1.0;  ///< BSCALE
    double zero = 0.0;   ///< BZERO
    std::optional<std::int64_t> blank;
    std::optional<std::uint32_t> data_sum;  ///< DATASUM
    std::string compression;                ///< ZCMPTYPE; empty: not compressed
    std::int64_t header_offset = 0;
    std::int64_t header_cards = 0;  ///< END included
    std::int64_t data_offset = 0;
    std::int64_t data_bytes = 0;  ///< without padding

    [[nodiscard]] bool has_pixels() const { return !axes.empty(); }
    [[nodiscard]] std::int64_t pixel_bytes() const { return (bitpix < 0 ? -bitpix : bitpix) / 8; }
    /// Bytes of the pixels, compressed or not.
    [[nodiscard]] std::int64_t image_bytes() const;
};

struct FitsStructure {
    std::vector<FitsHdu> hdus;
    std::multimap<std::string, int> images_by_name;  ///< EXTNAME in capitals to `hdus`
    std::vector<std::string> notes;                  ///< oddities that do not stop reading
};

/// Throws InputError: not FITS, damaged or contradictory header, truncated (naming the HDU and the
/// bytes found and expected), more than 100,000 cards in a header or 20,000 HDUs.
FitsStructure scan_fits(const InputFile& file);

/// What a header says of its HDU; `number` and the offsets are the caller's to fill. `file` and
/// `place` are for messages. Throws InputError.
FitsHdu described_hdu(const FitsHeader& header, bool primary, const std::string& file,
                      const std::string& place);

/// The cards of one HDU of a scanned file.
FitsHeader read_header(const InputFile& file, const FitsHdu& hdu);

/// "HDU 3 (NAME)", as messages name it; HDU 0 is the primary one.
std::string place_of(const FitsHdu& hdu);

/// Ones'-complement sum of an HDU's data unit, padding included (FITS 4.0, appendix J), to be
/// compared with DATASUM.
std::uint32_t data_checksum(const InputFile& file, const FitsHdu& hdu);

}  // namespace straymark::io
