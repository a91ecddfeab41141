#pragma once
// Purpose:   what a store operation throws on its own thread; turned into a Fault at the seam.
// Ownership: value. Threads: no shared state.

#include <stdexcept>
#include <string>

#include "drivers/faults/fault.hpp"

namespace lanewright {

// The store cannot be read or written.
class StoreError : public std::runtime_error {
  public:
    explicit StoreError(const std::string& what, Cause cause = Cause::io)
        : std::runtime_error(what), cause_(cause) {}

    Fault fault() const {
        Fault out;
        out.cause = cause_;
        out.what = what();
        return out;
    }

  private:
    Cause cause_;
};

// It can be read, but what stands there is not what this program understands or was asked for.
class BadStoreData : public StoreError {
  public:
    explicit BadStoreData(const std::string& what) : StoreError(what, Cause::bad_data) {}
};

// The store is fine; the run that was named is not in it.
class NoSuchRun : public BadStoreData {
  public:
    using BadStoreData::BadStoreData;
};

}  // namespace lanewright
