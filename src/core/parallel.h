#pragma once

#include <functional>

namespace straymark {

/// Calls body(0) ... body(count - 1), on at most `threads` threads (>= 1) at once, in any order;
/// returns when all are done. Nested calls share the outer call's threads. The first exception
/// thrown by a body is rethrown here. Results must not depend on the order of the calls.
void parallel_for(int count, int threads, const std::function<void(int)>& body);

}  // namespace straymark
