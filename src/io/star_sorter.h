#pragma once

#include <cstddef>
#include <cstdint>
#include <functional>
#include <memory>
#include <span>
#include <string>
#include <string_view>
#include <vector>

#include "io/files.h"
#include "io/star_record.h"
#include "sky/cells.h"

namespace straymark::io {

/// Sorts any number of stars by cell in bounded memory: full batches are sorted and set aside in a
/// temporary file beside the result, then merged. The order depends on the stars alone, not on the
/// order in which they came.
class StarSorter {
public:
    /// scratch_path: what the temporary file's name is made from. mags: magnitudes of each star.
    /// batch_bytes: memory for one batch, below 4 GiB.
    StarSorter(const SkyCells& cells, std::string scratch_path, std::size_t mags,
               std::size_t batch_bytes);
    ~StarSorter();
    StarSorter(const StarSorter&) = delete;
    StarSorter& operator=(const StarSorter&) = delete;

    /// Throws SystemError where the disk cannot hold the batches.
    void add(const StarRecord& star);
    [[nodiscard]] std::int64_t count() const { return count_; }
    [[nodiscard]] std::size_t longest_id() const { return longest_id_; }

    /// One star in sorted order; `numbers` as by store_star_numbers.
    struct Sorted {
        std::int32_t cell = 0;
        std::string_view id;
        std::span<const std::byte> numbers;
    };
    /// Calls `take` for every star, by cell, then right ascension, declination and the rest of the
    /// row. Once only, after the last `add`.
    void drain(const std::function<void(const Sorted&)>& take);

private:
    struct Entry {
        std::int32_t cell;
        std::uint32_t offset;  ///< into batch_
    };
    struct Run {
        std::int64_t offset;
        std::int64_t bytes;
    };
    class Cursor;

    [[nodiscard]] Sorted record_at(const std::byte* from) const;
    void sort_batch();
    void set_aside();
    void drain_batch(const std::function<void(const Sorted&)>& take);
    void merge(const std::function<void(const Sorted&)>& take);

    const SkyCells& cells_;
    std::string scratch_path_;
    std::size_t number_bytes_;
    std::size_t batch_bytes_;
    std::int64_t count_ = 0;
    std::size_t longest_id_ = 1;
    std::vector<std::byte> batch_;  ///< records: length of the id, the id, the numbers
    std::vector<Entry> entries_;
    std::vector<Run> runs_;
    std::unique_ptr<OutputFile> scratch_;   ///< where runs are written
    std::unique_ptr<InputFile> set_aside_;  ///< the same, to read them back
};

}  // namespace straymark::io
