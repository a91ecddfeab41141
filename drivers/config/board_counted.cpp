// What a counted monitor's section says beside that of every monitor.

#include <algorithm>
#include <bit>
#include <cstdint>
#include <string>
#include <utility>

#include "drivers/config/board_parts.hpp"

namespace lanewright {

namespace {

constexpr std::int64_t most_dwell_bits = std::int64_t{1} << 62;

const std::vector<std::string_view> look_results = {"errors", "saturated", "bits", "bits_high",
                                                    "bits_log2"};
const std::vector<std::string_view> origin_results = {"offset", "phase"};

StepSize decode_scale(const Object& object, std::string_view step_key, std::string_view sigma_key) {
    StepSize size;
    size.size = object.number(step_key, {.above = 0});
    size.tolerance = object.number_or("tolerance", 0, {.at_least = 0, .at_most = 1});
    size.centre = static_cast<std::int32_t>(object.integer("centre", {0, 0x7FFFFFFF}));
    size.most_steps = static_cast<std::int32_t>(object.integer("most_steps", {1, 0x7FFFFFFF}));
    size.sigma = object.number_or(sigma_key, 0, {.at_least = 0});
    size.nonlinearity_steps =
        object.number_or("nonlinearity_steps", 0, {.at_least = 0, .at_most = 1000});
    object.finish();
    return size;
}

// The step that writes the parameter; null where none does.
const WriteStep* writes(const Sequence& sequence, Parameter parameter) {
    for (const Step& step : sequence) {
        const auto* write = std::get_if<WriteStep>(&step);
        if (write != nullptr && write->value == Operand(parameter)) return write;
    }
    return nullptr;
}

void check_look(const List& list, const Sequence& look) {
    check_value_names(list, look, look_results);
    const auto lacks = [&list](const char* found, const char* expected, const char* hint = "") {
        list.node().complain(found, expected, hint);
    };
    if (writes(look, Parameter::offset_code) == nullptr)
        lacks("a look whose offset is never written", "a write of offset_code");
    if (writes(look, Parameter::phase_code) == nullptr)
        lacks("a look whose phase is never written", "a write of phase_code");
    if (writes(look, Parameter::dwell_log2) == nullptr &&
        writes(look, Parameter::dwell_bits_low) == nullptr)
        lacks("a look whose dwell is never written", "a write of dwell_log2 or dwell_bits_low");
    if (!makes(look, "errors")) lacks("a look that reads no errors", "a read as errors");
    if (makes(look, "bits") && makes(look, "bits_log2"))
        lacks("the bits counted read twice", "one of bits and bits_log2");
    if (makes(look, "bits_high") && !makes(look, "bits"))
        lacks("bits_high without bits", "both, or bits alone");
}

// All codes within reach of the centre must fit into the field that takes them.
void check_reach(const Object& object, const StepSize& size, const Sequence& look,
                 Parameter parameter, const RegisterMapDescription& map) {
    const WriteStep* write = writes(look, parameter);
    const FieldDescription* field = write != nullptr ? map.find(write->field) : nullptr;
    if (field == nullptr || size.most_steps <= 0) return;
    const std::int64_t lowest = field->lowest_allowed(), highest = field->highest_allowed();
    const std::int64_t centre = size.centre, reach = size.most_steps;
    if (centre < lowest || centre > highest) {
        object.need("centre").complain(
            std::to_string(centre), "a code of " + write->field.text() + ", " +
                                        std::to_string(lowest) + " to " + std::to_string(highest));
        return;
    }
    const std::int64_t room = std::min(centre - lowest, highest - centre);
    if (reach > room)
        object.need("most_steps")
            .complain(std::to_string(reach),
                      "at most " + std::to_string(room) + ", so that " + write->field.text() +
                          " can hold every code to either side of " + std::to_string(centre));
}

void check_bits(const Object& object, CountedDescription& counted,
                const RegisterMapDescription& map) {
    if (counted.most_bits < counted.least_bits)
        object.need("most_bits")
            .complain(std::to_string(counted.most_bits),
                      "at least least_bits, " + std::to_string(counted.least_bits));
    const WriteStep* write = writes(counted.look, Parameter::dwell_log2);
    counted.bits_by_powers_of_two = write != nullptr;
    if (write == nullptr) return;
    const FieldDescription* field = map.find(write->field);
    if (field == nullptr) return;
    for (const char* key : {"least_bits", "most_bits"}) {
        const std::uint64_t bits = key[0] == 'l' ? counted.least_bits : counted.most_bits;
        if (bits == 0) continue;  // complained of already
        const auto log2 = static_cast<std::uint32_t>(std::bit_width(bits) - 1);
        if (std::has_single_bit(bits) && log2 >= field->lowest_allowed() &&
            log2 <= field->highest_allowed())
            continue;
        object.need(key).complain(std::to_string(bits),
                                  "a power of two from 2^" +
                                      std::to_string(field->lowest_allowed()) + " to 2^" +
                                      std::to_string(field->highest_allowed()) + ", as " +
                                      write->field.text() + " takes it");
    }
}

void check_counter(const Object& object, const CountedDescription& counted,
                   const RegisterMapDescription& map) {
    for (const Step& step : counted.look) {
        const auto* read = std::get_if<ReadStep>(&step);
        if (read == nullptr || read->as != "errors" || map.find(read->field) == nullptr) continue;
        const std::uint32_t largest = largest_value(map, read->field);
        if (counted.most_errors <= largest) continue;
        object.need("most_errors")
            .complain(std::to_string(counted.most_errors), "at most " + std::to_string(largest) +
                                                               ", all that " + read->field.text() +
                                                               " can hold");
    }
}

void decode_origin(const Object& monitor, BoardFile& board) {
    OriginDescription& origin = board.monitor.counted.origin;
    const Object object = monitor.object("origin");
    if (!object.node().is_object()) return;
    const bool read = object.has("sequence");
    if (read) {
        const List list = object.list("sequence");
        origin.sequence = decode_sequence(list, SequenceKind::origin, board.map);
        if (list.node().is_list()) {
            check_value_names(list, origin.sequence, origin_results);
            if (!makes(origin.sequence, "offset") || !makes(origin.sequence, "phase"))
                list.node().complain("a sequence that does not read both",
                                     "reads as offset and as phase");
        }
    }
    // A code that was read is known to half a step; where nothing is read somebody must say.
    const auto tolerance = [&](std::string_view key, double step) {
        constexpr NumberRange range{.at_least = 0, .at_most = 1e6};
        return read ? object.number_or(key, 0.5 * step, range) : object.number(key, range);
    };
    origin.tolerance_mv = tolerance("tolerance_mv", board.monitor.height.size);
    origin.tolerance_ui = tolerance("tolerance_ui", board.monitor.width.size);
    object.finish();
}

}  // namespace

void decode_counted(const Object& object, BoardFile& board) {
    MonitorDescription& monitor = board.monitor;
    CountedDescription& counted = monitor.counted;
    const Object offset = object.object("offset");
    const Object phase = object.object("phase");
    monitor.height = decode_scale(offset, "step_mv", "sigma_mv");
    monitor.width = decode_scale(phase, "step_ui", "sigma_ui");
    counted.least_bits =
        static_cast<std::uint64_t>(object.integer("least_bits", {1, most_dwell_bits}));
    counted.most_bits =
        static_cast<std::uint64_t>(object.integer("most_bits", {1, most_dwell_bits}));
    counted.most_errors =
        static_cast<std::uint64_t>(object.integer_or("most_errors", 0, {0, 0xFFFFFFFF}));
    counted.looks_a_batch = static_cast<std::uint32_t>(
        object.integer_or("looks_a_batch", counted.looks_a_batch, {1, 1000}));
    counted.most_looks =
        static_cast<std::uint32_t>(object.integer_or("most_looks", counted.most_looks, {4, 10000}));
    counted.begin = decode_sequence(object.list_or_empty("begin"), SequenceKind::begin, board.map);
    const List look = object.list("look");
    counted.look = decode_sequence(look, SequenceKind::look, board.map);
    if (look.node().is_list()) check_look(look, counted.look);
    check_reach(offset, monitor.height, counted.look, Parameter::offset_code, board.map);
    check_reach(phase, monitor.width, counted.look, Parameter::phase_code, board.map);
    check_bits(object, counted, board.map);
    check_counter(object, counted, board.map);
    decode_origin(object, board);
}

}  // namespace lanewright
