#include "sim_target/target_link.hpp"

#include <array>
#include <cmath>
#include <filesystem>

namespace lanewright::sim {

namespace {

std::string resolved(const std::string& folder, const std::string& name) {
    const std::filesystem::path path(name);
    return path.is_absolute() ? name : (std::filesystem::path(folder) / path).string();
}

constexpr NumberRange ohms{.at_least = 5, .at_most = 500};

std::vector<ImpedanceStep> read_steps(const List& from) {
    std::vector<ImpedanceStep> steps;
    double before = 0;
    for (const Node node : from) {
        const Object object = node.object();
        ImpedanceStep step;
        step.at_share = object.number("at_share", {.at_most = 0.999, .above = 0});
        step.impedance_ohm = object.number("impedance_ohm", ohms);
        if (step.at_share <= before && !steps.empty())
            node.complain("a step before or at the one above it", "steps in order of their places");
        before = step.at_share;
        object.finish();
        steps.push_back(step);
    }
    return steps;
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

PackageLine read_package(const Object& from) {
    PackageLine to;
    to.length_mm = from.number("length_mm", {.at_most = 200, .above = 0});
    to.impedance_ohm = from.number_or("impedance_ohm", to.impedance_ohm, ohms);
    to.gamma0_per_mm =
        from.number_or("gamma0_per_mm", to.gamma0_per_mm, {.at_least = 0, .at_most = 0.1});
    to.a1 = from.number_or("a1", to.a1, {.at_least = 0, .at_most = 0.1});
    to.a2 = from.number_or("a2", to.a2, {.at_least = 0, .at_most = 0.1});
    to.delay_ns_per_mm =
        from.number_or("delay_ns_per_mm", to.delay_ns_per_mm, {.at_least = 0, .at_most = 0.1});
    to.ball_f = from.number_or("ball_ff", 0, {.at_least = 0, .at_most = 10000}) * 1e-15;
    from.finish();
    return to;
}

Stub read_stub(const Object& from) {
    Stub to;
    to.length_mm = from.number("length_mm", {.at_most = 50, .above = 0});
    to.impedance_ohm = from.number_or("impedance_ohm", to.impedance_ohm, ohms);
    to.permittivity =
        from.number_or("permittivity", to.permittivity, {.at_least = 1, .at_most = 20});
    to.loss_tangent =
        from.number_or("loss_tangent", to.loss_tangent, {.at_least = 0.001, .at_most = 0.1});
    from.finish();
    return to;
}

std::vector<CrosstalkSource> read_crosstalk(const List& from) {
    std::vector<CrosstalkSource> sources;
    if (from.size() > 8)
        from.node().complain("a list of " + std::to_string(from.size()), "at most 8 aggressors");
    for (const Node node : from) {
        const Object object = node.object();
        CrosstalkSource source;
        source.far_end = object.word("kind", {"far_end", "near_end"}) == 0;
        source.coupling_db = object.number("coupling_db", {.at_least = -120, .at_most = -6});
        source.phase_ui = object.number_or("phase_ui", -1, {.at_least = 0, .at_most = 1});
        object.finish();
        sources.push_back(source);
    }
    return sources;
}

}  // namespace

Transmitter read_transmitter(const Object& from) {
    Transmitter to;
    to.swing_mv = from.number("swing_mv", {.at_most = 5000, .above = 0});
    to.rise_s = from.number_or("rise_ps", 12, {.at_least = 0, .at_most = 1000}) * 1e-12;
    to.bandwidth_hz = from.number_or("bandwidth_ghz", 0, {.at_least = 0, .at_most = 1000}) * 1e9;
    const NumberRange taps{.at_least = -0.4, .at_most = 0.4};
    to.pre_tap = from.number_or("pre_tap", 0, taps);
    to.post_tap = from.number_or("post_tap", 0, taps);
    to.source_ohm = from.number_or("source_ohm", 50, {.at_least = 1, .at_most = 1000});
    to.pad_f = from.number_or("pad_ff", 0, {.at_least = 0, .at_most = 10000}) * 1e-15;
    from.finish();
    return to;
}

Line read_line(const Object& from, const Line& otherwise) {
    Line to = otherwise;
    to.length_mm = from.number_or("length_mm", to.length_mm, {.at_most = 5000, .above = 0});
    to.impedance_ohm = from.number_or("impedance_ohm", to.impedance_ohm, ohms);
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
    to.roughness_um =
        from.number_or("roughness_um", to.roughness_um, {.at_least = 0, .at_most = 20});
    if (const auto steps = from.find("steps")) to.steps = read_steps(steps->list());
    from.finish();
    return to;
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

void read_channel_parts(const Object& from, LaneChannel& to) {
    if (const auto package = from.object_if("package")) {
        if (const auto near = package->object_if("near")) to.near_package = read_package(*near);
        if (const auto far = package->object_if("far")) to.far_package = read_package(*far);
        package->finish();
    }
    if (const auto stub = from.object_if("stub")) {
        if (const auto near = stub->object_if("near")) to.near_stub = read_stub(*near);
        if (const auto far = stub->object_if("far")) to.far_stub = read_stub(*far);
        stub->finish();
    }
    if (const auto crosstalk = from.find("crosstalk"))
        to.crosstalk = read_crosstalk(crosstalk->list());
    if (const auto compression = from.object_if("compression")) {
        to.knee_mv = compression->number("knee_mv", {.at_least = 10, .at_most = 10000});
        compression->finish();
    }
}

std::vector<LaneChannel> read_lanes(const List& from, const LaneChannel& shared,
                                    const std::string& folder) {
    std::vector<LaneChannel> lanes;
    if (from.size() < 1 || from.size() > most_lanes)
        from.node().complain("a list of " + std::to_string(from.size()),
                             "from 1 to " + std::to_string(most_lanes) + " lanes");
    for (const Node node : from) {
        if (lanes.size() >= most_lanes) break;
        const Object object = node.object();
        LaneChannel lane = shared;
        const std::optional<Object> line = object.object_if("line");
        const std::optional<Object> file = object.object_if("touchstone");
        if (line.has_value() == file.has_value())
            node.complain(line ? "both line and touchstone" : "neither line nor touchstone",
                          "one of line and touchstone");
        if (line) lane.line = read_line(*line, shared.line);
        if (file) lane.touchstone = read_touchstone_channel(*file, folder);
        read_channel_parts(object, lane);
        lane.swing_mv = object.number_or("swing_mv", 0, {.at_most = 5000, .above = 0});
        object.finish();
        lanes.push_back(std::move(lane));
    }
    return lanes;
}

}  // namespace lanewright::sim
