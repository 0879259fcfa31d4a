#include "io/content_digest.h"

#include <fmt/format.h>
#include <new>
#include <xxhash.h>

namespace straymark::io {

struct ContentDigest::State {
    struct Free {
        void operator()(XXH3_state_t* state) const { XXH3_freeState(state); }
    };
    std::unique_ptr<XXH3_state_t, Free> hash{XXH3_createState()};
};

ContentDigest::ContentDigest() : state_(std::make_unique<State>()) {
    if (!state_->hash) {
        throw std::bad_alloc();
    }
    XXH3_128bits_reset(state_->hash.get());
}

ContentDigest::~ContentDigest() = default;

void ContentDigest::add(std::span<const std::byte> bytes) {
    XXH3_128bits_update(state_->hash.get(), bytes.data(), bytes.size());
}

std::string ContentDigest::text() const {
    const XXH128_hash_t value = XXH3_128bits_digest(state_->hash.get());
    return fmt::format("xxh128:{:016x}{:016x}", value.high64, value.low64);
}

}  // namespace straymark::io
