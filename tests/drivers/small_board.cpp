#include "small_board.hpp"

namespace lanewright::test {

namespace {

FieldDescription field(const char* name, unsigned high, unsigned low, Role role, Access access) {
    FieldDescription out;
    out.name = name;
    out.low_bit = low;
    out.high_bit = high;
    out.role = role;
    out.access = access;
    return out;
}

RegisterDescription reg(const char* name, std::uint32_t address, unsigned width, bool per_lane,
                        std::vector<FieldDescription> fields) {
    RegisterDescription out;
    out.name = name;
    out.address = address;
    out.width_bits = width;
    out.per_lane = per_lane;
    out.fields = std::move(fields);
    return out;
}

RegisterMapDescription registers() {
    RegisterMapDescription map;
    map.lane_count = 2;
    map.lane_base = 0x100;
    map.lane_stride = 0x40;
    const auto ro = Access::read_only;
    const auto rw = Access::read_write;
    FieldDescription dwell = field("dwell_log2", 5, 0, Role::control, rw);
    dwell.lowest = 10;
    dwell.highest = 40;
    map.registers = {
        reg("ID", 0, 32, false, {field("value", 31, 0, Role::none, ro)}),
        reg("SCRATCH", 4, 32, false, {field("value", 31, 0, Role::scratch, rw)}),
        reg("EQ", 0, 16, true,
            {field("a", 3, 0, Role::tuned, rw), field("b", 7, 4, Role::tuned, rw)}),
        reg("LOAD", 1, 8, true, {field("strobe", 0, 0, Role::control, Access::self_clearing)}),
        reg("CTL", 2, 16, true,
            {field("hold", 0, 0, Role::control, rw), field("trim", 7, 4, Role::none, rw),
             field("spare", 8, 8, Role::control, rw)}),
        reg("STATUS", 3, 16, true, {field("lock", 0, 0, Role::none, ro)}),
        reg("NOTE", 4, 32, true, {field("value", 31, 0, Role::scratch, rw)}),
        reg("SETUP", 5, 16, true, {dwell, field("ratio_exponent", 11, 8, Role::control, rw)}),
        reg("GO", 6, 8, true, {field("go", 0, 0, Role::control, Access::self_clearing)}),
        reg("MONITOR", 7, 16, true,
            {field("busy", 0, 0, Role::none, ro), field("closed", 1, 1, Role::none, ro)}),
        reg("UP", 8, 16, true, {field("steps", 8, 0, Role::none, ro)}),
        reg("DOWN", 9, 16, true, {field("steps", 8, 0, Role::none, ro)}),
        reg("LEFT", 10, 16, true, {field("steps", 6, 0, Role::none, ro)}),
        reg("RIGHT", 11, 16, true, {field("steps", 6, 0, Role::none, ro)}),
        reg("KEY", 12, 32, true, {field("value", 31, 0, Role::control, Access::write_only)}),
    };
    return map;
}

WaitStep wait(const char* reg_name, const char* name, std::uint32_t equals, double timeout_ms) {
    WaitStep step;
    step.field = {reg_name, name};
    step.equals = equals;
    step.timeout_ms = timeout_ms;
    return step;
}

}  // namespace

BoardFile small_board() {
    BoardFile board;
    board.name = "small";
    board.dialect = {"framed", 50, 4, 3};
    board.identity.expect = {{"chip", {"ID", "value"}, 0x1234}};
    board.map = registers();
    board.scratch = {"SCRATCH", "value"};
    board.ordinal = FieldName{"NOTE", "value"};
    board.dimensions = {{"a", {"EQ", "a"}, PartName::other, {}},
                        {"b", {"EQ", "b"}, PartName::other, {}}};
    board.forbidden = {{{{"a", 15, 15}, {"b", 15, 15}}, "too much load"}};
    board.bit_rate_gbps = 25;
    WaitStep lock = wait("STATUS", "lock", 1, 5);
    lock.lock = true;
    board.apply = {WriteStep{{"CTL", "hold"}, 1u},
                   WriteCodesStep{},
                   WriteStep{{"LOAD", "strobe"}, 1u},
                   PauseStep{0.2},
                   lock,
                   WriteStep{{"CTL", "hold"}, 0u}};
    board.bring_up = {WriteStep{{"KEY", "value"}, 0xABCDu}, WriteStep{{"CTL", "hold"}, 0u}};
    WaitStep done = wait("MONITOR", "busy", 0, 50);
    done.plus_dwell = true;
    board.monitor.sequence = {WriteStep{{"NOTE", "value"}, Parameter::ordinal},
                              WriteStep{{"SETUP", "ratio_exponent"}, Parameter::ratio_exponent},
                              WriteStep{{"SETUP", "dwell_log2"}, Parameter::dwell_log2},
                              WriteStep{{"GO", "go"}, 1u},
                              done,
                              ReadStep{{"MONITOR", "closed"}, "closed"},
                              ReadStep{{"UP", "steps"}, "up"},
                              ReadStep{{"DOWN", "steps"}, "down"},
                              ReadStep{{"LEFT", "steps"}, "left"},
                              ReadStep{{"RIGHT", "steps"}, "right"}};
    board.monitor.error_definition = "pattern";
    board.monitor.height = {2.0, 0.1, 511, 1.0};
    board.monitor.width = {1.0 / 64, 0.1, 127, 0.006};
    board.monitor.lowest_error_ratio = 1e-9;
    board.cost = {0.001, 0.0002, 1};
    return board;
}

namespace {

WriteStep write_changed(const char* reg_name, const char* name, Parameter parameter) {
    return {{reg_name, name}, parameter, true};
}

void add_counted_registers(RegisterMapDescription& map) {
    const auto ro = Access::read_only;
    const auto rw = Access::read_write;
    const std::vector<RegisterDescription> more = {
        reg("HEAT", 6, 16, false, {field("value", 11, 0, Role::none, ro)}),
        reg("GUARD", 8, 32, false, {field("value", 31, 0, Role::scratch, rw)}),
        reg("POINT", 13, 32, true,
            {field("offset", 8, 0, Role::control, rw), field("phase", 15, 9, Role::control, rw)}),
        reg("COUNT", 14, 8, true, {field("go", 0, 0, Role::control, Access::self_clearing)}),
        reg("ERRORS", 15, 32, true,
            {field("count", 23, 0, Role::none, ro), field("full", 31, 31, Role::none, ro)}),
        reg("BITS", 16, 16, true, {field("log2", 5, 0, Role::none, ro)}),
        reg("ORIGIN", 17, 32, true,
            {field("offset", 8, 0, Role::none, ro), field("phase", 15, 9, Role::none, ro)}),
        reg("TAG", 18, 16, true, {field("value", 7, 0, Role::none, ro)}),
    };
    map.registers.insert(map.registers.end(), more.begin(), more.end());
}

}  // namespace

BoardFile small_counted_board() {
    BoardFile board = small_board();
    add_counted_registers(board.map);
    board.telemetry = {{"heat_c", {"HEAT", "value"}, 0.25, -64}};
    MonitorDescription& monitor = board.monitor;
    monitor.procedure = MonitorProcedure::counted;
    monitor.sequence.clear();
    monitor.height = {2.0, 0.1, 255, 0, 256, 0};
    monitor.width = {1.0 / 64, 0.1, 63, 0, 64, 0};
    monitor.lowest_error_ratio = 0;
    CountedDescription& counted = monitor.counted;
    counted.least_bits = 1 << 10;
    counted.most_bits = std::uint64_t{1} << 40;
    counted.bits_by_powers_of_two = true;
    counted.most_errors = 0xFFFFFF;
    counted.begin = {WriteStep{{"NOTE", "value"}, Parameter::ordinal}};
    counted.origin.sequence = {ReadStep{{"ORIGIN", "offset"}, "offset"},
                               ReadStep{{"ORIGIN", "phase"}, "phase"}};
    WaitStep done = wait("MONITOR", "busy", 0, 10);
    done.plus_dwell = true;
    counted.look = {write_changed("SETUP", "dwell_log2", Parameter::dwell_log2),
                    write_changed("POINT", "phase", Parameter::phase_code),
                    write_changed("POINT", "offset", Parameter::offset_code),
                    WriteStep{{"COUNT", "go"}, 1u},
                    done,
                    ReadStep{{"ERRORS", "count"}, "errors"},
                    ReadStep{{"ERRORS", "full"}, "saturated"},
                    ReadStep{{"BITS", "log2"}, "bits_log2"}};
    return board;
}

}  // namespace lanewright::test
