#include <algorithm>
#include <array>
#include <cstdint>
#include <utility>

#include "drivers/config/board_parts.hpp"

namespace lanewright {

namespace {

constexpr double longest_wait_ms = 3600e3;
constexpr double longest_pause_ms = 60e3;

constexpr std::array<std::string_view, 6> step_keys = {"write", "write_codes", "read",
                                                       "wait",  "pause_ms",    "combine"};

struct ParameterWord {
    std::string_view word;
    Parameter parameter = Parameter::ordinal;
};

constexpr ParameterWord ordinal_word{"ordinal", Parameter::ordinal};
constexpr ParameterWord dwell_words[] = {{"dwell_log2", Parameter::dwell_log2},
                                         {"dwell_bits_low", Parameter::dwell_bits_low},
                                         {"dwell_bits_high", Parameter::dwell_bits_high}};
constexpr ParameterWord ratio_word{"ratio_exponent", Parameter::ratio_exponent};
constexpr ParameterWord point_words[] = {{"offset_code", Parameter::offset_code},
                                         {"phase_code", Parameter::phase_code}};

// What values of a reading a sequence of that kind may write.
std::vector<ParameterWord> parameters_of(SequenceKind kind) {
    std::vector<ParameterWord> out;
    const bool dwells = kind == SequenceKind::monitor || kind == SequenceKind::look;
    if (dwells || kind == SequenceKind::begin) out.push_back(ordinal_word);
    if (dwells) out.insert(out.end(), std::begin(dwell_words), std::end(dwell_words));
    if (kind == SequenceKind::monitor) out.push_back(ratio_word);
    if (kind == SequenceKind::look)
        out.insert(out.end(), std::begin(point_words), std::end(point_words));
    return out;
}

class SequenceDecoder {
  public:
    SequenceDecoder(SequenceKind kind, const RegisterMapDescription& map)
        : kind_(kind), map_(map), parameters_(parameters_of(kind)) {}

    Sequence decode(const List& list) {
        Sequence sequence;
        for (const Node node : list) {
            const Object object = node.object();
            if (!node.is_object()) continue;
            const std::string_view key = key_of(object);
            if (key == "write")
                sequence.emplace_back(write_step(object));
            else if (key == "write_codes")
                sequence.emplace_back(write_codes_step(object));
            else if (key == "read")
                sequence.emplace_back(read_step(object));
            else if (key == "wait")
                sequence.emplace_back(wait_step(object));
            else if (key == "pause_ms")
                sequence.emplace_back(pause_step(object));
            else if (key == "combine")
                sequence.emplace_back(combine_step(object));
            if (!key.empty()) object.finish();
        }
        if (kind_ == SequenceKind::apply && list.node().is_list() && codes_written_ == 0)
            list.node().complain("no step that writes the codes",
                                 "one step {\"write_codes\": true}");
        return sequence;
    }

  private:
    // The one key that says what the step does; empty after a complaint.
    std::string_view key_of(const Object& object) const {
        std::string_view key;
        std::string found;
        for (const std::string_view candidate : step_keys) {
            if (!object.has(candidate)) continue;
            found += (found.empty() ? "" : " and ") + std::string(candidate);
            key = found == candidate ? candidate : std::string_view();
        }
        if (!key.empty()) return key;
        std::string hint;
        if (found.empty()) {
            const std::vector<std::string_view> candidates(step_keys.begin(), step_keys.end());
            for (const std::string& present : object.keys()) {
                const std::string near = nearest_word(present, candidates);
                if (!near.empty()) hint = "did you mean \"" + near + "\"?";
            }
        }
        object.node().complain(found.empty() ? "a step that does nothing" : "a step with " + found,
                               "one of write, write_codes, read, wait, pause_ms, combine",
                               std::move(hint));
        return {};
    }

    WriteStep write_step(const Object& object) const {
        WriteStep step;
        const Node node = object.need("write");
        step.field = decode_field_name(node, map_);
        const FieldDescription* field = map_.find(step.field);
        if (field != nullptr && field->role == Role::tuned)
            node.complain(node.described() + ", a tuned field", "a control or scratch field",
                          "write_codes writes the tuned ones");
        else if (field != nullptr && field->role == Role::none)
            node.complain(node.described() + ", a field without a role",
                          "a control or scratch field", "fields without a role are never written");
        step.value = operand(object.need("value"), field);
        if (const auto when_changed = object.find("when_changed")) {
            step.when_changed = when_changed->boolean();
            if (step.when_changed && kind_ != SequenceKind::look)
                when_changed->complain("true", "it in the look of a counted monitor only",
                                       "elsewhere every write is made");
        }
        return step;
    }

    Operand operand(const Node& node, const FieldDescription* field) const {
        const bool is_word = node.is_text() && !node.text().starts_with("0x");
        if (is_word && !parameters_.empty()) {
            std::vector<std::string_view> words;
            for (const ParameterWord& each : parameters_) words.push_back(each.word);
            const Parameter parameter = parameters_[node.word(words)].parameter;
            // A narrower field would cut the number of bits without a word.
            if (parameter == Parameter::dwell_bits_low && field != nullptr && field->width() < 32)
                node.complain(node.described(), "a field of 32 bits for it");
            return parameter;
        }
        if (is_word)
            node.complain(node.described(), "a number",
                          "values of a reading exist only in the sequence that takes it");
        const std::int64_t lowest = field != nullptr ? field->lowest_allowed() : 0;
        const std::int64_t highest = field != nullptr ? field->highest_allowed() : 0xFFFFFFFF;
        if (is_word) return static_cast<std::uint32_t>(lowest);
        return static_cast<std::uint32_t>(node.integer({lowest, std::max(lowest, highest)}));
    }

    WriteCodesStep write_codes_step(const Object& object) {
        const Node node = object.need("write_codes");
        if (!node.boolean()) node.complain(node.described(), "true");
        if (kind_ != SequenceKind::apply)
            node.complain("write_codes", "it in the apply sequence only");
        if (++codes_written_ > 1) node.complain("a second write_codes", "the codes written once");
        return {};
    }

    ReadStep read_step(const Object& object) {
        ReadStep step;
        step.field = decode_readable_field(object.need("read"), map_);
        const Node as = object.need("as");
        step.as = decode_name(as);
        add_value(as, step.as);
        return step;
    }

    WaitStep wait_step(const Object& object) const {
        WaitStep step;
        step.field = decode_readable_field(object.need("wait"), map_);
        step.equals = static_cast<std::uint32_t>(
            object.integer("equals", {0, largest_value(map_, step.field)}));
        step.timeout_ms = object.number("timeout_ms", {.at_most = longest_wait_ms, .above = 0});
        if (const auto plus_dwell = object.find("plus_dwell")) {
            step.plus_dwell = plus_dwell->boolean();
            if (step.plus_dwell && kind_ != SequenceKind::monitor && kind_ != SequenceKind::look)
                plus_dwell->complain("true", "it where the monitor dwells only",
                                     "nothing dwells here");
        }
        if (const auto otherwise = object.find("otherwise")) {
            otherwise->word({"no_lock"});
            step.lock = true;
        }
        return step;
    }

    static PauseStep pause_step(const Object& object) {
        return {object.number("pause_ms", {.at_least = 0, .at_most = longest_pause_ms})};
    }

    CombineStep combine_step(const Object& object) {
        CombineStep step;
        const Object combine = object.object("combine");
        const auto input = [&](std::string_view key) {
            const Node node = combine.need(key);
            const std::vector<std::string_view> known(values_.begin(), values_.end());
            if (!node.is_text() || known.empty()) {
                node.complain(node.described(), "the name of a value read before");
                return std::string();
            }
            return std::string(known[node.word(known)]);
        };
        step.high = input("high");
        step.low = input("low");
        step.shift = static_cast<unsigned>(combine.integer("shift", {1, 31}));
        combine.finish();
        const Node as = object.need("as");
        step.as = decode_name(as);
        add_value(as, step.as);
        return step;
    }

    void add_value(const Node& node, const std::string& name) {
        if (name.empty()) return;
        if (std::find(values_.begin(), values_.end(), name) != values_.end())
            node.complain("a second value " + name, "each name once in a sequence");
        values_.push_back(name);
    }

    SequenceKind kind_;
    const RegisterMapDescription& map_;
    const std::vector<ParameterWord> parameters_;
    int codes_written_ = 0;
    std::vector<std::string> values_;
};

}  // namespace

Sequence decode_sequence(const List& list, SequenceKind kind, const RegisterMapDescription& map) {
    return SequenceDecoder(kind, map).decode(list);
}

FieldName decode_readable_field(const Node& node, const RegisterMapDescription& map) {
    FieldName name = decode_field_name(node, map);
    const FieldDescription* field = map.find(name);
    if (field != nullptr && field->access == Access::write_only)
        node.complain(node.described() + ", a write_only field", "a field that can be read");
    return name;
}

std::uint32_t largest_value(const RegisterMapDescription& map, const FieldName& name) {
    const FieldDescription* field = map.find(name);
    return field != nullptr ? field->mask() >> field->low_bit : 0xFFFFFFFFu;
}

}  // namespace lanewright
