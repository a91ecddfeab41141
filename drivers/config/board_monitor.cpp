#include <algorithm>
#include <array>
#include <cstdint>
#include <set>
#include <utility>

#include "drivers/config/board_parts.hpp"

namespace lanewright {

namespace {

const std::vector<std::string_view> result_names = {"up",     "down",  "left",  "right",
                                                    "height", "width", "closed"};

StepSize decode_step_size(const Object& object, std::string_view step_key,
                          std::string_view sigma_key) {
    StepSize size;
    size.size = object.number(step_key, {.above = 0});
    size.tolerance = object.number_or("tolerance", 0, {.at_least = 0, .at_most = 1});
    size.most_steps = static_cast<std::int32_t>(object.integer("most_steps", {1, 0x7FFFFFFF}));
    size.sigma = object.number_or(sigma_key, 0, {.at_least = 0});
    object.finish();
    return size;
}

void decode_groups(const Object& monitor, BoardFile& board) {
    std::set<std::uint16_t> seen;
    for (const Node group_node : monitor.list_or_empty("shared_by")) {
        std::vector<std::uint16_t> group;
        for (const Node node : group_node.list()) {
            const auto lane = static_cast<std::uint16_t>(node.integer({0, 65535}));
            if (!node.is_number()) continue;
            if (lane >= board.map.lane_count)
                node.complain(node.described(),
                              "a lane from 0 to " + std::to_string(board.map.lane_count - 1));
            else if (!seen.insert(lane).second)
                node.complain("lane " + std::to_string(lane) + " a second time",
                              "each lane in one group at most");
            group.push_back(lane);
        }
        if (group_node.is_list() && group.size() < 2)
            group_node.complain(group_node.described(), "the lanes that share one monitor",
                                "lanes that are not listed have one of their own");
        board.monitor.shared_by.push_back(std::move(group));
    }
}

void check_results(const List& list, BoardFile& board) {
    const Sequence& sequence = board.monitor.sequence;
    check_value_names(list, sequence, result_names);
    int edges = 0, sizes = 0;
    for (const char* name : {"up", "down", "left", "right"}) edges += makes(sequence, name) ? 1 : 0;
    for (const char* name : {"height", "width"}) sizes += makes(sequence, name) ? 1 : 0;
    board.monitor.four_edges = edges == 4;
    if ((edges == 4 && sizes == 0) || (edges == 0 && sizes == 2)) return;
    std::string found;
    for (const char* name : {"up", "down", "left", "right", "height", "width"}) {
        if (makes(sequence, name)) found += (found.empty() ? "only " : ", ") + std::string(name);
    }
    if (edges > 0 && sizes > 0) found.replace(0, 5, "both kinds, ");
    list.node().complain(found.empty() ? "a sequence that reads no margin" : found,
                         "reads as up, down, left and right, or as height and width");
}

// The top of a counter that is read in one piece must fit into its field.
void check_most_steps(const Object& object, const StepSize& size, const BoardFile& board,
                      const std::vector<std::string_view>& names) {
    for (const Step& step : board.monitor.sequence) {
        const auto* read = std::get_if<ReadStep>(&step);
        if (read == nullptr || board.map.find(read->field) == nullptr) continue;
        if (std::find(names.begin(), names.end(), read->as) == names.end()) continue;
        const std::uint32_t largest = largest_value(board.map, read->field);
        if (size.most_steps <= 0 || static_cast<std::uint32_t>(size.most_steps) <= largest)
            continue;
        const Node node = object.need("most_steps");
        node.complain(node.described(), "at most " + std::to_string(largest) + ", all that " +
                                            read->field.text() + " can hold");
        return;
    }
}

void decode_latched(const Object& object, BoardFile& board) {
    MonitorDescription& monitor = board.monitor;
    const Object height = object.object("height");
    const Object width = object.object("width");
    monitor.height = decode_step_size(height, "step_mv", "sigma_mv");
    monitor.width = decode_step_size(width, "step_ui", "sigma_ui");
    monitor.lowest_error_ratio = object.number("lowest_error_ratio", {.at_most = 0.5, .above = 0});
    const List sequence = object.list("sequence");
    monitor.sequence = decode_sequence(sequence, SequenceKind::monitor, board.map);
    if (sequence.node().is_list()) check_results(sequence, board);
    check_most_steps(height, monitor.height, board, {"up", "down", "height"});
    check_most_steps(width, monitor.width, board, {"left", "right", "width"});
}

}  // namespace

bool makes(const Sequence& sequence, std::string_view name) {
    return std::any_of(sequence.begin(), sequence.end(), [name](const Step& step) {
        if (const auto* read = std::get_if<ReadStep>(&step)) return read->as == name;
        if (const auto* combine = std::get_if<CombineStep>(&step)) return combine->as == name;
        return false;
    });
}

void check_value_names(const List& list, const Sequence& sequence,
                       const std::vector<std::string_view>& known) {
    std::set<std::string> used;
    for (const Step& step : sequence) {
        if (const auto* combine = std::get_if<CombineStep>(&step))
            used.insert({combine->high, combine->low});
    }
    for (const Node node : list) {
        if (!node.is_object()) continue;
        const auto as = node.object().find("as");
        if (!as || !as->is_text() || as->text().empty()) continue;
        if (!used.contains(as->text())) as->word(known);
    }
}

void decode_monitor(const Object& object, BoardFile& board) {
    MonitorDescription& monitor = board.monitor;
    monitor.procedure =
        static_cast<MonitorProcedure>(object.word("procedure", {"latched", "counted"}));
    constexpr std::array<std::string_view, 2> definitions = {"pattern", "decision"};
    monitor.error_definition =
        definitions[object.word("error_definition", {definitions[0], definitions[1]})];
    monitor.pattern = object.text_or("pattern", "");
    decode_groups(object, board);
    if (monitor.procedure == MonitorProcedure::counted)
        decode_counted(object, board);
    else
        decode_latched(object, board);
    object.finish();
}

}  // namespace lanewright
