#include "fuzz_framed.hpp"

#include <algorithm>
#include <map>
#include <set>
#include <stdexcept>

#include "dialect_desk.hpp"

namespace lanewright::test {

namespace {

// Plays a script: each step is an operation byte, a length byte, and so many bytes.
class Player {
  public:
    void step(unsigned operation, const Octets& content) {
        switch (operation % 9) {
            case 0:
                look(desk_.dialect.step(bytes_of(content), desk_.now));
                break;
            case 1:
                hear(content);
                break;
            case 2:
                answer(content);
                break;
            case 3:
                submit(content);
                break;
            case 4:
                look(desk_.tick(std::chrono::milliseconds(content.empty() ? 1 : content[0])));
                break;
            case 5:
                relink();
                break;
            case 6:
                look(desk_.dialect.admit(desk_.now));
                break;
            case 7:
                look(desk_.dialect.again(pick(content), desk_.now));
                break;
            default:
                give_up(pick(content));
                break;
        }
    }

  private:
    // A frame that is good whatever it says.
    void hear(const Octets& content) {
        if (!content.empty()) look(desk_.hear({content}));
    }

    // A reply, an error or a hello's answer to the frame sent last.
    void answer(const Octets& content) {
        if (last_sent_.size() < 7) return;
        if (last_sent_[0] == 1) {
            std::uint32_t session = 0;
            for (unsigned i = 0; i < 4; ++i) session += std::uint32_t{last_sent_[3 + i]} << (8 * i);
            const std::uint32_t boot = content.empty() ? 7 : content[0] % 4 + 5;
            const bool resumed = content.size() > 1 && content[1] % 2 == 1;
            look(desk_.hear({hello_answer(last_sent_[1], session, boot, resumed, 3)}));
            return;
        }
        const bool error = !content.empty() && content[0] % 2 == 1;
        Octets reply = reply_to(last_sent_, content);
        if (error) reply[0] = 0x83;
        look(desk_.hear({reply}));
    }

    void submit(const Octets& content) {
        const bool strobe = !content.empty() && content[0] % 2 == 1;
        const auto urgency = content.size() > 1 ? Urgency::identity : Urgency::ordinary;
        open_.insert(next_);
        look(desk_.submit(next_++, strobe ? desk_.strobe_batch() : desk_.read_batch(), urgency));
    }

    void relink() {
        desk_.dialect.link_lost();
        desk_.dialect.link_reopened();
        look(desk_.tick());
    }

    void give_up(Ticket ticket) {
        open_.erase(static_cast<std::uint64_t>(ticket));
        look(desk_.dialect.abandon(ticket, desk_.now));
    }

    Ticket pick(const Octets& content) const {
        return static_cast<Ticket>(content.empty() ? 1 : content[0] % (next_ + 1));
    }

    void look(const DialectStep& step) {
        for (const Octets& payload : payloads_in(step.send)) {
            last_sent_ = payload;
            if (payload[0] != 2) continue;
            // Slot, count and tag are the batch's name to the board.
            const Octets name(payload.begin() + 1, payload.begin() + 6);
            const auto known = sent_.emplace(name, payload).first;
            if (known->second != payload) throw std::runtime_error("one name for two batches");
        }
        for (const Finished& finished : step.finished) {
            if (open_.erase(static_cast<std::uint64_t>(finished.ticket)) == 0) {
                throw std::runtime_error("a ticket was finished that was not open");
            }
        }
    }

    Desk desk_;
    std::set<std::uint64_t> open_;
    std::map<Octets, Octets> sent_;
    Octets last_sent_;
    std::uint64_t next_ = 1;
};

}  // namespace

void fuzz_framed(std::span<const std::uint8_t> script) {
    Player player;
    for (std::size_t at = 0; at + 1 < script.size();) {
        const unsigned operation = script[at];
        const std::size_t length = std::min<std::size_t>(script[at + 1], script.size() - at - 2);
        const auto content = script.subspan(at + 2, length);
        player.step(operation, Octets(content.begin(), content.end()));
        at += 2 + length;
    }
}

}  // namespace lanewright::test
