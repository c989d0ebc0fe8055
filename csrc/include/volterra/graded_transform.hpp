// The graded scheme carried from a list of u to log-transforms at all maturities, with an error
// estimate: packs u into lane blocks, chooses a mesh per u, refines where the estimate misses.
//
//   solve_log_transform(kernels, model, curve, u, maturities, tolerance, values, errors)
//
// Every u gets a mesh from its own relaxation time, so no value depends on the other u of the call;
// the plan (weights of one hurst index) is shared by all of them.
#pragma once

#include <algorithm>
#include <cmath>
#include <complex>
#include <cstddef>
#include <limits>
#include <span>
#include <vector>

#include "targets.hpp"
#include "volterra/aligned_buffer.hpp"
#include "volterra/graded_functional.hpp"
#include "volterra/mesh.hpp"

namespace volterra {

namespace detail {

inline graded_block work_order(const graded_plan& plan) {
    graded_block b{};
    b.nodes = plan.shape->m, b.powers = plan.shape->x.data() + 1;
    auto matrices = [](const graded_operator& op) {
        return graded_matrices{op.own.data(), op.q.data(), op.q_transposed.data(), op.s.data(),
                               op.to_history.data(), op.paired};
    };
    b.start = matrices(plan.start), b.step = matrices(plan.step);
    b.from_zero = plan.from_zero.data(), b.from_first = plan.from_first.data();
    b.lag = plan.lag.data(), b.lags = plan.elements > 2 ? plan.elements - 2 : 0;
    b.extrapolation = plan.extrapolation.data(), b.tau_power = plan.tau_power.data();
    b.series = plan.series;
    return b;
}

// Points the work order at the mesh with `elements` elements.
inline void set_mesh(graded_block& b, const graded_meshes& meshes, std::size_t elements,
                     const graded_functional& w, const first_element_functional& first) {
    const std::size_t skipped = meshes.most - elements, m = meshes.plan->shape->m;
    b.elements = elements;
    b.scales = meshes.scales.data() + skipped;
    b.functionals = w.count, b.mix = w.mix;
    b.first_f = first.f.data(), b.first_psi = w.uses_psi ? first.psi.data() : nullptr;
    b.weights_f = w.f.data() + skipped * m * w.count;
    b.weights_psi = w.uses_psi ? w.psi.data() + skipped * m * w.count : nullptr;
    b.first_active = w.first_active.data() + skipped;
}

}  // namespace detail

// One solve at one level of accuracy of the u numbered in `which`. values[r * u.size() + i]:
// functional r (maturity, or maturity and elementary curve when `basis`) at u[i]; solved[i] is
// false where the solver failed. Maturities must ascend.
inline void graded_pass(const target_kernels& kernels, const graded_level& level,
                        const model_parameters& m, const variance_curve& curve,
                        std::span<const std::complex<double>> u,
                        std::span<const std::size_t> which, std::span<const double> maturities,
                        bool basis, std::span<std::complex<double>> values,
                        std::span<char> solved) {
    const std::size_t lanes = kernels.graded_lanes, row = 2 * lanes, n = which.size();
    const double horizon = maturities.back();
    std::vector<riccati_coefficients> c(n);
    std::vector<std::size_t> elements(n), count(graded_most_elements + 2, 0), order(n);
    for (std::size_t i = 0; i < n; ++i) {
        c[i] = riccati(m, u[which[i]]);
        elements[i] = graded_elements(level, m.alpha(), c[i], horizon);
        ++count[elements[i] + 1];
    }
    std::size_t most = graded_most_elements;
    while (most > 1 && count[most + 1] == 0) --most;
    for (std::size_t k = 1; k < count.size(); ++k) count[k] += count[k - 1];
    for (std::size_t i = 0; i < n; ++i) order[count[elements[i]]++] = i;  // stable

    const auto plan = make_graded_plan(m.alpha(), table_of(level.nodes, level.ratio), most);
    const graded_meshes meshes(plan, horizon, most);
    const auto functional = make_functional(meshes, curve, m.mean_reversion, maturities, basis);
    aligned_buffer c0(row), c1(row), status(lanes), block_values(functional.count * row);
    aligned_buffer workspace(graded_workspace(level.nodes, most, lanes));
    auto block = detail::work_order(plan);
    block.c0 = c0.data(), block.c1 = c1.data(), block.c2 = 0.5 * m.vol_of_vol * m.vol_of_vol;
    block.accuracy = level.accuracy;
    block.values = block_values.data(), block.status = status.data();
    block.workspace = workspace.data();
    for (std::size_t start = 0; start < n;) {
        const std::size_t k = elements[order[start]], end = count[k];
        const auto first = make_first_functional(meshes, functional, k, curve, maturities, basis);
        detail::set_mesh(block, meshes, k, functional, first);
        for (; start < end; start += lanes) {
            const std::size_t filled = std::min(lanes, end - start);
            for (std::size_t i = 0; i < lanes; ++i) {  // idle lanes repeat the last one
                const auto& from = c[order[start + std::min(i, filled - 1)]];
                c0[i] = from.c0.real(), c0[lanes + i] = from.c0.imag();
                c1[i] = from.c1.real(), c1[lanes + i] = from.c1.imag();
            }
            kernels.solve_graded_block(block);
            for (std::size_t i = 0; i < filled; ++i) solved[which[order[start + i]]] = status[i] == 0.0;
            for (std::size_t r = 0; r < functional.count; ++r) {
                const double* const re = block_values.data() + r * row;
                const double* const im = re + lanes;
                double finite = 0.0;
                for (std::size_t i = 0; i < filled; ++i) {
                    values[r * u.size() + which[order[start + i]]] = {re[i], im[i]};
                    finite += re[i] * 0.0 + im[i] * 0.0;
                }
                if (finite == 0.0) continue;
                for (std::size_t i = 0; i < filled; ++i)
                    if (re[i] - re[i] != 0.0 || im[i] - im[i] != 0.0)
                        solved[which[order[start + i]]] = false;
            }
        }
        start = end;
    }
}

// How many levels finer the solution is that a value is compared with.
inline constexpr std::size_t graded_check_step = 2;

// Where |phi| is small, this level is enough for most tolerances.
inline constexpr std::size_t graded_coarse_level = 2;

namespace detail {

// int_0^T g0, the scale of rounding errors: an upper bound of int xi when curve and mean reversion
// are not negative.
inline double integrated_curve(const variance_curve& curve, double alpha, double maturity) {
    const bool driven = curve.form == curve_form::driven;
    double sum = driven ? curve.initial * maturity : 0.0;
    for_each_reversed_piece(curve, maturity, [&](std::size_t k, double from, double to) {
        const double level = std::abs(curve.levels[k]);
        sum += driven ? level * (std::pow(to, alpha + 1) - std::pow(from, alpha + 1)) /
                            std::tgamma(alpha + 2)
                      : level * (to - from);
    });
    return sum;
}

// What |phi| will be at its largest maturity, roughly: psi from a rational function of z = t^alpha
// with the right start and limit, log phi = (int g0) psi / z. Only chooses the level a u starts
// from; solve_log_transform checks the outcome.
inline double expected_size(const riccati_coefficients& c, std::span<const double> powers,
                            std::span<const double> integrals) {
    const std::complex<double> limit = std::sqrt(c.c1 * c.c1 - 4.0 * c.c0 * c.c2) - c.c1;
    double decay = std::numeric_limits<double>::infinity();
    for (const std::size_t t : {std::size_t{0}, powers.size() / 2, powers.size() - 1}) {
        const double re = 1.0 + 0.5 * powers[t] * limit.real(), im = 0.5 * powers[t] * limit.imag();
        const double real = (c.c0.real() * re + c.c0.imag() * im) / (re * re + im * im);
        decay = std::min(decay, -integrals[t] * real);
    }
    return std::exp(-0.7 * std::max(decay, 0.0));
}

}  // namespace detail

// log E[exp(iuX_T)] by the graded scheme, maturities x u, and the absolute error of phi for every
// value when `errors` is not empty (its size is that of `values`). `bounds` (maturities x u) is the
// error asked for. Maturities must ascend. Where no level converged, which is what happens past an
// explosion time, the value is nan and its error inf.
//
// Each u is solved at the level its bound needs, coarser where |phi| is small at every maturity. With
// errors it is solved a second time two levels finer, and again until the difference is below
// the bound. Without, the level is trusted (see mesh.hpp for how often it errs).
inline void solve_log_transform(const target_kernels& kernels, const model_parameters& m,
                                const variance_curve& curve,
                                std::span<const std::complex<double>> u,
                                std::span<const double> maturities, std::span<const double> bounds,
                                std::span<std::complex<double>> values, std::span<double> errors) {
    const std::size_t n = u.size();
    const double infinity = std::numeric_limits<double>::infinity();
    std::vector<double> integrals, powers;
    for (double t : maturities) {
        integrals.push_back(detail::integrated_curve(curve, m.alpha(), t));
        powers.push_back(std::pow(t, m.alpha()));
    }
    auto length = [](std::complex<double> z) { return std::sqrt(std::norm(z)); };
    auto size_of = [&](std::complex<double> log_phi) {
        return std::exp(log_phi.real()) * std::max(1.0, length(log_phi));
    };

    std::vector<std::size_t> level(n), base(n), which;
    std::vector<double> bound(n, infinity);
    std::vector<char> solved(n, 0), open(n, 1);
    for (std::size_t t = 0; t < maturities.size(); ++t)
        for (std::size_t i = 0; i < n; ++i) bound[i] = std::min(bound[i], bounds[t * n + i]);
    for (std::size_t i = 0; i < n; ++i) {
        base[i] = level[i] = graded_level_for(bound[i]);
        // Two levels per call, so that two plans serve all u.
        if (base[i] <= graded_coarse_level) continue;
        const auto c = riccati(m, u[i]);
        const double most = 0.7 * std::abs(c.c0) * integrals.front();
        if (std::exp(-most) * graded_level_error(graded_coarse_level) < bound[i] &&
            detail::expected_size(c, powers, integrals) *
                    graded_level_error(graded_coarse_level) < bound[i])
            level[i] = graded_coarse_level;
    }
    // |exp(z) - 1|, to a tenth of a percent
    auto change = [&](std::complex<double> z) {
        const double size = length(z);
        return size < 1e-3 ? size : std::abs(std::exp(z) - 1.0);
    };
    // Whether values[., i], solved at a level coarser than base[i], are good enough.
    auto fine_enough = [&](std::size_t i) {
        const double error = graded_level_error(level[i]);
        const double clear = std::log(bound[i] / error) - 8.0;  // size_of < e^8 |phi| there
        for (std::size_t t = 0; t < maturities.size(); ++t) {
            const auto value = values[t * n + i];
            if (value.real() < clear && std::abs(value.real()) + std::abs(value.imag()) < 2900.0)
                continue;
            if (size_of(value) * error > bound[i]) return false;
        }
        return true;
    };
    auto pass = [&](std::span<std::complex<double>> into) {
        for (std::size_t l = 0; l < graded_levels; ++l) {
            which.clear();
            for (std::size_t i = 0; i < n; ++i)
                if (open[i] && level[i] == l) which.push_back(i);
            if (!which.empty())
                graded_pass(kernels, graded_ladder(m.hurst, l), m, curve, u, which, maturities,
                            false, into, solved);
        }
    };
    for (bool again = true; again;) {
        pass(values);
        again = false;
        for (std::size_t i = 0; i < n; ++i) {
            if (!open[i]) continue;
            open[i] = level[i] + 1 < graded_levels &&
                      (!solved[i] || (level[i] < base[i] && !fine_enough(i)));
            if (open[i])
                level[i] = solved[i] ? base[i] : std::min(level[i] + 2, graded_levels - 1);
            again |= open[i];
        }
    }
    for (std::size_t i = 0; i < n; ++i)
        for (std::size_t t = 0; t < maturities.size() && !solved[i]; ++t)
            values[t * n + i] = std::numeric_limits<double>::quiet_NaN();
    if (errors.empty()) return;
    std::vector<std::complex<double>> finer(values.size());
    for (std::size_t i = 0; i < n; ++i) {
        open[i] = solved[i];
        level[i] = std::min(level[i] + graded_check_step, graded_levels - 1);
        for (std::size_t t = 0; t < maturities.size(); ++t) errors[t * n + i] = infinity;
    }
    for (bool again = true; again;) {
        pass(finer);
        again = false;
        for (std::size_t i = 0; i < n; ++i) {
            if (!open[i]) continue;
            bool met = true;
            if (solved[i]) {
                // A difference can vanish by chance at one maturity, hardly at all of them.
                double relative = 0.0;
                for (std::size_t t = 0; t < maturities.size(); ++t)
                    relative = std::max(relative, std::norm(values[t * n + i] - finer[t * n + i]) /
                                                      std::max(1.0, std::norm(values[t * n + i])));
                relative = std::sqrt(relative);
                relative = 0.5 * relative + 0.06 * graded_level_error(level[i]);
                const double c0 = std::abs(riccati(m, u[i]).c0);
                for (std::size_t t = 0; t < maturities.size(); ++t) {
                    const std::size_t at = t * n + i;
                    const double modulus = std::exp(values[at].real());
                    const double size = length(values[at]);
                    const double floor = 8.0 * std::numeric_limits<double>::epsilon() *
                                         (c0 * integrals[t] + size + 1.0);
                    errors[at] = modulus * (4.0 * change(finer[at] - values[at]) + floor +
                                            relative * std::max(1.0, size));
                    met = met && errors[at] <= bounds[at];
                }
            }
            open[i] = !(solved[i] && met) && level[i] + 1 < graded_levels;
            if (!open[i]) continue;
            if (solved[i])
                for (std::size_t t = 0; t < maturities.size(); ++t)
                    values[t * n + i] = finer[t * n + i];
            level[i] = std::min(level[i] + 2, graded_levels - 1);
            again = true;
        }
    }
}

}  // namespace volterra
