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
    double bit_rate_gbps = 0;  // turns a dwell into time
};

// 2^n bits are the least power of two that covers the dwell.
std::uint32_t dwell_log2_of(std::uint64_t dwell_bits);
// The n whose 10^-n is nearest to the ratio, on the logarithmic scale.
std::uint32_t ratio_exponent_of(double error_ratio);

// Whether some step writes that parameter.
bool uses(const Sequence& sequence, Parameter parameter);

class Compiled {
  public:
    const Batch& batch() const { return batch_; }

    // Adds the steps from number `first` on. Cause::not_allowed as RegisterMap says.
    Result<void> add(const RegisterMap& map, const std::vector<DimensionDescription>& dimensions,
                     const Sequence& sequence, std::size_t first, Lane lane,
                     const SequenceValues& values);

    // If the reply ended at a wait for lock: where that was.
    struct LockMissed {
        std::size_t added = 0;  // 0: in the sequence added first
        std::size_t step = 0;   // in that sequence
    };
    std::optional<LockMissed> lock_missed(const BatchReply& reply) const;

    // The codes as read back, in the order of the dimensions; those of fields that cannot be read
    // back are as written. Only after the writes were carried out.
    Codes codes_read_back(const BatchReply& reply) const;

    // Values read and combined, by their names.
    std::map<std::string, std::uint32_t> values(const BatchReply& reply) const;

  private:
    struct NamedRead {
        std::string as;
        std::size_t operation = 0;
        FieldPlace place;
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
    Result<void> add_read(const RegisterMap& map, const ReadStep& step, Lane lane);

    Batch batch_;
    std::vector<NamedRead> reads_;
    std::vector<CombineStep> combines_;
    std::vector<CodeWrite> code_writes_;            // by dimension
    std::map<std::size_t, LockMissed> lock_waits_;  // by operation
    std::size_t sequences_added_ = 0;
};

}  // namespace lanewright
