#include "drivers/dialects/framed.hpp"

#include <algorithm>
#include <utility>

#include "drivers/dialects/bytes.hpp"

namespace lanewright::framed {

namespace {

// Larger frames are neither sent nor taken, whatever the board offers: a bound on memory.
constexpr std::size_t largest_of_ours = 65536;
constexpr std::size_t smallest_payload = 64;  // what every board can take

// After so long without sending, something else may have stood on the line.
constexpr std::chrono::milliseconds quiet_time{20};

Fault fault_of(Cause cause, std::string what) {
    Fault fault;
    fault.cause = cause;
    fault.what = std::move(what);
    return fault;
}

std::uint16_t tag_of(std::uint32_t session) {
    return static_cast<std::uint16_t>(session & 0xFFFF);
}

// Another number whose low half, the tag, is another too.
std::uint32_t session_after(std::uint32_t session) {
    return session == 0xFFFFFFFFu ? 1 : session + 1;
}

const char* text_of(Error error) {
    switch (error) {
        case Error::wrong_boot:
            return "the board's boot number is another";
        case Error::no_session:
            return "the board knows no session";
        case Error::malformed:
            return "the board calls the batch malformed";
        case Error::beyond_limit:
            return "the board calls the batch beyond its limits";
        case Error::slot_busy:
            return "the board's slot is busy";
        case Error::behind:
            return "the board's slot is ahead";
    }
    return "the board refused the batch";
}

}  // namespace

Framed::Framed(const DialectOptions& options)
    : answer_time_(options.answer_time),
      session_(options.session == 0 ? 1 : options.session),
      largest_payload_(smallest_payload),
      reader_(smallest_payload) {
    traits_.name = "framed";
    traits_.in_flight = 1;
    traits_.board_waits = true;
    traits_.tells_reset = true;
}

bool Framed::fits(const Batch& batch, std::string& why) const {
    if (traits_.most_operations == 0) return true;  // not known before the greeting
    const std::size_t request = encode(Head{127, 0, 0, 0xFFFFFFFFu}, batch).size();
    const auto too_much = [&why](const char* what, std::size_t found, std::size_t most) {
        why = std::string(what) + " " + std::to_string(found) + ", the board takes " +
              std::to_string(most);
        return false;
    };
    if (batch.size() > traits_.most_operations) {
        return too_much("operations in a batch:", batch.size(), traits_.most_operations);
    }
    if (request > largest_payload_) return too_much("bytes in a batch:", request, largest_payload_);
    if (longest_reply(batch) > largest_payload_) {
        return too_much("bytes in a reply:", longest_reply(batch), largest_payload_);
    }
    for (const Operation& operation : batch.operations()) {
        std::chrono::microseconds time{};
        if (const auto* wait = std::get_if<WaitUntil>(&operation)) time = wait->timeout;
        if (const auto* pause = std::get_if<Pause>(&operation)) time = pause->time;
        if (time > traits_.longest_wait) {
            return too_much("microseconds of one wait:", static_cast<std::size_t>(time.count()),
                            static_cast<std::size_t>(traits_.longest_wait.count()));
        }
    }
    return true;
}

std::size_t Framed::line_bytes(const Batch& batch) const {
    constexpr std::size_t frame_overhead = 8;  // CRC, COBS, zeros
    const std::size_t request = encode(Head{127, 0, 0, 0xFFFFFFFFu}, batch).size();
    return request + request / 254 + longest_reply(batch) + 2 * frame_overhead;
}

std::list<Framed::Request>::iterator Framed::find(Ticket ticket) {
    return std::find_if(requests_.begin(), requests_.end(),
                        [ticket](const Request& each) { return each.ticket == ticket; });
}

std::list<Framed::Request>::const_iterator Framed::find(Ticket ticket) const {
    return std::find_if(requests_.begin(), requests_.end(),
                        [ticket](const Request& each) { return each.ticket == ticket; });
}

void Framed::submit(Ticket ticket, const Batch& batch, Urgency urgency) {
    Request request;
    request.ticket = ticket;
    request.batch = batch;
    request.urgency = urgency;
    requests_.push_back(std::move(request));
}

void Framed::link_reopened() {
    reader_.reset();
    last_sent_.reset();
    begin_greeting(false);
}

void Framed::link_lost() {
    state_ = State::closed;
}

void Framed::begin_greeting(bool new_session) {
    if (new_session) {
        session_ = session_after(session_);
        session_used_ = false;
        slots_.clear();
        for (Request& request : requests_) request.slot.reset();
    }
    state_ = State::greeting;
    tries_ = 0;
    next_hello_ = TimePoint::min();
}

DialectStep Framed::step(std::span<const std::byte> received, TimePoint now) {
    DialectStep step;
    for (const std::vector<std::byte>& payload : reader_.feed(received)) {
        const std::optional<BoardMessage> message = decode(payload);
        if (message) {
            take(*message, step);
        } else {
            reader_.count_bad();
        }
    }
    finish_step(step, now);
    return step;
}

// What is due goes out after every event, so that no caller can forget it.
void Framed::finish_step(DialectStep& step, TimePoint now) {
    counts_.frames_received = reader_.good();
    counts_.bad_frames = reader_.bad();
    if (state_ == State::greeting) {
        if (now >= next_hello_) send_hello(step, now);
        step.call_again = next_hello_;
        return;
    }
    if (state_ == State::closed) return;
    send_clearing(step, now);
    send_waiting(step, now);
    for (const Slot& slot : slots_) {
        if (slot.use != Slot::Use::clearing) continue;
        if (!step.call_again || slot.next_try < *step.call_again) step.call_again = slot.next_try;
    }
}

void Framed::send_payload(const std::vector<std::byte>& payload, bool after_silence,
                          DialectStep& step, TimePoint now) {
    if (after_silence || !last_sent_ || now - *last_sent_ > quiet_time) {
        step.send.push_back(std::byte{0});
    }
    const std::vector<std::byte> frame = frame_of(payload);
    step.send.insert(step.send.end(), frame.begin(), frame.end());
    last_sent_ = now;
    ++counts_.frames_sent;
}

void Framed::send_hello(DialectStep& step, TimePoint now) {
    ++last_try_;
    ++tries_;
    send_payload(encode(Hello{last_try_, session_}), true, step, now);
    next_hello_ = now + answer_time_;
}

std::optional<std::size_t> Framed::free_slot() const {
    for (std::size_t i = 0; i < slots_.size(); ++i) {
        if (slots_[i].use == Slot::Use::free) return i;
    }
    return std::nullopt;
}

bool Framed::clearing_holds_up() const {
    return std::any_of(slots_.begin(), slots_.end(), [](const Slot& slot) {
        return slot.use == Slot::Use::clearing && !slot.still_running;
    });
}

Head Framed::head_for(std::size_t slot) const {
    return Head{static_cast<std::uint32_t>(slot), slots_[slot].count, tag_of(session_), boot_};
}

void Framed::send_waiting(DialectStep& step, TimePoint now) {
    for (Request& request : requests_) {
        if (request.slot) continue;
        if (state_ == State::greeted && request.urgency != Urgency::identity) continue;
        if (clearing_holds_up()) return;
        const std::optional<std::size_t> slot = free_slot();
        if (!slot) return;
        start(request, *slot, step, now);
    }
}

void Framed::start(Request& request, std::size_t at, DialectStep& step, TimePoint now) {
    Slot& slot = slots_[at];
    slot.use = Slot::Use::busy;
    slot.count = static_cast<std::uint16_t>(slot.count + 1);
    slot.ticket = request.ticket;
    request.slot = at;
    request.payload = encode(head_for(at), request.batch);
    send_payload(request.payload, false, step, now);
    session_used_ = true;
    if (!request.begun_before) step.started.push_back(request.ticket);
    request.begun_before = true;
}

void Framed::send_clearing(DialectStep& step, TimePoint now) {
    for (std::size_t i = 0; i < slots_.size(); ++i) {
        Slot& slot = slots_[i];
        if (slot.use != Slot::Use::clearing || now < slot.next_try) continue;
        send_payload(encode(head_for(i), Batch{}), true, step, now);
        slot.next_try = now + answer_time_;
    }
}

DialectStep Framed::admit(TimePoint now) {
    DialectStep step;
    if (state_ == State::greeted) {
        state_ = State::open;
        for (const Request& request : requests_) {
            if (request.slot) send_payload(request.payload, true, step, now);
        }
    }
    finish_step(step, now);
    return step;
}

DialectStep Framed::again(Ticket ticket, TimePoint now) {
    DialectStep step;
    const auto request = find(ticket);
    const bool may_go =
        state_ == State::open || (state_ == State::greeted && request != requests_.end() &&
                                  request->urgency == Urgency::identity);
    if (request != requests_.end() && request->slot && may_go) {
        send_payload(request->payload, true, step, now);
    }
    finish_step(step, now);
    return step;
}

DialectStep Framed::abandon(Ticket ticket, TimePoint now) {
    DialectStep step;
    const auto request = find(ticket);
    if (request != requests_.end()) {
        if (request->slot) {
            Slot& slot = slots_[*request->slot];
            slot.use = Slot::Use::clearing;
            slot.still_running = false;
            slot.count = static_cast<std::uint16_t>(slot.count + 1);
            slot.next_try = now;
        }
        requests_.erase(request);
    }
    finish_step(step, now);
    return step;
}

bool Framed::was_sent(Ticket ticket) const {
    const auto request = find(ticket);
    return request != requests_.end() && request->slot.has_value();
}

std::string Framed::sent_hex(Ticket ticket) const {
    const auto request = find(ticket);
    return request == requests_.end() || request->payload.empty()
               ? std::string{}
               : hex_of(frame_of(request->payload));
}

void Framed::take(const BoardMessage& message, DialectStep& step) {
    if (const auto* answer = std::get_if<HelloAnswer>(&message)) take_answer(*answer, step);
    if (const auto* reply = std::get_if<Reply>(&message)) take_reply(*reply, step);
    if (const auto* error = std::get_if<ErrorReply>(&message)) take_error(*error, step);
}

void Framed::take_answer(const HelloAnswer& answer, DialectStep& step) {
    const unsigned age = static_cast<std::uint8_t>(last_try_ - answer.try_number);
    if (state_ != State::greeting || answer.session != session_ || age >= tries_) return;
    if (answer.version != version) {
        step.hopeless =
            fault_of(Cause::refused, "the board speaks version " + std::to_string(answer.version) +
                                         " of the framed dialect, this host version 1");
        state_ = State::closed;
        return;
    }
    if (boot_ != 0 && answer.boot != boot_) board_was_reset(answer.boot, step);
    boot_ = answer.boot;
    if (!answer.resumed && session_used_) {
        session_is_gone(step);
        return;  // greets once more, in a new session
    }
    take_limits(answer);
    state_ = State::greeted;
    BoardSaid said = step.board_said.value_or(BoardSaid{});
    said.greeted = true;
    said.boot = boot_;
    said.bad_frames = answer.bad_frames;
    step.board_said = said;
}

void Framed::take_limits(const HelloAnswer& answer) {
    traits_.in_flight = answer.slots;
    traits_.most_operations = answer.most_operations;
    traits_.longest_wait = std::chrono::microseconds(answer.longest_wait_us);
    largest_payload_ = std::min<std::size_t>(answer.largest_payload, largest_of_ours);
    reader_.set_largest(largest_payload_);
    // The slots of a resumed session stay as they are; a board does not change their number
    // without a reset.
    if (slots_.size() < answer.slots) slots_.resize(answer.slots);
}

// Both ends begin anew; whatever was asked for is over.
void Framed::board_was_reset(std::uint32_t boot, DialectStep& step) {
    for (const Request& request : requests_) {
        Fault fault = fault_of(Cause::board_reset, "the board was reset: its boot number was " +
                                                       std::to_string(boot_) + " and is " +
                                                       std::to_string(boot));
        if (!request.payload.empty()) fault.sent_hex = hex_of(frame_of(request.payload));
        step.finished.push_back({request.ticket, std::move(fault)});
    }
    requests_.clear();
    BoardSaid said = step.board_said.value_or(BoardSaid{});
    said.reset = true;
    said.boot = boot;
    step.board_said = said;
    boot_ = boot;
}

// The board no longer knows what was carried out of what was sent. Repeatable batches simply
// begin anew in the next session.
void Framed::session_is_gone(DialectStep& step) {
    for (auto request = requests_.begin(); request != requests_.end();) {
        const auto here = request++;
        if (!here->slot || here->batch.repeatable()) continue;
        Fault fault = fault_of(Cause::outcome_unknown,
                               "the board no longer remembers a batch that was sent and must not "
                               "be carried out twice");
        fault.sent_hex = hex_of(frame_of(here->payload));
        step.finished.push_back({here->ticket, std::move(fault)});
        requests_.erase(here);
    }
    begin_greeting(true);
}

// The slot that the reply belongs to, or null for a stray one: a late copy, or another session's.
Framed::Slot* Framed::slot_of(const Head& head) {
    if (head.tag != tag_of(session_) || head.slot >= slots_.size()) return nullptr;
    Slot& slot = slots_[head.slot];
    if (slot.use == Slot::Use::free || slot.count != head.count) return nullptr;
    return &slot;
}

void Framed::finish(Ticket ticket, Result<BatchReply> result, DialectStep& step) {
    const auto request = find(ticket);
    if (request == requests_.end()) return;
    if (!result && result.error().sent_hex.empty()) {
        Fault fault = result.error();
        fault.sent_hex = hex_of(frame_of(request->payload));
        result = std::move(fault);
    }
    step.finished.push_back({ticket, std::move(result)});
    requests_.erase(request);
}

void Framed::take_reply(const Reply& reply, DialectStep& step) {
    Slot* slot = slot_of(reply.head);
    if (slot == nullptr || reply.head.boot != boot_) return;
    const Slot::Use use = std::exchange(slot->use, Slot::Use::free);
    if (use == Slot::Use::clearing) return;
    const auto request = find(slot->ticket);
    if (request == requests_.end()) return;
    std::optional<BatchReply> content = decode_content(reply.content, request->batch);
    if (content) {
        finish(slot->ticket, std::move(*content), step);
        return;
    }
    Fault fault = fault_of(Cause::refused, "the board's reply does not fit the batch");
    fault.received_hex = hex_of(reply.content);
    finish(slot->ticket, std::move(fault), step);
}

void Framed::take_error(const ErrorReply& reply, DialectStep& step) {
    if (reply.error == Error::no_session) {
        const bool ours = reply.head.tag == tag_of(session_);
        if (ours && reply.head.boot == boot_ && state_ != State::greeting) begin_greeting(false);
        return;
    }
    Slot* slot = slot_of(reply.head);
    if (slot == nullptr) return;
    if (reply.error == Error::wrong_boot) {
        if (reply.head.boot == boot_) return;  // of a time before: it contradicts itself
        board_was_reset(reply.head.boot, step);
        begin_greeting(true);
        return;
    }
    if (reply.head.boot == boot_) refuse(*slot, reply.error, step);
}

void Framed::refuse(Slot& slot, Error error, DialectStep& step) {
    if (error == Error::slot_busy && slot.use == Slot::Use::clearing) {
        slot.still_running = true;  // tried again at its time
        return;
    }
    if (error == Error::slot_busy || error == Error::behind) {
        // The two sides disagree about the slots; a new session is the way out. The batch was
        // refused, so it has not been carried out and may begin there.
        if (slot.use == Slot::Use::busy) {
            const auto request = find(slot.ticket);
            if (request != requests_.end()) request->slot.reset();
        }
        session_is_gone(step);
        return;
    }
    const bool clearing = slot.use == Slot::Use::clearing;
    slot.use = Slot::Use::free;
    if (clearing) return;
    const Ticket ticket = slot.ticket;
    finish(ticket, fault_of(Cause::refused, text_of(error)), step);
}

}  // namespace lanewright::framed
