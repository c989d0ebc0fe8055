// The graded scheme carried to log-transforms within a tolerance: chooses the rung each u starts from,
// interpolates along lines, estimates the error and refines where the estimate misses.
//
// No value depends on the other u of the call.
#pragma once

#include <algorithm>
#include <cmath>
#include <complex>
#include <cstddef>
#include <cstdint>
#include <limits>
#include <map>
#include <span>
#include <vector>

#include "volterra/graded_line.hpp"
#include "volterra/graded_pass.hpp"

namespace volterra {

// A u whose graded_record::doubt times this exceeds the error asked for is solved again one level finer:
// fewer than one in a thousand within the ranges of mesh.hpp, where the mesh would have done; it is
// there for parameters beyond them.
inline constexpr double graded_doubt = 0.002;

// |phi| is not solved further where it is below this share of the error asked for.
inline constexpr double graded_negligible = 0.05;

// The error of phi asked for: one per maturity and line, a line being the u of one imaginary part.
struct error_bounds {
    std::size_t lines = 0;
    std::vector<std::uint32_t> line;  // of each u
    std::vector<double> bound;        // maturities x lines

    double operator()(std::size_t t, std::size_t i) const { return bound[t * lines + line[i]]; }

    // Numbers the lines of u; calls first(Im u) at the first u of each.
    template <class First>
    void number(std::span<const std::complex<double>> u, First&& first) {
        std::map<double, std::uint32_t> numbers;
        line.reserve(u.size());
        for (std::size_t i = 0; i < u.size(); ++i) {
            const double y = u[i].imag();
            if (i && y == u[i - 1].imag()) {
                line.push_back(line.back());
                continue;
            }
            const auto [entry, is_new] =
                numbers.try_emplace(y, static_cast<std::uint32_t>(numbers.size()));
            line.push_back(entry->second);
            if (is_new) first(y);
        }
        lines = numbers.size();
    }
};

// The rung of mesh.hpp that a u, or a line of them, starts from. The ladder is too short by up to a half
// near the imaginary axis beyond the moments 0 and 1, where psi may be close to its explosion, and by
// one or two levels for positive correlations beyond those it was calibrated for, where psi grows
// before it settles.
inline std::size_t first_rung(const model_parameters& m, double bound, double real,
                              double imaginary) {
    const bool close = std::abs(real) < 1.0 && (imaginary >= 0.0 || imaginary <= -1.0);
    const std::size_t more = m.correlation > 0.9 ? 4 : m.correlation > 0.5 ? 2 : 0;
    return std::min(2 * graded_level_for(bound) + close + more, graded_rungs - 3);
}

// The rung whose solution tells the error of another one's.
inline std::size_t check_rung(std::size_t rung) {
    return std::min(rung + (rung % 2 ? 2 : 1), graded_rungs - 1);
}

// The u of a call that are interpolated along one line.
struct line_task {
    line_grid grid;
    double variance, tolerance;
    std::size_t level;  // a rung of mesh.hpp
    std::vector<std::size_t> members;
    std::vector<double> tails;  // per maturity
};

inline std::vector<line_task> lines_of(const model_parameters& m, const variance_curve& curve,
                                       std::span<const std::complex<double>> u,
                                       std::span<const double> maturities,
                                       const error_bounds& bounds, std::span<const double> bound) {
    std::vector<line_task> lines;
    std::vector<std::size_t> line_at(bounds.lines, 0);  // 0: not seen, k + 1: lines[k]
    const double longest = maturities.back();
    for (std::size_t i = 0; i < u.size(); ++i) {
        // At u = 0 the transform is 1 exactly, and the solver knows.
        if (!is_interpolated_line(u[i].imag()) || u[i] == 0.0) continue;
        auto& at = line_at[bounds.line[i]];
        if (at == 0) {
            const double variance = detail::integrated_curve(curve, m.alpha(), longest) / longest;
            lines.push_back({make_line_grid(m, u[i].imag(), longest, variance, bound[i]), variance,
                             bound[i], first_rung(m, bound[i], 0.0, u[i].imag()), {}, {}});
            at = lines.size();
        }
        if (std::abs(u[i].real()) <= lines[at - 1].grid.reach) lines[at - 1].members.push_back(i);
    }
    std::erase_if(lines, [](const line_task& line) { return line.members.empty(); });
    return lines;
}

// log E[exp(iuX_T)] by the graded scheme, maturities x u. Maturities must ascend. Returns the largest
// estimated error as a multiple of its bound. Where no mesh converged, which is what happens past an
// explosion time, the value is nan.
//
// With `errors` (the size of values) every u is solved a second time one rung finer, and again until
// the estimate is below the bound: errors holds the absolute error of phi, inf beside nan. Without,
// the mesh is trusted where the indicator of the solver raises no doubt (see mesh.hpp for how often
// it errs). With `interpolate` the u of the lines of graded_line.hpp are interpolated.
inline double solve_log_transform(const target_kernels& kernels, const model_parameters& m,
                                  const variance_curve& curve,
                                  std::span<const std::complex<double>> u,
                                  std::span<const double> maturities,
                                  const error_bounds& bounds, bool interpolate,
                                  std::span<std::complex<double>> values,
                                  std::span<double> errors) {
    const std::size_t n = u.size();
    constexpr double infinity = std::numeric_limits<double>::infinity();
    std::vector<std::size_t> level(n), which;  // level: a rung of mesh.hpp
    std::vector<double> bound(n, infinity), cut(n);
    std::vector<char> open(n, 1);
    for (std::size_t i = 0; i < n; ++i) {
        if (i && bounds.line[i] == bounds.line[i - 1]) {
            bound[i] = bound[i - 1], cut[i] = cut[i - 1];
        } else {
            for (std::size_t t = 0; t < maturities.size(); ++t)
                bound[i] = std::min(bound[i], bounds(t, i));
            cut[i] = std::log(graded_negligible * bound[i]);
        }
        level[i] = first_rung(m, bound[i], u[i].real(), u[i].imag());
    }
    auto pass = [&](std::span<std::complex<double>> into, graded_record& record) {
        for (std::size_t l = 0; l < graded_rungs; ++l) {
            which.clear();
            for (std::size_t i = 0; i < n; ++i)
                if (open[i] && level[i] == l) which.push_back(i);
            if (!which.empty())
                graded_pass(kernels, graded_rung(m.hurst, l), m, curve, u, which, maturities,
                            false, false, cut, into, record);
        }
    };
    // The members of a line, interpolated; returns false if that is not good enough.
    std::vector<line_task> lines;
    auto pass_line = [&](line_task& line, std::span<std::complex<double>> into) {
        const std::size_t nodes = line.grid.s.size();
        graded_record record(nodes);
        std::vector<std::complex<double>> at_nodes(maturities.size() * nodes);
        which.resize(nodes);
        for (std::size_t j = 0; j < nodes; ++j) which[j] = j;
        const std::vector<double> never(nodes, -infinity);
        graded_pass(kernels, graded_rung(m.hurst, line.level), m, curve, line.grid.u, which,
                    maturities, false, true, never, at_nodes, record);
        for (const char solved : record.solved)
            if (!solved) return false;
        line.tails = line_tails(line.grid, at_nodes);
        for (std::size_t t = 0; t < maturities.size(); ++t)
            for (std::size_t j = 0; j < nodes; ++j)
                if (!(line.tails[t] * line.grid.scale[j] * std::exp(at_nodes[t * nodes + j].real()) <
                      0.03 * bounds(t, line.members.front())))
                    return false;
        interpolate_line(kernels, line.grid, at_nodes, u, line.members, into);
        return true;
    };
    graded_record coarse(n);
    if (interpolate)
        for (auto& line : lines_of(m, curve, u, maturities, bounds, bound)) {
            bool good = pass_line(line, values);
            if (!good) {  // once more with more nodes
                line.grid = make_line_grid(m, line.grid.imaginary, maturities.back(), line.variance,
                                           1e-4 * line.tolerance);
                good = pass_line(line, values);
            }
            if (!good) continue;
            for (const std::size_t i : line.members)
                coarse.solved[i] = true, open[i] = false, level[i] = line.level;
            lines.push_back(std::move(line));
        }
    double worst = 0.0;
    for (bool again = std::find(open.begin(), open.end(), 1) != open.end(); again;) {
        pass(values, coarse);
        again = false;
        for (std::size_t i = 0; i < n; ++i) {
            if (!open[i]) continue;
            const bool doubtful = errors.empty() && graded_doubt * coarse.doubt[i] > bound[i];
            open[i] = (!coarse.solved[i] || doubtful) && level[i] + 2 < graded_rungs;
            if (open[i])
                level[i] = std::min(level[i] + (coarse.solved[i] ? 2 : 4), graded_rungs - 2);
            else if (doubtful)
                worst = std::max(worst, graded_doubt * coarse.doubt[i] / bound[i]);
            again |= open[i];
        }
    }
    for (std::size_t i = 0; i < n; ++i)
        for (std::size_t t = 0; t < maturities.size() && !coarse.solved[i]; ++t)
            values[t * n + i] = std::numeric_limits<double>::quiet_NaN();
    if (errors.empty()) return worst;

    std::vector<double> integrals;
    for (double t : maturities) integrals.push_back(detail::integrated_curve(curve, m.alpha(), t));
    std::vector<std::complex<double>> finer(values.size());
    graded_record fine(n);
    std::vector<double> estimate(values.size()), least(n), c0(n), relative(n), spread(n, 0.0);
    std::vector<double> tails(maturities.size(), 0.0);
    for (const auto& line : lines) {
        for (const std::size_t i : line.members)
            spread[i] = line_scale(u[i].real());
        for (std::size_t t = 0; t < tails.size(); ++t) tails[t] = std::max(tails[t], line.tails[t]);
    }
    for (std::size_t i = 0; i < n; ++i) c0[i] = std::abs(riccati(m, u[i]).c0);
    for (std::size_t i = 0; i < n; ++i) {
        open[i] = coarse.solved[i];
        level[i] = check_rung(level[i]);
        for (std::size_t t = 0; t < maturities.size(); ++t) errors[t * n + i] = infinity;
    }
    for (auto& line : lines) {
        line.level = check_rung(line.level);
        line.grid = make_line_grid(m, line.grid.imaginary, maturities.back(), line.variance,
                                   0.05 * line.tolerance);
        const bool good = pass_line(line, finer);
        for (const std::size_t i : line.members)
            fine.solved[i] = good, open[i] = false, level[i] = line.level;
    }
    bool first_round = true;
    for (bool again = true; again; first_round = false) {
        pass(finer, fine);
        again = false;
        if (first_round)
            for (const auto& line : lines)
                for (const std::size_t i : line.members) open[i] = true;
        for (std::size_t i = 0; i < n; ++i) {
            least[i] = 0.06 * graded_rung_error(level[i]);
            relative[i] = 0.0;
        }
        for (std::size_t t = 0; t < maturities.size(); ++t)
            kernels.estimate_error({n, reinterpret_cast<const double*>(values.data() + t * n),
                                    reinterpret_cast<const double*>(finer.data() + t * n),
                                    c0.data(), least.data(), relative.data(), spread.data(), tails[t],
                                    integrals[t],
                                    estimate.data() + t * n,
                                    t ? estimate.data() + (t - 1) * n : nullptr});
        for (std::size_t i = 0; i < n; ++i) {
            if (!open[i]) continue;
            open[i] = level[i] + 1 < graded_rungs;
            if (fine.solved[i]) {
                double misses = 0.0;  // largest estimate as a multiple of its bound
                for (std::size_t t = 0; t < maturities.size(); ++t) {
                    if (maturities[t] > coarse.guessed_from[i])
                        estimate[t * n + i] =
                            std::max(estimate[t * n + i], 2.0 * coarse.guessed_size[i]);
                    misses = std::max(misses, estimate[t * n + i] / bounds(t, i));
                }
                // Keep what has the smallest estimate; the finer values are better than the estimate
                // of the coarse ones by this factor at least.
                constexpr double gain = 0.3;
                const bool keep = misses <= 1.0;
                double before = 0.0, now = 0.0;
                for (std::size_t t = 0; t < maturities.size(); ++t) {
                    const std::size_t at = t * n + i;
                    before = std::max(before, errors[at] / bounds(t, i));
                    now = std::max(now, (keep ? 1.0 : gain) * estimate[at] / bounds(t, i));
                }
                if (now < before)
                    for (std::size_t t = 0; t < maturities.size(); ++t) {
                        const std::size_t at = t * n + i;
                        errors[at] = (keep ? 1.0 : gain) * estimate[at];
                        if (!keep) values[at] = finer[at];
                    }
                open[i] = open[i] && !(std::min(now, before) <= 1.0);
                if (!keep) coarse.guessed_from[i] = fine.guessed_from[i];
                if (!keep) coarse.guessed_size[i] = fine.guessed_size[i];
            }
            if (!open[i]) continue;
            level[i] = std::min(level[i] + 3, graded_rungs - 1);
            again = true;
        }
    }
    for (std::size_t t = 0; t < maturities.size(); ++t)
        for (std::size_t i = 0; i < n; ++i)
            if (!std::isnan(values[t * n + i].real()))
                worst = std::max(worst, errors[t * n + i] / bounds(t, i));
    return worst;
}

}  // namespace volterra
