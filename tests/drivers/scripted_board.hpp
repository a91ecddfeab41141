#pragma once
// Purpose:   a small board side of the framed dialect for tests, written from drivers/framed.md
//            with its own codec, so that an equal mistake in the host's cannot hide here.
// Ownership: refers to the TimeSource and the board's end of a link.
// Threads:   io thread.

#include <cstdint>
#include <functional>
#include <map>
#include <memory>
#include <optional>
#include <set>
#include <string>
#include <vector>

#include "drivers/io/link.hpp"
#include "drivers/io/task_group.hpp"
#include "drivers/io/time_source.hpp"

namespace lanewright::test {

using Octets = std::vector<std::uint8_t>;

Octets framed_by_hand(const Octets& payload);                   // with the closing zero
std::optional<Octets> unframed_by_hand(const Octets& encoded);  // without it

// One write as it was carried out.
struct DoneWrite {
    std::uint32_t address = 0, mask = 0, value = 0;
};

class ScriptedBoard {
  public:
    ScriptedBoard(TimeSource& time, Link& link);

    // Starts to serve; close() ends it and must finish before destruction.
    void start();
    Task<void> close();

    std::map<std::uint32_t, std::uint32_t> registers;  // those that exist
    std::set<std::uint32_t> self_clearing;
    std::function<void(const DoneWrite&)> on_write;  // after a write was carried out
    std::function<void(Octets&)> on_reply;           // may alter a reply's payload
    std::vector<DoneWrite> writes;                   // in order of being carried out
    std::uint32_t boot = 7;
    bool silent = false;   // takes everything, answers nothing
    bool forgets = false;  // knows no session at each new hello
    std::uint32_t largest_payload = 1024, slots = 16, most_operations = 256;
    std::uint64_t batches_begun = 0, repeats = 0, hellos = 0, bad_frames = 0;
    std::uint64_t bytes_in = 0, bytes_out = 0;

    void reset();                       // another boot number, everything forgotten
    void say(const std::string& text);  // console text on the line

  private:
    struct Slot {
        std::uint16_t count = 0;
        bool had = false, running = false;
        Octets reply;
    };
    struct Session {
        std::vector<Slot> slots;
        bool used = false;
    };
    struct Head {
        std::uint32_t slot = 0;
        std::uint16_t count = 0, tag = 0;
        std::uint32_t boot = 0;
    };
    struct Operation {
        unsigned code = 0;
        std::uint32_t address = 0, mask = 0xFFFFFFFF, value = 0, time_us = 0;
    };

    Task<void> serve();
    Task<void> carry_out(std::uint32_t session, Head head, std::vector<Operation> operations);
    Task<bool> wait_until(Operation operation, std::uint64_t epoch);
    void take(const Octets& payload);
    void take_hello(const Octets& payload);
    void take_batch(const Octets& payload);
    void refuse(const Head& head, std::uint8_t error);
    void send(Octets payload);
    void write(const Operation& operation);

    TimeSource& time_;
    Link& link_;
    TaskGroup tasks_;
    Octets arriving_;
    std::map<std::uint32_t, Session> sessions_;
    std::uint32_t session_ = 0;
    std::uint64_t epoch_ = 0;
};

}  // namespace lanewright::test
