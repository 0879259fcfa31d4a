#pragma once

#include <cstddef>
#include <memory>
#include <span>
#include <string>

namespace straymark::io {

/// The digest of bytes that come piece by piece: the same text as `bytes_digest` of them all.
class ContentDigest {
public:
    ContentDigest();
    ~ContentDigest();
    ContentDigest(const ContentDigest&) = delete;
    ContentDigest& operator=(const ContentDigest&) = delete;
    void add(std::span<const std::byte> bytes);
    [[nodiscard]] std::string text() const;

private:
    struct State;
    std::unique_ptr<State> state_;
};

}  // namespace straymark::io
