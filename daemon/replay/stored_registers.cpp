#include "daemon/replay/stored_registers.hpp"

#include <cstdio>
#include <utility>

#include "drivers/board/wire_record.hpp"

namespace lanewright {

namespace {

std::string hex(std::uint32_t value) {
    char text[16];
    std::snprintf(text, sizeof text, "0x%X", value);
    return text;
}

const char* name_of(WireOperation::Kind kind) {
    switch (kind) {
        case WireOperation::Kind::read:
            return "read";
        case WireOperation::Kind::write:
            return "write";
        case WireOperation::Kind::wait_until:
            return "wait until";
        case WireOperation::Kind::pause:
            break;
    }
    return "pause";
}

// The operation as a record would hold it, without results.
WireOperation as_recorded(const Batch& batch, std::size_t index) {
    BatchReply nothing;
    nothing.results.resize(batch.size());
    return wire_record(batch, nothing)[index];
}

bool same_operation(const WireOperation& one, const WireOperation& other) {
    return one.kind == other.kind && one.address == other.address && one.mask == other.mask &&
           one.value == other.value;
}

bool wants_read_back(const Operation& operation) {
    const auto* write = std::get_if<Write>(&operation);
    return write != nullptr && write->read_back;
}

}  // namespace

std::string described(const RegisterMap& map, const WireOperation& operation) {
    const std::string kind = name_of(operation.kind);
    if (operation.kind == WireOperation::Kind::pause) {
        return kind + " " + std::to_string(operation.value) + " us";
    }
    std::string text = kind + " " + map.name_at(operation.address, operation.mask) + " at " +
                       hex(operation.address) + " mask " + hex(operation.mask);
    if (operation.kind != WireOperation::Kind::read) text += " value " + hex(operation.value);
    return text;
}

StoredRegisters::StoredRegisters(const RegisterMap& map, std::vector<WireOperation> record,
                                 std::optional<Codes> standing, std::vector<FieldName> dimensions,
                                 std::optional<SentinelRecord> sentinel)
    : map_(map),
      record_(std::move(record)),
      standing_(std::move(standing)),
      dimensions_(std::move(dimensions)),
      sentinel_(std::move(sentinel)) {}

bool StoredRegisters::fits(const Batch&, std::string&) const {
    return true;
}

std::chrono::nanoseconds StoredRegisters::longest(const Batch& batch) const {
    return batch.longest();
}

Fault StoredRegisters::differs(std::string reg, std::string expected, std::string found) {
    Fault fault;
    fault.cause = Cause::diverged;
    fault.what = "operation " + std::to_string(next_) + " is not the recorded one";
    fault.reg = reg;
    difference_ = {next_, std::move(reg), std::move(expected), std::move(found)};
    return fault;
}

// A chip without a strobe is asked for its codes before it is given others; the record begins with
// what is written then.
std::optional<BatchReply> StoredRegisters::standing_codes(Lane lane, const Batch& batch) const {
    if (map_.has_strobe() || next_ > 0 || !standing_ || batch.size() != dimensions_.size() ||
        standing_->value.size() != dimensions_.size()) {
        return std::nullopt;
    }
    BatchReply reply;
    for (std::size_t i = 0; i < batch.size(); ++i) {
        const auto* read = std::get_if<Read>(&batch.operations()[i]);
        const Result<FieldPlace> place = map_.place(lane, dimensions_[i]);
        if (read == nullptr || !place || place->address != read->address) return std::nullopt;
        reply.results.emplace_back(
            (static_cast<std::uint32_t>(standing_->value[i]) << place->shift) & place->mask);
    }
    return reply;
}

// Over the operations on the sentinel that the program at hand does not ask for; false where one of
// them holds what no session plants.
bool StoredRegisters::pass_sentinel(const WireOperation* wanted) {
    for (; sentinel_ && next_ < record_.size(); ++next_) {
        const WireOperation& recorded = record_[next_];
        const bool write = recorded.kind == WireOperation::Kind::write;
        const bool watches =
            recorded.address == sentinel_->address &&
            (write ? recorded.mask == sentinel_->mask : recorded.kind == WireOperation::Kind::read);
        if (!watches || (wanted != nullptr && same_operation(*wanted, recorded))) break;
        const std::uint32_t value = (write ? recorded.value : recorded.result) & sentinel_->mask;
        if (write) planted_ = value;
        if (sentinel_->values.contains(value) && value == planted_.value_or(value)) continue;
        differs(map_.name_at(sentinel_->address, sentinel_->mask),
                planted_ ? hex(*planted_) : "a value that is planted there", hex(value));
        return false;
    }
    return true;
}

void StoredRegisters::end() {
    if (!difference_) pass_sentinel(nullptr);
}

// Puts the recorded result of one operation into the reply; false where the batch ends with it.
bool StoredRegisters::answer(const Operation& operation, BatchReply& reply, std::size_t index) {
    const WireOperation& recorded = record_[next_];
    if (has_result(operation)) reply.results[index] = recorded.result;
    if (!recorded.expired) return true;
    reply.outcome = Outcome::wait_expired;
    reply.failed_at = index;
    return false;
}

Task<BatchReply> StoredRegisters::run(Lane lane, Batch batch, TimePoint) {
    if (std::optional<BatchReply> standing = standing_codes(lane, batch)) {
        co_return std::move(*standing);
    }
    BatchReply reply;
    reply.results.resize(batch.size());
    for (std::size_t i = 0; i < batch.size(); ++i, ++next_) {
        const Operation& operation = batch.operations()[i];
        const WireOperation wanted = as_recorded(batch, i);
        const std::string reg = wanted.kind == WireOperation::Kind::pause
                                    ? std::string()
                                    : map_.name_at(wanted.address, wanted.mask);
        if (!pass_sentinel(&wanted)) {
            Fault fault;
            fault.cause = Cause::diverged;
            co_return fault;
        }
        if (next_ >= record_.size()) {
            co_return differs(reg, described(map_, wanted), "the end of the record");
        }
        const WireOperation& recorded = record_[next_];
        if (!same_operation(wanted, recorded)) {
            co_return differs(reg, described(map_, wanted), described(map_, recorded));
        }
        const std::uint32_t seen = recorded.result & recorded.mask;
        if (wants_read_back(operation) != recorded.read_back) {
            co_return differs(reg, wants_read_back(operation) ? "a read-back" : "no read-back",
                              recorded.read_back ? "a read-back" : "no read-back");
        }
        if (recorded.read_back && seen != recorded.value) {
            co_return differs(reg, hex(recorded.value) + " read back", hex(recorded.result));
        }
        if (wanted.kind == WireOperation::Kind::wait_until &&
            (seen == recorded.value) == recorded.expired) {
            co_return differs(reg,
                              recorded.expired ? "another value than " + hex(recorded.value) +
                                                     " where the wait expired"
                                               : hex(recorded.value) + " where the wait ended",
                              hex(recorded.result));
        }
        if (!answer(operation, reply, i)) {
            ++next_;
            break;
        }
    }
    co_return reply;
}

}  // namespace lanewright
