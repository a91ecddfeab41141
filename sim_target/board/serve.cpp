#include "sim_target/board/serve.hpp"

#include <filesystem>
#include <iostream>
#include <nlohmann/json.hpp>
#include <random>

#include "drivers/io/shutdown.hpp"
#include "sim_target/board/board.hpp"
#include "sim_target/board/servers.hpp"
#include "sim_target/target_file.hpp"

namespace lanewright::sim {

namespace {

constexpr int exit_usage = 64;
constexpr int exit_unavailable = 69;
constexpr int exit_output = 74;
constexpr int exit_config = 78;

int failed(int code, const std::string& what) {
    std::cerr << "lanewright-target: " << what << (what.ends_with('\n') ? "" : "\n");
    return code;
}

// Codes that a bank has and its field cannot hold, or the other way round, would read back as
// something else.
void check_code_fields(const Object& top, const TargetFile& target, const BoardSide& side) {
    for (std::size_t bank = 0; bank < dimension_names().size(); ++bank) {
        const auto& name = side.binding.field(static_cast<Part>(bank));
        const FieldDescription* field = name ? side.map.find(*name) : nullptr;
        if (field == nullptr) continue;
        const std::uint64_t holds = std::uint64_t{1} << field->width();
        const auto codes = static_cast<std::uint64_t>(target.receiver.banks[bank].codes());
        if (holds == codes) continue;
        top.object("binding")
            .need(dimension_names()[bank])
            .complain(name->text() + ", which holds " + std::to_string(holds) + " codes",
                      "a field for the " + std::to_string(codes) + " codes of that bank");
    }
}

struct Loaded {
    std::optional<TargetFile> target;
    BoardSide side;
    std::string complaints;
};

Loaded load(const std::string& path) {
    Loaded loaded;
    Complaints complaints;
    std::string folder = std::filesystem::path(path).parent_path().string();
    if (folder.empty()) folder = ".";
    loaded.target = load_target(path, complaints, [&](const Object& top) {
        loaded.side = decode_board_side(top, folder);
        if (!loaded.side.declared) {
            top.node().complain("no key \"board\"", "the board file whose registers are served");
        }
    });
    if (loaded.target) {
        const auto document = Document::load(path, complaints);
        if (document) check_code_fields(document->root().object(), *loaded.target, loaded.side);
    }
    if (complaints.any()) loaded.target.reset();
    loaded.complaints = complaints.text();
    return loaded;
}

bool print_ready(const std::vector<std::unique_ptr<Server>>& tcp,
                 const std::vector<std::unique_ptr<Server>>& pty) {
    nlohmann::ordered_json ready = {
        {"ready", true}, {"tcp", nlohmann::json::array()}, {"pty", nlohmann::json::array()}};
    for (const auto& server : tcp) ready["tcp"].push_back(server->address());
    for (const auto& server : pty) ready["pty"].push_back(server->address());
    std::cout << ready.dump(-1, ' ', false, nlohmann::json::error_handler_t::replace) << std::endl;
    return static_cast<bool>(std::cout);
}

// A restart must show as a reset, also to a host that kept its session: a number that the board
// had before would hide it.
std::uint32_t random_boot_number() {
    std::random_device device;
    return device() % 0x0FFFFFFFu + 1;
}

Task<void> run_until_stopped(Hub& hub, Stop stop) {
    co_await hub.time.sleep_until(TimePoint::max(), stop);
    const auto batches = co_await hub.board.stop();
    auto wires = co_await hub.tasks.join();
    if (wires.has_error() && wires.error().cause != Cause::stopped) co_return wires.error();
    co_return batches;
}

}  // namespace

int run_serve(const ServeOptions& options) {
    if (options.tcp.empty() && options.pty.empty()) {
        return failed(exit_usage, "nothing to serve on: give --tcp HOST:PORT or --pty LINK");
    }
    Loaded loaded = load(options.target_path);
    if (!loaded.target) return failed(exit_config, loaded.complaints);
    const std::string problem = choose_board(*loaded.target, options.population_board);
    if (!problem.empty()) return failed(exit_usage, "--population-board: " + problem);
    const TargetFile& target = *loaded.target;

    boost::asio::io_context io;
    SteadyTimeSource time(io);
    Stop stop(io);
    const ShutdownSignals signals(io, stop);
    Board board(time, loaded.side,
                {.time_scale = target.time_scale,
                 .bit_rate_hz = target.grid.bit_rate_hz,
                 .reset_codes = target.reset_codes,
                 .temperature_c = target.temperature.celsius,
                 .chip = target.chip},
                make_lane_models(target), random_boot_number());
    Hub hub(time, board, loaded.side, target.time_scale, stop);
    std::vector<std::unique_ptr<Server>> tcp, pty;
    try {
        for (const auto& address : options.tcp) tcp.push_back(make_tcp_server(hub, address));
        for (const auto& link : options.pty) pty.push_back(make_pty_server(hub, link));
    } catch (const ServeError& error) {
        return failed(exit_unavailable, error.what());
    }
    for (const auto& server : tcp) hub.tasks.spawn("tcp", server->run());
    for (const auto& server : pty) hub.tasks.spawn("pty", server->run());
    const bool told = print_ready(tcp, pty);
    if (!told) stop.request();
    const auto ended = run_until_done(time, run_until_stopped(hub, stop));
    if (!told) return failed(exit_output, "the ready line could not be written");
    if (ended.has_error()) throw std::runtime_error(ended.error().text());
    return 0;
}

}  // namespace lanewright::sim
