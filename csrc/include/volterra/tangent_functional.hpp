// From a variance curve to linear functionals of the tangents, one per maturity, element by element.
//
// The curve is piecewise constant, so log phi is a sum of primitives of Z = F + mix psi and of psi at a
// few times (see graded_functional.hpp for the formulas). Each primitive is an integral over the
// elements before, which all rows share, plus a short sum over the nodes of its own element: for a few
// maturities that is much less work than a sum over all nodes.
#pragma once

#include <cmath>
#include <cstddef>
#include <span>
#include <vector>

#include "volterra/graded_functional.hpp"
#include "volterra/graded_tangent.hpp"
#include "volterra/graded_tangent_plan.hpp"

namespace volterra {

// One element's share of one family of functionals; see tangent_entries.
struct tangent_element_rows {
    std::vector<std::size_t> rows;
    std::vector<double> carry, weights, points, changes;

    tangent_entries view() const {
        return {rows.size(), rows.data(), carry.data(), weights.data(), points.data(),
                changes.empty() ? nullptr : changes.data()};
    }
    // Room for `row`, shared by ends of it that follow each other. Returns where its weights start.
    std::size_t open(std::size_t row, double coefficient, std::size_t width, bool changing) {
        if (rows.empty() || rows.back() != row) {
            rows.push_back(row), carry.push_back(0.0);
            weights.resize(rows.size() * width), points.resize(rows.size() * width);
            if (changing) changes.resize(rows.size() * width);
        }
        carry.back() += coefficient;
        return weights.size() - width;
    }
};

// All four families on a common element, or on the first element of one mesh.
struct tangent_shares {
    tangent_element_rows on_f, on_psi, basis_f, basis_psi;
};

namespace detail {

// coefficient int_left^time X and coefficient time X(time) on the element [left, q left].
inline void add_unit_end(const graded_shape& s, double left, double time, bool at_end,
                         std::size_t row, double coefficient, tangent_element_rows& to) {
    const std::size_t n1 = s.m + 1, at = to.open(row, coefficient, n1, false);
    double* const weights = to.weights.data() + at;
    double* const points = to.points.data() + at;
    if (at_end) {
        for (std::size_t j = 0; j < n1; ++j) weights[j] += coefficient * left * s.total[j];
        points[s.m] += coefficient * time;
        return;
    }
    double legendre[64], basis[graded_most_nodes + 1];
    shifted_legendre(std::log(time / left) / s.log_q, s.primitive_terms, legendre);
    to_nodes(s, legendre, basis);
    for (std::size_t j = 0; j < n1; ++j) {
        weights[j] += coefficient * left * s.primitive_at(j, legendre);
        points[j] += coefficient * time * basis[j];
    }
}

// The same on the first element [0, b], and the derivative with respect to alpha at fixed values at
// the nodes, which move with alpha.
inline void add_first_end(const graded_plan& plan, const graded_tangent_plan& tangent, double b,
                          double time, std::size_t row, double coefficient,
                          tangent_element_rows& to) {
    const graded_shape& s = *plan.shape;
    const std::size_t n1 = s.m + 1, at = to.open(row, coefficient, n1, true);
    double* const weights = to.weights.data() + at;
    double* const points = to.points.data() + at;
    double* const changes = to.changes.data() + at;
    const double size = coefficient * b;
    if (time == b) {
        for (std::size_t j = 0; j < n1; ++j) {
            weights[j] += size * plan.first_total[j];
            changes[j] += size * tangent.first_total_change[j];
        }
        points[s.m] += size;
        return;
    }
    const double x = time / b, log_x = std::log(x), z = std::pow(x, plan.alpha);
    double integral[graded_most_nodes + 1], change[graded_most_nodes + 1], legendre[64];
    for (std::size_t p = 0; p < n1; ++p) {
        // int P*_p(y^alpha) = sum_c (-1)^(p+c) binom(p,c) binom(p+c,c) x^(1 + c alpha)/(1 + c alpha)
        double power = p % 2 ? -x : x, sum = 0.0, moved = 0.0;
        for (std::size_t c = 0; c <= p; ++c) {
            const double n = static_cast<double>(c), degree = static_cast<double>(p);
            const double term = power / (1.0 + plan.alpha * n);
            sum += term;
            moved += term * n * (log_x - 1.0 / (1.0 + plan.alpha * n));
            power *= -z * (degree - n) * (degree + n + 1) / ((n + 1) * (n + 1));
        }
        integral[p] = sum, change[p] = moved;
    }
    shifted_legendre(z, n1, legendre);
    auto add = [&](const double* in_legendre, double factor, double* target) {
        double nodes[graded_most_nodes + 1] = {};
        to_nodes(s, in_legendre, nodes);
        for (std::size_t j = 0; j < n1; ++j) target[j] += factor * nodes[j];
    };
    add(integral, size, weights);
    add(change, size, changes);
    add(legendre, coefficient * time, points);
}

// Calls end(row, basis_row, on_psi, time, coefficient, basis_coefficient) for the ends of all
// integrals.
template <class Visit>
void for_each_end(const variance_curve& curve, std::span<const double> maturities, Visit&& end) {
    const bool driven = curve.form == curve_form::driven;
    const std::size_t count = maturities.size();
    for (std::size_t t = 0; t < count; ++t) {
        if (driven) end(t, t, false, maturities[t], curve.initial, 1.0);
        for_each_reversed_piece(curve, maturities[t], [&](std::size_t k, double from, double to) {
            const std::size_t basis_row = (k + driven) * count + t;
            end(t, basis_row, driven, to, curve.levels[k], 1.0);
            if (from > 0.0) end(t, basis_row, driven, from, -curve.levels[k], -1.0);
        });
    }
}

}  // namespace detail

// The shares of the elements 1 .. most - 1 of the common mesh, item e on [edges[e], edges[e + 1]].
// The rows of the basis are ordered by elementary curve, then by maturity.
inline std::vector<tangent_shares> make_tangent_shares(const graded_meshes& meshes,
                                                       const variance_curve& curve,
                                                       std::span<const double> maturities,
                                                       bool basis) {
    std::vector<tangent_shares> shares(meshes.most - 1);
    const graded_shape& s = *meshes.plan->shape;
    detail::for_each_end(curve, maturities, [&](std::size_t row, std::size_t basis_row, bool on_psi,
                                                double time, double level, double one) {
        std::size_t e = 0;
        while (e < shares.size() && time > meshes.edges[e + 1]) ++e;
        if (e == shares.size() || time <= meshes.edges[e]) return;
        const double left = meshes.edges[e];
        const bool at_end = time == meshes.edges[e + 1];
        auto& to = shares[e];
        detail::add_unit_end(s, left, time, at_end, row, level, on_psi ? to.on_psi : to.on_f);
        if (basis)
            detail::add_unit_end(s, left, time, at_end, basis_row, one,
                                 on_psi ? to.basis_psi : to.basis_f);
    });
    return shares;
}

// The share of the first element of the mesh with `elements` elements.
inline tangent_shares make_first_tangent_share(const graded_meshes& meshes,
                                               const graded_tangent_plan& tangent,
                                               std::size_t elements, const variance_curve& curve,
                                               std::span<const double> maturities, bool basis) {
    tangent_shares share;
    const double b = meshes.edges[meshes.most - elements];
    detail::for_each_end(curve, maturities, [&](std::size_t row, std::size_t basis_row, bool on_psi,
                                                double time, double level, double one) {
        if (time > b) return;
        auto add = [&](std::size_t to_row, double coefficient, tangent_element_rows& to) {
            detail::add_first_end(*meshes.plan, tangent, b, time, to_row, coefficient, to);
        };
        add(row, level, on_psi ? share.on_psi : share.on_f);
        if (basis) add(basis_row, one, on_psi ? share.basis_psi : share.basis_f);
    });
    return share;
}

}  // namespace volterra
