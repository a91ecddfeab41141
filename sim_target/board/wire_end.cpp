#include "sim_target/board/wire_end.hpp"

#include <array>

namespace lanewright::sim {

namespace {

// A client that reads nothing for so much is let go.
constexpr std::size_t most_outgoing = 1u << 20;

std::chrono::nanoseconds nanoseconds_of(double seconds) {
    return std::chrono::duration_cast<std::chrono::nanoseconds>(
        std::chrono::duration<double>(seconds));
}

}  // namespace

void Hub::drop_all_wires() {
    for (const auto& one : cut) one();
}

std::chrono::nanoseconds Hub::time_down() const {
    return nanoseconds_of(faults.options().back_after_ms * 1e-3);
}

WireEnd::WireEnd(Hub& hub, double byte_s)
    : hub_(hub),
      byte_s_(byte_s * hub.time_scale),
      stop_(hub.tasks.stop_of_tasks().child()),
      queued_(hub.time.io(), Signal::Kind::counted, stop_),
      sent_(hub.wire.limits.largest_payload),
      arrived_(hub.wire.limits.largest_payload) {}

void WireEnd::close() {
    stop_.request();
    shut();
}

std::chrono::nanoseconds WireEnd::on_the_line(std::size_t bytes) const {
    return nanoseconds_of(static_cast<double>(bytes) * byte_s_);
}

Task<void> WireEnd::run(std::shared_ptr<WireEnd> self) {
    Hub& hub = self->hub_;
    hub.tasks.spawn("writer", write_queued(self));
    std::array<std::uint8_t, 4096> buffer;
    while (!self->stop_.requested()) {
        const std::size_t size = co_await self->read_bytes(buffer);
        if (size == 0) break;
        if (self->byte_s_ > 0) {
            self->line_free_ = std::max(self->line_free_, hub.time.now()) + self->on_the_line(size);
            const Woke woke = co_await hub.time.sleep_until(self->line_free_, self->stop_);
            if (woke == Woke::stopped) break;
        }
        self->take(std::span(buffer).first(size));
    }
    self->close();
    hub.board.port_gone(*self);
    co_return Result<void>{};
}

void WireEnd::take(std::span<const std::uint8_t> received) {
    for (Octets& frame : sent_.take(received)) {
        if (stop_.requested()) return;
        frame.push_back(0);
        take_frame(std::move(frame));
    }
}

void WireEnd::take_frame(Octets line_bytes) {
    const FaultOptions& faults = hub_.faults.options();
    const std::uint64_t number = ++hub_.frames;
    const auto reached = [number](std::uint64_t limit) { return limit != 0 && number >= limit; };
    if (number == faults.drop_at_frame) {
        hub_.drop_all_wires();
        return;
    }
    if (reached(faults.silent_from_frame)) return;
    if (reached(faults.garbage_from_frame)) {
        queue(hub_.faults.garbage(), {});
        return;
    }
    for (FramePiece& piece : hub_.faults.pass(std::move(line_bytes), Direction::to_board)) {
        if (piece.delay.count() == 0) {
            arrive(piece.bytes);
        } else {
            hub_.tasks.spawn("late frame", take_late(shared_from_this(), std::move(piece)));
        }
    }
}

Task<void> WireEnd::take_late(std::shared_ptr<WireEnd> self, FramePiece piece) {
    TimeSource& time = self->hub_.time;
    const Woke woke = co_await time.sleep_until(time.now() + piece.delay, self->stop_);
    if (woke == Woke::deadline) self->arrive(piece.bytes);
    co_return Result<void>{};
}

void WireEnd::arrive(std::span<const std::uint8_t> line_bytes) {
    const std::uint64_t too_long = arrived_.too_long();
    for (const Octets& frame : arrived_.take(line_bytes)) {
        const auto payload = payload_of(frame);
        if (!payload || !hub_.board.received(shared_from_this(), *payload, bad_frames_)) {
            ++bad_frames_;
        }
    }
    bad_frames_ += static_cast<std::uint32_t>(arrived_.too_long() - too_long);
}

void WireEnd::send(Octets payload) {
    if (stop_.requested()) return;
    Octets line = line_bytes_of(payload);
    if (!hub_.faults.options().console_text.empty()) {
        // Whatever the console printed must not become part of this frame.
        const std::string text = hub_.faults.console();
        if (!text.empty()) queue(Octets(text.begin(), text.end()), {});
        line.insert(line.begin(), 0);
    }
    for (FramePiece& piece : hub_.faults.pass(std::move(line), Direction::to_host)) {
        queue(std::move(piece.bytes), piece.delay);
    }
}

void WireEnd::queue(Octets bytes, std::chrono::nanoseconds delay) {
    const auto latency = nanoseconds_of(hub_.wire.latency_us * 1e-6 * hub_.time_scale);
    outgoing_size_ += bytes.size();
    outgoing_.emplace(hub_.time.now() + latency + delay, std::move(bytes));
    if (outgoing_size_ > most_outgoing) close();
    queued_.raise();
}

Task<void> WireEnd::write_queued(std::shared_ptr<WireEnd> self) {
    TimeSource& time = self->hub_.time;
    while (!self->stop_.requested()) {
        const TimePoint due =
            self->outgoing_.empty() ? TimePoint::max() : self->outgoing_.begin()->first;
        if (due > time.now()) {
            co_await time.wait(self->queued_, due);
            continue;
        }
        Octets bytes = std::move(self->outgoing_.begin()->second);
        self->outgoing_.erase(self->outgoing_.begin());
        self->outgoing_size_ -= bytes.size();
        const auto takes = self->on_the_line(bytes.size());
        if (takes.count() > 0) co_await time.sleep_until(time.now() + takes, self->stop_);
        if (self->stop_.requested()) break;
        if (!co_await self->write_bytes(std::move(bytes))) break;
    }
    self->close();
    co_return Result<void>{};
}

}  // namespace lanewright::sim
