#include "io/plio.h"

#include <algorithm>
#include <cassert>
#include <cstring>

#include "io/byte_order.h"

namespace straymark::io {
namespace {

/// Instructions: four bits of code, twelve of data (FITS 4.0 table 38). The current value begins
/// as 1.
enum class Instruction : unsigned {
    zeros = 0,                 // so many zeros
    set_value = 1,             // low twelve bits here, the rest in the next word
    raise_value = 2,           // by so much
    lower_value = 3,           // by so much
    repeat_value = 4,          // so many pixels of the current value
    zeros_then_value = 5,      // one less zeros, then one pixel of the current value
    raise_value_and_emit = 6,  // then one pixel
    lower_value_and_emit = 7,  // then one pixel
};
constexpr int kDataBits = 12;
constexpr unsigned kLargestData = (1U << kDataBits) - 1;
constexpr int kFirstValue = 1;

constexpr std::size_t kHeaderWords = 7;
constexpr unsigned kVersionWord = 0xFF9C;  // -100
constexpr int kLengthBits = 15;            // of each of the two words that hold the length

std::size_t end_of_zeros(std::span<const std::int16_t> line, std::size_t at) {
    // Words of four pixels, four words at a time: most of a mask is zero.
    const auto word = [line](std::size_t i) {
        std::uint64_t pixels = 0;
        std::memcpy(&pixels, line.data() + i, sizeof pixels);
        return pixels;
    };
    while (at + 16 <= line.size() &&
           (word(at) | word(at + 4) | word(at + 8) | word(at + 12)) == 0) {
        at += 16;
    }
    while (at + 4 <= line.size() && word(at) == 0) {
        at += 4;
    }
    while (at < line.size() && line[at] == 0) {
        ++at;
    }
    return at;
}

std::size_t end_of_run(std::span<const std::int16_t> line, std::size_t at) {
    const std::int16_t value = line[at];
    while (at < line.size() && line[at] == value) {
        ++at;
    }
    return at;
}

/// Writes words behind those already in a buffer that is large enough.
class LineWriter {
public:
    explicit LineWriter(std::byte* to) : to_(to) {}

    void word(unsigned value) {
        store_big_endian(to_, static_cast<std::uint16_t>(value));
        to_ += sizeof(std::uint16_t);
    }
    void instruct(Instruction code, unsigned data) {
        word((static_cast<unsigned>(code) << kDataBits) | data);
    }
    void repeat(Instruction code, std::size_t count) {
        for (; count > kLargestData; count -= kLargestData) {
            instruct(code, kLargestData);
        }
        if (count > 0) {
            instruct(code, static_cast<unsigned>(count));
        }
    }
    [[nodiscard]] std::byte* end() const { return to_; }

private:
    std::byte* to_;
};

/// `zeros` zeros, then `count` pixels of `value`; `current` is the decoder's current value.
void write_run(LineWriter& writer, std::size_t zeros, int value, std::size_t count, int& current) {
    const int step = value - current;
    const auto size = static_cast<unsigned>(step < 0 ? -step : step);
    current = value;
    if (zeros == 0 && count == 1 && size != 0 && size <= kLargestData) {
        writer.instruct(
            step > 0 ? Instruction::raise_value_and_emit : Instruction::lower_value_and_emit, size);
        return;
    }
    if (size > kLargestData) {
        writer.instruct(Instruction::set_value, static_cast<unsigned>(value) & kLargestData);
        writer.word(static_cast<unsigned>(value) >> kDataBits);
    } else if (size != 0) {
        writer.instruct(step > 0 ? Instruction::raise_value : Instruction::lower_value, size);
    }
    if (count == 1 && zeros > 0 && zeros < kLargestData) {
        writer.instruct(Instruction::zeros_then_value, static_cast<unsigned>(zeros) + 1);
        return;
    }
    writer.repeat(Instruction::zeros, zeros);
    writer.repeat(Instruction::repeat_value, count);
}

}  // namespace

std::span<const std::byte> PlioEncoder::encode(std::span<const std::int16_t> line) {
    assert(!line.empty() && line.size() <= (std::size_t{1} << 27));
    const std::size_t worst = sizeof(std::uint16_t) * (kHeaderWords + 3 * line.size());
    if (words_.size() < worst) {
        words_.resize(worst);
    }
    std::byte* const header = words_.data();
    LineWriter writer(header + sizeof(std::uint16_t) * kHeaderWords);

    int current = kFirstValue;
    std::size_t at = 0;
    while (at < line.size()) {
        const std::size_t after_zeros = end_of_zeros(line, at);
        if (after_zeros == line.size()) {
            writer.repeat(Instruction::zeros, after_zeros - at);
            break;
        }
        const std::int16_t value = line[after_zeros];
        assert(value > 0);
        const std::size_t end = end_of_run(line, after_zeros);
        write_run(writer, after_zeros - at, value, end - after_zeros, current);
        at = end;
    }

    const auto bytes = static_cast<std::size_t>(writer.end() - header);
    const auto words = static_cast<unsigned>(bytes / sizeof(std::uint16_t));
    LineWriter head(header);
    head.word(0);
    head.word(kHeaderWords);
    head.word(kVersionWord);
    head.word(words & ((1U << kLengthBits) - 1));
    head.word(words >> kLengthBits);
    head.word(0);
    head.word(0);
    return std::span(words_).first(bytes);
}

}  // namespace straymark::io
