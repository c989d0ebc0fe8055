// log E[exp(iuX_T)] and its derivatives with respect to the parameters, by the graded scheme and its
// tangents (graded_tangent.hpp).
//
// The curve is held fixed as it is given: xi of a market curve; V0 and theta of a driven one.
#pragma once

#include <algorithm>
#include <atomic>
#include <cmath>
#include <complex>
#include <cstddef>
#include <cstdint>
#include <limits>
#include <map>
#include <memory>
#include <numeric>
#include <span>
#include <vector>

#include "targets.hpp"
#include "volterra/classical.hpp"
#include "volterra/explosion.hpp"
#include "volterra/graded_transform.hpp"
#include "volterra/parallel.hpp"
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

// The u solved for at a time: few enough to keep the working memory small.
inline constexpr std::size_t sensitivity_chunk = 1024;

// Errors of the sensitivities are held below this times the tolerance, relative to the largest of
// the line.
inline constexpr double sensitivity_accuracy = 10.0;

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
    const std::size_t lanes = kernels.graded_lanes, row = 2 * lanes, n = which.size();
    const std::size_t rows = maturities.size(), basis_rows = layout.basis_rows;
    const double horizon = maturities.back(), alpha = m.alpha();
    std::vector<riccati_coefficients> c(n);
    std::vector<std::size_t> elements(n), order(n);
    for (std::size_t i = 0; i < n; ++i) {
        c[i] = riccati(m, u[which[i]]);
        elements[i] = graded_elements(level, alpha, c[i], horizon);
        order[i] = i;
    }
    const std::size_t most = *std::ranges::max_element(elements);
    if (one_mesh) std::fill(elements.begin(), elements.end(), most);
    std::ranges::stable_sort(order, {}, [&](std::size_t i) { return elements[i]; });

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
    aligned_buffer inputs(2 * row), outputs(6 * lanes), psi(size * row);
    aligned_buffer workspace(graded_workspace(level.nodes, most, lanes));
    aligned_buffer tangent_space(tangent_workspace(level.nodes, most, lanes));
    aligned_buffer values(tangent_values(rows, basis_rows) * row);
    double *const c0 = inputs.data(), *const c1 = c0 + row;
    double *const status = outputs.data(), *const never = status + lanes,
           *const doubt = never + lanes, *const guessed = doubt + lanes,
           *const remainder = guessed + lanes, *const direct = remainder + lanes;
    auto block = work_order(*plan);
    block.c0 = c0, block.c1 = c1, block.c2 = 0.5 * m.vol_of_vol * m.vol_of_vol;
    block.accuracy = level.accuracy, block.of_logarithm = true;
    block.least_variance = least_variance(curve, m.mean_reversion);
    block.typical_variance = integrated_curve(curve, alpha, horizon) / horizon;
    std::fill_n(never, lanes, -std::numeric_limits<double>::infinity());
    block.negligible = never, block.doubt = doubt, block.guessed = guessed;
    block.remainder = remainder, block.status = status;
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
    t.direct = direct, t.rows = rows, t.basis_rows = basis_rows;
    t.functionals = {on_f, on_psi, basis_f, basis_psi};
    t.values = values.data(), t.workspace = tangent_space.data();
    const double shortest = std::pow(maturities.front(), 2.0 * alpha);

    for (std::size_t start = 0; start < n;) {
        const std::size_t k = elements[order[start]], skipped = most - k;
        std::size_t end = start;
        while (end < n && elements[order[end]] == k) ++end;
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
            t.of_c2 = false;
            for (std::size_t i = 0; i < lanes; ++i) {  // idle lanes repeat the last one
                const auto& from = c[order[start + std::min(i, filled - 1)]];
                c0[i] = from.c0.real(), c0[lanes + i] = from.c0.imag();
                c1[i] = from.c1.real(), c1[lanes + i] = from.c1.imag();
                const bool linear = std::abs(from.c0) * from.c2 * shortest < nearly_linear;
                direct[i] = linear;
                t.of_c2 |= linear && wanted.vol_of_vol;
            }
            kernels.solve_graded_block(block);
            kernels.solve_graded_tangents_block(t);
            for (std::size_t i = 0; i < filled; ++i) {
                const std::size_t to = which[order[start + i]];
                record.solved[to] = status[i] == 0.0, record.doubt[to] = doubt[i];
            }
            const std::size_t at = which[order[start]];
            bool contiguous = true;
            for (std::size_t i = 0; i < filled; ++i) contiguous &= which[order[start + i]] == at + i;
            auto copy = [&](std::size_t from, std::size_t count, std::size_t row_to) {
                for (std::size_t r = 0; r < count; ++r) {
                    const double* const re = values.data() + (from + r) * row;
                    const double* const im = re + lanes;
                    std::complex<double>* const to = raw.data() + (row_to + r) * u.size();
                    double finite = 0.0;
                    for (std::size_t i = 0; i < filled; ++i) finite += re[i] * 0.0 + im[i] * 0.0;
                    if (contiguous)
                        for (std::size_t i = 0; i < filled; ++i) to[at + i] = {re[i], im[i]};
                    else
                        for (std::size_t i = 0; i < filled; ++i)
                            to[which[order[start + i]]] = {re[i], im[i]};
                    for (std::size_t i = 0; finite != 0.0 && i < filled; ++i)
                        if (re[i] - re[i] != 0.0 || im[i] - im[i] != 0.0)
                            record.solved[which[order[start + i]]] = false;
                }
            };
            for (std::size_t c = 0; c < tangent_channels; ++c)
                if (layout.kept[c]) copy(c * rows, rows, layout.first[c]);
            copy(tangent_channels * rows, basis_rows, layout.basis);
        }
        start = end;
    }
}

// From the raw channels to the parameters asked for, in the order hurst, vol_of_vol, correlation,
// mean_reversion: c1 = iu rho nu - lambda, c2 = nu^2/2, and lambda multiplies int xi psi in log phi.
inline void to_parameters(const model_parameters& m, const variance_curve& curve,
                          std::span<const std::complex<double>> u, std::size_t rows,
                          const sensitivity_request& wanted, const raw_rows& layout,
                          std::span<const std::complex<double>> raw,
                          std::span<std::complex<double>> sensitivities) {
    const std::size_t n = u.size(), size = rows * n;
    const std::complex<double>* const by_c1 = raw.data() + layout.first[channel_c1] * n;
    std::complex<double>* to = sensitivities.data();
    if (wanted.hurst) to = std::copy_n(raw.data() + layout.first[channel_alpha] * n, size, to);
    auto rotate = [&](double factor, const std::complex<double>* more, double weight) {
        for (std::size_t r = 0; r < rows; ++r)
            for (std::size_t i = 0; i < n; ++i, ++to) {  // factor i u d/dc1 + weight more
                const double x = u[i].real(), y = u[i].imag();
                const auto d = by_c1[r * n + i];
                double re = factor * (-y * d.real() - x * d.imag());
                double im = factor * (x * d.real() - y * d.imag());
                if (more) re += weight * more[r * n + i].real(), im += weight * more[r * n + i].imag();
                *to = {re, im};
            }
    };
    if (wanted.vol_of_vol) {
        const bool moves = m.vol_of_vol > 0.0;  // at 0 d(c2)/dnu is 0
        rotate(m.correlation, moves ? raw.data() + layout.first[channel_c2] * n : nullptr,
               moves ? 2.0 / m.vol_of_vol : 0.0);
    }
    if (wanted.correlation) rotate(m.vol_of_vol, nullptr, 0.0);
    if (wanted.mean_reversion) {
        const bool market = curve.form == curve_form::market;
        const std::complex<double>* const extra = raw.data() + layout.first[channel_psi] * n;
        for (std::size_t k = 0; k < size; ++k, ++to) *to = market ? extra[k] - by_c1[k] : -by_c1[k];
    }
}

// Serves the u of a line from an interpolant in every row. Returns false, and leaves `raw` alone, where
// that is not good enough: values to the tolerance, derivatives relative to their largest.
inline bool tangent_line(const target_kernels& kernels, const graded_level& level,
                         const model_parameters& m, const variance_curve& curve,
                         const line_task& line, std::span<const std::complex<double>> u,
                         std::span<const double> maturities, const sensitivity_request& wanted,
                         const raw_rows& layout, std::span<std::complex<double>> raw) {
    const std::size_t nodes = line.grid.s.size(), rows = maturities.size();
    graded_record record(nodes);
    std::vector<std::complex<double>> at_nodes(layout.all * nodes);
    std::vector<std::size_t> which(nodes);
    std::iota(which.begin(), which.end(), std::size_t{0});
    tangent_pass(kernels, level, m, curve, line.grid.u, which, maturities, wanted, layout, true,
                 at_nodes, record);
    if (std::ranges::count(record.solved, 0) != 0) return false;
    // d/dc1 and the functional of psi stay moderate along the line, unlike all other rows: their
    // interpolants are not scaled, which takes the opposite factor here.
    std::vector<char> flat(layout.all, 0);
    for (const auto c : {channel_c1, channel_psi})
        if (layout.kept[c]) std::fill_n(flat.data() + layout.first[c], rows, 1);
    for (std::size_t r = 0; r < layout.all; ++r)
        for (std::size_t j = 0; flat[r] && j < nodes; ++j)
            at_nodes[r * nodes + j] *= line.grid.scale[j];
    const auto tails = line_tails(line.grid, at_nodes);
    for (std::size_t r = 0; r < layout.all; ++r) {
        const std::complex<double>* const row = at_nodes.data() + r * nodes;
        if (r >= layout.first[channel_value]) {
            for (std::size_t j = 0; j < nodes; ++j)
                if (!(tails[r] * line.grid.scale[j] * std::exp(std::min(row[j].real(), 0.0)) <=
                      0.3 * wanted.tolerance))
                    return false;
            continue;
        }
        double largest = 0.0;  // square
        for (std::size_t j = 0; j < nodes; ++j) {
            const double scale = flat[r] ? line.grid.scale[j] : 1.0;
            largest = std::max(largest, std::norm(row[j]) / (scale * scale));
        }
        const double error = tails[r] * (flat[r] ? 1.0 : line.grid.scale[0]);  // nodes descend
        if (!(error <= sensitivity_accuracy * wanted.tolerance * std::sqrt(largest))) return false;
    }
    // values are the combination of the elementary curves where these are wanted
    const std::size_t served = layout.basis_rows ? layout.first[channel_value] : layout.all;
    interpolate_line(kernels, line.grid, std::span(at_nodes).first(served * nodes), u, line.members,
                     raw);
    const std::size_t n = u.size();
    std::vector<double> unscale;
    for (const std::size_t i : line.members) unscale.push_back(1.0 / line_scale(u[i].real()));
    for (std::size_t r = 0; r < served; ++r)
        for (std::size_t k = 0; flat[r] && k < unscale.size(); ++k)
            raw[r * n + line.members[k]] *= unscale[k];
    const bool driven = curve.form == curve_form::driven;
    for (std::size_t k = 0; layout.basis_rows && k < curve.basis_size(); ++k) {
        const double level_of = driven ? (k ? curve.levels[k - 1] : curve.initial) : curve.levels[k];
        for (std::size_t t = 0; t < rows; ++t) {
            const std::complex<double>* const from = raw.data() + (layout.basis + k * rows + t) * n;
            std::complex<double>* const to = raw.data() + (layout.first[channel_value] + t) * n;
            for (const std::size_t i : line.members)
                to[i] = (k ? to[i] : std::complex<double>{}) + level_of * from[i];
        }
    }
    return true;
}

}  // namespace detail

// Values (maturities x u), `sensitivities` (parameters x maturities x u) and, if wanted, `basis`
// (elementary curves x maturities x u). Maturities must ascend. Returns how many u no mesh could
// solve, or not to the tolerance; what is not solved is nan. Throws moment_explosion_error.
inline std::size_t solve_log_sensitivities(const target_kernels& kernels, const model_parameters& m,
                                           const variance_curve& curve,
                                           std::span<const std::complex<double>> u,
                                           std::span<const double> maturities,
                                           const sensitivity_request& wanted,
                                           std::span<std::complex<double>> values,
                                           std::span<std::complex<double>> sensitivities,
                                           std::span<std::complex<double>> basis) {
    const std::size_t n = u.size(), rows = maturities.size();
    const detail::raw_rows layout(wanted, m, curve, rows);
    error_bounds bounds;
    std::map<double, std::uint32_t> imaginary;
    for (std::size_t i = 0; i < n; ++i) {
        const double y = u[i].imag();
        if (i && y == u[i - 1].imag()) {
            bounds.line.push_back(bounds.line.back());
            continue;
        }
        const auto [entry, is_new] =
            imaginary.try_emplace(y, static_cast<std::uint32_t>(imaginary.size()));
        bounds.line.push_back(entry->second);
        if (is_new) require_finite_moment(m, -y, maturities);
    }
    bounds.lines = imaginary.size();

    const auto storage = std::make_unique_for_overwrite<double[]>(2 * layout.all * n);
    const std::span raw(reinterpret_cast<std::complex<double>*>(storage.get()), layout.all * n);
    std::vector<char> open(n, 1);
    const std::size_t coarsest = graded_level_for(wanted.tolerance);
    if (m.hurst < 0.5) {
        const std::vector<double> bound(n, wanted.tolerance);
        for (const auto& line : lines_of(m, curve, u, maturities, bounds, bound))
            if (detail::tangent_line(kernels, detail::tangent_ladder(m.hurst, coarsest), m, curve,
                                     line, u, maturities, wanted, layout, raw))
                for (const std::size_t i : line.members) open[i] = 0;
    }
    graded_record record(n);
    std::vector<std::size_t> which;
    std::complex<double>* const value = raw.data() + layout.first[channel_value] * n;
    for (std::size_t level = coarsest; level + 1 < graded_levels; ++level) {
        which.clear();
        for (std::size_t i = 0; i < n; ++i)
            if (open[i]) which.push_back(i);
        if (which.empty()) break;
        detail::tangent_pass(kernels, detail::tangent_ladder(m.hurst, level), m, curve, u, which,
                             maturities, wanted, layout, false, raw, record);
        for (const std::size_t i : which) {
            const double size = std::max(1.0, std::abs(value[(rows - 1) * n + i]));
            open[i] = !record.solved[i] || graded_doubt * record.doubt[i] > wanted.tolerance * size;
        }
    }
    constexpr double nan = std::numeric_limits<double>::quiet_NaN();
    std::size_t missed = 0;
    for (std::size_t i = 0; i < n; ++i) {
        if (u[i] == 0.0 || u[i] == std::complex<double>{0.0, -1.0}) {  // phi = 1 for all parameters
            for (std::size_t r = 0; r < layout.all; ++r) raw[r * n + i] = 0.0;
            continue;
        }
        missed += open[i] != 0;
        for (std::size_t r = 0; open[i] && !record.solved[i] && r < layout.all; ++r)
            raw[r * n + i] = {nan, nan};
    }
    if (m.hurst == 0.5) {
        std::vector<std::complex<double>> elementary(curve.basis_size());
        const bool driven = curve.form == curve_form::driven;
        for (std::size_t t = 0; t < rows; ++t)
            for (std::size_t i = 0; i < n; ++i) {
                classical_basis(m, curve, u[i], maturities[t], elementary.data());
                auto& sum = value[t * n + i] = driven ? curve.initial * elementary[0] : 0.0;
                for (std::size_t k = 0; k < curve.levels.size(); ++k)
                    sum += curve.levels[k] * elementary[k + driven];
                for (std::size_t k = 0; layout.basis_rows && k < elementary.size(); ++k)
                    raw[(layout.basis + k * rows + t) * n + i] = elementary[k];
            }
    }
    std::copy_n(value, rows * n, values.data());
    if (layout.basis_is_value)
        for (std::size_t k = 0; k < basis.size(); ++k) basis[k] = value[k] / curve.levels[0];
    else
        std::copy_n(raw.data() + layout.basis * n, basis.size(), basis.data());
    detail::to_parameters(m, curve, u, rows, wanted, layout, raw, sensitivities);
    return missed;
}

// The same in parts of at most sensitivity_chunk u, shared out among threads; no value depends on its
// companions, so the bits are the same for any number of threads.
inline std::size_t log_sensitivities_into(const target_kernels& kernels, const model_parameters& m,
                                          const variance_curve& curve,
                                          std::span<const std::complex<double>> u,
                                          std::span<const double> maturities,
                                          const sensitivity_request& wanted,
                                          std::span<std::complex<double>> values,
                                          std::span<std::complex<double>> sensitivities,
                                          std::span<std::complex<double>> basis) {
    const std::size_t n = u.size();
    if (values.empty()) return 0;
    std::atomic<std::size_t> missed{0};
    constexpr std::size_t least = 64;  // u: below that a thread costs more than it saves
    for_each_part(n, wanted.threads, least, [&](std::size_t part_begin, std::size_t part_end) {
        std::vector<std::complex<double>> part;
        for (std::size_t begin = part_begin; begin < part_end; begin += sensitivity_chunk) {
            const std::size_t size = std::min(part_end - begin, sensitivity_chunk);
            const auto nodes = u.subspan(begin, size);
            if (size == n) {
                missed += solve_log_sensitivities(kernels, m, curve, nodes, maturities, wanted,
                                                  values, sensitivities, basis);
                continue;
            }
            const std::span<std::complex<double>> targets[] = {values, sensitivities, basis};
            std::span<std::complex<double>> parts[3];
            part.resize((values.size() + sensitivities.size() + basis.size()) / n * size);
            std::size_t at = 0;
            for (std::size_t k = 0; k < 3; ++k) {
                parts[k] = std::span(part).subspan(at, targets[k].size() / n * size);
                at += parts[k].size();
            }
            missed += solve_log_sensitivities(kernels, m, curve, nodes, maturities, wanted, parts[0],
                                              parts[1], parts[2]);
            for (std::size_t k = 0; k < 3; ++k)
                for (std::size_t r = 0; r < targets[k].size() / n; ++r)
                    std::copy_n(parts[k].data() + r * size, size, targets[k].data() + r * n + begin);
        }
    });
    return missed;
}

}  // namespace volterra
