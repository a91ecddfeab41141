#pragma once
// Purpose:   what a store operation throws on its own thread; turned into a Fault at the seam.
// Ownership: value. Threads: no shared state.

#include <stdexcept>
#include <string>

namespace lanewright {

class StoreError : public std::runtime_error {
  public:
    using std::runtime_error::runtime_error;
};

// The store is fine; the run that was named is not in it.
class NoSuchRun : public StoreError {
  public:
    using StoreError::StoreError;
};

}  // namespace lanewright
