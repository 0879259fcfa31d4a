#include <algorithm>
#include <array>
#include <cmath>
#include <fmt/format.h>
#include <limits>
#include <numbers>
#include <optional>
#include <string_view>
#include <tuple>
#include <utility>

#include "io/byte_order.h"
#include "io/content_digest.h"
#include "io/fits_writer.h"
#include "io/star_coverage.h"
#include "io/star_file.h"
#include "io/star_index.h"

namespace straymark::io {
namespace {

using UnitVector = std::array<double, 3>;

UnitVector unit_vector(SkyPoint point) {
    constexpr double kRadians = std::numbers::pi / 180.0;
    const double cosine = std::cos(point.dec_deg * kRadians);
    return {cosine * std::cos(point.ra_deg * kRadians), cosine * std::sin(point.ra_deg * kRadians),
            std::sin(point.dec_deg * kRadians)};
}

class IndexedStarList final : public StarList {
public:
    explicit IndexedStarList(const std::string& path)
        : file_(path),
          index_(read_star_index(file_)),
          cells_(index_.cell_size_deg),
          coverage_(index_.coverage) {}

    [[nodiscard]] std::vector<Star> within(SkyPoint centre, double radius_deg,
                                           const std::string& filter,
                                           double faintest) const override {
        std::vector<Star> found;
        const std::optional<std::size_t> mag = mag_column(filter);
        const Query query{unit_vector(centre), radius_deg, mag, faintest};
        std::vector<std::byte> rows;
        for (const SkyCells::Span& span : cells_.touched(centre, radius_deg)) {
            const auto [first, end] = rows_of(span);
            collect(first, end, query, rows, found);
        }
        // Brightest first; without a magnitude last; ties by position and name, so that the order
        // is always the same.
        std::sort(found.begin(), found.end(), [](const Star& a, const Star& b) {
            const auto key = [](const Star& s) {
                const bool listed = !std::isnan(s.mag);
                return std::tuple(!listed, listed ? s.mag : 0.0, s.position.ra_deg,
                                  s.position.dec_deg, std::string_view(s.id));
            };
            return key(a) < key(b);
        });
        return found;
    }

    [[nodiscard]] double coverage(SkyPoint centre, double radius_deg) const override {
        return coverage_.fraction(centre, radius_deg);
    }
    [[nodiscard]] std::string digest() const override { return index_.digest; }
    [[nodiscard]] std::int64_t size() const override { return index_.stars.rows; }

private:
    struct Query {
        UnitVector centre{};
        double radius_deg = 0.0;
        std::optional<std::size_t> mag;
        double faintest = 0.0;
    };

    [[nodiscard]] std::optional<std::size_t> mag_column(const std::string& filter) const {
        const auto find = [this](const std::string& name) -> std::optional<std::size_t> {
            const auto found = std::find(index_.mags.begin(), index_.mags.end(), name);
            if (found == index_.mags.end()) {
                return std::nullopt;
            }
            return static_cast<std::size_t>(found - index_.mags.begin());
        };
        const auto own = find("mag_" + filter);
        return own ? own : find("mag");
    }

    [[nodiscard]] std::pair<std::int64_t, std::int64_t> rows_of(const SkyCells::Span& span) const {
        const auto at = [this](std::int32_t cell) {
            const auto found = std::lower_bound(index_.cells.begin(), index_.cells.end(), cell);
            return index_.first[static_cast<std::size_t>(found - index_.cells.begin())];
        };
        return {at(span.first), at(span.end)};
    }

    void collect(std::int64_t first, std::int64_t end, const Query& query,
                 std::vector<std::byte>& rows, std::vector<Star>& found) const {
        constexpr std::int64_t kRowsAtOnce = 16384;
        while (first < end) {
            const std::int64_t count = std::min(kRowsAtOnce, end - first);
            const std::int64_t row_bytes = index_.stars.row_bytes;
            rows.resize(static_cast<std::size_t>(count * row_bytes));
            file_.read_at(index_.stars.offset + first * row_bytes, rows);
            for (std::int64_t i = 0; i < count; ++i) {
                add_if_wanted(rows.data() + i * row_bytes, query, found);
            }
            first += count;
        }
    }

    void add_if_wanted(const std::byte* row, const Query& query, std::vector<Star>& found) const {
        const std::byte* const numbers = row + index_.id_width;
        const SkyPoint position = stored_position(numbers);
        const UnitVector direction = unit_vector(position);
        double chord2 = 0.0;
        for (std::size_t i = 0; i < 3; ++i) {
            chord2 += (direction[i] - query.centre[i]) * (direction[i] - query.centre[i]);
        }
        const double half_chord =
            std::sin(0.5 * std::min(query.radius_deg, 180.0) * std::numbers::pi / 180.0);
        if (!(chord2 <= 4.0 * half_chord * half_chord)) {
            return;
        }
        const auto real = [numbers](std::size_t i) {
            return static_cast<double>(load_big_endian<float>(numbers + 16 + 4 * i));
        };
        const double mag =
            query.mag ? real(3 + *query.mag) : std::numeric_limits<double>::quiet_NaN();
        const bool all = std::isinf(query.faintest) && query.faintest > 0.0;
        if (!all && !(mag < query.faintest)) {
            return;
        }
        const char* const id = reinterpret_cast<const char*>(row);
        const std::size_t length =
            static_cast<std::size_t>(std::find(id, id + index_.id_width, '\0') - id);
        found.push_back({std::string(id, length), position, mag, real(0), real(1), real(2)});
    }

    InputFile file_;
    StarListIndex index_;
    SkyCells cells_;
    CoverageMap coverage_;
};

}  // namespace

std::unique_ptr<StarList> open_star_list(const std::string& path) {
    return std::make_unique<IndexedStarList>(path);
}

void verify_star_list(const std::string& path) {
    const InputFile file(path);
    const StarListIndex index = read_star_index(file);
    ContentDigest content;
    std::vector<std::byte> block(1 << 18);
    for (std::int64_t offset = kFitsBlock; offset < file.size();) {
        const auto length = std::min(static_cast<std::int64_t>(block.size()), file.size() - offset);
        const auto part = std::span(block).first(static_cast<std::size_t>(length));
        file.read_at(offset, part);
        content.add(part);
        offset += length;
    }
    if (content.text() != index.digest) {
        refuse_star_list(path, "", fmt::format("content {}", content.text()), index.digest);
    }
}

}  // namespace straymark::io
