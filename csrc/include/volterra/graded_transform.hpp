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
#include "volterra/graded_functional.hpp"
#include "volterra/mesh.hpp"

namespace volterra {

namespace detail {

inline graded_block work_order(const graded_plan& plan) {
    graded_block b{};
    b.nodes = plan.shape->m, b.powers = plan.shape->x.data() + 1;
    b.first = plan.first.data(), b.own = plan.own.data();
    b.q = plan.q.data(), b.q_transposed = plan.q_transposed.data(), b.s = plan.s.data();
    b.to_history = plan.to_history.data(), b.from_first = plan.from_first.data();
    b.lag = plan.lag.data(), b.lags = plan.elements > 2 ? plan.elements - 2 : 0;
    b.extrapolation = plan.extrapolation.data(), b.tau_power = plan.tau_power.data();
    b.series = plan.series, b.paired = plan.paired;
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

// One solve at one level of accuracy. values[r * u.size() + i]: functional r (maturity, or maturity
// and elementary curve when `basis`) at u[i]; solved[i] is false where the solver failed.
inline void graded_pass(const target_kernels& kernels, const graded_level& level,
                        const model_parameters& m, const variance_curve& curve,
                        std::span<const std::complex<double>> u, std::span<const double> maturities,
                        bool basis, std::span<std::complex<double>> values,
                        std::span<char> solved) {
    const std::size_t lanes = kernels.graded_lanes, row = 2 * lanes;
    const double horizon = maturities.back();
    std::vector<std::size_t> elements(u.size()), count(graded_most_elements + 2, 0), order(u.size());
    for (std::size_t i = 0; i < u.size(); ++i) {
        elements[i] = graded_elements(level, m, u[i], horizon);
        ++count[elements[i] + 1];
    }
    std::size_t most = graded_most_elements;
    while (most > 1 && count[most + 1] == 0) --most;
    for (std::size_t k = 1; k < count.size(); ++k) count[k] += count[k - 1];
    for (std::size_t i = 0; i < u.size(); ++i) order[count[elements[i]]++] = i;  // stable

    const auto plan = make_graded_plan(m.alpha(), table_of(level.nodes, level.ratio), most);
    const graded_meshes meshes(plan, horizon, most);
    const auto functional = make_functional(meshes, curve, m.mean_reversion, maturities, basis);
    std::vector<double> c0(row), c1(row), status(lanes), block_values(functional.count * row);
    std::vector<double> workspace(graded_workspace(level.nodes, most, lanes));
    auto block = detail::work_order(plan);
    block.c0 = c0.data(), block.c1 = c1.data(), block.c2 = 0.5 * m.vol_of_vol * m.vol_of_vol;
    block.accuracy = level.accuracy;
    block.values = block_values.data(), block.status = status.data();
    block.workspace = workspace.data();
    for (std::size_t start = 0; start < u.size();) {
        const std::size_t k = elements[order[start]], end = count[k];
        const auto first = make_first_functional(meshes, functional, k, curve, maturities, basis);
        detail::set_mesh(block, meshes, k, functional, first);
        for (; start < end; start += lanes) {
            const std::size_t filled = std::min(lanes, end - start);
            for (std::size_t i = 0; i < lanes; ++i) {  // idle lanes solve u = 0: psi = 0
                const auto c = riccati(m, i < filled ? u[order[start + i]] : 0.0);
                c0[i] = c.c0.real(), c0[lanes + i] = c.c0.imag();
                c1[i] = c.c1.real(), c1[lanes + i] = c.c1.imag();
            }
            kernels.solve_graded_block(block);
            for (std::size_t i = 0; i < filled; ++i) solved[order[start + i]] = status[i] == 0.0;
            for (std::size_t r = 0; r < functional.count; ++r)
                for (std::size_t i = 0; i < filled; ++i)
                    values[r * u.size() + order[start + i]] = {block_values[r * row + i],
                                                               block_values[r * row + lanes + i]};
        }
        start = end;
    }
}

}  // namespace volterra
