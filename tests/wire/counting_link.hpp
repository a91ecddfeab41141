#pragma once
// Purpose:   counts the bytes that go over a link.
// Ownership: owns the link behind it; refers to the counts.
// Threads:   io thread.

#include <cstdint>
#include <memory>
#include <utility>

#include "drivers/io/link.hpp"

namespace lanewright::tests {

struct Traffic {
    std::uint64_t sent = 0, received = 0;
    std::uint64_t both() const { return sent + received; }
};

// Passes everything on and counts it.
class CountingLink final : public Link {
  public:
    CountingLink(std::unique_ptr<Link> inner, Traffic& traffic)
        : inner_(std::move(inner)), traffic_(traffic) {}
    Task<void> open(TimePoint deadline) override { return inner_->open(deadline); }
    Task<std::size_t> read_some(std::span<std::byte> buffer) override {
        auto size = co_await inner_->read_some(buffer);
        if (size.has_value()) traffic_.received += *size;
        co_return size;
    }
    Task<void> write(Bytes bytes) override {
        traffic_.sent += bytes.size();
        return inner_->write(std::move(bytes));
    }
    void close() noexcept override { inner_->close(); }
    bool is_open() const override { return inner_->is_open(); }
    const LinkTraits& traits() const override { return inner_->traits(); }

  private:
    std::unique_ptr<Link> inner_;
    Traffic& traffic_;
};

}  // namespace lanewright::tests
