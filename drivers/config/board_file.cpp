#include "drivers/config/board_file.hpp"

#include <algorithm>
#include <cstdint>
#include <set>
#include <utility>

#include "drivers/config/board_parts.hpp"

namespace lanewright {

namespace {

void decode_dialect(const Object& object, const std::vector<std::string_view>& known,
                    DialectDescription& dialect) {
    const std::size_t index = object.word("name", known);
    if (index < known.size()) dialect.name = known[index];
    dialect.deadline_ms = object.number("deadline_ms", {.at_most = 600e3, .above = 0});
    dialect.attempts = static_cast<int>(object.integer("attempts", {1, 100}));
    dialect.patience_s =
        object.number_or("patience_s", dialect.patience_s, {.at_least = 0, .at_most = 86400});
    object.finish();
}

// A field of the whole board that says what the board is.
FieldName decode_identity_field(const Node& node, const RegisterMapDescription& map) {
    FieldName name = decode_readable_field(node, map);
    const RegisterDescription* reg = map.find(name.reg);
    if (reg != nullptr && reg->per_lane)
        node.complain(node.described() + ", one a lane", "a field of the whole board");
    return name;
}

void decode_identity(const Object& object, const RegisterMapDescription& map,
                     IdentityDescription& identity) {
    std::set<std::string> names;
    const auto decode_own_name = [&names](const Object& entry) {
        const Node node = entry.need("name");
        std::string name = decode_name(node);
        if (!name.empty() && !names.insert(name).second)
            node.complain("a second " + name, "each name once");
        return name;
    };
    const List expect = object.list("expect");
    if (expect.node().is_list() && expect.size() == 0)
        expect.node().complain("an empty list", "at least one value that tells this board",
                               "without it a wrong board would be written to");
    for (const Node node : expect) {
        const Object entry = node.object();
        IdentityExpectation one;
        one.name = decode_own_name(entry);
        one.field = decode_identity_field(entry.need("field"), map);
        one.equals =
            static_cast<std::uint32_t>(entry.integer("equals", {0, largest_value(map, one.field)}));
        entry.finish();
        identity.expect.push_back(std::move(one));
    }
    for (const Node node : object.list_or_empty("report")) {
        const Object entry = node.object();
        IdentityReport one;
        one.name = decode_own_name(entry);
        one.field = decode_identity_field(entry.need("field"), map);
        entry.finish();
        identity.report.push_back(std::move(one));
    }
    if (const auto simulated = object.find("simulated"))
        identity.simulated = decode_identity_field(*simulated, map);
    object.finish();
}

void decode_ordinal(const Object& top, BoardFile& board) {
    const auto node = top.find("ordinal");
    if (!node) return;
    board.ordinal = decode_scratch(*node, board.map);
    const RegisterDescription* reg = board.map.find(board.ordinal->reg);
    if (reg == nullptr) return;
    if (!reg->per_lane) node->complain(node->described(), "a field in a per-lane register");
    const bool counted = board.monitor.procedure == MonitorProcedure::counted;
    const Sequence& sequence = counted ? board.monitor.counted.begin : board.monitor.sequence;
    const bool written = std::any_of(sequence.begin(), sequence.end(), [&board](const Step& step) {
        const auto* write = std::get_if<WriteStep>(&step);
        return write != nullptr && write->field == *board.ordinal &&
               write->value == Operand(Parameter::ordinal);
    });
    if (!written)
        node->complain(node->described(), counted ? "a field to which begin writes ordinal"
                                                  : "a field to which the monitor's sequence "
                                                    "writes ordinal");
}

void decode_cost(const Object& object, CostDescription& cost) {
    cost.settle_s = object.number("settle_s", {.at_least = 0, .at_most = 3600});
    cost.per_look_s = object.number("per_look_s", {.at_least = 0, .at_most = 3600});
    cost.looks_per_margin = static_cast<std::uint32_t>(
        object.integer_or("looks_per_margin", cost.looks_per_margin, {1, 1000000}));
    object.finish();
}

void decode_expected_loss(const Object& top, BoardFile& board) {
    const auto node = top.find("expected_loss_db");
    if (!node) return;
    const List list = node->list();
    for (const Node entry_node : list) {
        const Object entry = entry_node.object();
        ExpectedLoss loss;
        loss.loss_db = entry.number("loss", {.at_least = 0, .at_most = 200});
        loss.tolerance_db = entry.number_or("tolerance", 0, {.at_least = 0, .at_most = 200});
        entry.finish();
        board.expected_loss.push_back(loss);
    }
    if (node->is_list() && list.size() != board.map.lane_count)
        node->complain(node->described(),
                       std::to_string(board.map.lane_count) + " entries, one for every lane");
}

// With a strobe the codes wait in the registers until a later write makes them take effect.
void check_strobe(const Object& top, const BoardFile& board) {
    if (!board.strobe) return;
    const auto codes = std::find_if(board.apply.begin(), board.apply.end(), [](const Step& step) {
        return std::holds_alternative<WriteCodesStep>(step);
    });
    if (codes == board.apply.end()) return;  // complained of already
    const bool written_after = std::any_of(codes, board.apply.end(), [](const Step& step) {
        return std::holds_alternative<WriteStep>(step);
    });
    if (written_after) return;
    const auto strobe = top.find("strobe");
    (strobe ? *strobe : top.node())
        .complain(strobe ? "true" : "strobe left at its default, true",
                  "a write after write_codes in the apply sequence",
                  "write false if each code takes effect as soon as it is written");
}

void decode_sequences(const Object& top, BoardFile& board) {
    const Object sequences = top.object("sequences");
    const List apply = sequences.list("apply");
    board.apply = decode_sequence(apply, SequenceKind::apply, board.map);
    board.bring_up =
        decode_sequence(sequences.list_or_empty("bring_up"), SequenceKind::bring_up, board.map);
    sequences.finish();
    board.strobe = top.boolean_or("strobe", true);
    if (board.apply.size() == apply.size()) check_strobe(top, board);
}

void decode_temperature(const Object& top, TemperatureCoefficients& temperature) {
    const auto object = top.object_if("temperature");
    if (!object) return;
    constexpr NumberRange range{.at_least = -100000, .at_most = 100000};
    temperature.resistor_ppm_per_k = object->number_or("resistor_ppm_per_k", 0, range);
    temperature.capacitor_ppm_per_k = object->number_or("capacitor_ppm_per_k", 0, range);
    object->finish();
}

}  // namespace

FieldName decode_scratch(const Node& node, const RegisterMapDescription& map) {
    FieldName name = decode_field_name(node, map);
    const FieldDescription* field = map.find(name);
    if (field != nullptr && field->role != Role::scratch)
        node.complain(node.described(), "a field of role scratch");
    return name;
}

std::optional<BoardFile> load_board_file(const std::string& path, Complaints& complaints,
                                         const std::vector<std::string_view>& dialects) {
    const auto document = Document::load(path, complaints);
    if (!document) return {};
    return decode_board_file(*document, complaints, dialects);
}

std::optional<BoardFile> decode_board_file(const Document& document, Complaints& complaints,
                                           const std::vector<std::string_view>& dialects) {
    BoardFile board;
    board.path = document.file_name();
    board.source = document.source();

    const Object top = document.root().object();
    top.word("format", {"lanewright-board/1"});
    const Node name = top.need("name");
    board.name = name.text();
    if (name.is_text() && board.name.empty()) name.complain("an empty name", "a name");
    board.description = top.text_or("description", "");
    board.link = decode_link(top.object("link"));
    decode_dialect(top.object("dialect"), dialects, board.dialect);
    board.map = decode_register_map(top);
    decode_identity(top.object("identity"), board.map, board.identity);
    board.scratch = decode_scratch(top.need("scratch"), board.map);
    board.bit_rate_gbps = top.number("bit_rate_gbps", {.at_most = 1000, .above = 0});
    decode_dimensions(top, board);
    decode_forbidden(top, board);
    decode_monitor(top.object("monitor"), board);
    decode_ordinal(top, board);
    decode_sentinel(top, board);
    decode_telemetry(top, board);
    decode_preflight(top, board);
    decode_sequences(top, board);
    decode_cost(top.object("cost"), board.cost);
    decode_temperature(top, board.temperature);
    decode_expected_loss(top, board);
    top.finish();

    if (complaints.any_of(board.path)) return {};
    return board;
}

std::vector<const Sequence*> writing_sequences(const BoardFile& board) {
    const CountedDescription& counted = board.monitor.counted;
    return {&board.apply,  &board.monitor.sequence, &counted.begin, &counted.origin.sequence,
            &counted.look, &board.bring_up};
}

std::vector<FieldName> fields_to_save(const BoardFile& board) {
    std::vector<FieldName> out;
    for (const DimensionDescription& dimension : board.dimensions) out.push_back(dimension.field);
    for (const Sequence* sequence : writing_sequences(board)) {
        for (const Step& step : *sequence) {
            const auto* write = std::get_if<WriteStep>(&step);
            if (write == nullptr) continue;
            const FieldDescription* field = board.map.find(write->field);
            if (field == nullptr || field->access != Access::read_write) continue;
            if (std::find(out.begin(), out.end(), write->field) == out.end())
                out.push_back(write->field);
        }
    }
    return out;
}

}  // namespace lanewright
