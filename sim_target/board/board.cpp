#include "sim_target/board/board.hpp"

#include <algorithm>
#include <optional>

namespace lanewright::sim {

struct Board::Slot {
    std::uint16_t count = 0;
    bool used = false;     // it has had a batch
    bool running = false;  // which is still being carried out
    Octets reply;
};

struct Board::Session {
    Session(std::uint32_t its_number, std::uint32_t slot_count, Stop stop)
        : number(its_number), slots(slot_count), gone(std::move(stop)) {}
    std::uint32_t number;
    std::vector<Slot> slots;
    Stop gone;  // forgotten, or reset: its batches begin no further operation
    std::weak_ptr<Port> port;
    std::uint64_t used = 0;
};

struct Board::Running {
    std::shared_ptr<Session> session;
    BatchHead head;
    std::vector<WireStep> steps;
    Writer results;
    std::uint64_t number = 0;           // counted from 1 since the start
    std::optional<std::uint16_t> lane;  // whose registers were the last to be touched
    bool to_be_reset = false;           // this one ends in a reset of the board
};

Board::Board(TimeSource& time, const BoardSide& side, ChipOptions options,
             std::vector<std::unique_ptr<LaneModel>> models, std::uint32_t boot)
    : time_(time),
      limits_(side.wire.limits),
      reset_at_(side.faults.reset_at_batches),
      reset_before_(side.faults.reset_before_batch),
      chip_(time, side, std::move(options), std::move(models)),
      boot_(boot == 0 ? 1 : boot),
      changed_(time.io()),
      tasks_(time.io()) {}

Board::~Board() = default;

Task<void> Board::stop() {
    tasks_.stop();
    for (const auto& session : sessions_) session->gone.request();
    wake_waits();
    return tasks_.join();
}

void Board::wake_waits() {
    changed_.raise();
    changed_.lower();
}

void Board::reset() {
    chip_.reset();
    boot_ = boot_ == 0xFFFFFFFFu ? 1 : boot_ + 1;
    for (const auto& session : sessions_) session->gone.request();
    sessions_.clear();
    wake_waits();
}

bool Board::received(const std::shared_ptr<Port>& port, const Octets& payload,
                     std::uint32_t bad_frames) {
    if (tasks_.stopping()) return true;
    if (payload.front() == static_cast<std::uint8_t>(Kind::hello)) {
        const auto said = decode_hello(payload);
        if (said) hello(port, *said, bad_frames);
        return said.has_value();
    }
    return payload.front() == static_cast<std::uint8_t>(Kind::batch) && batch(port, payload);
}

std::shared_ptr<Board::Session> Board::session_of(const Port& port) const {
    for (const auto& session : sessions_) {
        if (session->port.lock().get() == &port) return session;
    }
    return nullptr;
}

void Board::port_gone(const Port& port) {
    if (const auto session = session_of(port)) session->port.reset();
}

void Board::hello(const std::shared_ptr<Port>& port, const Hello& said, std::uint32_t bad_frames) {
    if (const auto before = session_of(*port)) before->port.reset();
    HelloAnswer answer;
    const auto session = session_for(said, answer.resumed);
    session->port = port;
    session->used = ++uses_;
    answer.hello = said;
    answer.boot = boot_;
    answer.limits = limits_;
    answer.bad_frames = bad_frames;
    port->send(encode(answer));
}

std::shared_ptr<Board::Session> Board::session_for(const Hello& said, bool& resumed) {
    for (const auto& session : sessions_) {
        if (session->number != said.session) continue;
        resumed = true;
        return session;
    }
    resumed = false;
    if (sessions_.size() >= limits_.sessions) forget_oldest();
    sessions_.push_back(
        std::make_shared<Session>(said.session, limits_.slots, tasks_.stop_of_tasks().child()));
    return sessions_.back();
}

// One without a link goes first.
void Board::forget_oldest() {
    const auto oldest = std::min_element(sessions_.begin(), sessions_.end(),
                                         [](const auto& left, const auto& right) {
                                             return std::pair(!left->port.expired(), left->used) <
                                                    std::pair(!right->port.expired(), right->used);
                                         });
    (*oldest)->gone.request();
    sessions_.erase(oldest);
    wake_waits();
}

BatchError Board::check(const BatchHead& head, const std::shared_ptr<Session>& session,
                        std::span<const std::uint8_t> operations,
                        std::vector<WireStep>& steps) const {
    if (head.boot != boot_) return BatchError::other_boot;
    if (!session || (session->number & 0xFFFFu) != head.tag) return BatchError::no_session;
    const BatchError wrong = decode_steps(operations, limits_, steps);
    if (wrong == BatchError::malformed) return wrong;
    if (head.slot >= limits_.slots) return BatchError::beyond_limit;
    return wrong;
}

bool Board::batch(const std::shared_ptr<Port>& port, const Octets& payload) {
    std::span<const std::uint8_t> operations;
    const auto head = decode_head(payload, operations);
    if (!head) return false;
    const auto session = session_of(*port);
    std::vector<WireStep> steps;
    BatchError wrong = check(*head, session, operations, steps);
    if (wrong == BatchError::none) {
        session->used = ++uses_;
        Slot& slot = session->slots[head->slot];
        const auto ahead = static_cast<std::uint16_t>(head->count - slot.count);
        if (ahead == 0 && slot.used) {
            // What is still being carried out answers when it ends.
            if (!slot.running) port->send(slot.reply);
            return true;
        }
        if (ahead == 0 || ahead >= 32768) wrong = BatchError::behind;
        if (wrong == BatchError::none && slot.running) wrong = BatchError::slot_busy;
    }
    if (wrong == BatchError::none) {
        start(session, *head, std::move(steps));
    } else {
        port->send(encode_error(*head, boot_, wrong));
    }
    return true;
}

void Board::start(std::shared_ptr<Session> session, const BatchHead& head,
                  std::vector<WireStep> steps) {
    ++batches_;
    const bool resets = std::find(reset_at_.begin(), reset_at_.end(), batches_) != reset_at_.end();
    if (resets && reset_before_) {
        const auto port = session->port.lock();
        reset();
        if (port) port->send(encode_error(head, boot_, BatchError::other_boot));
        return;
    }
    Slot& slot = session->slots[head.slot];
    slot.count = head.count;
    slot.used = slot.running = true;
    slot.reply.clear();
    auto running = std::make_shared<Running>();
    running->session = std::move(session);
    running->head = head;
    running->steps = std::move(steps);
    running->number = batches_;
    running->to_be_reset = resets;
    tasks_.spawn("batch", carry_out(std::move(running)));
}

// What strikes in mid-batch does so while the batch waits, or else after half of its operations.
void Board::strike_in_mid_batch(Running& running, std::size_t step) {
    const auto& steps = running.steps;
    const auto waits = [](const WireStep& one) { return one.verb == Verb::wait; };
    const auto first = std::find_if(steps.begin(), steps.end(), waits);
    const std::size_t where =
        first != steps.end() ? static_cast<std::size_t>(first - steps.begin()) : steps.size() / 2;
    if (step != where) return;
    if (chip_.foreign_writes(running.number)) wake_waits();
    if (running.to_be_reset) reset();
}

Task<void> Board::carry_out(std::shared_ptr<Running> running) {
    Outcome outcome = Outcome::done;
    std::size_t step = 0;
    for (; step < running->steps.size(); ++step) {
        strike_in_mid_batch(*running, step);
        if (running->session->gone.requested()) co_return Result<void>{};
        outcome = co_await carry_out_step(running, running->steps[step]);
        if (outcome != Outcome::done) break;
    }
    if (running->session->gone.requested()) co_return Result<void>{};
    Slot& slot = running->session->slots[running->head.slot];
    slot.reply = encode_reply(running->head, boot_, outcome, static_cast<std::uint32_t>(step),
                              running->results.take());
    slot.running = false;
    if (const auto port = running->session->port.lock()) port->send(slot.reply);
    co_return Result<void>{};
}

boost::asio::awaitable<Outcome> Board::carry_out_step(std::shared_ptr<Running> running,
                                                      WireStep step) {
    if (step.verb != Verb::pause) {
        if (const auto lane = chip_.registers().lane_of(step.address)) running->lane = lane;
    }
    switch (step.verb) {
        case Verb::read:
            co_return read_step(step, *running);
        case Verb::write_and_check:
            co_return check_step(step, *running);
        case Verb::wait:
            co_return co_await wait_until(running, step);
        case Verb::write: {
            const Outcome outcome = chip_.registers().write(step.address, step.mask, step.value);
            wake_waits();
            co_return outcome;
        }
        case Verb::pause: {
            const TimePoint end = chip_.after(step.time_us * 1e-6);
            co_await time_.sleep_until(end, running->session->gone);
            if (running->lane) chip_.paused(*running->lane, step.time_us * 1e-6);
            co_return Outcome::done;
        }
    }
    co_return Outcome::bus_error;
}

Outcome Board::read_step(const WireStep& step, Running& running) {
    std::uint32_t value = 0;
    const Outcome outcome = chip_.registers().read(step.address, value);
    if (outcome == Outcome::done) running.results.varint(value);
    return outcome;
}

Outcome Board::check_step(const WireStep& step, Running& running) {
    RegisterFile& registers = chip_.registers();
    std::uint32_t value = 0;
    // What cannot be read back is refused before anything is written.
    const Outcome readable = registers.read(step.address, value);
    if (readable != Outcome::done) return readable;
    const Outcome written = registers.write(step.address, step.mask, step.value);
    wake_waits();
    if (written != Outcome::done) return written;
    const Outcome read = registers.read(step.address, value);
    if (read != Outcome::done) return read;
    value &= step.mask.value_or(registers.all_bits(step.address));
    running.results.varint(value);
    return value == step.value ? Outcome::done : Outcome::check_failed;
}

boost::asio::awaitable<Outcome> Board::wait_until(std::shared_ptr<Running> running, WireStep step) {
    RegisterFile& registers = chip_.registers();
    const std::uint32_t all = registers.all_bits(step.address);
    if (((step.value | step.mask.value_or(0)) & ~all) != 0 && all != 0) {
        co_return Outcome::beyond_width;
    }
    const TimePoint end = chip_.after(step.time_us * 1e-6);
    for (;;) {
        const TimePoint now = time_.now();
        std::uint32_t value = 0;
        const Outcome read = registers.read(step.address, value);
        if (read != Outcome::done) co_return read;
        value &= step.mask.value_or(all);
        const bool matches = value == step.value;
        if (matches || now >= end) {
            running->results.varint(value);
            co_return matches ? Outcome::done : Outcome::wait_expired;
        }
        co_await time_.wait(changed_, std::min(end, chip_.next_change()));
        if (running->session->gone.requested()) co_return Outcome::bus_error;
    }
}

}  // namespace lanewright::sim
