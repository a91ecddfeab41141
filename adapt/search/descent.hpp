#pragma once
// Purpose:   coordinate descent with steps that start coarse and halve, and pattern moves (Hooke &
//            Jeeves, J. ACM 8, 212-229, 1961; on coordinate descent: Wright, Math. Program. 151,
//            3-34, 2015). Where no step along an axis improves any more, steps in a second set of
//            directions, oblique to the first, are tried, as a narrow ridge runs between the axes
//            (that more directions than axes may be polled: Kolda, Lewis & Torczon, SIAM Review 45,
//            385-482, 2003). It ends at codes that no step of either set improves: a local
//            optimum, as a descent does.
// Ownership: pure functions; moves and ledger belong to the caller.
// Threads:   one caller at a time.
//
// The descent is not kept as a state: it is run anew from its start over what has been read, and
// stops where it needs a reading that is not there. The same readings so give the same question.

#include <memory>
#include <span>
#include <string>
#include <vector>

#include "adapt/search/ledger.hpp"
#include "adapt/search/moves.hpp"
#include "adapt/search/procedure.hpp"

namespace lanewright {

struct Question {
    std::vector<Codes> wanted;  // not read yet; empty: finished
    std::string why;
    bool settled = false;  // a local optimum along the axes was reached: what follows is a bonus
};

// What a descent from `start` wants read next. `start` must be in the ledger. `oblique` steps are
// taken where `moves` lead no further, from level 1 on; after one that helps, `moves` go on with
// their smallest steps.
Question descend(const CodeSpace& space, const Moves& moves, const Moves& oblique,
                 const Ledger& ledger, Codes start);

std::unique_ptr<Procedure> make_descent(const LaneProblem&, std::span<const Lesson>, RandomKey);
std::unique_ptr<Procedure> make_descent_axes(const LaneProblem&, std::span<const Lesson>,
                                             RandomKey);

}  // namespace lanewright
