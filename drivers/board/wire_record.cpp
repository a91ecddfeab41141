#include "drivers/board/wire_record.hpp"

#include <algorithm>

namespace lanewright {

namespace {

std::uint32_t all_bits(unsigned width_bits) {
    return width_bits >= 32 ? 0xFFFFFFFFu : (1u << width_bits) - 1u;
}

struct Recorder {
    std::optional<std::uint32_t> result;
    bool expired = false;

    WireOperation operator()(const Read& read) const {
        WireOperation out;
        out.kind = WireOperation::Kind::read;
        out.address = read.address;
        out.mask = all_bits(read.width_bits);
        out.result = result.value_or(0);
        return out;
    }
    WireOperation operator()(const Write& write) const {
        WireOperation out;
        out.kind = WireOperation::Kind::write;
        out.address = write.address;
        out.mask = write.mask;
        out.value = write.value;
        out.result = result.value_or(0);
        out.read_back = result.has_value();
        return out;
    }
    WireOperation operator()(const WaitUntil& wait) const {
        WireOperation out;
        out.kind = WireOperation::Kind::wait_until;
        out.address = wait.address;
        out.mask = wait.mask;
        out.value = wait.value;
        out.result = result.value_or(0);
        out.expired = expired;
        return out;
    }
    WireOperation operator()(const Pause& pause) const {
        WireOperation out;
        out.kind = WireOperation::Kind::pause;
        out.value = static_cast<std::uint32_t>(pause.time.count());
        return out;
    }
};

}  // namespace

std::vector<WireOperation> wire_record(const Batch& batch, const BatchReply& reply) {
    const auto operations = batch.operations();
    const std::size_t begun = reply.outcome == Outcome::done
                                  ? operations.size()
                                  : std::min(reply.failed_at + 1, operations.size());
    std::vector<WireOperation> out;
    for (std::size_t i = 0; i < begun; ++i) {
        Recorder recorder;
        if (i < reply.results.size()) recorder.result = reply.results[i];
        recorder.expired = reply.outcome == Outcome::wait_expired && i == reply.failed_at;
        out.push_back(std::visit(recorder, operations[i]));
    }
    return out;
}

}  // namespace lanewright
