// The uniform fractional Adams–Moulton scheme for a block of Fourier arguments.
//
//   psi = K * F,  F = c0 + c1 psi + c2 psi^2
//
// One block holds `adams_lanes` values of u in split real and imaginary rows. The history sums are
// a triangular Toeplitz product in time. It is cut into squares: once 2^k leaves of 16 nodes are
// known, their share in the next 2^k leaves is added at one go (toeplitz.hpp), in register tiles
// and from cache; only within a leaf are terms added step by step. The corrector is a quadratic in
// one unknown and is solved in closed form: no predictor is needed and nothing overflows where the
// explicit predictor would.
//
// Memory: 6 to 10 x steps x adams_lanes doubles per block, whatever the number of u.
// No allocation, no exceptions, no standard-library templates here: see simd.hpp.
#pragma once

#include "volterra/simd.hpp"
#include "volterra/toeplitz.hpp"

namespace volterra {

inline constexpr std::size_t adams_most_levels = 24;

// One block's work order. All rows are split: `lanes` real parts, then `lanes` imaginary parts.
struct adams_block {
    const double* c0;  // 2 x lanes
    const double* c1;  // 2 x lanes
    double c2;
    std::size_t steps;
    double diagonal_weight;
    const double* lag_weights;    // [1 .. adams_padded(steps)], see fractional_weights.hpp
    const double* first_weights;  // [1 .. steps]
    const double* const* leaves;  // leaves[k]: of the square of 16 2^k nodes, for all that fit
    std::size_t functionals;      // how many linear functionals of (F, psi) are wanted
    const double* weights_f;      // functionals x (steps + 1)
    const double* weights_psi;    // functionals x (steps + 1)
    double* values;               // functionals x 2 x lanes: sum_n wF_n F_n + wpsi_n psi_n
    double* psi;                  // (steps + 1) x 2 x lanes, or null
    double* workspace;            // adams_workspace(steps, lanes) doubles, aligned to 64 bytes
};

// Steps rounded up to whole leaves.
inline constexpr std::size_t adams_padded(std::size_t steps) {
    return (steps + toeplitz_leaf - 1) / toeplitz_leaf * toeplitz_leaf;
}

// The end of the last square: a leaf times a power of two.
inline constexpr std::size_t adams_reach(std::size_t steps) {
    std::size_t reach = toeplitz_leaf;
    while (reach < steps) reach *= 2;
    return reach;
}

// Doubles of workspace for one block: F at every node, the history sums as far as squares reach,
// and the scratch of the largest square, which holds at most half of that.
inline constexpr std::size_t adams_workspace(std::size_t steps, std::size_t lanes) {
    return (adams_padded(steps) + 2 * adams_reach(steps)) * 2 * lanes;
}

}  // namespace volterra

namespace volterra::VOLTERRA_TARGET {

// Register tiles, rows x packs, by measurement: accumulators, inputs and weights must fit into the
// registers, and enough accumulators be in flight to hide the latency of multiply-add.
inline constexpr std::size_t adams_rows = pack_width == 2 && vector_registers == 16 ? 2 : 4;
inline constexpr std::size_t adams_columns = pack_width == 4 ? 2 : 4;
// Values of u in a block: its rows are one or more tiles wide.
inline constexpr std::size_t adams_lanes = (vector_registers == 32 ? 2 : 4) * pack_width;

namespace adams_detail {

inline constexpr std::size_t lanes = adams_lanes;
inline constexpr std::size_t row = 2 * lanes;
inline constexpr std::size_t packs = row / pack_width;
inline constexpr std::size_t leaf = toeplitz_leaf;

// sums[r] += sum_j weights[r - j] x[j], r < rows, j < count: a register tile.
template <std::size_t rows, std::size_t columns>
VOLTERRA_INLINE void accumulate_tile(double* sums, const double* weights, const double* x,
                                     std::size_t count) {
    pack acc[rows][columns];
    for (std::size_t r = 0; r < rows; ++r)
        for (std::size_t c = 0; c < columns; ++c) acc[r][c] = load(sums + r * row + c * pack_width);
    for (std::size_t j = 0; j < count; ++j) {
        pack value[columns];
        for (std::size_t c = 0; c < columns; ++c) value[c] = load(x + j * row + c * pack_width);
        for (std::size_t r = 0; r < rows; ++r) {
            const pack w = broadcast(*(weights + r - j));
            for (std::size_t c = 0; c < columns; ++c) acc[r][c] += w * value[c];
        }
    }
    for (std::size_t r = 0; r < rows; ++r)
        for (std::size_t c = 0; c < columns; ++c) store(sums + r * row + c * pack_width, acc[r][c]);
}

// `count` nodes x to one leaf of sums; weights[r - j] as above.
inline void accumulate_leaf(double* sums, const double* weights, const double* x,
                            std::size_t count) {
    constexpr std::size_t rows = adams_rows, columns = adams_columns;
    for (std::size_t r = 0; r < leaf; r += rows)
        for (std::size_t c = 0; c < packs; c += columns)
            accumulate_tile<rows, columns>(sums + r * row + c * pack_width, weights + r,
                                           x + c * pack_width, count);
}

VOLTERRA_INLINE void add_rows(double* to, const double* from, std::size_t count) {
    for (std::size_t i = 0; i < count * row; i += pack_width)
        store(to + i, load(to + i) + load(from + i));
}

// sums += T x for a square of `size` nodes; returns the first leaf after those of the square.
inline const double* accumulate_square(const double* leaves, std::size_t size, const double* x,
                                       double* sums, double* scratch) {
    if (size == leaf) {
        accumulate_leaf(sums, leaves + leaf - 1, x, leaf);
        return leaves + toeplitz_stride;
    }
    const std::size_t half = size / 2;
    double* const both = scratch;
    double* const middle = scratch + half * row;
    double* const rest = scratch + size * row;
    std::memcpy(both, x, half * row * sizeof(double));
    add_rows(both, x + half * row, half);
    std::memset(middle, 0, half * row * sizeof(double));
    leaves = accumulate_square(leaves, half, both, middle, rest);
    leaves = accumulate_square(leaves, half, x + half * row, sums, rest);
    leaves = accumulate_square(leaves, half, x, sums + half * row, rest);
    add_rows(sums, middle, half);
    add_rows(sums + half * row, middle, half);
    return leaves;
}

// Adds the share of the last lowbit(done) leaves to the leaves after them, `leaves_left` of which
// are wanted. A square that reaches far beyond the last step is cheaper done plainly.
inline void pass_on_history(const adams_block& block, std::size_t done, std::size_t leaves_left,
                            const double* f, double* sums, double* scratch) {
    const std::size_t count = done & (~done + 1);
    std::size_t level = 0;
    double saving = 1.0;
    for (std::size_t n = count; n > 1; n /= 2) ++level, saving *= 0.75;
    const std::size_t begin = done * leaf, size = count * leaf;
    const double* const x = f + (begin - size) * row;
    if (static_cast<double>(leaves_left) >= saving * static_cast<double>(count) &&
        leaves_left * 2 > count && block.leaves[level]) {
        accumulate_square(block.leaves[level], size, x, sums + begin * row, scratch);
        return;
    }
    const std::size_t wanted = leaves_left < count ? leaves_left : count;
    for (std::size_t source = 0; source < count; ++source)
        for (std::size_t target = 0; target < wanted; ++target)
            accumulate_leaf(sums + (begin + target * leaf) * row,
                            block.lag_weights + size + (target - source) * leaf,
                            x + source * leaf * row, leaf);
}

VOLTERRA_INLINE complex_pack load_complex(const double* p) { return {load(p), load(p + lanes)}; }
VOLTERRA_INLINE void store_complex(double* p, complex_pack z) {
    store(p, z.re);
    store(p + lanes, z.im);
}

}  // namespace adams_detail

// Solves one block.
inline void solve_adams_block(const adams_block& block) {
    using namespace adams_detail;
    const std::size_t padded = adams_padded(block.steps), leaves = padded / leaf;
    const std::size_t reach = adams_reach(block.steps);
    double* const f = block.workspace;  // F at the nodes 1, 2, ...
    double* const sums = f + padded * row;
    double* const scratch = sums + reach * row;
    const pack w = broadcast(block.diagonal_weight);
    const pack c2 = broadcast(block.c2);

    auto add_to_functionals = [&](std::size_t n, std::size_t c, complex_pack f_n, complex_pack psi_n) {
        for (std::size_t m = 0; m < block.functionals; ++m) {
            const double wf = block.weights_f[m * (block.steps + 1) + n];
            const double wp = block.weights_psi[m * (block.steps + 1) + n];
            double* const value = block.values + m * row + c;
            store_complex(value, load_complex(value) + broadcast(wf) * f_n + broadcast(wp) * psi_n);
        }
    };

    std::memset(block.values, 0, block.functionals * row * sizeof(double));
    std::memset(sums, 0, reach * row * sizeof(double));
    if (block.psi) std::memset(block.psi, 0, row * sizeof(double));
    for (std::size_t c = 0; c < lanes; c += pack_width)  // psi_0 = 0, F_0 = c0
        add_to_functionals(0, c, load_complex(block.c0 + c), {broadcast(0.0), broadcast(0.0)});

    for (std::size_t done = 0; done < leaves; ++done) {
        if (done) pass_on_history(block, done, leaves - done, f, sums, scratch);
        const std::size_t begin = done * leaf;  // row of the first node of this leaf
        for (std::size_t i = 0; i < leaf && begin + i < block.steps; ++i) {
            const std::size_t n = begin + i + 1;
            double* const sum = sums + (begin + i) * row;
            double* const f_n = f + (begin + i) * row;
            pack acc[packs];
            const pack first = broadcast(block.first_weights[n]);
            for (std::size_t c = 0; c < packs; ++c)
                acc[c] = load(sum + c * pack_width) + first * load(block.c0 + c * pack_width);
            for (std::size_t j = 0; j < i; ++j) {
                const pack lag = broadcast(block.lag_weights[i - j]);
                for (std::size_t c = 0; c < packs; ++c)
                    acc[c] += lag * load(f + (begin + j) * row + c * pack_width);
            }
            for (std::size_t k = 0; k < packs / 2; ++k) {
                // psi = r + w (c0 + c1 psi + c2 psi^2): the root with Re(1 - w F'(psi)) >= 0 is the
                // stable one and the one that continues w = 0, hence the root nearest to any
                // accurate predictor.
                const std::size_t c = k * pack_width;
                const complex_pack c0 = load_complex(block.c0 + c);
                const complex_pack c1 = load_complex(block.c1 + c);
                const complex_pack e = complex_pack{acc[k], acc[packs / 2 + k]} + w * c0;
                const complex_pack q = {1.0 - w * c1.re, -w * c1.im};
                const complex_pack psi = quadratic_root(e, q, q * q - (4.0 * w * c2) * e);
                const complex_pack value = c0 + (c1 + c2 * psi) * psi;
                store_complex(f_n + c, value);
                if (block.psi) store_complex(block.psi + n * row + c, psi);
                add_to_functionals(n, c, value, psi);
            }
        }
    }
}

}  // namespace volterra::VOLTERRA_TARGET
