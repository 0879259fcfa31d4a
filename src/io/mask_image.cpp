#include "io/mask_image.h"

#include <algorithm>
#include <cassert>
#include <fmt/format.h>
#include <limits>
#include <utility>

#include "core/error.h"
#include "io/byte_order.h"
#include "io/plio.h"

namespace straymark::io {
namespace {

/// A table of one variable-length column: a (length, offset) pair of 32 bits for each row, then the
/// heap.
constexpr std::size_t kDescriptorBytes = 2 * sizeof(std::int32_t);

struct EncodedRows {
    std::vector<std::byte> bytes;
    std::size_t longest_words = 0;
};

EncodedRows encode_rows(const DetectorMask& mask) {
    const auto width = static_cast<std::size_t>(mask.width);
    const auto height = static_cast<std::size_t>(mask.height);
    EncodedRows rows;
    rows.bytes.resize(height * kDescriptorBytes);
    PlioEncoder encoder;
    for (std::size_t y = 0; y < height; ++y) {
        const std::span<const std::byte> words =
            encoder.encode(std::span(mask.bits).subspan(y * width, width));
        const std::size_t offset = rows.bytes.size() - height * kDescriptorBytes;
        if (offset > std::numeric_limits<std::int32_t>::max()) {
            throw InputError({"", fmt::format("mask row {}", y + 1),
                              "more than 2 GiB of encoded pixels",
                              "a detector whose mask is smaller", ""});
        }
        const std::size_t count = words.size() / sizeof(std::int16_t);
        std::byte* const descriptor = rows.bytes.data() + y * kDescriptorBytes;
        store_big_endian(descriptor, static_cast<std::int32_t>(count));
        store_big_endian(descriptor + sizeof(std::int32_t), static_cast<std::int32_t>(offset));
        rows.bytes.insert(rows.bytes.end(), words.begin(), words.end());
        rows.longest_words = std::max(rows.longest_words, count);
    }
    return rows;
}

}  // namespace

FitsUnit mask_image_unit(const std::string& detector, const DetectorMask& mask,
                         const std::vector<std::string>& wcs_cards) {
    assert(mask.width > 0 && mask.height > 0);
    assert(mask.bits.size() == static_cast<std::size_t>(mask.width) * mask.height);
    EncodedRows rows = encode_rows(mask);
    const auto height = static_cast<std::size_t>(mask.height);
    HeaderCards cards = binary_table_cards(kDescriptorBytes, height,
                                           rows.bytes.size() - height * kDescriptorBytes, 1);
    cards.add_text("TTYPE1", "COMPRESSED_DATA");
    cards.add_text("TFORM1", fmt::format("1PI({})", rows.longest_words));
    cards.add_logical("ZIMAGE", true, "an image, compressed in tiles");
    cards.add_text("ZTENSION", "IMAGE");
    cards.add_integer("ZBITPIX", 16, "signed, bits 0 to 14 in use");
    cards.add_integer("ZNAXIS", 2);
    cards.add_integer("ZNAXIS1", mask.width);
    cards.add_integer("ZNAXIS2", mask.height);
    cards.add_integer("ZPCOUNT", 0);
    cards.add_integer("ZGCOUNT", 1);
    cards.add_integer("ZTILE1", mask.width, "a tile is a row");
    cards.add_integer("ZTILE2", 1);
    cards.add_text("ZCMPTYPE", "PLIO_1", "lossless");
    cards.add_text("EXTNAME", detector, "detector; the table BITS tells what bits mean");
    for (const std::string& card : wcs_cards) {
        cards.add_card(card);
    }
    return finished_unit(std::move(cards), std::move(rows.bytes));
}

}  // namespace straymark::io
