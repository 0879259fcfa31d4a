#include "core/parallel.h"

#if defined(__SANITIZE_THREAD__)
#include <algorithm>
#include <atomic>
#include <exception>
#include <mutex>
#include <thread>
#include <vector>
#else
#include <tbb/global_control.h>
#include <tbb/parallel_for.h>
#include <tbb/task_arena.h>
#endif

namespace straymark {
namespace {

#if defined(__SANITIZE_THREAD__)

/// The thread sanitizer does not see how Debian's oneTBB hands work over, and would report every
/// result as a race; plain threads it understands. What is tested is the bodies, not the library.
void run_on_threads(int count, int threads, const std::function<void(int)>& body) {
    static thread_local bool inside = false;
    if (inside) {  // a nested call shares the outer call's threads
        for (int i = 0; i < count; ++i) {
            body(i);
        }
        return;
    }
    std::atomic<int> next{0};
    std::mutex mutex;
    std::exception_ptr failure;
    std::vector<std::jthread> workers;
    for (int t = 0; t < std::min(count, threads); ++t) {
        workers.emplace_back([&] {
            inside = true;
            for (int i = next.fetch_add(1); i < count; i = next.fetch_add(1)) {
                try {
                    body(i);
                } catch (...) {
                    const std::scoped_lock lock(mutex);
                    failure = failure ? failure : std::current_exception();
                    next = count;
                }
            }
        });
    }
    workers.clear();  // joins
    if (failure) {
        std::rethrow_exception(failure);
    }
}

#else

void run_on_threads(int count, int threads, const std::function<void(int)>& body) {
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

#endif

}  // namespace

void parallel_for(int count, int threads, const std::function<void(int)>& body) {
    if (threads <= 1 || count <= 1) {
        for (int i = 0; i < count; ++i) {
            body(i);
        }
        return;
    }
    run_on_threads(count, threads, body);
}

}  // namespace straymark
