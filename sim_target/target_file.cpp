#include "sim_target/target_file.hpp"

#include <array>
#include <cmath>
#include <filesystem>
#include <string>

namespace lanewright::sim {

namespace {

constexpr int most_lanes = 64;
constexpr std::array<const char*, 4> board_side_keys = {"board", "binding", "wire", "faults"};

std::string resolved(const std::string& folder, const std::string& name) {
    const std::filesystem::path path(name);
    return path.is_absolute() ? name : (std::filesystem::path(folder) / path).string();
}

Transmitter read_transmitter(const Object& from) {
    Transmitter to;
    to.swing_mv = from.number("swing_mv", {.at_most = 5000, .above = 0});
    to.rise_s = from.number_or("rise_ps", 12, {.at_least = 0, .at_most = 1000}) * 1e-12;
    to.source_ohm = from.number_or("source_ohm", 50, {.at_least = 1, .at_most = 1000});
    to.pad_f = from.number_or("pad_ff", 0, {.at_least = 0, .at_most = 10000}) * 1e-15;
    from.finish();
    return to;
}

// The keys of a bank name what kind it is: fixed_ohm and unit_ohm, or fixed_ff and unit_ff.
BankSpec read_bank(const Object& from, BankKind kind) {
    BankSpec to;
    to.kind = kind;
    to.bits = static_cast<int>(from.integer("bits", {.at_least = 0, .at_most = 8}));
    if (kind == BankKind::resistor) {
        to.fixed = from.number("fixed_ohm", {.at_least = 1, .at_most = 1e6});
        to.unit = from.number("unit_ohm", {.at_least = 1, .at_most = 1e7});
    } else {
        to.fixed = from.number("fixed_ff", {.at_most = 1e5, .above = 0}) * 1e-15;
        to.unit = from.number("unit_ff", {.at_most = 1e5, .above = 0}) * 1e-15;
        to.plate_share = from.number_or("plate_share", 0, {.at_least = 0, .at_most = 1});
    }
    to.switch_ohm = from.number_or("switch_ohm", 0, {.at_least = 0, .at_most = 1e5});
    to.switch_off_f = from.number_or("switch_off_ff", 0, {.at_least = 0, .at_most = 1000}) * 1e-15;
    to.error_sigma = from.number_or("error_sigma", 0, {.at_least = 0, .at_most = 0.3});
    from.finish();
    return to;
}

Receiver read_receiver(const Object& from) {
    Receiver to;
    to.termination_ohm = from.number_or("termination_ohm", 50, {.at_least = 1, .at_most = 1000});
    to.pad_f = from.number_or("pad_ff", 0, {.at_least = 0, .at_most = 10000}) * 1e-15;
    to.load_f = from.number_or("load_ff", 0, {.at_least = 0, .at_most = 10000}) * 1e-15;
    to.load_ohm = from.number_or("load_ohm", 0, {.at_least = 0, .at_most = 1e9});
    const Object banks = from.object("banks");
    to.banks[bank_r1] = read_bank(banks.object("r1"), BankKind::resistor);
    to.banks[bank_c1] = read_bank(banks.object("c1"), BankKind::capacitor);
    to.banks[bank_r2] = read_bank(banks.object("r2"), BankKind::resistor);
    to.banks[bank_c2] = read_bank(banks.object("c2"), BankKind::capacitor);
    banks.finish();
    from.finish();
    // A quarter of a million codes a lane is what a sweep, and its memory, can bear.
    int bits = 0;
    for (const BankSpec& bank : to.banks) bits += bank.bits;
    if (bits > 18)
        banks.node().complain("banks of " + std::to_string(bits) + " bits together",
                              "at most 18 bits");
    return to;
}

Line read_line(const Object& from, Line otherwise) {
    Line to = otherwise;
    to.length_mm = from.number_or("length_mm", to.length_mm, {.at_most = 5000, .above = 0});
    to.impedance_ohm =
        from.number_or("impedance_ohm", to.impedance_ohm, {.at_least = 5, .at_most = 500});
    to.permittivity =
        from.number_or("permittivity", to.permittivity, {.at_least = 1, .at_most = 20});
    to.loss_tangent =
        from.number_or("loss_tangent", to.loss_tangent, {.at_least = 0, .at_most = 0.1});
    to.width_um = from.number_or("width_um", to.width_um, {.at_least = 1, .at_most = 10000});
    to.thickness_um =
        from.number_or("thickness_um", to.thickness_um, {.at_least = 0.1, .at_most = 1000});
    to.faces = from.number_or("faces", to.faces, {.at_least = 0.5, .at_most = 2});
    to.conductivity_s_per_m = from.number_or("conductivity_s_per_m", to.conductivity_s_per_m,
                                             {.at_least = 1e5, .at_most = 1e9});
    from.finish();
    return to;
}

PortPair read_pair(const Object& from, std::string_view key, PortPair otherwise) {
    const std::optional<Node> node = from.find(key);
    if (!node) return otherwise;
    const List list = node->list();
    if (list.size() != 2) {
        node->complain("a list of " + std::to_string(list.size()), "two port numbers");
        return otherwise;
    }
    const IntegerRange ports{.at_least = 1, .at_most = 4};
    return {static_cast<int>(list.at(0).integer(ports)),
            static_cast<int>(list.at(1).integer(ports))};
}

TouchstoneChannel read_touchstone_channel(const Object& from, const std::string& folder) {
    TouchstoneChannel to;
    to.path = resolved(folder, from.text("file"));
    to.near = read_pair(from, "near", to.near);
    to.far = read_pair(from, "far", to.far);
    to.differential = from.boolean_or("differential", false);
    to.repeat = static_cast<int>(from.integer_or("repeat", 1, {.at_least = 1, .at_most = 50}));
    from.finish();
    const std::array<int, 4> ports = {to.near.plus, to.near.minus, to.far.plus, to.far.minus};
    for (std::size_t i = 0; i < ports.size(); ++i) {
        for (std::size_t j = i + 1; j < ports.size(); ++j) {
            if (ports[i] != ports[j]) continue;
            from.node().complain("port " + std::to_string(ports[i]) + " in the pairs twice",
                                 "four different ports in near and far");
            return to;
        }
    }
    return to;
}

std::vector<LaneChannel> read_lanes(const List& from, const Line& shared,
                                    const std::string& folder) {
    std::vector<LaneChannel> lanes;
    if (from.size() < 1 || from.size() > most_lanes)
        from.node().complain("a list of " + std::to_string(from.size()),
                             "from 1 to " + std::to_string(most_lanes) + " lanes");
    for (const Node node : from) {
        if (lanes.size() >= most_lanes) break;
        const Object object = node.object();
        LaneChannel lane;
        const std::optional<Object> line = object.object_if("line");
        const std::optional<Object> file = object.object_if("touchstone");
        if (line.has_value() == file.has_value())
            node.complain(line ? "both line and touchstone" : "neither line nor touchstone",
                          "one of line and touchstone");
        if (line) lane.line = read_line(*line, shared);
        if (file) lane.touchstone = read_touchstone_channel(*file, folder);
        object.finish();
        lanes.push_back(std::move(lane));
    }
    return lanes;
}

LatchedMonitor read_monitor(const Object& from) {
    LatchedMonitor to;
    to.height_step_mv = from.number_or("height_step_mv", 2, {.at_most = 1000, .above = 0});
    to.width_step_ui = from.number_or("width_step_ui", 1.0 / 64, {.at_most = 0.5, .above = 0});
    const IntegerRange steps{.at_least = 1, .at_most = 65535};
    to.height_steps_max = static_cast<int>(from.integer_or("height_steps_max", 255, steps));
    to.width_steps_max = static_cast<int>(from.integer_or("width_steps_max", 31, steps));
    to.height_sigma_mv = from.number_or("height_sigma_mv", 0, {.at_least = 0, .at_most = 1000});
    to.width_sigma_ui = from.number_or("width_sigma_ui", 0, {.at_least = 0, .at_most = 1});
    to.error_ratio = from.number_or("error_ratio", 1e-6, {.at_least = 1e-18, .at_most = 0.1});
    from.finish();
    return to;
}

Required read_required(const Object& from) {
    Required to;
    to.height_mv = from.number("height_mv", {.at_most = 10000, .above = 0});
    to.width_ui = from.number("width_ui", {.at_most = 1, .above = 0});
    to.error_ratio = from.number("error_ratio", {.at_least = 1e-18, .at_most = 0.1});
    from.finish();
    return to;
}

std::vector<int> read_reset_codes(const Object& from, const Receiver& receiver) {
    std::vector<int> codes;
    for (std::size_t bank = 0; bank < bank_count; ++bank) {
        const std::int64_t top = receiver.banks[bank].codes() - 1;
        codes.push_back(static_cast<int>(
            from.integer(dimension_names()[bank], {.at_least = 0, .at_most = top})));
    }
    from.finish();
    return codes;
}

void read_noise(const Object& from, TargetFile& to) {
    to.noise.input_v_per_root_hz =
        from.number_or("input_nv_per_root_hz", 0, {.at_least = 0, .at_most = 1e4}) * 1e-9;
    to.noise.temperature_k = from.number_or("temperature_k", 300, {.at_least = 1, .at_most = 1000});
    to.sampler_noise_mv = from.number("sampler_mv", {.at_least = 0.01, .at_most = 1000});
    to.sampler_jitter_ui = from.number_or("jitter_ui", 0, {.at_least = 0, .at_most = 0.1});
    from.finish();
}

TargetFile decode(const Object& top, const std::string& path, const BoardSideReader& board_side) {
    TargetFile target;
    target.path = path;
    target.folder = std::filesystem::path(path).parent_path().string();
    if (target.folder.empty()) target.folder = ".";

    top.word("format", {"lanewright-target/1"});
    target.name = top.text("name");
    target.seed = static_cast<std::uint64_t>(top.integer_or("seed", 1, {.at_least = 0}));
    target.time_scale = top.number_or("time_scale", 1, {.at_least = 0, .at_most = 1000});
    target.grid.bit_rate_hz = top.number("bit_rate_gbps", {.at_least = 0.1, .at_most = 200}) * 1e9;
    target.transmitter = read_transmitter(top.object("transmitter"));
    Line shared;
    if (const auto line = top.object_if("line")) shared = read_line(*line, shared);
    target.receiver = read_receiver(top.object("receiver"));
    read_noise(top.object("noise"), target);
    if (const auto sampler = top.object_if("sampler")) {
        target.spread.offset_sigma_mv =
            sampler->number_or("offset_sigma_mv", 0, {.at_least = 0, .at_most = 100});
        target.spread.phase_sigma_ui =
            sampler->number_or("phase_sigma_ui", 0, {.at_least = 0, .at_most = 0.1});
        sampler->finish();
    }
    target.monitor = read_monitor(top.object("monitor"));
    target.required = read_required(top.object("required"));
    target.reset_codes = read_reset_codes(top.object("reset_codes"), target.receiver);
    target.lanes = read_lanes(top.list("lanes"), shared, target.folder);
    if (board_side)
        board_side(top);
    else
        for (const char* key : board_side_keys) top.find(key);
    top.finish();
    return target;
}

std::optional<TargetFile> decode_document(const std::optional<Document>& document,
                                          const std::string& path, Complaints& complaints,
                                          const BoardSideReader& board_side) {
    if (!document) return std::nullopt;
    TargetFile target = decode(document->root().object(), path, board_side);
    if (complaints.any()) return std::nullopt;
    return target;
}

}  // namespace

const std::vector<std::string_view>& dimension_names() {
    static const std::vector<std::string_view> names = {"r1", "c1", "r2", "c2"};
    return names;
}

std::optional<TargetFile> load_target(const std::string& path, Complaints& complaints,
                                      const BoardSideReader& board_side) {
    return decode_document(Document::load(path, complaints), path, complaints, board_side);
}

std::optional<TargetFile> parse_target(const std::string& text, const std::string& path,
                                       Complaints& complaints, const BoardSideReader& board_side) {
    return decode_document(Document::parse(text, path, complaints), path, complaints, board_side);
}

}  // namespace lanewright::sim
