#include "io/star_sorter.h"

#include <algorithm>
#include <cassert>
#include <cstring>
#include <queue>

#include "io/files.h"

namespace straymark::io {
namespace {

/// Total order of stars: where they are, then every byte of the row.
bool before(const StarSorter::Sorted& a, const StarSorter::Sorted& b) {
    if (a.cell != b.cell) {
        return a.cell < b.cell;
    }
    const SkyPoint p = stored_position(a.numbers.data());
    const SkyPoint q = stored_position(b.numbers.data());
    if (p.ra_deg != q.ra_deg) {
        return p.ra_deg < q.ra_deg;
    }
    if (p.dec_deg != q.dec_deg) {
        return p.dec_deg < q.dec_deg;
    }
    if (a.id != b.id) {
        return a.id < b.id;
    }
    return std::memcmp(a.numbers.data(), b.numbers.data(), a.numbers.size()) < 0;
}

}  // namespace

/// Walks one run through a window of it.
class StarSorter::Cursor {
public:
    Cursor(const StarSorter& sorter, Run run)
        : sorter_(sorter), next_(run.offset), end_(run.offset + run.bytes) {}

    /// The next star; false at the end of the run. The previous one is gone.
    bool advance() {
        at_ += length_;
        const std::size_t longest = 1 + kLongestStarId + sorter_.number_bytes_;
        if (window_.size() - at_ < longest && next_ < end_) {
            refill();
        }
        if (at_ >= window_.size()) {
            return false;
        }
        star_ = sorter_.record_at(window_.data() + at_);
        length_ = 1 + star_.id.size() + star_.numbers.size();
        return true;
    }
    [[nodiscard]] const Sorted& star() const { return star_; }

private:
    void refill() {
        constexpr std::int64_t kWindow = 1 << 18;
        window_.erase(window_.begin(), window_.begin() + static_cast<std::ptrdiff_t>(at_));
        at_ = 0;
        const std::size_t kept = window_.size();
        const auto more = static_cast<std::size_t>(std::min(kWindow, end_ - next_));
        window_.resize(kept + more);
        sorter_.set_aside_->read_at(next_, std::span(window_).subspan(kept));
        next_ += static_cast<std::int64_t>(more);
    }

    const StarSorter& sorter_;
    std::int64_t next_, end_;
    std::vector<std::byte> window_;
    std::size_t at_ = 0;
    std::size_t length_ = 0;
    Sorted star_;
};

StarSorter::StarSorter(const SkyCells& cells, std::string scratch_path, std::size_t mags,
                       std::size_t batch_bytes)
    : cells_(cells),
      scratch_path_(std::move(scratch_path)),
      number_bytes_(star_number_bytes(mags)),
      batch_bytes_(batch_bytes) {}

StarSorter::~StarSorter() = default;

StarSorter::Sorted StarSorter::record_at(const std::byte* from) const {
    const auto length = static_cast<std::size_t>(*from);
    const std::byte* const numbers = from + 1 + length;
    return {cells_.cell(stored_position(numbers)),
            std::string_view(reinterpret_cast<const char*>(from + 1), length),
            {numbers, number_bytes_}};
}

void StarSorter::add(const StarRecord& star) {
    assert(!star.id.empty() && star.id.size() <= kLongestStarId);
    const std::size_t length = 1 + star.id.size() + number_bytes_;
    if (batch_.size() + length > batch_bytes_ && !entries_.empty()) {
        set_aside();
    }
    const std::size_t offset = batch_.size();
    batch_.resize(offset + length);
    batch_[offset] = static_cast<std::byte>(star.id.size());
    std::memcpy(batch_.data() + offset + 1, star.id.data(), star.id.size());
    store_star_numbers(star, std::span(batch_).subspan(offset + 1 + star.id.size()));
    entries_.push_back({cells_.cell(star.position), static_cast<std::uint32_t>(offset)});
    longest_id_ = std::max(longest_id_, star.id.size());
    ++count_;
}

void StarSorter::sort_batch() {
    std::sort(entries_.begin(), entries_.end(), [this](const Entry& a, const Entry& b) {
        if (a.cell != b.cell) {
            return a.cell < b.cell;
        }
        return before(record_at(batch_.data() + a.offset), record_at(batch_.data() + b.offset));
    });
}

void StarSorter::set_aside() {
    if (!scratch_) {
        scratch_ = std::make_unique<OutputFile>(scratch_path_);
    }
    sort_batch();
    std::int64_t written = 0;
    const auto flush = [&](std::vector<std::byte>& out) {
        scratch_->write(out);
        written += static_cast<std::int64_t>(out.size());
        out.clear();
    };
    std::vector<std::byte> out;
    constexpr std::size_t kPiece = 1 << 20;
    for (const Entry& entry : entries_) {
        const std::byte* const from = batch_.data() + entry.offset;
        out.insert(out.end(), from, from + 1 + static_cast<std::size_t>(*from) + number_bytes_);
        if (out.size() >= kPiece) {
            flush(out);
        }
    }
    flush(out);
    const std::int64_t start = runs_.empty() ? 0 : runs_.back().offset + runs_.back().bytes;
    runs_.push_back({start, written});
    batch_.clear();
    entries_.clear();
}

void StarSorter::drain_batch(const std::function<void(const Sorted&)>& take) {
    sort_batch();
    for (const Entry& entry : entries_) {
        take(record_at(batch_.data() + entry.offset));
    }
}

void StarSorter::merge(const std::function<void(const Sorted&)>& take) {
    set_aside_ = std::make_unique<InputFile>(scratch_->temporary_path());
    std::vector<std::unique_ptr<Cursor>> cursors;
    for (const Run& run : runs_) {
        cursors.push_back(std::make_unique<Cursor>(*this, run));
    }
    const auto later = [](const Cursor* a, const Cursor* b) {
        return before(b->star(), a->star());
    };
    std::priority_queue<Cursor*, std::vector<Cursor*>, decltype(later)> waiting(later);
    for (const auto& cursor : cursors) {
        if (cursor->advance()) {
            waiting.push(cursor.get());
        }
    }
    while (!waiting.empty()) {
        Cursor* const first = waiting.top();
        waiting.pop();
        take(first->star());
        if (first->advance()) {
            waiting.push(first);
        }
    }
}

void StarSorter::drain(const std::function<void(const Sorted&)>& take) {
    if (runs_.empty()) {
        drain_batch(take);
        return;
    }
    set_aside();
    std::vector<std::byte>().swap(batch_);
    std::vector<Entry>().swap(entries_);
    merge(take);
}

}  // namespace straymark::io
