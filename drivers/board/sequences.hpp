#pragma once
// Purpose:   turns the board file's declared sequences into register operations for one lane, and
//            the reply back into the named values that the procedures use.
// Ownership: a Compiled owns its batch; refers to nothing.
// Threads:   no shared state.

#include <cstdint>
#include <map>
#include <optional>
#include <string>
#include <vector>

#include "adapt/values/values.hpp"
#include "drivers/config/board_file.hpp"
#include "drivers/registers/register_map.hpp"

namespace lanewright {

// What the parameters of a sequence stand for.
struct SequenceValues {
    std::optional<Codes> codes;     // for write_codes
    std::optional<Codes> standing;  // needed with codes where the chip has no strobe
    std::uint32_t ordinal = 0;
    std::uint64_t dwell_bits = 0;
    double error_ratio = 0;
    double bit_rate_gbps = 0;                       // turns a dwell into time
    std::uint32_t offset_code = 0, phase_code = 0;  // of one look
};

// 2^n bits are the least power of two that covers the dwell.
std::uint32_t dwell_log2_of(std::uint64_t dwell_bits);
// The n whose 10^-n is nearest to the ratio, on the logarithmic scale.
std::uint32_t ratio_exponent_of(double error_ratio);

// Whether some step writes that parameter.
bool uses(const Sequence& sequence, Parameter parameter);

class Compiled {
  public:
    // What this reading has written to fields that a sequence writes only when they change.
    using Standing = std::map<FieldName, std::uint32_t>;

    Compiled() = default;
    explicit Compiled(Standing standing) : standing_(std::move(standing)) {}

    const Batch& batch() const { return batch_; }
    const Standing& standing() const { return standing_; }

    // Adds the steps from number `first` on. Cause::not_allowed as RegisterMap says.
    Result<void> add(const RegisterMap& map, const std::vector<DimensionDescription>& dimensions,
                     const Sequence& sequence, std::size_t first, Lane lane,
                     const SequenceValues& values);

    // Adds one read that belongs to no sequence; gives the number by which field() finds it. Fields
    // of one register that are read one after another share one read.
    Result<std::size_t> add_field(const RegisterMap& map, Lane lane, const FieldName& name);
    // Adds a write that belongs to no sequence, to a scratch field.
    Result<void> add_scratch(const RegisterMap& map, Lane lane, const FieldName& name,
                             std::uint32_t value);
    Result<void> add_pause(const RegisterMap& map, double seconds);

    // If the reply ended at a wait for lock: where that was.
    struct LockMissed {
        std::size_t added = 0;  // 0: in the sequence added first
        std::size_t step = 0;   // in that sequence
    };
    std::optional<LockMissed> lock_missed(const BatchReply& reply) const;

    // The codes as read back, in the order of the dimensions; those of fields that cannot be read
    // back are as written. Only after the writes were carried out.
    Codes codes_read_back(const BatchReply& reply) const;

    // Values read and combined, by their names: of all sequences, or of the one added as the n-th.
    using Values = std::map<std::string, std::uint32_t>;
    Values values(const BatchReply& reply) const;
    Values values(const BatchReply& reply, std::size_t sequence) const;

    // What add_field's read of that number gave, in the field's own units; empty where the batch
    // ended before it.
    std::optional<std::uint32_t> field(std::size_t number, const BatchReply& reply) const;

  private:
    struct FieldRead {
        std::size_t operation = 0;
        FieldPlace place;
        std::optional<std::uint32_t> value(const BatchReply& reply) const;
    };
    struct NamedRead {
        std::string as;
        std::size_t sequence = 0;
        FieldRead read;
    };
    struct NamedCombine {
        CombineStep step;
        std::size_t sequence = 0;
    };
    struct CodeWrite {
        std::size_t operation = 0;
        FieldPlace place;
    };

    Result<void> add_step(const RegisterMap& map,
                          const std::vector<DimensionDescription>& dimensions, const Step& step,
                          Lane lane, const SequenceValues& values);
    Result<void> add_codes(const RegisterMap& map,
                           const std::vector<DimensionDescription>& dimensions, Lane lane,
                           const SequenceValues& values);
    Result<void> add_write(const RegisterMap& map, const WriteStep& step, Lane lane,
                           const SequenceValues& values);
    Result<FieldRead> add_read(const RegisterMap& map, const FieldName& name, Lane lane);

    Batch batch_;
    Standing standing_;
    std::size_t joinable_ = 0;  // the batch's size while its last write may take in another
    std::vector<NamedRead> reads_;
    std::vector<NamedCombine> combines_;
    std::vector<FieldRead> fields_;
    std::vector<CodeWrite> code_writes_;            // by dimension
    std::map<std::size_t, LockMissed> lock_waits_;  // by operation
    std::size_t sequences_added_ = 0;
};

}  // namespace lanewright
