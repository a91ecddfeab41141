#include "daemon/store/value_json.hpp"

#include <nlohmann/json.hpp>

#include "daemon/store/words.hpp"

namespace lanewright {

using nlohmann::json;

namespace {

constexpr auto role_words = words<Role>({{Role::none, "none"},
                                         {Role::tuned, "tuned"},
                                         {Role::control, "control"},
                                         {Role::scratch, "scratch"}});

json look_json(const Look& look) {
    return json::array({look.phase_ui, look.offset_mv, look.bits});
}

Look look_from(const json& value) {
    return {value.at(0).get<double>(), value.at(1).get<double>(), value.at(2).get<std::uint64_t>()};
}

}  // namespace

json to_json_value(const Codes& codes) {
    return json(codes.value);
}

Codes codes_from(const json& value) {
    return {value.get<std::vector<std::int32_t>>()};
}

json to_json_value(const Request& request) {
    json out{{"codes", to_json_value(request.codes)},
             {"condition", static_cast<std::uint16_t>(request.condition)},
             {"why", request.why}};
    if (const auto* margin = std::get_if<MarginWanted>(&request.what)) {
        out["margin"] = {{"error_ratio", margin->error_ratio}, {"dwell_bits", margin->dwell_bits}};
        if (margin->expected != Expected{}) {
            const Expected& edges = margin->expected;
            out["margin"]["expected"] = {edges.up_mv, edges.down_mv, edges.left_ui, edges.right_ui};
        }
    } else {
        json looks = json::array();
        for (const Look& look : std::get<LooksWanted>(request.what).looks) {
            looks.push_back(look_json(look));
        }
        out["looks"] = std::move(looks);
    }
    if (request.wait_s != 0) out["wait_s"] = request.wait_s;
    return out;
}

Request request_from(const json& value) {
    Request out;
    out.codes = codes_from(value.at("codes"));
    out.condition = Condition{value.at("condition").get<std::uint16_t>()};
    out.why = value.at("why").get<std::string>();
    if (value.contains("margin")) {
        const json& margin = value.at("margin");
        MarginWanted wanted{margin.at("error_ratio").get<double>(),
                            margin.at("dwell_bits").get<std::uint64_t>(),
                            {}};
        if (margin.contains("expected")) {
            const json& edges = margin.at("expected");
            wanted.expected = {edges.at(0).get<double>(), edges.at(1).get<double>(),
                               edges.at(2).get<double>(), edges.at(3).get<double>()};
        }
        out.what = wanted;
    } else {
        LooksWanted wanted;
        for (const json& look : value.at("looks")) wanted.looks.push_back(look_from(look));
        out.what = std::move(wanted);
    }
    out.wait_s = value.value("wait_s", 0.0);
    return out;
}

json to_json_value(const Identity& identity) {
    json values = json::object();
    for (const IdentityValue& entry : identity.values) values[entry.name] = entry.value;
    return {{"values", std::move(values)}, {"simulated", identity.simulated}};
}

Identity identity_from(const json& value) {
    Identity out;
    out.simulated = value.at("simulated").get<bool>();
    for (const auto& [name, entry] : value.at("values").items()) {
        out.values.push_back({name, entry.get<std::uint32_t>()});
    }
    return out;
}

json to_json_value(const SavedLane& saved) {
    json fields = json::array();
    for (const SavedField& field : saved.fields) {
        json entry{{"register", field.field.reg}, {"field", field.field.field},
                   {"address", field.address},    {"mask", field.mask},
                   {"value", field.value},        {"lowest", field.lowest},
                   {"highest", field.highest},    {"role", role_words.name(field.role)}};
        if (!field.dimension.empty()) entry["dimension"] = field.dimension;
        fields.push_back(std::move(entry));
    }
    return {{"lane", number(saved.lane)}, {"fields", std::move(fields)}};
}

SavedLane saved_lane_from(const json& value) {
    SavedLane out;
    out.lane = Lane{value.at("lane").get<std::uint16_t>()};
    for (const json& entry : value.at("fields")) {
        SavedField field;
        field.field = {entry.at("register").get<std::string>(),
                       entry.at("field").get<std::string>()};
        field.address = entry.at("address").get<std::uint32_t>();
        field.mask = entry.at("mask").get<std::uint32_t>();
        field.value = entry.at("value").get<std::uint32_t>();
        field.lowest = entry.at("lowest").get<std::uint32_t>();
        field.highest = entry.at("highest").get<std::uint32_t>();
        field.role = role_words.value(entry.at("role").get<std::string>());
        field.dimension = entry.value("dimension", "");
        out.fields.push_back(std::move(field));
    }
    return out;
}

json to_json_value(const Decision& decision) {
    return {{"codes", to_json_value(decision.codes)},
            {"unchanged", decision.unchanged},
            {"reason", decision.reason},
            {"notes", decision.notes},
            {"reading_count", decision.reading_count},
            {"standard_readings", decision.standard_readings},
            {"bench_s", decision.bench_s}};
}

json to_json_value(const MonitorNoise& noise) {
    return {{"height_step_mv", noise.height_step_mv},
            {"width_step_ui", noise.width_step_ui},
            {"height_sigma_mv", noise.height_sigma_mv},
            {"width_sigma_ui", noise.width_sigma_ui},
            {"height_nonlinearity_mv", noise.height_nonlinearity_mv},
            {"width_nonlinearity_ui", noise.width_nonlinearity_ui}};
}

MonitorNoise noise_from(const json& value) {
    return {value.at("height_step_mv").get<double>(),
            value.at("width_step_ui").get<double>(),
            value.at("height_sigma_mv").get<double>(),
            value.at("width_sigma_ui").get<double>(),
            value.at("height_nonlinearity_mv").get<double>(),
            value.at("width_nonlinearity_ui").get<double>()};
}

Decision decision_from(const json& value) {
    Decision out;
    out.codes = codes_from(value.at("codes"));
    out.unchanged = value.at("unchanged").get<bool>();
    out.reason = value.at("reason").get<std::string>();
    out.notes = value.at("notes").get<std::vector<std::string>>();
    out.reading_count = value.at("reading_count").get<std::uint32_t>();
    out.standard_readings = value.at("standard_readings").get<double>();
    out.bench_s = value.at("bench_s").get<double>();
    return out;
}

json to_json_value(const std::vector<Count>& counts) {
    json out = json::array();
    for (const Count& count : counts) {
        out.push_back({look_json(count.look), count.errors, count.saturated});
    }
    return out;
}

std::vector<Count> counts_from(const json& value) {
    std::vector<Count> out;
    for (const json& entry : value) {
        out.push_back(
            {look_from(entry.at(0)), entry.at(1).get<std::uint64_t>(), entry.at(2).get<bool>()});
    }
    return out;
}

namespace {

struct SlopeName {
    Measured EdgeSlopes::* member;
    const char* name;
};
constexpr SlopeName slope_names[] = {{&EdgeSlopes::up_mv, "up_mv"},
                                     {&EdgeSlopes::down_mv, "down_mv"},
                                     {&EdgeSlopes::left_ui, "left_ui"},
                                     {&EdgeSlopes::right_ui, "right_ui"}};

}  // namespace

// Each as [value, standard error, bound], the bound as in the columns of a reading.
json to_json_value(const std::optional<EdgeSlopes>& slopes) {
    if (!slopes) return nullptr;
    json out = json::object();
    for (const auto& [member, name] : slope_names) {
        const Measured& slope = *slopes.*member;
        out[name] = {slope.value, slope.std_error, static_cast<int>(slope.bound)};
    }
    return out;
}

std::optional<EdgeSlopes> slopes_from(const json& value) {
    if (value.is_null()) return std::nullopt;
    EdgeSlopes out;
    for (const auto& [member, name] : slope_names) {
        const json& slope = value.at(name);
        const int bound = slope.at(2).get<int>();
        if (bound < 0 || bound > 2) throw BadStoreData("a slope holds an unknown bound");
        out.*member = {slope.at(0).get<double>(), slope.at(1).get<double>(),
                       static_cast<Bound>(bound)};
    }
    return out;
}

// A list, as the board file's order is kept.
json to_json_value(const std::vector<Telemetry>& telemetry) {
    json out = json::array();
    for (const Telemetry& each : telemetry) out.push_back({each.name, each.value});
    return out;
}

std::vector<Telemetry> telemetry_from(const json& value) {
    std::vector<Telemetry> out;
    for (const json& each : value) {
        out.push_back({each.at(0).get<std::string>(), each.at(1).get<double>()});
    }
    return out;
}

// Compact, as there are many: [kind, address, mask, value, result, flags].
json to_json_value(const std::vector<WireOperation>& wire) {
    json out = json::array();
    for (const WireOperation& op : wire) {
        out.push_back({static_cast<int>(op.kind), op.address, op.mask, op.value, op.result,
                       (op.read_back ? 1 : 0) | (op.expired ? 2 : 0)});
    }
    return out;
}

std::vector<WireOperation> wire_from(const json& value) {
    std::vector<WireOperation> out;
    for (const json& entry : value) {
        WireOperation op;
        const int kind = entry.at(0).get<int>();
        if (kind < 0 || kind > 3) throw BadStoreData("a wire record holds an unknown operation");
        op.kind = static_cast<WireOperation::Kind>(kind);
        op.address = entry.at(1).get<std::uint32_t>();
        op.mask = entry.at(2).get<std::uint32_t>();
        op.value = entry.at(3).get<std::uint32_t>();
        op.result = entry.at(4).get<std::uint32_t>();
        const int flags = entry.at(5).get<int>();
        op.read_back = (flags & 1) != 0;
        op.expired = (flags & 2) != 0;
        out.push_back(op);
    }
    return out;
}

}  // namespace lanewright
