// The graded scheme for one block of lanes: psi = K * [c0 + c1 psi + c2 psi^2] on a geometric mesh.
//
// Element by element: the history of an element is a product of small dense blocks, which depend
// on the lag only, with the stored G; its nodes solve a system of their own (graded_element.hpp);
// then the linear functionals of (F, psi), one per maturity, take up their share of it.
//
// Memory: one row of 2 x lanes doubles per node, whatever the number of u. No allocation, no
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
    double accuracy;                  // relative accuracy asked of psi at the nodes
    double* values;                   // functionals x 2 x lanes
    double* psi;                      // (1 + elements m) x 2 x lanes, or null
    double* status;                   // lanes: 0 solved, k + 1 if the solver failed on element k
    double* workspace;                // graded_workspace doubles
};

inline constexpr std::size_t graded_workspace(std::size_t nodes, std::size_t elements,
                                              std::size_t lanes) {
    return (1 + nodes * elements + 4 * (nodes + 1)) * 2 * lanes;
}

}  // namespace volterra

namespace volterra::VOLTERRA_TARGET {

namespace graded_detail {

VOLTERRA_INLINE quadratic scaled(const graded_block& b, std::size_t c, double scale) {
    const pack s = broadcast(scale);
    return {s * load_complex(b.c0 + c), s * load_complex(b.c1 + c), s * broadcast(b.c2)};
}

// values += f-weights (G + mix psi) + psi-weights psi over the nodes of one element.
template <std::size_t m>
VOLTERRA_INLINE void accumulate_functionals(const graded_block& b, std::size_t k, const double* g,
                                            const double* psi) {
    const std::size_t at = k ? (k - 1) * m * b.functionals : b.functionals;
    const double* const weights_f = (k ? b.weights_f : b.first_f) + at;
    const double* const weights_psi = b.first_psi ? (k ? b.weights_psi : b.first_psi) + at : nullptr;
    constexpr std::size_t tile = 3;
    std::size_t r = k ? b.first_active[k] : 0;
    auto rows = [&]<std::size_t n>() {
        pack acc[n][row_packs];
        VOLTERRA_UNROLL
        for (std::size_t i = 0; i < n; ++i)
            VOLTERRA_UNROLL
            for (std::size_t c = 0; c < row_packs; ++c)
                acc[i][c] = load(b.values + (r + i) * row + c * pack_width);
        multiply_tile<n>(acc, weights_f + r, b.functionals, g, m);
        if (weights_psi)
            multiply_tile<n>(acc, weights_psi + r, b.functionals, psi, m);
        VOLTERRA_UNROLL
        for (std::size_t i = 0; i < n; ++i)
            VOLTERRA_UNROLL
            for (std::size_t c = 0; c < row_packs; ++c)
                store(b.values + (r + i) * row + c * pack_width, acc[i][c]);
    };
    for (; r + tile <= b.functionals; r += tile) rows.template operator()<tile>();
    for (; r < b.functionals; ++r) rows.template operator()<1>();
}

template <std::size_t m>
inline void solve(const graded_block& b) {
    double* const G = b.workspace;                          // 1 + elements m rows
    double* const h = G + (1 + m * b.elements) * row;       // m rows
    double* const y = h + m * row;                          // m rows
    double* const psi_edge = y + m * row;                   // m + 1 rows: left edge, then nodes
    double* const psi = psi_edge + row;
    double* const z = psi_edge + (m + 1) * row;             // m rows

    std::memset(b.values, 0, b.functionals * row * sizeof(double));
    std::memset(b.status, 0, lanes * sizeof(double));
    for (std::size_t c = 0; c < row; c += pack_width) {
        store(G + c, b.scales[0] * load(b.c0 + c));
        store(psi_edge + c, broadcast(0.0));
        if (b.psi) store(b.psi + c, broadcast(0.0));
        for (std::size_t r = 0; r < b.functionals; ++r)
            store(b.values + r * row + c, b.first_f[r] * load(G + c));
    }

    for (std::size_t k = 0; k < b.elements; ++k) {
        double* const g = G + (1 + k * m) * row;  // this element's nodes
        const double scale = b.scales[k ? k - 1 : 0];
        constexpr std::size_t rows = tile_rows<m>;
        for (std::size_t top = 0; top < m; top += rows) {
            pack acc[rows][row_packs] = {};
            if (k == 0) {
                multiply_tile<rows>(acc, b.from_zero + top, m, G, 1);
            } else {
                multiply_tile<rows>(acc, b.from_first + (k - 1) * m * (m + 1) + top, m, G, m + 1);
                multiply_tile<rows>(acc, b.lag + (b.lags + 1 - k) * m * m + top, m,
                                    G + (1 + m) * row, (k - 1) * m);
            }
            VOLTERRA_UNROLL
            for (std::size_t i = 0; i < rows; ++i)
                VOLTERRA_UNROLL
                for (std::size_t c = 0; c < row_packs; ++c)
                    store(h + (top + i) * row + c * pack_width, acc[i][c]);
        }
        quadratic f[packs];
        VOLTERRA_UNROLL
        for (std::size_t p = 0; p < packs; ++p) f[p] = scaled(b, p * pack_width, scale);
        if (k >= 2) {
            multiply<m>(b.extrapolation, psi_edge, m + 1, y);
            copy_rows(psi + (m - 1) * row, 1, psi_edge);
            copy_rows(y, m, psi);
        } else {
            if (k == 1) copy_rows(psi + (m - 1) * row, 1, psi_edge);
            const double* const powers = k ? b.tau_power : b.powers;
            VOLTERRA_UNROLL
            for (std::size_t p = 0; p < packs; ++p) {
                const global_guess guess = make_guess(scaled(b, p * pack_width, 1.0), b.series);
                VOLTERRA_UNROLL
                for (std::size_t j = 0; j < m; ++j)
                    store_complex(psi + j * row + p * pack_width, guess.at(scale * powers[j]));
            }
        }
        mask open[packs];
        solve_element<m>(k ? b.step : b.start, f, h, psi_edge, psi, y, b.accuracy, open);
        VOLTERRA_UNROLL
        for (std::size_t p = 0; p < packs; ++p)
            for (std::size_t i = 0; i < pack_width; ++i)
                if (open[p][i] && b.status[p * pack_width + i] == 0.0)
                    b.status[p * pack_width + i] = static_cast<double>(k + 1);
        VOLTERRA_UNROLL
        for (std::size_t j = 0; j < m; ++j)
            VOLTERRA_UNROLL
            for (std::size_t p = 0; p < packs; ++p) {
                const std::size_t at = j * row + p * pack_width;
                const complex_pack x = load_complex(psi + at), value = f[p].value(x);
                store_complex(g + at, value);
                if (b.mix != 0.0) store_complex(z + at, value + broadcast(scale * b.mix) * x);
            }
        if (b.psi) copy_rows(psi, m, b.psi + (1 + k * m) * row);
        accumulate_functionals<m>(b, k, b.mix != 0.0 ? z : g, psi);
    }
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
