#include "drivers/board/identity.hpp"

#include <cstdio>
#include <utility>

#include "drivers/board/registers.hpp"

namespace lanewright {

namespace {

std::string hex(std::uint32_t value) {
    char text[16];
    std::snprintf(text, sizeof text, "0x%X", value);
    return text;
}

}  // namespace

IdentityCheck::IdentityCheck(const RegisterMap& map, IdentityDescription description)
    : map_(&map), description_(std::move(description)) {
    for (const IdentityExpectation& each : description_.expect) fields_.push_back(each.field);
    for (const IdentityReport& each : description_.report) fields_.push_back(each.field);
    if (description_.simulated) fields_.push_back(*description_.simulated);
}

Result<Batch> IdentityCheck::batch() const {
    Batch batch;
    for (const FieldName& field : fields_) {
        const Result<void> added = map_->read(batch, Lane{0}, field);
        if (!added) return added.error();
    }
    return batch;
}

Result<Identity> IdentityCheck::identity(const BatchReply& reply) const {
    const Result<Batch> asked = batch();
    if (!asked) return asked.error();
    const Result<void> whole = map_->check_reply(*asked, reply);
    if (!whole) {
        // A board without those registers is another board.
        Fault fault = whole.error();
        if (fault.cause == Cause::refused) fault.cause = Cause::wrong_board;
        return fault;
    }
    std::vector<std::uint32_t> values;
    for (std::size_t i = 0; i < fields_.size(); ++i) {
        const Result<FieldPlace> place = map_->place(Lane{0}, fields_[i]);
        if (!place) return place.error();
        values.push_back(place->value_in(reply.results[i].value_or(0)));
    }
    Identity out;
    std::size_t next = 0;
    for (const IdentityExpectation& each : description_.expect) {
        const std::uint32_t found = values[next++];
        if (found != each.equals) {
            Fault fault;
            fault.cause = Cause::wrong_board;
            fault.what = "this is another board: " + each.name + " is " + hex(found) +
                         ", the board file expects " + hex(each.equals);
            fault.reg = each.field.text();
            fault.hint = "Check the link, and which board file belongs to this board";
            return fault;
        }
        out.values.push_back({each.name, found});
    }
    for (const IdentityReport& each : description_.report) {
        out.values.push_back({each.name, values[next++]});
    }
    if (description_.simulated) out.simulated = values[next] != 0;
    return out;
}

}  // namespace lanewright
