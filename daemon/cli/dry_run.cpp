#include "daemon/cli/dry_run.hpp"

#include <algorithm>
#include <cstdio>
#include <nlohmann/json.hpp>

#include "daemon/cli/exit_codes.hpp"
#include "daemon/cli/terminal.hpp"
#include "daemon/store/value_json.hpp"
#include "daemon/views/run_json.hpp"

namespace lanewright {

namespace {

using json = nlohmann::ordered_json;

struct LanePreview {
    SavedLane saved;
    std::vector<Request> first_batch;
    double search_s = 0, compare_s = 0;  // declared bench time, at most
    double reading_s = 0;                // of one reading of the search
};

// Fields that the sequences write and that nothing can save: they clear themselves or cannot be
// read.
std::vector<FieldName> unsaved_fields(const BoardFile& board) {
    std::vector<FieldName> out;
    for (const Sequence* sequence : writing_sequences(board)) {
        for (const Step& step : *sequence) {
            const auto* write = std::get_if<WriteStep>(&step);
            if (write == nullptr) continue;
            const FieldDescription* field = board.map.find(write->field);
            const bool unsaved = field != nullptr && (field->access == Access::self_clearing ||
                                                      field->access == Access::write_only);
            if (unsaved && std::find(out.begin(), out.end(), write->field) == out.end()) {
                out.push_back(write->field);
            }
        }
    }
    return out;
}

struct Preview {
    Identity identity;
    std::vector<LanePreview> lanes;
    std::string pending_note;
};

Task<Preview> preview_of(LaneReader* lanes, const TuneRequest* request) {
    Preview out;
    auto identity = co_await lanes->identify();
    if (!identity) co_return identity.error();
    out.identity = std::move(*identity);
    for (const std::uint16_t lane : request->lanes) {
        auto saved = co_await lanes->save(Lane{lane});
        if (!saved) co_return saved.error();
        LanePreview entry;
        entry.saved = std::move(*saved);
        out.lanes.push_back(std::move(entry));
    }
    co_return out;
}

Task<Preview> preview(const BoardAtHand* at_hand, const TuneRequest* request, TimeSource* time) {
    auto board = co_await reach(at_hand->file, time);
    if (!board) co_return board.error();
    auto seen = co_await preview_of(&(*board)->lanes(), request);
    auto closed = co_await (*board)->close();
    if (seen && !closed) co_return closed.error();
    co_return seen;
}

// The first batch as the strategy would propose it from the present codes, and what the lane may
// cost: the budget, and four readings a round of comparison.
void fill_plans(Preview& preview, const TuneRequest& request) {
    for (LanePreview& lane : preview.lanes) {
        LaneSetup setup =
            lane_setup_of(request.board, request.recipe, lane.saved.lane, request.seed);
        const double each = cost_s(setup.problem.cost, Request{{}, {}, setup.problem.reading, {}});
        lane.reading_s = each;
        LaneMachine machine(std::move(setup));
        lane.first_batch = machine.first_batch(lane.saved);
        const BudgetChoice& budget = request.recipe.budget;
        const double by_readings = budget.standard_readings > 0
                                       ? budget.standard_readings * std::max(each, 0.0)
                                       : budget.bench_s;
        lane.search_s = budget.bench_s > 0 ? std::min(budget.bench_s, by_readings) : by_readings;
        lane.compare_s = 4.0 * request.recipe.verify_rounds * each;
    }
}

json field_json(const SavedField& field) {
    char address[16], mask[16];
    std::snprintf(address, sizeof address, "0x%04X", field.address);
    std::snprintf(mask, sizeof mask, "0x%X", field.mask);
    return {{"register", field.field.reg}, {"field", field.field.field},
            {"address", address},          {"mask", mask},
            {"present", field.value},      {"lowest", field.lowest},
            {"highest", field.highest}};
}

// Outside the lanes' budgets; less where the store knows what holds for the board.
double preflight_s(const Preview& preview) {
    return preview.lanes.empty()
               ? 0
               : preflight_cost_at_most_s(preview.lanes.front().reading_s, preview.lanes.size());
}

json preview_json(const Preview& preview, const TuneRequest& request) {
    const CodeSpace space = code_space_of(request.board);
    json lanes = json::array();
    double bench_s = 0;
    for (const LanePreview& lane : preview.lanes) {
        json fields = json::array(), batch = json::array();
        for (const SavedField& field : lane.saved.fields) fields.push_back(field_json(field));
        for (const Request& asked : lane.first_batch) {
            batch.push_back({{"codes", codes_json(space, asked.codes)}, {"why", asked.why}});
        }
        json unsaved = json::array();
        for (const FieldName& field : unsaved_fields(request.board))
            unsaved.push_back(field.text());
        lanes.push_back({{"lane", number(lane.saved.lane)},
                         {"may_write", std::move(fields)},
                         {"may_write_without_value", std::move(unsaved)},
                         {"first_batch", std::move(batch)},
                         {"bench_s_at_most", lane.search_s + lane.compare_s}});
        bench_s += lane.search_s + lane.compare_s;
    }
    json identity = json::object();
    for (const IdentityValue& value : preview.identity.values) identity[value.name] = value.value;
    return {{"format", "lanewright-dry-run/1"},
            {"board", request.board.name},
            {"simulated", preview.identity.simulated},
            {"identity", std::move(identity)},
            {"recipe", request.recipe.name},
            {"restore_pending",
             preview.pending_note.empty() ? json(nullptr) : json(preview.pending_note)},
            {"bench_s_at_most", bench_s},
            {"preflight_s_at_most", preflight_s(preview)},
            {"lanes", std::move(lanes)}};
}

// On one line where that is no wider than 80 columns, else on two.
void print_pair(const std::string& left, const std::string& right) {
    const bool fits = left.size() + 1 + right.size() <= 80;
    print(left + (fits ? " " : "\n      ") + right + "\n");
}

void print_field(const SavedField& field) {
    char left[160], right[80];
    std::snprintf(left, sizeof left, "  %-24s 0x%04X mask 0x%-8X", field.field.text().c_str(),
                  field.address, field.mask);
    std::snprintf(right, sizeof right, "now %u, limits %u..%u", field.value, field.lowest,
                  field.highest);
    print_pair(left, right);
}

void print_preview(const Preview& preview, const TuneRequest& request) {
    char line[160];
    print("dry run: nothing was written to board " + request.board.name +
          (preview.identity.simulated ? " (SIMULATED)" : "") + "\n");
    for (const IdentityValue& value : preview.identity.values) {
        std::snprintf(line, sizeof line, "  %-12s 0x%X\n", value.name.c_str(), value.value);
        print(line);
    }
    if (!preview.pending_note.empty()) {
        print("codes of an earlier run wait to be restored first: " + preview.pending_note + "\n");
    }
    double bench_s = 0;
    for (const LanePreview& lane : preview.lanes) {
        print("lane " + std::to_string(number(lane.saved.lane)) + " may write:\n");
        for (const SavedField& field : lane.saved.fields) print_field(field);
        for (const Request& asked : lane.first_batch) {
            print_pair("  first: " + codes_json(code_space_of(request.board), asked.codes).dump(),
                       asked.why);
        }
        bench_s += lane.search_s + lane.compare_s;
    }
    std::snprintf(line, sizeof line,
                  "bench time at most %.1f s over all lanes, %.1f s for the longest lane\n",
                  bench_s,
                  std::max_element(
                      preview.lanes.begin(), preview.lanes.end(),
                      [](const LanePreview& a, const LanePreview& b) {
                          return a.search_s + a.compare_s < b.search_s + b.compare_s;
                      })->search_s +
                      preview.lanes.front().compare_s);
    print(line);
    std::snprintf(line, sizeof line, "preflight at most %.1f s more, less where it is known\n",
                  preflight_s(preview));
    print(line);
    for (const FieldName& field : unsaved_fields(request.board)) {
        print("also written on each lane, has no value to keep: " + field.text() + "\n");
    }
}

}  // namespace

int dry_run(const BoardAtHand& at_hand, const TuneRequest& request, TimeSource& time,
            bool as_json) {
    auto seen = run_until_done(time, preview(&at_hand, &request, &time));
    if (!seen) return report(seen.error(), as_json);
    auto note = read_note(at_hand.endpoint.note_path());
    if (!note) return report(note.error(), as_json);
    if (*note) seen->pending_note = at_hand.endpoint.note_path();
    fill_plans(*seen, request);
    if (as_json) {
        print(preview_json(*seen, request).dump(2) + "\n");
    } else {
        print_preview(*seen, request);
    }
    return exit_ok;
}

}  // namespace lanewright
