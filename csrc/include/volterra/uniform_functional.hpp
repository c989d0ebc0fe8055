// From a variance curve to linear functionals of (F, psi) at the nodes of a uniform mesh:
//
//   driven curve:  log phi = V0 int_0^T F ds + int_0^T theta(T-s) psi(s) ds
//   market curve:  log phi = int_0^T xi(T-s) (F + lambda psi)(s) ds
//
// F and psi are replaced by their piecewise-linear interpolants and integrated exactly against the
// step functions theta and xi: a jump of the curve inside a cell costs no accuracy.
#pragma once

#include <algorithm>
#include <cstddef>
#include <vector>

#include "volterra/model.hpp"

namespace volterra {

struct functional_rows {
    std::size_t count = 0, nodes = 0;
    std::vector<double> f, psi;  // count x nodes
};

namespace detail {

// Adds level * int_from^to (interpolant) to the weights of the nodes of a mesh of width `step`.
inline void add_piece(double* weights, std::size_t nodes, double step, double from, double to,
                      double level) {
    const std::size_t cells = nodes - 1;
    auto j = std::min(static_cast<std::size_t>(from / step), cells - 1);
    for (; j < cells; ++j) {
        const double x0 = std::max(from / step - static_cast<double>(j), 0.0);
        const double x1 = std::min(to / step - static_cast<double>(j), 1.0);
        if (x1 <= x0) {
            if (to / step <= static_cast<double>(j)) break;
            continue;
        }
        const double right = 0.5 * (x1 - x0) * (x1 + x0);
        weights[j] += level * step * ((x1 - x0) - right);
        weights[j + 1] += level * step * right;
    }
}

}  // namespace detail

// One row per elementary curve (`basis`), or their combination with the curve's own levels.
inline functional_rows uniform_functional(const variance_curve& curve, double mean_reversion,
                                          double maturity, std::size_t steps, bool basis) {
    const bool driven = curve.form == curve_form::driven;
    functional_rows rows;
    rows.nodes = steps + 1;
    rows.count = basis ? curve.basis_size() : 1;
    rows.f.assign(rows.count * rows.nodes, 0.0);
    rows.psi.assign(rows.count * rows.nodes, 0.0);
    const double step = maturity / static_cast<double>(steps);
    if (driven)
        detail::add_piece(rows.f.data(), rows.nodes, step, 0.0, maturity,
                          basis ? 1.0 : curve.initial);
    for_each_reversed_piece(curve, maturity, [&](std::size_t k, double from, double to) {
        const std::size_t row = basis ? (driven ? k + 1 : k) * rows.nodes : 0;
        const double level = basis ? 1.0 : curve.levels[k];
        if (driven) {
            detail::add_piece(rows.psi.data() + row, rows.nodes, step, from, to, level);
        } else {
            detail::add_piece(rows.f.data() + row, rows.nodes, step, from, to, level);
            if (mean_reversion != 0.0)
                detail::add_piece(rows.psi.data() + row, rows.nodes, step, from, to,
                                  mean_reversion * level);
        }
    });
    return rows;
}

}  // namespace volterra
