#include "camera/readout.h"

#include <array>
#include <catch2/catch.hpp>
#include <optional>
#include <vector>

using namespace straymark;

namespace {

/// A device that is read as the hardware does it: all rows of packets move one step towards the
/// serial register, then the register's packets move one by one towards the amplifier. It knows
/// nothing but directions.
class ClockedDevice {
public:
    using Packet = std::optional<DetectorPixel>;

    ClockedDevice(PixelBox section, Corner corner, SerialAxis serial)
        : section_(section), corner_(corner), serial_(serial) {
        for (int y = section.y0; y < section.y1; ++y) {
            for (int x = section.x0; x < section.x1; ++x) {
                packets_.push_back(DetectorPixel{x, y});
            }
        }
    }

    /// One parallel shift: returns the row that fell into the register, nearest the amplifier
    /// first.
    std::vector<Packet> shift_row() {
        std::vector<Packet> serial_register;
        std::vector<Packet> moved(packets_.size());
        for (int y = section_.y0; y < section_.y1; ++y) {
            for (int x = section_.x0; x < section_.x1; ++x) {
                const DetectorPixel to{x + parallel_step().x, y + parallel_step().y};
                if (section_.contains(to.x, to.y)) {
                    moved[at(to.x, to.y)] = packets_[at(x, y)];
                } else {
                    serial_register.push_back(packets_[at(x, y)]);
                }
            }
        }
        packets_ = moved;
        // The loop above visits the row from its low end; an amplifier at the high end sees it
        // the other way round.
        const bool high_end = serial_ == SerialAxis::x ? at_right() : at_top();
        if (high_end) {
            return {serial_register.rbegin(), serial_register.rend()};
        }
        return serial_register;
    }

private:
    [[nodiscard]] bool at_right() const {
        return corner_ == Corner::lower_right || corner_ == Corner::upper_right;
    }
    [[nodiscard]] bool at_top() const {
        return corner_ == Corner::upper_left || corner_ == Corner::upper_right;
    }
    [[nodiscard]] DetectorPixel parallel_step() const {
        if (serial_ == SerialAxis::x) {
            return {0, at_top() ? 1 : -1};
        }
        return {at_right() ? 1 : -1, 0};
    }
    [[nodiscard]] std::size_t at(int x, int y) const {
        return static_cast<std::size_t>((y - section_.y0) * section_.width() + x - section_.x0);
    }

    PixelBox section_;
    Corner corner_;
    SerialAxis serial_;
    std::vector<Packet> packets_;
};

constexpr std::array kCorners{Corner::lower_left, Corner::lower_right, Corner::upper_left,
                              Corner::upper_right};
constexpr std::array kAxes{SerialAxis::x, SerialAxis::y};

}  // namespace

TEST_CASE("every pixel has the tick and row at which a clocked device delivers it") {
    constexpr PixelBox kSection{5, 2, 12, 6};  // 7 x 4, away from the origin
    constexpr int kPrescan = 3;
    constexpr int kDiscarded = 5;  // rows read before the section's first
    for (const Corner corner : kCorners) {
        for (const SerialAxis serial : kAxes) {
            INFO("corner " << static_cast<int>(corner) << ", serial " << static_cast<int>(serial));
            const ReadoutGeometry readout(kSection, corner, serial, kPrescan, kDiscarded);
            ClockedDevice device(kSection, corner, serial);
            int delivered = 0;
            const int rows = serial == SerialAxis::x ? 4 : 7;
            for (int row = kDiscarded; row < kDiscarded + rows; ++row) {
                int tick = kPrescan;  // the register's empty elements come out first
                for (const auto& packet : device.shift_row()) {
                    REQUIRE(packet.has_value());
                    REQUIRE(readout.detector_from_readout({tick, row}) == *packet);
                    REQUIRE(readout.readout_from_detector(*packet) == ReadoutIndex{tick, row});
                    REQUIRE(readout.holds({tick, row}));
                    ++tick;
                    ++delivered;
                }
            }
            CHECK(delivered == 28);
        }
    }
}

TEST_CASE("indices outside the section are not held but still invert") {
    for (const Corner corner : kCorners) {
        for (const SerialAxis serial : kAxes) {
            const ReadoutGeometry readout({5, 2, 12, 6}, corner, serial, 3);
            for (int row = -2; row < 12; ++row) {
                for (int tick = -2; tick < 20; ++tick) {
                    const DetectorPixel pixel = readout.detector_from_readout({tick, row});
                    CHECK(readout.readout_from_detector(pixel) == ReadoutIndex{tick, row});
                    CHECK(readout.holds({tick, row}) ==
                          readout.section().contains(pixel.x, pixel.y));
                }
            }
        }
    }
}

TEST_CASE("data ticks begin after the prescan and rows after those discarded") {
    const ReadoutGeometry readout({0, 0, 256, 1024}, Corner::upper_right, SerialAxis::x, 8, 100);
    CHECK(readout.first_tick() == 8);
    CHECK(readout.end_tick() == 264);
    CHECK(readout.first_row() == 100);
    CHECK(readout.end_row() == 1124);
    CHECK(readout.detector_from_readout({8, 100}) == DetectorPixel{255, 1023});
    CHECK(readout.detector_from_readout({263, 1123}) == DetectorPixel{0, 0});
    CHECK_FALSE(readout.holds({7, 100}));
    CHECK_FALSE(readout.holds({8, 99}));

    const ReadoutGeometry columns({0, 0, 256, 1024}, Corner::lower_left, SerialAxis::y, 8);
    CHECK(columns.end_tick() == 8 + 1024);
    CHECK(columns.end_row() == 256);
}
