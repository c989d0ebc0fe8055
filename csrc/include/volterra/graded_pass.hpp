// One solve of the graded scheme for a list of u at one rung of accuracy: packs them into lane blocks,
// each u on the mesh its own relaxation time asks for, and hands out the values at all maturities.
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
        return graded_matrices{op.own.data(), op.basis.data(), op.to_basis.data(), op.s.data(),
                               op.to_history.data(), op.paired};
    };
    b.start = matrices(plan.start), b.step = matrices(plan.step);
    b.from_zero = plan.from_zero.data(), b.from_first = plan.from_first.data();
    b.lag = plan.lag.data(), b.lags = plan.elements > 2 ? plan.elements - 2 : 0;
    b.extrapolation = plan.extrapolation.data(), b.tau_power = plan.tau_power.data();
    b.series = plan.series;
    b.total = plan.shape->total.data(), b.first_total = plan.first_total.data();
    b.growth = plan.step_scale;
    return b;
}

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

// A lower bound of the variance that multiplies F in log phi, which then falls at least as fast as
// this times int F. It only saves work where |phi| is small.
inline double least_variance(const variance_curve& curve, double mean_reversion) {
    const double lowest = *std::min_element(curve.levels.begin(), curve.levels.end());
    const bool driven = curve.form == curve_form::driven;
    const double least = driven ? (lowest < 0.0 ? 0.0 : curve.initial) : lowest;
    return mean_reversion < 0.0 ? 0.0 : std::max(least, 0.0);
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
    b.lengths = meshes.edges.data() + skipped;
    b.settling = meshes.settling.data() + skipped;
}

}  // namespace detail

// What one solve leaves behind besides the values, one entry per u of the call.
struct graded_record {
    std::vector<char> solved;         // false where the solver failed
    std::vector<double> doubt;        // an indicator of the error of phi
    std::vector<double> guessed_from; // at maturities beyond this time phi was only guessed ...
    std::vector<double> guessed_size; // ... because |phi| is below this

    explicit graded_record(std::size_t n)
        : solved(n, 0), doubt(n, 0.0), guessed_from(n, std::numeric_limits<double>::infinity()),
          guessed_size(n, 0.0) {}
};

namespace detail {

// The u of one pass, ordered by the number of elements of their meshes.
struct mesh_order {
    std::vector<riccati_coefficients> c;
    std::vector<std::size_t> elements, order;
    std::size_t most;

    // With `one_mesh` the longest mesh serves all.
    mesh_order(const graded_level& level, const model_parameters& m,
               std::span<const std::complex<double>> u, std::span<const std::size_t> which,
               double horizon, bool one_mesh)
        : c(which.size()), elements(which.size()), order(which.size()) {
        std::vector<std::size_t> end(graded_most_elements + 2, 0);
        for (std::size_t i = 0; i < which.size(); ++i) {
            c[i] = riccati(m, u[which[i]]);
            elements[i] = graded_elements(level, m.alpha(), c[i], horizon);
        }
        most = *std::ranges::max_element(elements);
        if (one_mesh) std::ranges::fill(elements, most);
        for (const std::size_t k : elements) ++end[k + 1];
        for (std::size_t k = 1; k < end.size(); ++k) end[k] += end[k - 1];
        for (std::size_t i = 0; i < order.size(); ++i) order[end[elements[i]]++] = i;  // stable
    }

    std::size_t size() const { return order.size(); }
    std::size_t elements_at(std::size_t place) const { return elements[order[place]]; }

    // The first place after `start` with another mesh.
    std::size_t end_of_mesh(std::size_t start) const {
        std::size_t end = start;
        while (end < size() && elements_at(end) == elements_at(start)) ++end;
        return end;
    }
};

// The arrays by which one block of lanes speaks to the solver.
struct lane_arrays {
    std::size_t lanes;
    aligned_buffer storage;
    double *c0, *c1, *status, *negligible, *doubt, *guessed, *remainder;

    lane_arrays(std::size_t count, graded_block& block, const graded_level& level,
                const model_parameters& m, const variance_curve& curve, double horizon)
        : lanes(count), storage(9 * count), c0(storage.data()), c1(c0 + 2 * count),
          status(c1 + 2 * count), negligible(status + count), doubt(negligible + count),
          guessed(doubt + count), remainder(guessed + count) {
        std::fill_n(negligible, count, -std::numeric_limits<double>::infinity());
        block.c0 = c0, block.c1 = c1, block.c2 = 0.5 * m.vol_of_vol * m.vol_of_vol;
        block.accuracy = level.accuracy;
        block.least_variance = least_variance(curve, m.mean_reversion);
        block.typical_variance = integrated_curve(curve, m.alpha(), horizon) / horizon;
        block.negligible = negligible, block.status = status, block.doubt = doubt;
        block.guessed = guessed, block.remainder = remainder;
    }

    void load(std::size_t lane, const riccati_coefficients& c) {
        c0[lane] = c.c0.real(), c0[lanes + lane] = c.c0.imag();
        c1[lane] = c.c1.real(), c1[lanes + lane] = c.c1.imag();
    }
};

// to[targets[i]] = lane i of a row; false for the lanes that are not finite, through `solved`.
inline void hand_out(const double* row, std::size_t lanes, std::span<const std::size_t> targets,
                     std::complex<double>* to, std::vector<char>& solved) {
    const double *const re = row, *const im = row + lanes;
    const std::size_t filled = targets.size(), at = targets[0];
    double finite = 0.0;
    for (std::size_t i = 0; i < filled; ++i) finite += re[i] * 0.0 + im[i] * 0.0;
    bool contiguous = true;
    for (std::size_t i = 1; i < filled; ++i) contiguous &= targets[i] == at + i;
    if (contiguous)
        for (std::size_t i = 0; i < filled; ++i) to[at + i] = {re[i], im[i]};
    else
        for (std::size_t i = 0; i < filled; ++i) to[targets[i]] = {re[i], im[i]};
    for (std::size_t i = 0; finite != 0.0 && i < filled; ++i)
        if (re[i] - re[i] != 0.0 || im[i] - im[i] != 0.0) solved[targets[i]] = false;
}

}  // namespace detail

// One solve at one level of accuracy of the u numbered in `which`. values[r * u.size() + i]:
// functional r (maturity, or maturity and elementary curve when `basis`) at u[i]. Where |phi| is
// below negligible[i] it is not solved further. For the nodes of a line (graded_line.hpp) it is log phi
// that has to be accurate, and one mesh serves them all. Maturities must ascend.
inline void graded_pass(const target_kernels& kernels, const graded_level& level,
                        const model_parameters& m, const variance_curve& curve,
                        std::span<const std::complex<double>> u,
                        std::span<const std::size_t> which, std::span<const double> maturities,
                        bool basis, bool on_line, std::span<const double> negligible,
                        std::span<std::complex<double>> values, graded_record& record) {
    const std::size_t lanes = kernels.graded_lanes;
    const double horizon = maturities.back();
    const detail::mesh_order meshed(level, m, u, which, horizon, on_line);
    const auto plan = plan_of(kernels, m.alpha(), level.nodes, level.ratio, meshed.most);
    const graded_meshes meshes(*plan, horizon, meshed.most);
    const auto functional = make_functional(meshes, curve, m.mean_reversion, maturities, basis);
    aligned_buffer block_values(functional.count * 2 * lanes);
    aligned_buffer workspace(graded_workspace(level.nodes, meshed.most, lanes));
    auto block = detail::work_order(*plan);
    detail::lane_arrays arrays(lanes, block, level, m, curve, horizon);
    block.of_logarithm = on_line;
    block.values = block_values.data(), block.workspace = workspace.data();
    std::vector<std::size_t> targets;
    for (std::size_t start = 0; start < meshed.size();) {
        const std::size_t k = meshed.elements_at(start), end = meshed.end_of_mesh(start);
        const auto first = make_first_functional(meshes, functional, k, curve, maturities, basis);
        detail::set_mesh(block, meshes, k, functional, first);
        for (; start < end; start += lanes) {
            const std::size_t filled = std::min(lanes, end - start);
            targets.clear();
            for (std::size_t i = 0; i < lanes; ++i) {  // idle lanes repeat the last one
                const std::size_t from = meshed.order[start + std::min(i, filled - 1)];
                arrays.load(i, meshed.c[from]);
                arrays.negligible[i] = negligible[which[from]];
                if (i < filled) targets.push_back(which[from]);
            }
            kernels.solve_graded_block(block);
            for (std::size_t i = 0; i < filled; ++i) {
                const std::size_t to = targets[i];
                record.solved[to] = arrays.status[i] == 0.0;
                record.doubt[to] = arrays.doubt[i];
                const auto used = static_cast<std::size_t>(arrays.guessed[i]);
                record.guessed_from[to] = used < k ? block.lengths[used - 1]
                                                   : std::numeric_limits<double>::infinity();
                record.guessed_size[to] = used < k ? std::exp(arrays.remainder[i]) : 0.0;
            }
            for (std::size_t r = 0; r < functional.count; ++r)
                detail::hand_out(block_values.data() + r * 2 * lanes, lanes, targets,
                                 values.data() + r * u.size(), record.solved);
        }
        start = end;
    }
}

}  // namespace volterra
