// Sizes that the maker of a plan and the solver of the graded scheme agree on.
#pragma once

#include <cstddef>

namespace volterra {

inline constexpr std::size_t graded_most_nodes = 10;
inline constexpr std::size_t graded_most_elements = 64;

// Elements with at most this many nodes are solved in a basis of eigenvectors, larger ones in a
// Schur basis: the eigenvectors of the weights are well conditioned (below 1e4) up to here.
inline constexpr std::size_t graded_diagonal_nodes = 6;

}  // namespace volterra
