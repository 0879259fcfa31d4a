#include "raster/components.h"

#include <algorithm>
#include <numeric>

namespace straymark {
namespace {

/// Union-find whose root is always the smallest index, so that labels follow the list's order.
class Equivalences {
public:
    explicit Equivalences(std::size_t size) : parent_(size) {
        std::iota(parent_.begin(), parent_.end(), 0);
    }
    int root(int i) {
        while (parent_[i] != i) {
            parent_[i] = parent_[parent_[i]];
            i = parent_[i];
        }
        return i;
    }
    void join(int i, int j) {
        const int a = root(i);
        const int b = root(j);
        parent_[std::max(a, b)] = std::min(a, b);
    }

private:
    std::vector<int> parent_;
};

/// Joins the runs [begin, end) of one row with those of the row above, [above, begin).
void join_rows(std::span<const PixelRun> runs, int above, int begin, int end, Equivalences& same) {
    int upper = above;
    for (int lower = begin; lower < end; ++lower) {
        const PixelRun& run = runs[lower];
        // 8-connected: a run one pixel to the left or right of this one's ends still touches it.
        while (upper < begin && runs[upper].x0 + runs[upper].length < run.x0) {
            ++upper;
        }
        for (int k = upper; k < begin && runs[k].x0 <= run.x0 + run.length; ++k) {
            same.join(k, lower);
            upper = k;  // the last one reached may also touch the next run
        }
        if (lower > begin && runs[lower - 1].x0 + runs[lower - 1].length == run.x0) {
            same.join(lower - 1, lower);
        }
    }
}

}  // namespace

RunComponents connected_components(std::span<const PixelRun> runs) {
    const int size = static_cast<int>(runs.size());
    Equivalences same(runs.size());
    int above = 0;
    int begin = 0;
    while (begin < size) {
        int end = begin;
        while (end < size && runs[end].y == runs[begin].y) {
            ++end;
        }
        const bool adjacent = above < begin && runs[above].y + 1 == runs[begin].y;
        join_rows(runs, adjacent ? above : begin, begin, end, same);
        above = begin;
        begin = end;
    }
    RunComponents components;
    components.label.resize(runs.size());
    for (int i = 0; i < size; ++i) {
        const int root = same.root(i);
        components.label[i] = root == i ? components.count++ : components.label[root];
    }
    return components;
}

}  // namespace straymark
