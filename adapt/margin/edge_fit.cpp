#include "adapt/margin/edge_fit.hpp"

#include <algorithm>
#include <cmath>
#include <utility>
#include <vector>

#include "adapt/stats/normal.hpp"
#include "adapt/stats/q_scale.hpp"

namespace lanewright {
namespace {

constexpr double level_spread = 10;  // Q: next to nothing known of where the line runs
constexpr double slope_doubt = 1.1;  // of the logarithm of the likely fall, 1 sigma
constexpr double most_ratio = 0.1;   // beyond, an edge is no line any more
constexpr int most_rounds = 25;

using Row = std::array<double, most_fitted>;

struct Place {
    double steps = 0;
    Seen seen;
    double q = 0;            // present estimate of what the monitor shows there
    double information = 0;  // about it
    double target = 0;       // where Newton's step leads
};

// The positions of a fit; those beyond its capacity are left out.
class Places {
  public:
    void add(const Place& place) {
        if (count_ < all_.size()) all_[count_++] = place;
    }
    std::span<const Place> all() const { return {all_.data(), count_}; }
    std::span<Place> all() { return {all_.data(), count_}; }
    bool empty() const { return count_ == 0; }

  private:
    std::array<Place, most_fitted> all_;
    std::size_t count_ = 0;
};

// The prior covariance of what the monitor shows, around a line through `edge` of slope `fall`.
struct Prior {
    double edge, fall, slope_spread, bend;  // bend: of the square of the distance
    double shift, scatter;                  // Q, of a position and of one look

    // The fall is lognormal around the likely one: near its present value as good as a normal one
    // with this mean and spread.
    Prior(const EdgeFit& fit, const EdgeModel& model)
        : edge(fit.edge_steps),
          fall(fit.fall * (1 - std::log(fit.fall / model.likely_fall))),
          slope_spread(fit.fall * slope_doubt),
          bend(0.5 * bend_per_q * fit.fall * fit.fall),
          shift(fit.fall * model.nonlinearity_steps),
          scatter(fit.fall * model.scatter_steps) {}

    double smooth(double a, double b) const {
        const double u = a - edge, v = b - edge;
        return level_spread * level_spread + slope_spread * slope_spread * u * v +
               bend * bend * u * u * v * v;
    }
    // No bend fits everywhere: a third of it stays for each position by itself.
    double misfit(double a) const { return bend * (a - edge) * (a - edge) / 3; }
    // Between two positions the monitor's shift is interpolated.
    static double weight(double steps, double place) {
        return std::max(0.0, 1 - std::abs(steps - place));
    }
};

// Cholesky factor of covariance plus noise, and solutions with it.
class Factor {
  public:
    Factor(std::span<const Place> places, const Prior& prior) : count_(places.size()) {
        for (std::size_t i = 0; i < count_; ++i) {
            for (std::size_t j = 0; j <= i; ++j) {
                double sum = prior.smooth(places[i].steps, places[j].steps);
                if (i == j) {
                    const double misfit = prior.misfit(places[i].steps);
                    sum += prior.shift * prior.shift + prior.scatter * prior.scatter +
                           misfit * misfit + 1 / places[i].information;
                }
                for (std::size_t k = 0; k < j; ++k) sum -= row_[i][k] * row_[j][k];
                row_[i][j] = i == j ? std::sqrt(std::max(sum, 1e-12)) : sum / row_[j][j];
            }
        }
    }
    // L x = b
    Row forward(const Row& b) const {
        Row x{};
        for (std::size_t i = 0; i < count_; ++i) {
            double sum = b[i];
            for (std::size_t k = 0; k < i; ++k) sum -= row_[i][k] * x[k];
            x[i] = sum / row_[i][i];
        }
        return x;
    }
    // transposed L x = b
    Row backward(const Row& b) const {
        Row x{};
        for (std::size_t i = count_; i-- > 0;) {
            double sum = b[i];
            for (std::size_t k = i + 1; k < count_; ++k) sum -= row_[k][i] * x[k];
            x[i] = sum / row_[i][i];
        }
        return x;
    }
    double dot(const Row& a, const Row& b) const {
        double sum = 0;
        for (std::size_t i = 0; i < count_; ++i) sum += a[i] * b[i];
        return sum;
    }

  private:
    std::size_t count_;
    std::array<Row, most_fitted> row_{};
};

// Covariance of what the monitor shows at `steps` with what it shows at the places.
Row shown_with(std::span<const Place> places, const Prior& prior, double steps) {
    Row row{};
    for (std::size_t i = 0; i < places.size(); ++i) {
        row[i] = prior.smooth(steps, places[i].steps) +
                 prior.shift * prior.shift * Prior::weight(steps, places[i].steps);
    }
    return row;
}

double shown_variance(const Prior& prior, double steps) {
    const double part = steps - std::floor(steps);
    return prior.smooth(steps, steps) +
           prior.shift * prior.shift * (part * part + (1 - part) * (1 - part));
}

// Of the fall of Q with what is shown at the places.
Row fall_with(std::span<const Place> places, const Prior& prior) {
    Row row{};
    for (std::size_t i = 0; i < places.size(); ++i) {
        row[i] = -prior.slope_spread * prior.slope_spread * (places[i].steps - prior.edge);
    }
    return row;
}

double left_over(double variance, const Factor& factor, const Row& with) {
    const Row part = factor.forward(with);
    return std::max(variance - factor.dot(part, part), 1e-12);
}

void look_again(Place& place) {
    const Seen& seen = place.seen;
    const Pull pull = pull_of(seen.errors, seen.bits, seen.at_least, place.q);
    place.information = std::max(pull.information, 1e-6);
    // A step of a few units of Q is far beyond where the quadratic holds.
    place.target = place.q + std::clamp(pull.gradient / place.information, -1.5, 1.5);
}

Places places_of(std::span<const Seen> seen, const EdgeModel& model) {
    const auto telling =
        std::count_if(seen.begin(), seen.end(), [](const Seen& each) { return tells(each); });
    std::vector<Place> useful;
    for (const Seen& each : seen) {
        const bool far_out = each.errors > 0 && each.ratio() > most_ratio;
        if (far_out && (telling >= 2 || !tells(each))) continue;
        useful.push_back({static_cast<double>(each.steps), each, each.q, 0, 0});
    }
    if (useful.size() > most_fitted) {
        const auto distance = [&](const Place& each) { return std::abs(each.q - model.wanted_q); };
        std::nth_element(useful.begin(), useful.begin() + most_fitted, useful.end(),
                         [&](const Place& a, const Place& b) { return distance(a) < distance(b); });
    }
    Places places;
    for (const Place& place : useful) places.add(place);
    return places;
}

// Places ordered by how well they tell where the ratio wanted is reached: near to it, with errors
// enough.
double distance_of(const Place& place, const EdgeModel& model) {
    const double sigma = place.seen.errors > 0 ? 3 / std::sqrt(place.seen.errors) : 100;
    return std::abs(place.q - model.wanted_q) + sigma;
}

const Place& best_told(std::span<const Place> places, const EdgeModel& model) {
    return *std::min_element(places.begin(), places.end(), [&](const Place& a, const Place& b) {
        return distance_of(a, model) < distance_of(b, model);
    });
}

// A first line: least squares through the positions that tell a Q, or by the likely slope through
// the best of them.
EdgeFit first_line(std::span<const Place> places, const EdgeModel& model) {
    double weights = 0, steps = 0, q = 0;
    const auto weight_of = [&](const Place& place) {
        // What lies far out counts less: the line bends.
        const double bend = bend_per_q * (place.q - model.wanted_q) * (place.q - model.wanted_q);
        return place.seen.errors > 0
                   ? 1 / (1 / expected_information(place.seen.bits, place.q) + bend * bend)
                   : 0;
    };
    for (const Place& place : places) {
        weights += weight_of(place);
        steps += weight_of(place) * place.steps;
        q += weight_of(place) * place.q;
    }
    EdgeFit fit;
    fit.fall = model.likely_fall;
    if (!(weights > 0)) return fit;
    steps /= weights;
    q /= weights;
    double square = 0, product = 0;
    for (const Place& place : places) {
        square += weight_of(place) * (place.steps - steps) * (place.steps - steps);
        product += weight_of(place) * (place.steps - steps) * (place.q - q);
    }
    fit.slope_known = square > 0 && product < 0;
    if (fit.slope_known) {
        // Few errors at neighbours tell little: the likely slope joins in.
        const double spread = 1.5 * model.likely_fall;
        const double guess = 1 / (spread * spread);
        fit.fall =
            (-product + guess * std::max(model.likely_fall, -product / square)) / (square + guess);
        fit.edge_steps = steps - (model.wanted_q - q) / fit.fall;
    } else {
        const Place& best = best_told(places, model);
        fit.edge_steps = best.steps - (model.wanted_q - best.q) / fit.fall;
    }
    return fit;
}

// One step of Newton's method for the line and for what is shown at every position. Returns by how
// much the edge moved, in units of Q.
double improve(std::span<Place> places, const EdgeModel& model, EdgeFit& fit) {
    const Prior prior(fit, model);
    for (Place& place : places) look_again(place);
    const Factor factor(places, prior);
    Row away{};
    for (std::size_t i = 0; i < places.size(); ++i) {
        away[i] = places[i].target - model.wanted_q + prior.fall * (places[i].steps - prior.edge);
    }
    const Row weights = factor.backward(factor.forward(away));
    for (std::size_t i = 0; i < places.size(); ++i) {
        // What is shown equals the target less its noise.
        const double shown = places[i].target - weights[i] / places[i].information;
        places[i].q += std::clamp(shown - places[i].q, -2.0, 2.0);
    }
    const double q = factor.dot(shown_with(places, prior, fit.edge_steps), weights);
    const double fall = prior.fall + factor.dot(fall_with(places, prior), weights);
    fit.fall = std::clamp(fall, 0.5 * fit.fall, 2 * fit.fall);
    fit.edge_steps += std::clamp(q, -1.0, 1.0) / fit.fall;
    return std::abs(q);
}

void add_errors(std::span<const Place> places, const EdgeModel& model, EdgeFit& fit) {
    const Prior prior(fit, model);
    const Factor factor(places, prior);
    const auto error_at = [&](double steps) {
        const Row with = shown_with(places, prior, steps);
        return std::sqrt(left_over(shown_variance(prior, steps), factor, with)) / fit.fall;
    };
    // Close to a position that was counted well the edge is known best; where it may lie instead
    // it is known less, and that is what its limits must hold.
    const auto wary_error = [&](double steps) {
        const double error = error_at(steps);
        return std::max({error, error_at(steps - error), error_at(steps + error)});
    };
    fit.edge_error = wary_error(fit.edge_steps);
    fit.decade_steps = fit.edge_steps + (model.wanted_q - model.decade_q) / fit.fall;
    fit.decade_error = wary_error(fit.decade_steps);
    fit.fall_error = std::sqrt(
        left_over(prior.slope_spread * prior.slope_spread, factor, fall_with(places, prior)));
}

// One position alone tells a Q: the edge then follows from how fast Q falls, and that from a broad
// guess and from where there were no errors or nearly half. Summed over falls, as what is left is
// no bell curve.
EdgeFit fit_by_guess(std::span<const Seen> seen, const EdgeModel& model, const Place& told) {
    constexpr double no_slope_q = 1.2;  // what positions beyond all errors may still show
    constexpr int falls = 21;
    const double lacking = model.wanted_q - told.q;
    const double own = 1 / std::sqrt(std::max(told.information, 1e-6));
    double weights = 0, edge = 0, edge_square = 0, mean_fall = 0, fall_square = 0;
    for (int i = 0; i < falls; ++i) {
        const double away = 6.0 * i / (falls - 1) - 3;
        const double fall = model.likely_fall * std::exp(slope_doubt * away);
        double log_weight = -0.5 * away * away;
        for (const Seen& each : seen) {
            const double q = told.q - fall * (each.steps - told.steps);
            if (each.errors == 0) {
                if (q < 8) log_weight -= each.bits * normal_tail(q);
            } else if (each.steps > told.steps && q > no_slope_q) {
                log_weight -= 2 * (q - no_slope_q) * (q - no_slope_q);
            }
        }
        const double weight = std::exp(log_weight);
        const double here = told.steps - lacking / fall;
        if (here < model.least_steps) continue;
        const double bend = 0.5 * bend_per_q * lacking * lacking;
        weights += weight;
        edge += weight * here;
        edge_square += weight * (here * here + (own * own + bend * bend) / (fall * fall));
        mean_fall += weight * fall;
        fall_square += weight * fall * fall;
    }
    EdgeFit fit;
    if (!(weights > 0)) {
        // Nothing fits: between the position told and the nearest one without errors.
        fit.fall = model.likely_fall;
        fit.edge_steps = told.steps - 0.5;
        fit.edge_error = fit.decade_error = 0.5;
    } else {
        fit.fall = mean_fall / weights;
        fit.fall_error = std::sqrt(std::max(fall_square / weights - fit.fall * fit.fall, 0.0));
        fit.edge_steps = edge / weights;
        const double variance = edge_square / weights - fit.edge_steps * fit.edge_steps;
        fit.edge_error = std::hypot(std::sqrt(std::max(variance, 0.0)), model.nonlinearity_steps,
                                    model.scatter_steps);
    }
    fit.decade_steps = fit.edge_steps + (model.wanted_q - model.decade_q) / fit.fall;
    fit.decade_error = fit.edge_error;
    return fit;
}

}  // namespace

bool tells(const Seen& seen) {
    constexpr double far_outside = 0.2;
    return seen.errors > 0 && !seen.at_least && seen.ratio() < far_outside;
}

EdgeFit fit_edge(std::span<const Seen> seen, const EdgeModel& model) {
    Places kept = places_of(seen, model);
    const std::span<Place> places = kept.all();
    EdgeFit fit = first_line(places, model);
    if (places.empty()) return fit;
    if (!fit.slope_known) {
        Place told = best_told(places, model);
        look_again(told);
        return fit_by_guess(seen, model, told);
    }
    constexpr double close_enough = 1e-4;
    for (int round = 0; round < most_rounds; ++round) {
        if (improve(places, model, fit) < close_enough && round > 2) break;
    }
    add_errors(places, model, fit);
    return fit;
}

Foresight::Foresight(std::span<const Seen> seen, const EdgeModel& model, const EdgeFit& fit)
    : model_(model), fit_(fit) {
    for (const Place& place : places_of(seen, model).all()) {
        const double q = fit.q_at(place.steps, model.wanted_q);
        known_[count_++] = {place.steps, std::max(expected_information(place.seen.bits, q), 1e-6)};
    }
}

double Foresight::variance(std::int32_t steps, double more_bits) const {
    Places places;
    const auto position = static_cast<double>(steps);
    double more = 0;
    if (more_bits > 0) {
        more = expected_information(more_bits, fit_.q_at(position, model_.wanted_q));
    }
    for (std::size_t i = 0; i < count_; ++i) {
        Place place;
        place.steps = known_[i].steps;
        place.information = known_[i].information;
        if (place.steps == position) place.information += std::exchange(more, 0);
        places.add(place);
    }
    if (more > 1e-6) {
        Place place;
        place.steps = position;
        place.information = more;
        places.add(place);
    }
    const Prior prior(fit_, model_);
    const Factor factor(places.all(), prior);
    double sum = 0;
    for (const double wanted : {fit_.edge_steps, fit_.decade_steps}) {
        const Row with = shown_with(places.all(), prior, wanted);
        sum += left_over(shown_variance(prior, wanted), factor, with);
    }
    return sum / (fit_.fall * fit_.fall);
}

}  // namespace lanewright
