#include "daemon/store/events.hpp"

#include <nlohmann/json.hpp>

#include "daemon/store/store_error.hpp"
#include "daemon/store/value_json.hpp"
#include "daemon/store/words.hpp"

namespace lanewright {

using nlohmann::json;

namespace {

constexpr auto stage_words = words<Stage>({{Stage::search, "search"},
                                           {Stage::compare, "compare"},
                                           {Stage::preflight, "preflight"},
                                           {Stage::reference, "reference"}});
constexpr auto settlement_words = words<Settlement>({{Settlement::decided, "decided"},
                                                     {Settlement::restored, "restored"},
                                                     {Settlement::given_up, "given_up"}});
constexpr auto result_words = words<ItemResult>({{ItemResult::passed, "passed"},
                                                 {ItemResult::failed, "failed"},
                                                 {ItemResult::noted, "noted"},
                                                 {ItemResult::not_shown, "not_shown"}});
constexpr auto outcome_words = words<LaneOutcome>({{LaneOutcome::tuned, "tuned"},
                                                   {LaneOutcome::unchanged, "unchanged"},
                                                   {LaneOutcome::failed, "failed"}});
constexpr auto ending_words = words<Ending>({{Ending::complete, "complete"},
                                             {Ending::stopped, "stopped"},
                                             {Ending::wall_limit, "wall_limit"},
                                             {Ending::fault, "fault"}});
constexpr auto status_words = words<Status>({{Status::open, "open"},
                                             {Status::closed, "closed"},
                                             {Status::no_lock, "no_lock"},
                                             {Status::saturated, "saturated"},
                                             {Status::void_reading, "void"}});
constexpr auto definition_words = words<ErrorDefinition>({{ErrorDefinition::pattern, "pattern"},
                                                          {ErrorDefinition::decision, "decision"},
                                                          {ErrorDefinition::unknown, "unknown"}});
constexpr auto basis_words =
    words<Basis>({{Basis::counted, "counted"}, {Basis::extrapolated, "extrapolated"}});

json lane_json(Lane lane) {
    return json{{"lane", number(lane)}};
}

Lane lane_from(const json& body) {
    return Lane{body.at("lane").get<std::uint16_t>()};
}

template <class T>
json reading_key(const T& event) {
    return {{"lane", number(event.lane)}, {"ordinal", event.ordinal}, {"attempt", event.attempt}};
}

template <class T>
T with_reading_key(const json& body) {
    T event;
    event.lane = lane_from(body);
    event.ordinal = body.at("ordinal").get<std::uint32_t>();
    event.attempt = body.at("attempt").get<std::uint32_t>();
    return event;
}

json item_json(const PreflightItem& item) {
    json body{{"name", item.name},         {"result", result_words.name(item.result)},
              {"found", item.found},       {"expected", item.expected},
              {"advice", item.advice},     {"values", item.values},
              {"settings", item.settings}, {"from", item.from}};
    if (item.lane) body["lane"] = number(*item.lane);
    if (item.codes) body["codes"] = to_json_value(*item.codes);
    return body;
}

PreflightItem item_from(const json& body) {
    PreflightItem item;
    if (body.contains("lane")) item.lane = lane_from(body);
    body.at("name").get_to(item.name);
    item.result = result_words.value(body.at("result").get<std::string>());
    body.at("found").get_to(item.found);
    body.at("expected").get_to(item.expected);
    body.at("advice").get_to(item.advice);
    body.at("values").get_to(item.values);
    body.at("settings").get_to(item.settings);
    body.at("from").get_to(item.from);
    if (body.contains("codes")) item.codes = codes_from(body.at("codes"));
    return item;
}

// One codec an event: its stored name, to and from JSON.
struct Codec {
    const char* kind;
    json (*encode)(const Event&);
    Event (*decode)(const json&);
};

template <class T>
const T& as(const Event& event) {
    return std::get<T>(event);
}

const Codec codecs[] = {
    {"identified", [](const Event& e) { return to_json_value(as<Identified>(e).identity); },
     [](const json& b) -> Event { return Identified{identity_from(b)}; }},
    {"lane_saved", [](const Event& e) { return to_json_value(as<LaneSaved>(e).saved); },
     [](const json& b) -> Event { return LaneSaved{saved_lane_from(b)}; }},
    {"intent",
     [](const Event& e) {
         json body = reading_key(as<Intent>(e));
         body["stage"] = stage_words.name(as<Intent>(e).stage);
         body["request"] = to_json_value(as<Intent>(e).request);
         return body;
     },
     [](const json& b) -> Event {
         auto event = with_reading_key<Intent>(b);
         event.stage = stage_words.value(b.at("stage").get<std::string>());
         event.request = request_from(b.at("request"));
         return event;
     }},
    {"reading", [](const Event& e) { return reading_key(as<ReadingTaken>(e)); },
     [](const json& b) -> Event { return with_reading_key<ReadingTaken>(b); }},
    {"reading_void",
     [](const Event& e) {
         json body = reading_key(as<ReadingVoid>(e));
         body["cause"] = as<ReadingVoid>(e).cause;
         if (const std::string& reg = as<ReadingVoid>(e).changed_register; !reg.empty()) {
             body["changed_register"] = reg;
         }
         return body;
     },
     [](const json& b) -> Event {
         auto event = with_reading_key<ReadingVoid>(b);
         event.cause = b.at("cause").get<std::string>();
         event.changed_register = b.value("changed_register", "");
         return event;
     }},
    {"lane_decided",
     [](const Event& e) {
         json body = lane_json(as<LaneDecided>(e).lane);
         body["decision"] = to_json_value(as<LaneDecided>(e).decision);
         return body;
     },
     [](const json& b) -> Event {
         return LaneDecided{lane_from(b), decision_from(b.at("decision"))};
     }},
    {"lane_settled",
     [](const Event& e) {
         json body = lane_json(as<LaneSettled>(e).lane);
         body["settlement"] = settlement_words.name(as<LaneSettled>(e).settlement);
         body["codes"] = to_json_value(as<LaneSettled>(e).codes);
         return body;
     },
     [](const json& b) -> Event {
         return LaneSettled{lane_from(b),
                            settlement_words.value(b.at("settlement").get<std::string>()),
                            codes_from(b.at("codes"))};
     }},
    {"lane_finished",
     [](const Event& e) {
         json body = lane_json(as<LaneFinished>(e).lane);
         body["outcome"] = outcome_words.name(as<LaneFinished>(e).outcome);
         body["reason"] = as<LaneFinished>(e).reason;
         return body;
     },
     [](const json& b) -> Event {
         return LaneFinished{lane_from(b), outcome_words.value(b.at("outcome").get<std::string>()),
                             b.at("reason").get<std::string>()};
     }},
    {"run_resumed",
     [](const Event& e) {
         return json{{"pid", as<RunResumed>(e).pid}, {"text", as<RunResumed>(e).text}};
     },
     [](const json& b) -> Event {
         return RunResumed{b.at("pid").get<std::int64_t>(), b.at("text").get<std::string>()};
     }},
    {"run_ended",
     [](const Event& e) {
         const auto& ended = as<RunEnded>(e);
         return json{{"ending", ending_words.name(ended.ending)},
                     {"reason", ended.reason},
                     {"wall_s", ended.wall_s},
                     {"link",
                      {{"frames", ended.link.frames},
                       {"bad_frames", ended.link.bad_frames},
                       {"retries", ended.link.retries},
                       {"reconnects", ended.link.reconnects},
                       {"resets", ended.link.resets}}}};
     },
     [](const json& b) -> Event {
         RunEnded ended;
         ended.ending = ending_words.value(b.at("ending").get<std::string>());
         ended.reason = b.at("reason").get<std::string>();
         ended.wall_s = b.at("wall_s").get<double>();
         const json& link = b.at("link");
         ended.link = {link.at("frames"), link.at("bad_frames"), link.at("retries"),
                       link.at("reconnects"), link.at("resets")};
         return ended;
     }},
    {"codes_written",
     [](const Event& e) {
         json body = lane_json(as<CodesWritten>(e).lane);
         body["codes"] = to_json_value(as<CodesWritten>(e).codes);
         body["why"] = as<CodesWritten>(e).why;
         return body;
     },
     [](const json& b) -> Event {
         return CodesWritten{lane_from(b), codes_from(b.at("codes")),
                             b.at("why").get<std::string>()};
     }},
    {"preflight_item", [](const Event& e) { return item_json(as<PreflightItem>(e)); },
     [](const json& b) -> Event { return item_from(b); }},
    {"preflight_begun",
     [](const Event& e) {
         json body = lane_json(as<PreflightBegun>(e).lane);
         body["items"] = as<PreflightBegun>(e).items;
         return body;
     },
     [](const json& b) -> Event {
         return PreflightBegun{lane_from(b), b.at("items").get<std::vector<std::string>>()};
     }},
    {"noise_chosen",
     [](const Event& e) {
         json body = lane_json(as<NoiseChosen>(e).lane);
         body["noise"] = to_json_value(as<NoiseChosen>(e).noise);
         body["from"] = as<NoiseChosen>(e).from;
         return body;
     },
     [](const json& b) -> Event {
         return NoiseChosen{lane_from(b), noise_from(b.at("noise")),
                            b.at("from").get<std::string>()};
     }},
    {"lane_reset", [](const Event& e) { return lane_json(as<LaneReset>(e).lane); },
     [](const json& b) -> Event { return LaneReset{lane_from(b)}; }},
};
static_assert(std::size(codecs) == std::variant_size_v<Event>, "one codec an event, in order");

}  // namespace

const char* kind_of(const Event& event) {
    return codecs[event.index()].kind;
}

std::optional<Lane> lane_of(const Event& event) {
    return std::visit(
        [](const auto& e) -> std::optional<Lane> {
            if constexpr (requires { e.lane; }) {
                return e.lane;
            } else if constexpr (requires { e.saved.lane; }) {
                return e.saved.lane;
            } else {
                return std::nullopt;
            }
        },
        event);
}

std::string encode_body(const Event& event) {
    // Board text can hold any byte; it must not stop a run from being stored.
    return codecs[event.index()].encode(event).dump(-1, ' ', false, json::error_handler_t::replace);
}

Event decode_body(const std::string& kind, const std::string& body) {
    for (const Codec& codec : codecs) {
        if (kind != codec.kind) continue;
        try {
            return codec.decode(json::parse(body));
        } catch (const json::exception& error) {
            throw BadStoreData("an event of kind " + kind + " cannot be read: " + error.what());
        }
    }
    throw BadStoreData("the store holds an event of kind \"" + kind +
                       "\", which this version does not know");
}

const char* name_of(Stage stage) {
    return stage_words.name(stage);
}
const char* name_of(Settlement settlement) {
    return settlement_words.name(settlement);
}
const char* name_of(LaneOutcome outcome) {
    return outcome_words.name(outcome);
}
const char* name_of(Ending ending) {
    return ending_words.name(ending);
}
const char* name_of(ItemResult result) {
    return result_words.name(result);
}
const char* name_of(Status status) {
    return status_words.name(status);
}
const char* name_of(ErrorDefinition definition) {
    return definition_words.name(definition);
}
const char* name_of(Basis basis) {
    return basis_words.name(basis);
}

Status status_from(const std::string& word) {
    return status_words.value(word);
}
ErrorDefinition error_definition_from(const std::string& word) {
    return definition_words.value(word);
}
Basis basis_from(const std::string& word) {
    return basis_words.value(word);
}

}  // namespace lanewright
