// The graded scheme for one block of lanes: psi = K * [c0 + c1 psi + c2 psi^2] on a geometric mesh.
//
// Element by element: the history of an element is a product of small dense blocks, which depend
// on the lag only, with the stored G; its nodes solve a system of their own (graded_element.hpp).
// In the end linear functionals of (F, psi), one per maturity, give log phi.
//
// Memory: three rows of 2 x lanes doubles per node, whatever the number of u. No allocation, no
// exceptions, no standard-library templates here: see simd.hpp.
#pragma once

#include "volterra/graded_element.hpp"

namespace volterra {

// One block's work order. All rows are split: `lanes` real parts, then `lanes` imaginary parts.
struct graded_block {
    const double* c0;  // 2 x lanes
    const double* c1;  // 2 x lanes
    double c2;
    std::size_t nodes;     // m
    std::size_t elements;  // of this mesh, the first one included
    const double* scales;  // elements - 1: left^alpha of all but the first, which has scales[0]
    const double* powers;  // m: (node/b)^alpha on the first element
    // from graded_plan
    graded_matrices start, step;
    const double *from_zero, *from_first, *lag, *extrapolation, *tau_power, *series;
    std::size_t lags;  // blocks in `lag`
    // linear functionals: value_r = sum_n f[n][r] (G + left^alpha mix psi)_n + p[n][r] psi_n
    std::size_t functionals;
    double mix;
    const double* first_f;            // (m + 1) x functionals: t = 0 and the first element
    const double* first_psi;          // the same, or null
    const double* weights_f;          // (elements - 1) m x functionals
    const double* weights_psi;        // the same; read if first_psi is not null
    const std::size_t* first_active;  // [1 .. elements - 1]: functionals before it do not use it
    double accuracy;                  // of phi, where the nonlinear systems stop ...
    bool of_logarithm;                // ... or of log phi
    const double* negligible;         // lanes: log |phi| below which psi is not solved for
    double least_variance;            // |phi| <= exp(least_variance int Re F)
    double typical_variance;          // size of what multiplies F in log phi, for `doubt`
    const double *total, *first_total;  // m + 1: integrals of the basis in units of left edge and b
    const double* lengths;            // elements - 1: left edges of all but the first element
    double growth;                    // q^alpha
    const double* settling;           // elements: right edge^(1 - alpha) / Gamma(2 - alpha)
    double* values;                   // functionals x 2 x lanes
    double* doubt;                    // lanes: indicator of the error of phi, see below
    double* guessed;                  // lanes: first element where psi is only guessed, or `elements`
    double* remainder;                // lanes: log |phi| there
    double* psi;                      // (1 + elements m) x 2 x lanes, or null
    double* status;                   // lanes: 0 solved, k + 1 if the solver failed on element k
    double* workspace;                // graded_workspace doubles
};

inline constexpr std::size_t graded_workspace(std::size_t nodes, std::size_t elements,
                                              std::size_t lanes) {
    return (3 * (1 + nodes * elements) + 2 * nodes) * 2 * lanes;
}

}  // namespace volterra

namespace volterra::VOLTERRA_TARGET {

namespace graded_detail {

VOLTERRA_INLINE quadratic scaled(const graded_block& b, std::size_t c, double scale) {
    const pack s = broadcast(scale);
    return {s * load_complex(b.c0 + c), s * load_complex(b.c1 + c), s * broadcast(b.c2)};
}

// values = f-weights (G + mix psi) + psi-weights psi over all nodes; z is G + mix psi.
template <std::size_t m>
VOLTERRA_INLINE void apply_functionals(const graded_block& b, const double* z, const double* psi) {
    constexpr std::size_t tile = row_packs == 4 ? 5 : 6;  // accumulators that fit the registers
    std::size_t r = 0, elements = 1;  // elements: those that the rows of the tile use
    auto rows = [&]<std::size_t n>() {
        while (elements < b.elements && b.first_active[elements] < r + n) ++elements;
        const std::size_t others = (elements - 1) * m;
        pack acc[n][row_packs] = {};
        multiply_tile<n>(acc, b.first_f + r, b.functionals, z, m + 1);
        multiply_tile<n>(acc, b.weights_f + r, b.functionals, z + (m + 1) * row, others);
        if (b.first_psi) {
            multiply_tile<n>(acc, b.first_psi + r, b.functionals, psi, m + 1);
            multiply_tile<n>(acc, b.weights_psi + r, b.functionals, psi + (m + 1) * row, others);
        }
        store_tile<n>(acc, b.values + r * row);
        r += n;
    };
    while (r + tile <= b.functionals) rows.template operator()<tile>();
    while (r + 2 <= b.functionals) rows.template operator()<2>();
    while (r < b.functionals) rows.template operator()<1>();
}

// Blocks that act on what came before an element; see graded_plan.
struct history_blocks {
    const double *from_zero, *from_first, *lag;
    std::size_t lags;
};

// acc += the rows top, top + 1, ... of what the elements before k contribute to element k.
template <std::size_t m, std::size_t rows>
VOLTERRA_INLINE void add_history(pack (&acc)[rows][row_packs], const history_blocks& b,
                                 std::size_t k, std::size_t top, const double* G) {
    if (k == 0) {
        multiply_tile<rows>(acc, b.from_zero + top, m, G, 1);
        return;
    }
    multiply_tile<rows>(acc, b.from_first + (k - 1) * m * (m + 1) + top, m, G, m + 1);
    multiply_tile<rows>(acc, b.lag + (b.lags + 1 - k) * m * m + top, m, G + (1 + m) * row,
                        (k - 1) * m);
}

// h = B^-1 W^-1 times what the elements before k contribute to the nodes of element k.
template <std::size_t m>
VOLTERRA_INLINE void history(const graded_block& b, std::size_t k, const double* G, double* h) {
    constexpr std::size_t rows = tile_rows<m>;
    for (std::size_t top = 0; top < m; top += rows) {
        pack acc[rows][row_packs] = {};
        add_history<m>(acc, {b.from_zero, b.from_first, b.lag, b.lags}, k, top, G);
        store_tile<rows>(acc, h + top * row);
    }
}

template <std::size_t m>
VOLTERRA_INLINE void fill_with_guess(const global_guess (&guess)[packs], const double* powers,
                                     double scale, double* psi) {
    VOLTERRA_UNROLL
    for (std::size_t j = 0; j < m; ++j)
        VOLTERRA_UNROLL
        for (std::size_t p = 0; p < packs; ++p)
            store_complex(psi + j * row + p * pack_width, guess[p].at(scale * powers[j]));
}

template <std::size_t m>
inline void solve(const graded_block& b) {
    const std::size_t size = (1 + m * b.elements) * row;
    double* const G = b.workspace;                  // left^alpha F at t = 0 and all nodes
    double* const psi = b.psi ? b.psi : G + size;   // the same nodes
    double* const z = b.mix != 0.0 ? G + 2 * size : G;
    double* const h = b.workspace + 3 * size;       // m rows
    double* const y = h + m * row;                  // m rows

    std::memset(b.status, 0, lanes * sizeof(double));
    for (std::size_t c = 0; c < row; c += pack_width) {
        store(G + c, b.scales[0] * load(b.c0 + c));
        store(z + c, load(G + c));
        store(psi + c, broadcast(0.0));
    }
    global_guess guess[packs];
    // log |phi| at the maturities still ahead is expected between `decay`, what has been integrated
    // so far, and `settled`, its value for psi at its limit. (|phi| may rise again with maturity.)
    pack decay[packs], limit[packs];
    pack doubt[packs];
    mask small[packs];  // lanes where that bound is negligible
    bool any_small = false, all_small = false;
    VOLTERRA_UNROLL
    for (std::size_t p = 0; p < packs; ++p) {
        guess[p] = make_guess(scaled(b, p * pack_width, 1.0), b.series);
        decay[p] = doubt[p] = broadcast(0.0);
        limit[p] = 0.5 * b.least_variance * stable_root(scaled(b, p * pack_width, 1.0)).re;
        small[p] = decay[p] != decay[p];
        store(b.guessed + p * pack_width, broadcast(static_cast<double>(b.elements)));
        store(b.remainder + p * pack_width, broadcast(0.0));
    }

    for (std::size_t k = 0; k < b.elements; ++k) {
        const double* const left = psi + k * m * row;  // left edge of this element
        double* const at_nodes = psi + (1 + k * m) * row;
        const double scale = b.scales[k ? k - 1 : 0];
        quadratic f[packs];
        VOLTERRA_UNROLL
        for (std::size_t p = 0; p < packs; ++p) f[p] = scaled(b, p * pack_width, scale);
        if (!all_small) {
            history<m>(b, k, G, h);
            pack strict[packs];
            complex_pack predicted[packs];
            if (k >= 2)
                multiply<m>(b.extrapolation, left - m * row, m + 1, at_nodes);
            else
                fill_with_guess<m>(guess, k ? b.tau_power : b.powers, scale, at_nodes);
            // An error of psi changes phi by |phi| times the size of the element times F'.
            const double weight = b.typical_variance * b.lengths[k ? k - 1 : 0] / scale;
            const double wanted = weight * weight / (b.accuracy * b.accuracy);
            pack modulus[packs];
            VOLTERRA_UNROLL
            for (std::size_t p = 0; p < packs; ++p) {
                predicted[p] = load_complex(at_nodes + p * pack_width);
                const complex_pack middle = load_complex(at_nodes + (m / 2) * row + p * pack_width);
                const pack ahead = larger(decay[p], limit[p] * broadcast(k ? b.settling[k - 1] : 0.0));
                const pack bounded = smaller(larger(ahead, broadcast(-200.0)), broadcast(200.0));
                modulus[p] = b.of_logarithm ? broadcast(1.0) : power_of_two(1.4427 * bounded);
                strict[p] = broadcast(wanted) * modulus[p] * modulus[p] *
                            (norm(f[p].derivative(middle)) + scale * scale);
            }
            mask open[packs];
            solve_element<m>(k ? b.step : b.start, f, h, left, at_nodes, y, strict, open);
            VOLTERRA_UNROLL
            for (std::size_t p = 0; p < packs; ++p) {
                if (any(open[p] & ~small[p]))
                    for (std::size_t i = 0; i < pack_width; ++i)
                        if (open[p][i] && !small[p][i] && b.status[p * pack_width + i] == 0.0)
                            b.status[p * pack_width + i] = static_cast<double>(k + 1);
                if (k < 2) continue;
                // Milne's device: how far extrapolation misses the next node measures the
                // derivative that interpolation neglects.
                const complex_pack first = load_complex(at_nodes + p * pack_width);
                const pack miss = norm(predicted[p] - first) * norm(f[p].derivative(first));
                const pack more = broadcast(weight * weight) * modulus[p] * modulus[p] * miss;
                doubt[p] += small[p] ? broadcast(0.0) : more;
            }
        }
        // Where |phi| is negligible psi keeps its value, near its limit, and F falls like t^-alpha.
        complex_pack last[packs] = {};
        if (any_small)
            VOLTERRA_UNROLL
            for (std::size_t p = 0; p < packs; ++p) {
                last[p] = broadcast(k > 1 ? b.growth : 1.0) * load_complex(G + k * m * row + p * pack_width);
                last[p].re = last[p].re < 0.0 ? last[p].re : broadcast(0.0);
                const complex_pack limit = load_complex(left + p * pack_width);
                VOLTERRA_UNROLL
                for (std::size_t j = 0; j < m; ++j) {
                    double* const at = at_nodes + j * row + p * pack_width;
                    store_complex(at, select(small[p], limit, load_complex(at)));
                }
            }
        const double* const total = k ? b.total : b.first_total;
        const double share = b.least_variance * b.lengths[k ? k - 1 : 0] / scale;
        bool now_any = false;
        all_small = true;
        VOLTERRA_UNROLL
        for (std::size_t p = 0; p < packs; ++p) {
            const std::size_t edge = k * m * row + p * pack_width;
            pack sum = broadcast(total[0] * (k > 1 ? b.growth : 1.0)) * load(G + edge);
            VOLTERRA_UNROLL
            for (std::size_t j = 0; j < m; ++j) {
                const std::size_t at = (1 + k * m + j) * row + p * pack_width;
                const complex_pack x = load_complex(psi + at);
                complex_pack value = f[p].value(x);
                if (any_small)
                    value = select(small[p], broadcast(1.0 / b.tau_power[j]) * last[p], value);
                store_complex(G + at, value);
                sum += broadcast(total[j + 1]) * value.re;
                if (b.mix != 0.0) store_complex(z + at, value + broadcast(scale * b.mix) * x);
            }
            decay[p] += broadcast(share) * sum;
            const pack cut = load(b.negligible + p * pack_width);
            const pack settled = limit[p] * broadcast(b.settling[k]);
            const mask now = ~small[p] & (decay[p] < cut) & (settled < cut);
            if (any(now)) {
                double* const to = b.guessed + p * pack_width;
                store(to, now ? broadcast(static_cast<double>(k + 1)) : load(to));
                double* const log_size = b.remainder + p * pack_width;
                store(log_size, now ? decay[p] : load(log_size));
                small[p] = small[p] | now;
            }
            now_any |= any(small[p]);
            all_small &= !any(~small[p]);
        }
        any_small = now_any;
    }
    VOLTERRA_UNROLL
    for (std::size_t p = 0; p < packs; ++p) store(b.doubt + p * pack_width, sqrt(doubt[p]));
    apply_functionals<m>(b, z, psi);
}

}  // namespace graded_detail

inline constexpr std::size_t graded_lanes = graded_detail::lanes;

inline void solve_graded_block(const graded_block& block) {
    switch (block.nodes) {
        case 4: return graded_detail::solve<4>(block);
        case 6: return graded_detail::solve<6>(block);
        case 8: return graded_detail::solve<8>(block);
        case 10: return graded_detail::solve<10>(block);
    }
}

}  // namespace volterra::VOLTERRA_TARGET
