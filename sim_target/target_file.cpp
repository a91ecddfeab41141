#include "sim_target/target_file.hpp"

#include <array>
#include <cmath>
#include <filesystem>
#include <string>

#include "sim_target/target_link.hpp"

namespace lanewright::sim {

namespace {

constexpr double zero_celsius_k = 273.15;
constexpr std::array<const char*, 4> board_side_keys = {"board", "binding", "wire", "faults"};

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
        to.small_below =
            from.number_or("small_below_ff", 0, {.at_least = 0, .at_most = 1e5}) * 1e-15;
        to.small_error_sigma =
            from.number_or("small_error_sigma", 0, {.at_least = 0, .at_most = 0.3});
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
    to.temperature.celsius = to.noise.temperature_k - zero_celsius_k;
    to.sampler_noise_mv = from.number("sampler_mv", {.at_least = 0.01, .at_most = 1000});
    to.sampler_jitter_ui = from.number_or("jitter_ui", 0, {.at_least = 0, .at_most = 0.1});
    from.finish();
}

// Input noise is stated at the reference and grows with the root of the absolute temperature, as
// that of a resistor does (Nyquist 1928).
void read_temperature(const Object& from, TargetFile& to) {
    const NumberRange degrees{.at_least = -100, .at_most = 250};
    const auto per_k = [&](std::string_view key) {
        return from.number_or(key, 0, {.at_least = -6000, .at_most = 6000}) * 1e-6;
    };
    Temperature& temperature = to.temperature;
    temperature.celsius = from.number("celsius", degrees);
    temperature.reference_celsius = from.number_or("reference_celsius", 25, degrees);
    temperature.resistor_per_k = per_k("resistor_ppm_per_k");
    temperature.capacitor_per_k = per_k("capacitor_ppm_per_k");
    temperature.switch_per_k = per_k("switch_ppm_per_k");
    temperature.conductor_per_k = per_k("conductor_ppm_per_k");
    temperature.loss_tangent_per_k = per_k("loss_tangent_ppm_per_k");
    from.finish();
    to.noise.temperature_k = temperature.celsius + zero_celsius_k;
    to.noise.input_v_per_root_hz *=
        std::sqrt(to.noise.temperature_k / (temperature.reference_celsius + zero_celsius_k));
}

Process read_process(const Object& from) {
    Process to;
    const NumberRange scale{.at_least = 0.3, .at_most = 3};
    to.resistor_scale = from.number_or("resistor_scale", 1, scale);
    to.capacitor_scale = from.number_or("capacitor_scale", 1, scale);
    const NumberRange sigma{.at_least = 0, .at_most = 0.2};
    to.resistor_sigma = from.number_or("resistor_sigma", 0, sigma);
    to.capacitor_sigma = from.number_or("capacitor_sigma", 0, sigma);
    from.finish();
    return to;
}

// Lanes one by one, or a population to draw them from.
void read_channels(const Object& top, TargetFile& target) {
    LaneChannel shared;
    if (const auto line = top.object_if("line")) shared.line = read_line(*line, shared.line);
    read_channel_parts(top, shared);
    if (top.has("population") && top.has("lanes"))
        top.node().complain("both lanes and population", "one of lanes and population");
    if (const auto population = top.object_if("population"))
        target.population = read_population(*population, shared, target.folder);
    else
        target.lanes = read_lanes(top.list("lanes"), shared, target.folder);
    if (top.has("population")) top.find("lanes");
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
    target.receiver = read_receiver(top.object("receiver"));
    read_noise(top.object("noise"), target);
    if (const auto process = top.object_if("process")) target.process = read_process(*process);
    if (const auto temperature = top.object_if("temperature")) {
        if (top.object("noise").has("temperature_k"))
            temperature->node().complain("both temperature and noise.temperature_k", "one of them");
        read_temperature(*temperature, target);
    }
    if (const auto sampler = top.object_if("sampler")) {
        target.spread.offset_sigma_mv =
            sampler->number_or("offset_sigma_mv", 0, {.at_least = 0, .at_most = 100});
        target.spread.phase_sigma_ui =
            sampler->number_or("phase_sigma_ui", 0, {.at_least = 0, .at_most = 0.1});
        sampler->finish();
    }
    target.monitor = read_monitor_options(top.object("monitor"));
    target.required = read_required(top.object("required"));
    target.reset_codes = read_reset_codes(top.object("reset_codes"), target.receiver);
    read_channels(top, target);
    std::array<int, bank_count> codes{};
    for (std::size_t bank = 0; bank < bank_count; ++bank)
        codes[bank] = target.receiver.banks[bank].codes();
    const std::size_t lanes = target.population ? static_cast<std::size_t>(target.population->lanes)
                                                : target.lanes.size();
    target.chip = read_chip_options(top, lanes, codes);
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
    target.source = document->source();
    return target.population ? population_board(target, 0) : target;
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
