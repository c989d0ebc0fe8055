// Which graded mesh a request needs: nodes per element, growth of the elements, length of the first.
//
// In units of the relaxation time of the linearised equation, t_* = (|c1|^2 + 4 |c0 c2|)^(-1/2 alpha),
// the solution looks much the same for all parameters: the interpolation error depends on (m, q),
// alpha and b/t_* alone, up to a modest factor. The ladder below holds, per range of hurst, the cheapest
// of 180 meshes whose error of phi stayed below the level's in all, and below 0.6 of it in 99.99 %, of
// 115,000 random values (vol_of_vol .1 to 1, correlation -1 to .5 and half of them below -.85, mean
// reversion 0 to 3, maturities a day to 10 years, |u| to 1000, Im u 0 or -1/2).
#pragma once

#include <algorithm>
#include <cmath>
#include <complex>
#include <cstddef>
#include <iterator>

#include "volterra/graded_table.hpp"
#include "volterra/model.hpp"

namespace volterra {

struct graded_level {
    std::size_t nodes;  // m
    double ratio;       // q
    double first;       // largest b/t_*
    double accuracy;    // of phi, where the nonlinear solves stop
};

// Level l aims at 10^-(3 + l); the last two are finer than any tolerance needs.
inline constexpr std::size_t graded_levels = 12;

inline double graded_level_error(std::size_t level) {
    return std::pow(10.0, -3.0 - static_cast<double>(std::min<std::size_t>(level, 9)));
}

inline graded_level graded_ladder(double hurst, std::size_t level) {
    struct rung {
        unsigned char nodes;
        float ratio, first;
    };
    struct side {
        double hurst;  // up to
        rung rungs[10];
    };
    static constexpr side sides[] = {
        {0.05, {{4, 4, .9f}, {4, 4, .9f}, {4, 4, .4f}, {4, 2.75f, .2f}, {6, 4, .4f},
                {6, 3, .2f}, {8, 4, .4f}, {8, 3, .2f}, {10, 4, .4f}, {10, 2.75f, .3f}}},
        {0.11, {{4, 4, .9f}, {4, 4, .9f}, {4, 3.5f, .4f}, {6, 4, .9f}, {6, 3.5f, .4f},
                {6, 2.5f, .2f}, {8, 3, .4f}, {10, 4, .6f}, {10, 3, .4f}, {10, 2.5f, .3f}}},
        {0.17, {{4, 4, .9f}, {4, 4, .9f}, {4, 3, .4f}, {6, 4, .9f}, {6, 3, .4f},
                {6, 2.25f, .3f}, {8, 3, .4f}, {10, 3.5f, .6f}, {10, 2.75f, .4f}, {10, 2.25f, .3f}}},
        {0.23, {{4, 4, .9f}, {4, 4, .9f}, {4, 2.75f, .4f}, {6, 4, .9f}, {6, 2.75f, .4f},
                {6, 2, .3f}, {10, 4, .9f}, {10, 3, .6f}, {10, 2.5f, .6f}, {10, 2, .4f}}},
        {0.31, {{4, 4, .9f}, {4, 3.5f, .9f}, {4, 2.5f, .6f}, {6, 3, .9f}, {6, 2.5f, .6f},
                {8, 3, .9f}, {10, 3.5f, .9f}, {10, 2.75f, .9f}, {10, 2.25f, .6f}, {10, 2, .4f}}},
        {0.42, {{4, 4, .9f}, {4, 3, .9f}, {4, 2, .6f}, {6, 2.75f, .9f}, {6, 2, .6f},
                {6, 1.8f, .4f}, {10, 2.75f, .9f}, {10, 2.25f, .9f}, {10, 1.8f, .6f}, {10, 1.6f, .6f}}},
        {0.47, {{4, 4, .9f}, {4, 2.75f, .9f}, {4, 2, .6f}, {6, 2.5f, .9f}, {6, 2, .6f},
                {10, 3, .9f}, {10, 2.5f, .9f}, {8, 1.6f, .6f}, {10, 1.6f, .6f}, {10, 1.6f, .4f}}},
        {0.50, {{4, 3, .9f}, {4, 2, .9f}, {6, 2.5f, .9f}, {6, 2, .9f}, {8, 2.25f, .9f},
                {10, 2.25f, .9f}, {8, 1.6f, .6f}, {10, 1.6f, .6f}, {10, 1.6f, .6f}, {10, 1.6f, .6f}}},
    };
    const double accuracy = 0.3 * graded_level_error(level);
    if (level == 10) return {10, 1.6f, 0.1, 1e-14};
    if (level >= 11) return {10, 1.5, 0.04, 1e-14};
    const side* at = sides;
    while (hurst > at->hurst && at->hurst < 0.5) ++at;
    const rung& r = at->rungs[level];
    return {r.nodes, r.ratio, r.first, accuracy};
}

// Rung 2l is level l; rung 2l + 1 has narrower elements and a shorter first one, for a second solution
// that tells the error of the first: about 5 (m = 4) to 20 (m = 10) times more accurate.
inline constexpr std::size_t graded_rungs = 2 * graded_levels;

inline graded_level graded_rung(double hurst, std::size_t rung) {
    graded_level level = graded_ladder(hurst, rung / 2);
    if (rung % 2 == 0) return level;
    static constexpr double ratios[] = {4, 3.5, 3, 2.75, 2.5, 2.25, 2, 1.8, 1.6, 1.5, 1.4};
    std::size_t at = 0;
    while (ratios[at + 1] >= level.ratio) ++at;
    at = std::min<std::size_t>(at + 2, std::size(ratios) - 1);
    return {level.nodes, ratios[at], 0.7 * level.first, 0.3 * level.accuracy};
}

inline double graded_rung_error(std::size_t rung) {
    return (rung % 2 ? 0.2 : 1.0) * graded_level_error(rung / 2);
}

// The coarsest level that aims at `error` or less.
inline std::size_t graded_level_for(double error) {
    const double level = std::ceil(-std::log10(error) - 3.1);  // the meshes are a little better
    return static_cast<std::size_t>(std::clamp(level, 0.0, 9.0));
}

// The number of elements u needs: the first one no longer than level.first t_*.
inline std::size_t graded_elements(const graded_level& level, double alpha,
                                   const riccati_coefficients& c, double horizon) {
    const double rate2 = std::norm(c.c1) + 4.0 * std::abs(c.c0) * c.c2;  // t_*^(-2 alpha)
    if (!(rate2 > 0.0)) return 1;
    const double ratio = std::log(horizon / level.first) + 0.5 * std::log(rate2) / alpha;
    // Even numbers only (or one): fewer kinds of mesh in a call, so fewer lane blocks partly filled.
    const double k = 2.0 * std::ceil(0.5 + 0.5 * ratio / std::log(level.ratio));
    return ratio <= 0.0 ? 1 : static_cast<std::size_t>(std::min(k, double{graded_most_elements}));
}

}  // namespace volterra
