#pragma once
// Purpose:   everything a board file says: link, dialect, identity, registers, tuned dimensions,
//            monitor, sequences, costs. Read once at start; the rest of the program sees this.
// Ownership: values only; the file's full text is kept for the manifest.
// Threads:   no shared state; const access from any thread.
// Errors:    decode collects every complaint of the file; a file with complaints gives no board.

#include <chrono>
#include <cstdint>
#include <optional>
#include <string>
#include <string_view>
#include <variant>
#include <vector>

#include "drivers/config/json_reader.hpp"
#include "drivers/config/register_description.hpp"

namespace lanewright {

struct TcpLinkDescription {
    std::string host;
    std::uint16_t port = 0;
};

struct SerialLinkDescription {
    std::string path;
    std::uint32_t baud = 921600;
    double settle_ms = 0;           // quiet time after opening, before the first byte
    std::optional<bool> dtr, rts;   // idle level; absent: left as it is
    bool hang_up_on_close = false;  // HUPCL: dropping DTR at close resets many boards
};

using LinkDescription = std::variant<TcpLinkDescription, SerialLinkDescription>;

// "tcp:HOST:PORT" (also tcp:[::1]:PORT) or "serial:PATH"; for serial the rest comes from `base`
// where that is serial too. On failure: empty, and `why` says what was expected.
std::optional<LinkDescription> parse_link(const std::string& text, const LinkDescription& base,
                                          std::string& why);
std::string text_of(const LinkDescription& link);  // tcp:HOST:PORT or serial:PATH

struct DialectDescription {
    std::string name;        // framed
    double deadline_ms = 0;  // for one answer, on top of what the batch itself waits
    int attempts = 0;        // in all
    double patience_s = 20;  // how long a lost link is tried again before the run gives up
};

struct IdentityExpectation {
    std::string name;  // chip, revision, ...
    FieldName field;
    std::uint32_t equals = 0;
};

struct IdentityReport {
    std::string name;
    FieldName field;
};

struct IdentityDescription {
    std::vector<IdentityExpectation> expect;  // any difference: the wrong board, nothing is written
    std::vector<IdentityReport> report;
    std::optional<FieldName> simulated;  // non-zero: results are marked as simulated
};

// What a sequence can refer to besides plain numbers.
enum class Parameter : std::uint8_t {
    ordinal,         // the reading's number within its lane
    dwell_log2,      // bits of one dwell, as the exponent of two that covers them
    dwell_bits_low,  // bits of one dwell, low and high 32 bits
    dwell_bits_high,
    ratio_exponent,  // error ratio as 10^-n
    offset_code,     // of the look at hand: where the monitor's sampler stands
    phase_code,
};

using Operand = std::variant<std::uint32_t, Parameter>;

struct WriteStep {
    FieldName field;
    Operand value;
    // Left out where this reading has written the same value there; neighbours in one register are
    // written together.
    bool when_changed = false;
};
struct WriteCodesStep {};  // writes the tuned dimensions, in the order the board file lists them
struct ReadStep {
    FieldName field;
    std::string as;  // the name by which the procedure picks the value up: up, down, left, ...
};
struct WaitStep {
    FieldName field;
    std::uint32_t equals = 0;
    double timeout_ms = 0;
    bool plus_dwell = false;  // the timeout counts from the end of the dwell
    bool lock = false;        // an expired wait means "no lock", not a fault
};
struct PauseStep {
    double pause_ms = 0;
};
struct CombineStep {  // (value of `high` << shift) | value of `low`
    std::string high, low, as;
    unsigned shift = 0;
};

using Step = std::variant<WriteStep, WriteCodesStep, ReadStep, WaitStep, PauseStep, CombineStep>;
using Sequence = std::vector<Step>;

enum class PartName : std::uint8_t {
    series_resistor,
    series_capacitor,
    shunt_resistor,
    shunt_capacitor,
    other
};

struct DimensionDescription {
    std::string name;  // r1, c1, r2, c2, ...
    FieldName field;
    PartName part = PartName::other;
    std::vector<double> nominal;  // ohm or farad by code; empty: not known
};

struct ForbiddenRange {
    std::string dimension;
    std::int32_t lowest = 0, highest = 0;
};
struct ForbiddenCombination {
    std::vector<ForbiddenRange> all_of;
    std::string why;
};

enum class MonitorProcedure : std::uint8_t {
    latched,  // finds the edges by itself and holds their distances in steps
    counted   // counts errors where it is told to look
};

struct StepSize {
    double size = 0;              // mV or UI a step
    double tolerance = 0;         // relative, of the step's calibration
    std::int32_t most_steps = 0;  // top of the counter; of a counted monitor: reach to either side
    double sigma = 0;             // repeatability of one edge, 1 sigma, mV or UI
    std::int32_t centre = 0;      // counted: the code of no offset
    double nonlinearity_steps = 0;  // counted: of one step's place, 1 sigma
};

// Where a counted monitor's looks are counted from: the data sampler's decision point.
struct OriginDescription {
    Sequence sequence;  // reads the codes `offset` and `phase` of it; empty: it is at the centres
    double tolerance_mv = 0, tolerance_ui = 0;  // to either side
};

// What a counting monitor has beside its step sizes.
struct CountedDescription {
    std::uint64_t least_bits = 0, most_bits = 0;  // of one look
    bool bits_by_powers_of_two = false;           // `look` is told an exponent
    std::uint64_t most_errors = 0;                // where the counter stops; 0: it does not
    std::uint32_t looks_a_batch = 16;             // at most
    std::uint32_t most_looks = 16;                // of one reading
    Sequence begin;                               // once a reading, behind `apply`
    Sequence look;                                // one dwell: point, start, wait, read
    OriginDescription origin;
};

struct MonitorDescription {
    MonitorProcedure procedure = MonitorProcedure::latched;
    std::string error_definition;   // pattern or decision
    std::string pattern;            // PRBS31, live, ...; free text
    StepSize height, width;         // mV; UI
    double lowest_error_ratio = 0;  // a latched monitor's own lower end
    std::vector<std::vector<std::uint16_t>>
        shared_by;               // lanes that share one monitor; others have their own
    Sequence sequence;           // latched: one margin reading
    bool four_edges = true;      // false: `height` and `width` only
    CountedDescription counted;  // where the procedure is that
};

// Read with every reading and kept with it: value = raw * scale + offset.
struct TelemetryField {
    std::string name;  // die_temperature_c, ...
    FieldName field;
    double scale = 1, offset = 0;
};

// What a lane's status must be before anything is measured.
struct StatusExpectation {
    std::string name;  // reference_clock, lock, pattern_sync, polarity, lane_order or loops
    FieldName field;
    std::uint32_t equals = 0;
    bool equals_lane = false;  // expected is the lane's number instead
};

// What the tests before a search must not exceed; what is absent has no limit.
struct PreflightLimits {
    std::optional<double> repeatability_mv, repeatability_ui;  // 1 sigma of one edge
    std::optional<double> return_mv, return_ui;  // moved by leaving the codes and coming back
    std::optional<double> settle_s;              // until readings stay the same
};

struct PreflightDescription {
    std::vector<StatusExpectation> items;  // in the order in which they are told
    PreflightLimits limits;
};

struct CostDescription {
    double settle_s = 0;
    double per_look_s = 0;
    std::uint32_t looks_per_margin = 1;
};

struct TemperatureCoefficients {
    double resistor_ppm_per_k = 0, capacitor_ppm_per_k = 0;
};

struct ExpectedLoss {
    double loss_db = 0, tolerance_db = 0;
};

struct BoardFile {
    std::string path, source;  // where it was read, and its full text
    std::string name;
    std::string description;
    LinkDescription link;
    DialectDescription dialect;
    IdentityDescription identity;
    RegisterMapDescription map;
    FieldName scratch;                  // for `check`; board-wide or per lane
    std::optional<FieldName> ordinal;   // per-lane scratch that carries the reading's ordinal
    std::optional<FieldName> sentinel;  // scratch that a reset clears; none needed where the
                                        // dialect tells a reset
    std::vector<DimensionDescription> dimensions;
    std::vector<ForbiddenCombination> forbidden;
    double bit_rate_gbps = 0;
    MonitorDescription monitor;
    std::vector<TelemetryField> telemetry;
    PreflightDescription preflight;
    Sequence apply, bring_up;
    CostDescription cost;
    TemperatureCoefficients temperature;
    std::vector<ExpectedLoss> expected_loss;  // by lane; empty: not stated
    bool strobe = true;  // the codes take effect together; else every intermediate combination
                         // must be allowed too
};

// Empty if there was any complaint about the file; `dialects` are the names that it may use.
std::optional<BoardFile> load_board_file(const std::string& path, Complaints& complaints,
                                         const std::vector<std::string_view>& dialects = {
                                             "framed"});
// `complaints` is the one the document was parsed with.
std::optional<BoardFile> decode_board_file(const Document& document, Complaints& complaints,
                                           const std::vector<std::string_view>& dialects = {
                                               "framed"});

// Every sequence of the file that may write: apply, the monitor's, bring_up.
std::vector<const Sequence*> writing_sequences(const BoardFile& board);

// The fields a run may write: tuned first, in the order of the dimensions, then the control and
// scratch fields that the sequences write, in the order in which they first appear. Self-clearing
// and write-only fields cannot be saved and are left out.
std::vector<FieldName> fields_to_save(const BoardFile& board);

}  // namespace lanewright
