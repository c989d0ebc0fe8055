// One solve of the graded scheme and its tangents for a list of u: which rows are wanted, on which mesh,
// and the lanes packed as in graded_pass.hpp.
#pragma once

#include <algorithm>
#include <cmath>
#include <complex>
#include <cstddef>
#include <span>
#include <vector>

#include "targets.hpp"
#include "volterra/graded_pass.hpp"
#include "volterra/tangent_functional.hpp"

namespace volterra {

// Which derivatives are wanted.
struct sensitivity_request {
    bool hurst = true, vol_of_vol = true, correlation = true, mean_reversion = true;
    bool curve = true;  // one per elementary curve: V0 first when driven, then the levels
    double tolerance = 1e-8;  // of phi, relative to phi(i Im u)
    std::size_t threads = 1;

    std::size_t parameters() const {
        return std::size_t{hurst} + vol_of_vol + correlation + mean_reversion;
    }
};

namespace detail {

// The mesh whose sensitivities are as good as the values of `level`: one level finer, for hurst
// loses a factor 20 to 40 against phi on the same mesh, and a first element short enough for relative
// accuracy at the shortest maturities. Measured against the finest mesh at tolerance 1e-8: in 3,190 of 3,200
// random models every sensitivity is within 1e-7 of the largest along its line, the worst at 6e-7.
inline graded_level tangent_ladder(double hurst, std::size_t level) {
    auto rung = graded_ladder(hurst, std::min(level + 1, graded_levels - 1));
    rung.first *= 0.4;
    return rung;
}

// |c0 c2| t^(2 alpha) below which the scaling laws lose more than a digit.
inline constexpr double nearly_linear = 0.1;

// Which channels of tangent_block::values are kept, and where: the derivatives, then the basis, the
// values last. `rows` maturities each.
struct raw_rows {
    bool kept[tangent_channels];
    bool needs_psi;  // by the scaling law of c2, or for itself
    bool basis_is_value;  // but for its level: a single elementary curve costs nothing
    std::size_t first[tangent_channels], basis, basis_rows, all;

    raw_rows(const sensitivity_request& wanted, const model_parameters& m,
             const variance_curve& curve, std::size_t rows) {
        const bool driven = curve.form == curve_form::driven;
        const bool of_c1 = wanted.vol_of_vol || wanted.correlation || wanted.mean_reversion;
        kept[channel_value] = true, kept[channel_c1] = of_c1;
        kept[channel_c2] = wanted.vol_of_vol, kept[channel_alpha] = wanted.hurst;
        kept[channel_psi] = wanted.mean_reversion && !driven;
        needs_psi = kept[channel_psi] || (of_c1 && (driven || m.mean_reversion != 0.0));
        all = 0;
        for (std::size_t c = 1; c < tangent_channels; ++c) {
            first[c] = all;
            all += kept[c] ? rows : 0;
        }
        basis_is_value = wanted.curve && curve.basis_size() == 1 && curve.levels[0] > 0.0;
        basis = all, basis_rows = wanted.curve && !basis_is_value ? curve.basis_size() * rows : 0;
        all += basis_rows;
        first[channel_value] = all;
        all += rows;
    }
};

// One solve at one level of the u numbered in `which`; raw[r * u.size() + i]: row r of `layout` at
// u[i]. Of `record` it fills `solved` and `doubt`.
inline void tangent_pass(const target_kernels& kernels, const graded_level& level,
                         const model_parameters& m, const variance_curve& curve,
                         std::span<const std::complex<double>> u, std::span<const std::size_t> which,
                         std::span<const double> maturities, const sensitivity_request& wanted,
                         const raw_rows& layout, bool one_mesh, std::span<std::complex<double>> raw,
                         graded_record& record) {
    const std::size_t lanes = kernels.graded_lanes, row = 2 * lanes;
    const std::size_t rows = maturities.size(), basis_rows = layout.basis_rows;
    const double horizon = maturities.back(), alpha = m.alpha();
    const mesh_order meshed(level, m, u, which, horizon, one_mesh);
    const std::size_t most = meshed.most;
    const auto plan = plan_of(kernels, alpha, level.nodes, level.ratio, most);
    const auto tangent = tangent_plan_of(kernels, plan);
    const graded_meshes meshes(*plan, horizon, most);
    std::vector<double> log_edges;
    for (const double edge : meshes.edges) log_edges.push_back(std::log(edge));
    const auto shares = make_tangent_shares(meshes, curve, maturities, basis_rows != 0);
    std::vector<tangent_entries> entries(4 * most);
    tangent_entries *const on_f = entries.data(), *const on_psi = on_f + most,
                    *const basis_f = on_psi + most, *const basis_psi = basis_f + most;

    const std::size_t size = 1 + level.nodes * most;
    aligned_buffer psi(size * row), direct(lanes);
    aligned_buffer workspace(graded_workspace(level.nodes, most, lanes));
    aligned_buffer tangent_space(tangent_workspace(level.nodes, most, lanes));
    aligned_buffer values(tangent_values(rows, basis_rows) * row);
    auto block = work_order(*plan);
    lane_arrays arrays(lanes, block, level, m, curve, horizon);
    block.of_logarithm = true;
    block.psi = psi.data(), block.workspace = workspace.data();

    const bool driven = curve.form == curve_form::driven;
    tangent_block t{};
    t.solved = &block;
    t.start_inverse = tangent->start.inverse.data(), t.step_inverse = tangent->step.inverse.data();
    t.start_change = tangent->start.own_change.data();
    t.step_change = tangent->step.own_change.data();
    t.from_zero = tangent->from_zero.data(), t.from_zero_change = tangent->from_zero_change.data();
    t.from_first = tangent->from_first.data();
    t.from_first_change = tangent->from_first_change.data();
    t.lag = tangent->lag.data(), t.lag_change = tangent->lag_change.data();
    t.first_total_change = tangent->first_total_change.data();
    t.alpha = alpha, t.mix = driven ? 0.0 : m.mean_reversion, t.driven = driven;
    t.of_c1 = layout.kept[channel_c1], t.of_alpha = layout.kept[channel_alpha];
    t.of_psi = layout.needs_psi;
    t.direct = direct.data(), t.rows = rows, t.basis_rows = basis_rows;
    t.functionals = {on_f, on_psi, basis_f, basis_psi};
    t.values = values.data(), t.workspace = tangent_space.data();
    const double shortest = std::pow(maturities.front(), 2.0 * alpha);

    std::vector<std::size_t> targets;
    for (std::size_t start = 0; start < meshed.size();) {
        const std::size_t k = meshed.elements_at(start), skipped = most - k;
        const std::size_t end = meshed.end_of_mesh(start);
        const auto first =
            make_first_tangent_share(meshes, *tangent, k, curve, maturities, basis_rows != 0);
        for (std::size_t e = 0; e < k; ++e) {
            const auto& share = e ? shares[skipped + e - 1] : first;
            on_f[e] = share.on_f.view(), on_psi[e] = share.on_psi.view();
            basis_f[e] = share.basis_f.view(), basis_psi[e] = share.basis_psi.view();
        }
        block.elements = k;
        block.scales = meshes.scales.data() + skipped, block.lengths = meshes.edges.data() + skipped;
        block.settling = meshes.settling.data() + skipped;
        t.log_lengths = log_edges.data() + skipped;
        for (; start < end; start += lanes) {
            const std::size_t filled = std::min(lanes, end - start);
            targets.clear();
            t.of_c2 = false;
            for (std::size_t i = 0; i < lanes; ++i) {  // idle lanes repeat the last one
                const std::size_t from = meshed.order[start + std::min(i, filled - 1)];
                const auto& c = meshed.c[from];
                arrays.load(i, c);
                const bool linear = std::abs(c.c0) * c.c2 * shortest < nearly_linear;
                direct.data()[i] = linear;
                t.of_c2 |= linear && wanted.vol_of_vol;
                if (i < filled) targets.push_back(which[from]);
            }
            kernels.solve_graded_block(block);
            kernels.solve_graded_tangents_block(t);
            for (std::size_t i = 0; i < filled; ++i) {
                record.solved[targets[i]] = arrays.status[i] == 0.0;
                record.doubt[targets[i]] = arrays.doubt[i];
            }
            auto copy = [&](std::size_t from, std::size_t count, std::size_t row_to) {
                for (std::size_t r = 0; r < count; ++r)
                    hand_out(values.data() + (from + r) * row, lanes, targets,
                             raw.data() + (row_to + r) * u.size(), record.solved);
            };
            for (std::size_t c = 0; c < tangent_channels; ++c)
                if (layout.kept[c]) copy(c * rows, rows, layout.first[c]);
            copy(tangent_channels * rows, basis_rows, layout.basis);
        }
        start = end;
    }
}

}  // namespace detail

}  // namespace volterra
