#include "core/parallel.h"

#include <tbb/global_control.h>
#include <tbb/parallel_for.h>
#include <tbb/task_arena.h>

namespace straymark {

void parallel_for(int count, int threads, const std::function<void(int)>& body) {
    if (threads <= 1 || count <= 1) {
        for (int i = 0; i < count; ++i) {
            body(i);
        }
        return;
    }
    const auto run = [&] {
        tbb::parallel_for(tbb::blocked_range<int>(0, count, 1),
                          [&](const tbb::blocked_range<int>& range) {
                              for (int i = range.begin(); i != range.end(); ++i) {
                                  body(i);
                              }
                          });
    };
    if (tbb::this_task_arena::max_concurrency() == threads &&
        tbb::this_task_arena::current_thread_index() != tbb::task_arena::not_initialized) {
        run();  // already inside an arena of this size: share its threads
        return;
    }
    // More threads than cores is the caller's wish; without this TBB would refuse, and say so.
    const tbb::global_control allowed(tbb::global_control::max_allowed_parallelism,
                                      static_cast<std::size_t>(threads));
    tbb::task_arena arena(threads);
    arena.execute(run);
}

}  // namespace straymark
