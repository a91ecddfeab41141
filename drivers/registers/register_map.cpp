#include "drivers/registers/register_map.hpp"

#include <algorithm>
#include <cstdio>
#include <limits>
#include <type_traits>
#include <utility>

namespace lanewright {

namespace {

constexpr std::chrono::microseconds longest_time{std::numeric_limits<std::uint32_t>::max()};

std::string hex(std::uint32_t value) {
    char text[16];
    std::snprintf(text, sizeof text, "0x%X", value);
    return text;
}

std::uint32_t all_bits(unsigned width_bits) {
    return width_bits >= 32 ? 0xFFFFFFFFu : (1u << width_bits) - 1u;
}

const char* role_name(Role role) {
    switch (role) {
        case Role::none:
            return "none";
        case Role::tuned:
            return "tuned";
        case Role::control:
            return "control";
        case Role::scratch:
            return "scratch";
    }
    return "none";
}

struct Target {
    std::uint32_t address = 0, mask = 0, value = 0;
};

Target target_of(const Operation& operation) {
    return std::visit(
        [](const auto& each) -> Target {
            using Kind = std::decay_t<decltype(each)>;
            if constexpr (std::is_same_v<Kind, Pause>) {
                return {};
            } else if constexpr (std::is_same_v<Kind, Read>) {
                return {each.address, all_bits(each.width_bits), 0};
            } else {
                return {each.address, each.mask, each.value};
            }
        },
        operation);
}

}  // namespace

Fault not_allowed(std::string what, std::string reg, std::optional<Lane> lane) {
    Fault fault;
    fault.cause = Cause::not_allowed;
    fault.what = std::move(what);
    fault.reg = std::move(reg);
    fault.lane = lane;
    return fault;
}

RegisterMap::RegisterMap(const BoardFile& board) : description_(board.map), strobe_(board.strobe) {
    for (const DimensionDescription& dimension : board.dimensions) {
        dimensions_.push_back(dimension.field);
        dimension_names_.push_back(dimension.name);
    }
    note_addresses();
    for (const Sequence* sequence : writing_sequences(board)) note_declared(*sequence);
    note_forbidden(board);
}

void RegisterMap::note_addresses() {
    for (std::size_t i = 0; i < description_.registers.size(); ++i) {
        const RegisterDescription& reg = description_.registers[i];
        if (!reg.per_lane) {
            owner_of_address_[reg.address] = {i, std::nullopt};
            continue;
        }
        for (std::uint32_t lane = 0; lane < description_.lane_count; ++lane) {
            const std::uint32_t block = description_.lane_base + lane * description_.lane_stride;
            owner_of_address_[block + reg.address] = {
                i, static_cast<Lane>(static_cast<std::uint16_t>(lane))};
        }
    }
}

void RegisterMap::note_declared(const Sequence& sequence) {
    for (const Step& step : sequence) {
        if (const auto* write = std::get_if<WriteStep>(&step)) declared_.insert(write->field);
    }
}

Result<FieldPlace> RegisterMap::place(Lane lane, const FieldName& name) const {
    const RegisterDescription* reg = description_.find(name.reg);
    const FieldDescription* field = description_.find(name);
    if (reg == nullptr || field == nullptr) {
        return not_allowed("the register map has no field " + name.text(), name.text(),
                           std::nullopt);
    }
    FieldPlace place{reg->address, field->mask(), field->low_bit, reg->width_bits};
    if (reg->per_lane) {
        if (number(lane) >= description_.lane_count) {
            return not_allowed("the board has no lane " + std::to_string(number(lane)) +
                                   ", only 0 to " + std::to_string(description_.lane_count - 1),
                               name.text(), lane);
        }
        place.address += description_.lane_base + number(lane) * description_.lane_stride;
    }
    return place;
}

Result<void> RegisterMap::read(Batch& batch, Lane lane, const FieldName& name) const {
    const Result<FieldPlace> at = place(lane, name);
    if (!at) return at.error();
    if (find(name)->access == Access::write_only) {
        return not_allowed(name.text() + " is write-only: it cannot be read", name.text(), lane);
    }
    batch.operations_.push_back(Read{at->address, at->width_bits});
    return {};
}

Result<void> RegisterMap::check_limits(Lane lane, const FieldName& name,
                                       const FieldDescription& field, std::int64_t value) const {
    const std::int64_t lowest = field.lowest_allowed(), highest = field.highest_allowed();
    if (value >= lowest && value <= highest) return {};
    return not_allowed(name.text() + " = " + std::to_string(value) + " is outside its limits " +
                           std::to_string(lowest) + " to " + std::to_string(highest),
                       name.text(), lane);
}

void RegisterMap::add_write(Batch& batch, const FieldPlace& place, const FieldDescription& field,
                            std::uint32_t value) const {
    Write write;
    write.address = place.address;
    write.mask = place.mask;
    write.value = (value << place.shift) & place.mask;
    write.width_bits = place.width_bits;
    write.read_back = field.access == Access::read_write;
    batch.operations_.push_back(write);
    if (field.access == Access::self_clearing) batch.repeatable_ = false;
}

Result<void> RegisterMap::write_declared(Batch& batch, Lane lane, const FieldName& name,
                                         std::uint32_t value) const {
    const Result<FieldPlace> at = place(lane, name);
    if (!at) return at.error();
    const FieldDescription& field = *find(name);
    const bool declared = field.role == Role::control && declared_.contains(name);
    if ((!declared && field.role != Role::scratch) || field.access == Access::read_only) {
        return not_allowed(
            name.text() + " may not be written: its role is " + role_name(field.role) +
                (field.role == Role::control ? " and no sequence of the board file writes it" : ""),
            name.text(), lane);
    }
    if (const Result<void> limits = check_limits(lane, name, field, value); !limits) return limits;
    add_write(batch, *at, field, value);
    return {};
}

Result<void> RegisterMap::write_joined(Batch& batch, Lane lane, const FieldName& name,
                                       std::uint32_t value) const {
    const std::size_t before = batch.size();
    const Result<void> added = write_declared(batch, lane, name, value);
    if (!added || before == 0) return added;
    auto* last = std::get_if<Write>(&batch.operations_[before - 1]);
    const auto& own = std::get<Write>(batch.operations_[before]);
    const bool joins = last != nullptr && last->address == own.address && last->read_back &&
                       own.read_back && (last->mask & own.mask) == 0;
    if (!joins) return added;
    last->mask |= own.mask;
    last->value |= own.value;
    batch.operations_.pop_back();
    return added;
}

Result<void> RegisterMap::wait_until(Batch& batch, Lane lane, const FieldName& name,
                                     std::uint32_t value, std::chrono::microseconds timeout) const {
    const Result<FieldPlace> at = place(lane, name);
    if (!at) return at.error();
    const FieldPlace& there = at.value();
    if (find(name)->access == Access::write_only) {
        return not_allowed(name.text() + " is write-only: nothing can wait for it", name.text(),
                           lane);
    }
    if (value > (there.mask >> there.shift)) {
        return not_allowed(name.text() + " never holds " + std::to_string(value) + ": at most " +
                               std::to_string(there.mask >> there.shift),
                           name.text(), lane);
    }
    if (timeout.count() < 0 || timeout > longest_time) {
        return not_allowed("a wait for " + name.text() + " of " + std::to_string(timeout.count()) +
                               " us is outside 0 to " + std::to_string(longest_time.count()) +
                               " us",
                           name.text(), lane);
    }
    batch.operations_.push_back(
        WaitUntil{there.address, there.mask, value << there.shift, there.width_bits, timeout});
    return {};
}

Result<void> RegisterMap::pause(Batch& batch, std::chrono::microseconds time) const {
    if (time.count() < 0 || time > longest_time) {
        return not_allowed("a pause of " + std::to_string(time.count()) + " us is outside 0 to " +
                               std::to_string(longest_time.count()) + " us",
                           {}, std::nullopt);
    }
    batch.operations_.push_back(Pause{time});
    return {};
}

Batch RegisterMap::part_of(const Batch& batch, std::size_t first, std::size_t count) {
    Batch part;
    for (const Operation& operation : batch.operations().subspan(first, count)) {
        part.operations_.push_back(operation);
        const auto* write = std::get_if<Write>(&operation);
        if (write != nullptr && !write->read_back && !batch.repeatable()) part.repeatable_ = false;
    }
    return part;
}

std::string RegisterMap::name_at(std::uint32_t address, std::uint32_t mask) const {
    const auto found = owner_of_address_.find(address);
    if (found == owner_of_address_.end()) return hex(address);
    const RegisterDescription& reg = description_.registers[found->second.reg];
    for (const FieldDescription& field : reg.fields) {
        if (field.mask() == mask) return reg.name + "." + field.name;
    }
    return reg.name;
}

std::optional<Lane> RegisterMap::lane_at(std::uint32_t address) const {
    const auto found = owner_of_address_.find(address);
    return found == owner_of_address_.end() ? std::nullopt : found->second.lane;
}

Fault RegisterMap::fault_at(const Operation& operation, std::optional<std::uint32_t> result,
                            Outcome outcome) const {
    const Target target = target_of(operation);
    Fault fault;
    fault.reg = name_at(target.address, target.mask);
    fault.lane = lane_at(target.address);
    const std::string seen = result ? hex(*result) : std::string("nothing");
    const std::string where = fault.reg + " at " + hex(target.address);
    fault.cause = Cause::refused;
    switch (outcome) {
        case Outcome::not_as_written:
            fault.cause = Cause::not_accepted;
            fault.what = fault.reg + " was written as " + hex(target.value) + " and read back as " +
                         seen + " (mask " + hex(target.mask) + ")";
            fault.hint =
                "Check the field's bits and access in the board file, and whether "
                "something else writes the register";
            break;
        case Outcome::wait_expired:
            fault.cause = Cause::wait_expired;
            fault.what = where + " did not become " + hex(target.value) + " in time, it was " +
                         seen + " (mask " + hex(target.mask) + ")";
            break;
        case Outcome::no_register:
            fault.what = "the board has no register " + where;
            break;
        case Outcome::no_access:
            fault.what = "the board does not allow that access to " + where;
            break;
        case Outcome::beyond_width:
            fault.what = "value or mask has bits that the board's register lacks: " + where;
            fault.hint = "Check the register's width in the board file";
            break;
        case Outcome::bus_error:
            fault.what = "the board could not reach " + where;
            break;
        case Outcome::done:
            fault.what = "the reply lacks the result of " + where;
            break;
    }
    return fault;
}

Result<void> RegisterMap::check_reply(const Batch& batch, const BatchReply& reply) const {
    const auto operations = batch.operations();
    const std::size_t begun = reply.outcome == Outcome::done ? operations.size() : reply.failed_at;
    for (std::size_t i = 0; i < std::min(begun, operations.size()); ++i) {
        const std::optional<std::uint32_t> result =
            i < reply.results.size() ? reply.results[i] : std::nullopt;
        if (has_result(operations[i]) && !result) {
            return fault_at(operations[i], result, Outcome::done);
        }
        // The board compares as well; a board or dialect that does not is caught here.
        const auto* write = std::get_if<Write>(&operations[i]);
        if (write != nullptr && write->read_back && (*result & write->mask) != write->value) {
            return fault_at(operations[i], result, Outcome::not_as_written);
        }
    }
    if (reply.outcome == Outcome::done) return {};
    if (reply.failed_at >= operations.size()) {
        Fault fault;
        fault.cause = Cause::refused;
        fault.what = "the board says that operation " + std::to_string(reply.failed_at) + " of " +
                     std::to_string(operations.size()) + " failed";
        return fault;
    }
    const std::optional<std::uint32_t> seen =
        reply.failed_at < reply.results.size() ? reply.results[reply.failed_at] : std::nullopt;
    return fault_at(operations[reply.failed_at], seen, reply.outcome);
}

}  // namespace lanewright
