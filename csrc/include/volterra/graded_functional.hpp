// From a variance curve to linear functionals of (F, psi) at the nodes of a graded mesh:
//
//   driven curve:  log phi = V0 int_0^T F ds + int_0^T theta(T-s) psi(s) ds
//   market curve:  log phi = int_0^T xi(T-s) (F + lambda psi)(s) ds
//
// F and psi are replaced by the interpolants the scheme itself uses and integrated exactly against
// the step functions theta and xi by differences of primitives: a jump of the curve or a maturity
// inside an element costs no accuracy.
#pragma once

#include <algorithm>
#include <cmath>
#include <cstddef>
#include <span>
#include <vector>

#include "volterra/graded_weights.hpp"
#include "volterra/model.hpp"
#include "volterra/uniform_functional.hpp"

namespace volterra {

// Geometric mesh [0, b], [b, qb], ... up to the horizon; b = horizon / q^(elements - 1).
struct graded_mesh {
    std::size_t elements;
    double first;                // b
    std::vector<double> edges;   // 0, b, qb, ..., horizon
    std::vector<double> scales;  // left^alpha per element, b^alpha for the first
    std::vector<double> times;   // every node
};

inline graded_mesh make_graded_mesh(const graded_weights& w, double horizon, std::size_t elements) {
    const graded_shape& s = *w.shape;
    graded_mesh mesh{elements, horizon * std::pow(s.q, 1.0 - static_cast<double>(elements)),
                     {0.0}, {}, {0.0}};
    for (std::size_t k = 0; k < elements; ++k) {
        mesh.edges.push_back(k + 1 == elements ? horizon : mesh.first * std::pow(s.q, k));
        mesh.scales.push_back(std::pow(mesh.edges[k ? k : 1], w.alpha));
        for (std::size_t i = 1; i <= s.m; ++i)
            mesh.times.push_back(k ? mesh.edges[k] * s.tau[i]
                                   : mesh.first * std::pow(s.x[i], 1.0 / w.alpha));
    }
    return mesh;
}

namespace detail {

// Adds sign * level * int_0^t (interpolant) to the weights of the nodes.
inline void add_primitive(const graded_weights& w, const graded_mesh& mesh, double t, double level,
                          double* weights) {
    if (t <= 0.0) return;
    const graded_shape& s = *w.shape;
    const std::size_t m = s.m, n1 = m + 1;
    double values[64];
    for (std::size_t k = 0; k < mesh.elements && t > mesh.edges[k]; ++k) {
        double* at = weights + k * m;
        const double left = mesh.edges[k], right = mesh.edges[k + 1];
        if (k == 0) {
            // int_0^s P*_p(z^alpha) ds by its monomials: small degree, and the element is short
            const double end = std::min(t, right), z = std::pow(end / right, w.alpha);
            double legendre[64];
            double c_row[64];
            for (std::size_t p = 0; p < n1; ++p) {
                // P*_p(z) = sum_c (-1)^(p+c) binom(p,c) binom(p+c,c) z^c
                double coefficient = p % 2 ? -1.0 : 1.0, power = 1.0, sum = 0.0;
                for (std::size_t c = 0; c <= p; ++c) {
                    sum += coefficient * power / (1.0 + w.alpha * static_cast<double>(c));
                    const double x = static_cast<double>(c);
                    coefficient *= -(static_cast<double>(p) - x) * (static_cast<double>(p) + x + 1) /
                                   ((x + 1) * (x + 1));
                    power *= z;
                }
                legendre[p] = end * sum;
            }
            to_nodes(s, legendre, c_row);
            for (std::size_t j = 0; j < n1; ++j) at[j] += level * c_row[j];
        } else if (t >= right) {
            for (std::size_t j = 0; j < n1; ++j) at[j] += level * left * s.total[j];
        } else {
            const double x = std::log(t / left) / s.log_q;
            shifted_legendre(x, s.primitive_terms, values);
            for (std::size_t j = 0; j < n1; ++j) at[j] += level * left * s.primitive_at(j, values);
        }
    }
}

}  // namespace detail

struct graded_rows {
    functional_rows rows;                   // f acts on left^alpha F, as the kernel stores it
    std::vector<std::size_t> first_active;  // per element
};

// One row per maturity (ascending), or per maturity and elementary curve when `basis`.
inline graded_rows graded_functional(const graded_weights& w, const graded_mesh& mesh,
                                     const variance_curve& curve, double mean_reversion,
                                     std::span<const double> maturities, bool basis) {
    const bool driven = curve.form == curve_form::driven;
    const std::size_t m = w.nodes(), nodes = 1 + m * mesh.elements;
    const std::size_t per = basis ? curve.basis_size() : 1;
    graded_rows result;
    functional_rows& rows = result.rows;
    rows.count = per * maturities.size(), rows.nodes = nodes;
    rows.f.assign(rows.count * nodes, 0.0);
    rows.psi.assign(rows.count * nodes, 0.0);
    for (std::size_t t = 0; t < maturities.size(); ++t) {
        double* f = &rows.f[t * per * nodes];
        double* psi = &rows.psi[t * per * nodes];
        if (driven) detail::add_primitive(w, mesh, maturities[t], basis ? 1.0 : curve.initial, f);
        for_each_reversed_piece(curve, maturities[t], [&](std::size_t k, double from, double to) {
            const std::size_t row = basis ? (driven ? k + 1 : k) * nodes : 0;
            const double level = basis ? 1.0 : curve.levels[k];
            double* target = (driven ? psi : f) + row;
            detail::add_primitive(w, mesh, to, level, target);
            detail::add_primitive(w, mesh, from, -level, target);
        });
        if (!driven && mean_reversion != 0.0)
            for (std::size_t n = 0; n < per * nodes; ++n) psi[n] = mean_reversion * f[n];
    }
    // A shared node serves two elements; F there is stored once, with the earlier element's scale.
    for (std::size_t r = 0; r < rows.count; ++r)
        for (std::size_t n = 0; n < nodes; ++n)
            rows.f[r * nodes + n] /= mesh.scales[n ? (n - 1) / m : 0];
    for (std::size_t k = 0; k < mesh.elements; ++k) {
        std::size_t t = 0;
        while (t < maturities.size() && maturities[t] <= mesh.edges[k]) ++t;
        result.first_active.push_back(t * per);
    }
    return result;
}

}  // namespace volterra
