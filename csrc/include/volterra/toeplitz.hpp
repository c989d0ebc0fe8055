// Squares of Toeplitz weights arranged for fast products.
//
// A Toeplitz square of size b, split into halves, needs three products of half the size:
//
//   [T1 T0] [x0]   [P + (T0 - T1) x1]
//   [T2 T1] [x1] = [P + (T2 - T1) x0],   P = T1 (x0 + x1),
//
// three quarters of the multiplications per halving. (Fast algorithms for digital signal
// processing, Addison-Wesley 1985; from memory.) The weights of all leaves are worked out once per
// mesh, in the order in which the product visits them.
#pragma once

#include <cstddef>
#include <vector>

namespace volterra {

inline constexpr std::size_t toeplitz_leaf = 16;                       // rows of a leaf
inline constexpr std::size_t toeplitz_stride = 2 * toeplitz_leaf;      // doubles of a leaf

namespace detail {

// `diagonals[size - 1 + d]` is the weight of the diagonal row - column = d.
inline void append_leaves(const std::vector<double>& diagonals, std::size_t size,
                          std::vector<double>& leaves) {
    if (size == toeplitz_leaf) {
        leaves.insert(leaves.end(), diagonals.begin(), diagonals.end());
        leaves.push_back(0.0);
        return;
    }
    const std::size_t half = size / 2, count = 2 * half - 1;
    std::vector<double> middle(count), upper(count), lower(count);
    for (std::size_t i = 0; i < count; ++i) {
        middle[i] = diagonals[half + i];
        upper[i] = diagonals[i] - middle[i];
        lower[i] = diagonals[2 * half + i] - middle[i];
    }
    append_leaves(middle, half, leaves);
    append_leaves(upper, half, leaves);
    append_leaves(lower, half, leaves);
}

}  // namespace detail

// Leaves of the square that carries `size` nodes to the `size` steps after them; lag must reach
// 2 size - 1.
inline std::vector<double> toeplitz_leaves(const std::vector<double>& lag, std::size_t size) {
    std::vector<double> leaves;
    const auto first = lag.begin() + 1;
    detail::append_leaves({first, first + static_cast<std::ptrdiff_t>(2 * size - 1)}, size, leaves);
    return leaves;
}

}  // namespace volterra
