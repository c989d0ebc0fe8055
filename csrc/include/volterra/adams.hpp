// The uniform fractional Adams–Moulton scheme for a block of Fourier arguments.
//
//   psi = K * F,  F = c0 + c1 psi + c2 psi^2
//
// One block holds `adams_lanes` values of u in split real and imaginary rows. History sums are
// taken in two parts: what lies before the current block of `time_block` steps is a dense product
// of Toeplitz weights with the stored F (register tiles, chunks that stay in the first-level
// cache), what lies inside it is added step by step. The corrector is a quadratic in one unknown
// and is solved in closed form: no predictor is needed and nothing overflows where the explicit
// predictor would.
//
// Memory: (steps + 1) x 2 x adams_lanes doubles per block, whatever the number of u.
// No allocation, no exceptions, no standard-library templates here: see simd.hpp.
#pragma once

#include "volterra/simd.hpp"

namespace volterra {

// One block's work order. All rows are split: `lanes` real parts, then `lanes` imaginary parts.
struct adams_block {
    const double* c0;  // 2 x lanes
    const double* c1;  // 2 x lanes
    double c2;
    std::size_t steps;
    double diagonal_weight;
    const double* lag_weights;    // [1 .. steps - 1], see fractional_weights.hpp
    const double* first_weights;  // [1 .. steps]
    std::size_t functionals;      // how many linear functionals of (F, psi) are wanted
    const double* weights_f;      // functionals x (steps + 1)
    const double* weights_psi;    // functionals x (steps + 1)
    double* values;               // functionals x 2 x lanes: sum_n wF_n F_n + wpsi_n psi_n
    double* psi;                  // (steps + 1) x 2 x lanes, or null
    double* history;              // workspace: adams_workspace(steps, lanes) doubles
};

inline constexpr std::size_t adams_time_block = 16;

// Doubles of workspace for one block: F at every node, and the history sums of one time block.
inline constexpr std::size_t adams_workspace(std::size_t steps, std::size_t lanes) {
    return (steps + 1 + adams_time_block) * 2 * lanes;
}

}  // namespace volterra

namespace volterra::VOLTERRA_TARGET {

inline constexpr std::size_t adams_lanes = 4 * pack_width;

namespace adams_detail {

inline constexpr std::size_t lanes = adams_lanes;
inline constexpr std::size_t row = 2 * lanes;
inline constexpr std::size_t packs = row / pack_width;

// sums[r] += sum_{j in [begin, end)} lag[first_lag + r - j + begin] F_j for `rows` rows r.
// Register tile: `rows` x `columns` accumulators.
template <std::size_t rows, std::size_t columns>
VOLTERRA_INLINE void accumulate_tile(double* sums, const double* lag, std::size_t first_lag,
                                     const double* f, std::size_t count) {
    pack acc[rows][columns];
    for (std::size_t r = 0; r < rows; ++r)
        for (std::size_t c = 0; c < columns; ++c) acc[r][c] = load(sums + r * row + c * pack_width);
    for (std::size_t j = 0; j < count; ++j) {
        pack x[columns];
        for (std::size_t c = 0; c < columns; ++c) x[c] = load(f + j * row + c * pack_width);
        for (std::size_t r = 0; r < rows; ++r) {
            const pack w = broadcast(lag[first_lag + r - j]);
            for (std::size_t c = 0; c < columns; ++c) acc[r][c] += w * x[c];
        }
    }
    for (std::size_t r = 0; r < rows; ++r)
        for (std::size_t c = 0; c < columns; ++c) store(sums + r * row + c * pack_width, acc[r][c]);
}

// History of nodes 1 .. begin - 1 at the steps begin .. begin + adams_time_block - 1.
inline void accumulate_history(double* sums, const double* lag, const double* f,
                               std::size_t begin) {
    constexpr std::size_t chunk = 32;  // nodes per pass: their F stays in the first-level cache
    constexpr std::size_t tile_rows = 4;
    constexpr std::size_t tile_columns = vector_registers == 32 ? 4 : 2;
    for (std::size_t j = 1; j < begin; j += chunk) {
        const std::size_t count = begin - j < chunk ? begin - j : chunk;
        for (std::size_t r = 0; r < adams_time_block; r += tile_rows)
            for (std::size_t c = 0; c < packs; c += tile_columns)
                accumulate_tile<tile_rows, tile_columns>(sums + r * row + c * pack_width, lag,
                                                         begin + r - j,
                                                         f + j * row + c * pack_width, count);
    }
}

VOLTERRA_INLINE complex_pack load_complex(const double* p) { return {load(p), load(p + lanes)}; }
VOLTERRA_INLINE void store_complex(double* p, complex_pack z) {
    store(p, z.re);
    store(p + lanes, z.im);
}

}  // namespace adams_detail

// Solves one block. `lag_weights` must be readable up to index steps + adams_time_block: rows past
// the last step are computed and dropped.
inline void solve_adams_block(const adams_block& block) {
    using namespace adams_detail;
    double* const f = block.history;
    double* const sums = block.history + (block.steps + 1) * row;
    const pack w = broadcast(block.diagonal_weight);

    auto add_to_functionals = [&](std::size_t n, std::size_t c, complex_pack f_n, complex_pack psi_n) {
        for (std::size_t m = 0; m < block.functionals; ++m) {
            const double wf = block.weights_f[m * (block.steps + 1) + n];
            const double wp = block.weights_psi[m * (block.steps + 1) + n];
            double* const value = block.values + m * row + c;
            store_complex(value, load_complex(value) + broadcast(wf) * f_n + broadcast(wp) * psi_n);
        }
    };

    std::memset(block.values, 0, block.functionals * row * sizeof(double));
    std::memcpy(f, block.c0, row * sizeof(double));  // psi_0 = 0, F_0 = c0
    if (block.psi) std::memset(block.psi, 0, row * sizeof(double));
    for (std::size_t c = 0; c < lanes; c += pack_width)
        add_to_functionals(0, c, load_complex(block.c0 + c), {broadcast(0.0), broadcast(0.0)});

    for (std::size_t begin = 1; begin <= block.steps; begin += adams_time_block) {
        const std::size_t left = block.steps + 1 - begin;
        const std::size_t count = left < adams_time_block ? left : adams_time_block;
        std::memset(sums, 0, adams_time_block * row * sizeof(double));
        accumulate_history(sums, block.lag_weights, f, begin);
        for (std::size_t i = 0; i < count; ++i) {
            const std::size_t n = begin + i;
            double* const sum = sums + i * row;
            for (std::size_t c = 0; c < row; c += pack_width) {
                pack acc = load(sum + c) + block.first_weights[n] * load(f + c);
                for (std::size_t j = begin; j < n; ++j)
                    acc += block.lag_weights[n - j] * load(f + j * row + c);
                store(sum + c, acc);
            }
            for (std::size_t c = 0; c < lanes; c += pack_width) {
                // psi = r + w (c0 + c1 psi + c2 psi^2): the root with Re(1 - w F'(psi)) >= 0 is the
                // stable one and the one that continues w = 0, hence the root nearest to any
                // accurate predictor.
                const complex_pack c0 = load_complex(block.c0 + c);
                const complex_pack c1 = load_complex(block.c1 + c);
                const complex_pack e = load_complex(sum + c) + w * c0;
                const complex_pack q = {1.0 - w * c1.re, -w * c1.im};
                const complex_pack root = sqrt(q * q - (4.0 * w * block.c2) * e);
                const complex_pack psi = (broadcast(2.0) * e) / (q + root);
                const complex_pack f_n = c0 + (c1 + broadcast(block.c2) * psi) * psi;
                store_complex(f + n * row + c, f_n);
                if (block.psi) store_complex(block.psi + n * row + c, psi);
                add_to_functionals(n, c, f_n, psi);
            }
        }
    }
}

}  // namespace volterra::VOLTERRA_TARGET
