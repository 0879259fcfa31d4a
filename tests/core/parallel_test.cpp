#include "core/parallel.h"

#include <atomic>
#include <catch2/catch.hpp>
#include <mutex>
#include <set>
#include <stdexcept>
#include <thread>
#include <vector>

using namespace straymark;

TEST_CASE("every index is called exactly once, whatever the number of threads") {
    for (const int threads : {1, 2, 5}) {
        for (const int count : {0, 1, 2, 1000}) {
            std::vector<std::atomic<int>> calls(static_cast<std::size_t>(count));
            parallel_for(count, threads, [&](int i) { ++calls[static_cast<std::size_t>(i)]; });
            for (const auto& called : calls) {
                REQUIRE(called == 1);
            }
        }
    }
}

TEST_CASE("an exception in a body reaches the caller with its type and message") {
    for (const int threads : {1, 3}) {
        try {
            parallel_for(50, threads, [](int i) {
                if (i == 17) {
                    throw std::domain_error("seventeen");
                }
            });
            FAIL("nothing was thrown");
        } catch (const std::domain_error& error) {
            CHECK(std::string(error.what()) == "seventeen");
        }
        // And the next call is none the worse for it.
        std::atomic<int> calls = 0;
        parallel_for(10, threads, [&](int) { ++calls; });
        CHECK(calls == 10);
    }
}

TEST_CASE("nested calls finish and stay within the outer number of threads") {
    constexpr int kThreads = 2;
    std::atomic<int> calls = 0;
    std::mutex mutex;
    std::set<std::thread::id> seen;
    parallel_for(8, kThreads, [&](int) {
        parallel_for(8, kThreads, [&](int) {
            ++calls;
            const std::lock_guard lock(mutex);
            seen.insert(std::this_thread::get_id());
        });
    });
    CHECK(calls == 64);
    CHECK(seen.size() <= kThreads);
}

TEST_CASE("one thread means the caller's own, in order") {
    std::vector<int> order;
    const auto caller = std::this_thread::get_id();
    parallel_for(5, 1, [&](int i) {
        CHECK(std::this_thread::get_id() == caller);
        order.push_back(i);
    });
    CHECK(order == std::vector<int>{0, 1, 2, 3, 4});
}
