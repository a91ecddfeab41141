#pragma once
// Purpose:   registers without wires for tests of replays: a table of values that takes writes,
//            lets waits come true, and counts errors of a Gaussian eye where it is told to look.
// Ownership: values only.
// Threads:   one test each.

#include <cmath>
#include <map>

#include "drivers/board/registers.hpp"

namespace lanewright::test {

class TableRegisters : public Registers {
  public:
    std::map<std::uint32_t, std::uint32_t> value;
    bool locks = true;
    // The demo board's lane 0, as its file has it.
    static constexpr std::uint32_t base = 0x100, status = base + 0x06, setup = base + 0x08,
                                   point = base + 0x0F, errors = base + 0x11, bits = base + 0x12,
                                   origin = base + 0x15;

    TableRegisters() { value[origin] = 256u | (64u << 9); }

    bool fits(const Batch&, std::string&) const override { return true; }
    std::chrono::nanoseconds longest(const Batch& batch) const override { return batch.longest(); }

    Task<BatchReply> run(Lane, Batch batch, TimePoint) override {
        BatchReply reply;
        reply.results.resize(batch.size());
        for (std::size_t i = 0; i < batch.size(); ++i) {
            if (carry_out(batch.operations()[i], reply.results[i])) continue;
            reply.outcome = Outcome::wait_expired;
            reply.failed_at = i;
            break;
        }
        co_return reply;
    }

  private:
    bool carry_out(const Operation& operation, std::optional<std::uint32_t>& result) {
        if (const auto* read = std::get_if<Read>(&operation)) {
            result = seen(read->address);
        } else if (const auto* write = std::get_if<Write>(&operation)) {
            std::uint32_t& reg = value[write->address];
            reg = (reg & ~write->mask) | write->value;
            if (write->read_back) result = reg & write->mask;
        } else if (const auto* wait = std::get_if<WaitUntil>(&operation)) {
            std::uint32_t& reg = value[wait->address];
            const bool comes = locks || wait->address != status;
            reg = (reg & ~wait->mask) | (comes ? wait->value : ~wait->value & wait->mask);
            result = reg & wait->mask;
            return comes;
        }
        return true;
    }

    std::uint32_t seen(std::uint32_t address) {
        const std::uint32_t log2 = value[setup] & 0x3F;
        if (address == bits) return log2;
        if (address != errors) return value[address];
        const double offset_mv = 2.0 * (static_cast<int>(value[point] & 0x1FF) - 256);
        const double phase_ui = (static_cast<int>((value[point] >> 9) & 0x7F) - 64) / 64.0;
        const auto tail = [](double z) { return 0.5 * std::erfc(z / std::sqrt(2.0)); };
        const double ratio = std::min(
            0.5, tail((60 - std::abs(offset_mv)) / 4) + tail((0.4 - std::abs(phase_ui)) / 0.02));
        return static_cast<std::uint32_t>(std::min(std::ldexp(ratio, static_cast<int>(log2)), 1e7));
    }
};

}  // namespace lanewright::test
