#include "drivers/io/memory_link.hpp"

#include <algorithm>
#include <deque>
#include <list>

namespace lanewright {

namespace {

Fault lost(const std::string& name, const char* what) {
    Fault fault;
    fault.cause = Cause::unreachable;
    fault.what = name + ": " + what;
    return fault;
}

struct Side {
    Side(boost::asio::io_context& io) : arrived(io) {}
    std::deque<std::byte> received;
    Signal arrived;  // raised: bytes are there, or the link has changed
    bool open = false;
    std::uint64_t opened =
        0;                  // a read that outlives its opening must not take the next one's bytes
    MemoryHook hook;        // on what this side writes
    TimePoint line_free{};  // when the last byte it wrote has left
};

class Cable final : public MemoryCable, public std::enable_shared_from_this<Cable> {
  public:
    Cable(TimeSource& source, MemoryOptions its_options)
        : time(source), options(std::move(its_options)), host(source.io()), board(source.io()) {
        board.open = true;
    }

    void on_host_writes(MemoryHook hook) override { host.hook = std::move(hook); }
    void on_board_writes(MemoryHook hook) override { board.hook = std::move(hook); }

    void cut() override {
        under_way_.clear();
        for (Side* side : {&host, &board}) {
            side->received.clear();
            side->line_free = {};
        }
        close(host);
        // The board's own end comes back by itself, as a listening board's does.
        close(board);
        board.open = true;
        ++board.opened;
    }

    void unplug() override {
        plugged_ = false;
        cut();
    }
    void plug_in() override { plugged_ = true; }

    bool open_host() {
        if (!plugged_) return false;
        host.received.clear();
        host.arrived.lower();
        host.open = true;
        ++host.opened;
        return true;
    }

    void close(Side& side) {
        if (!side.open) return;
        side.open = false;
        side.arrived.raise();
    }

    void send(Side& from, Side& to, Bytes bytes) {
        const std::size_t size = bytes.size();
        std::vector<MemoryPiece> pieces;
        if (from.hook) {
            pieces = from.hook(std::move(bytes));
        } else {
            pieces.push_back({std::move(bytes), {}});
        }
        const TimePoint left = time_of_leaving(from, size);
        for (MemoryPiece& piece : pieces) {
            deliver(to, std::move(piece.bytes), left + options.latency + piece.delay);
        }
    }

    TimePoint time_of_leaving(Side& from, std::size_t size) {
        if (options.bytes_per_s <= 0) return time.now();
        const std::chrono::duration<double> takes(static_cast<double>(size) / options.bytes_per_s);
        from.line_free = std::max(from.line_free, time.now()) +
                         std::chrono::duration_cast<std::chrono::nanoseconds>(takes);
        return from.line_free;
    }

    TimeSource& time;
    MemoryOptions options;
    Side host, board;

  private:
    struct Delivery {
        Bytes bytes;
        std::unique_ptr<Alarm> alarm;
    };

    void deliver(Side& to, Bytes bytes, TimePoint when) {
        if (when <= time.now()) {
            arrive(to, bytes);
            return;
        }
        under_way_.push_back({std::move(bytes), nullptr});
        const auto place = std::prev(under_way_.end());
        place->alarm = std::make_unique<Alarm>(time, when, [this, &to, place] {
            const Bytes late = std::move(place->bytes);
            under_way_.erase(place);
            arrive(to, late);
        });
    }

    void arrive(Side& to, const Bytes& bytes) {
        if (!to.open || bytes.empty()) return;
        to.received.insert(to.received.end(), bytes.begin(), bytes.end());
        to.arrived.raise();
    }

    bool plugged_ = true;
    std::list<Delivery> under_way_;
};

class MemoryEnd final : public Link {
  public:
    MemoryEnd(std::shared_ptr<Cable> cable, bool is_host)
        : cable_(std::move(cable)), is_host_(is_host) {
        traits_.name = cable_->options.name + (is_host_ ? "" : " (board)");
        traits_.bytes_per_s = cable_->options.bytes_per_s;
        traits_.after_deadline = cable_->options.after_deadline;
    }
    ~MemoryEnd() override { close(); }

    Task<void> open(TimePoint) override {
        if (is_host_ && !cable_->open_host()) {
            co_return lost(traits_.name, "the cable is unplugged");
        }
        if (!is_host_ && !mine().open) {
            mine().open = true;
            ++mine().opened;
            mine().arrived.lower();
        }
        co_return Result<void>{};
    }

    Task<std::size_t> read_some(std::span<std::byte> buffer) override {
        const auto cable = cable_;
        Side& side = mine();
        const std::uint64_t opened = side.opened;
        while (side.open && side.opened == opened) {
            if (!side.received.empty()) co_return take(side, buffer);
            side.arrived.lower();
            co_await cable->time.wait(side.arrived, TimePoint::max());
        }
        co_return lost(traits_.name, "the link was lost");
    }

    Task<void> write(Bytes bytes) override {
        if (!mine().open) co_return lost(traits_.name, "the link is closed");
        cable_->send(mine(), theirs(), std::move(bytes));
        co_return Result<void>{};
    }

    void close() noexcept override { cable_->close(mine()); }
    bool is_open() const override { return (is_host_ ? cable_->host : cable_->board).open; }
    const LinkTraits& traits() const override { return traits_; }

  private:
    Side& mine() { return is_host_ ? cable_->host : cable_->board; }
    Side& theirs() { return is_host_ ? cable_->board : cable_->host; }

    static std::size_t take(Side& side, std::span<std::byte> buffer) {
        const std::size_t size = std::min(buffer.size(), side.received.size());
        const auto end = side.received.begin() + static_cast<std::ptrdiff_t>(size);
        std::copy(side.received.begin(), end, buffer.begin());
        side.received.erase(side.received.begin(), end);
        return size;
    }

    std::shared_ptr<Cable> cable_;
    bool is_host_;
    LinkTraits traits_;
};

}  // namespace

MemoryPair make_memory_pair(TimeSource& time, MemoryOptions options) {
    const auto cable = std::make_shared<Cable>(time, std::move(options));
    MemoryPair pair;
    pair.host = std::make_unique<MemoryEnd>(cable, true);
    pair.board = std::make_unique<MemoryEnd>(cable, false);
    pair.cable = cable;
    return pair;
}

}  // namespace lanewright
