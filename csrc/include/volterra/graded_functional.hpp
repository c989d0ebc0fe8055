// From a variance curve to linear functionals of (F, psi) at the nodes of a graded mesh:
//
//   driven curve:  log phi = V0 int_0^T F ds + int_0^T theta(T-s) psi(s) ds
//   market curve:  log phi = int_0^T xi(T-s) (F + lambda psi)(s) ds
//
// F and psi are replaced by the interpolants the scheme itself uses and integrated exactly against
// the step functions theta and xi by differences of primitives: a jump of the curve or a maturity
// inside an element costs no accuracy.
//
// Meshes with the same horizon but different first elements share all other elements, so their
// weights are made once; only those of the first element are made per mesh.
#pragma once

#include <algorithm>
#include <cmath>
#include <cstddef>
#include <span>
#include <vector>

#include "volterra/graded_table.hpp"
#include "volterra/model.hpp"

namespace volterra {

// Geometric meshes [0, b], [b, qb], ... up to a common horizon, b = horizon / q^(elements - 1).
// The mesh of `most` elements has the edges 0, edges[0] .. edges[most - 1] = horizon; one of fewer
// elements starts at edges[most - elements].
struct graded_meshes {
    const graded_plan* plan;
    std::size_t most;
    std::vector<double> edges;
    std::vector<double> scales;  // edges^alpha
    std::vector<double> settling;  // edges^(1 - alpha) / Gamma(2 - alpha)

    graded_meshes(const graded_plan& p, double horizon, std::size_t elements)
        : plan(&p), most(elements), edges(elements), scales(elements), settling(elements) {
        edges[most - 1] = horizon, scales[most - 1] = std::pow(horizon, p.alpha);
        for (std::size_t e = most - 1; e-- > 0;) {
            edges[e] = edges[e + 1] / p.shape->q;
            scales[e] = scales[e + 1] / p.step_scale;
        }
        const double gamma = std::tgamma(2.0 - p.alpha);
        for (std::size_t e = 0; e < most; ++e) settling[e] = edges[e] / (scales[e] * gamma);
    }
};

// value_r = sum over the nodes n of f[n][r] left^alpha (F + mix psi)_n + psi[n][r] psi_n, the nodes
// of the elements 1 .. most - 1, without what reaches a shared node from the element to its right.
// Weights are node-major: `count` rows beside each other.
struct graded_functional {
    std::size_t count;
    double mix;
    bool uses_psi;
    std::vector<double> f, psi;             // (most - 1) m x count
    std::vector<double> left_f, left_psi;   // (most - 1) x count: left edge of element e
    std::vector<std::size_t> first_active;  // most: rows before this one do not use element e
};

// The weights of the first element of one mesh: m + 1 nodes.
struct first_element_functional {
    std::vector<double> f, psi;
};

namespace detail {

// weights[j * stride] += level int_from^to (interpolant), 1 <= from < to <= q, on the unit element.
inline void add_unit_piece(const graded_shape& s, double from, double to, double level,
                           double* weights, std::size_t stride) {
    const std::size_t n1 = s.m + 1;
    if (from <= 1.0 && to >= s.q) {
        for (std::size_t j = 0; j < n1; ++j) weights[j * stride] += level * s.total[j];
        return;
    }
    double values[64];
    for (const double end : {to, from}) {
        if (end > 1.0) {
            shifted_legendre(std::log(end) / s.log_q, s.primitive_terms, values);
            for (std::size_t j = 0; j < n1; ++j)
                weights[j * stride] += level * s.primitive_at(j, values);
        }
        level = -level;
    }
}

// The same for the first element [0, 1] with its polynomials in s^alpha.
inline void add_first_piece(const graded_plan& plan, double from, double to, double level,
                            double* weights, std::size_t stride) {
    const std::size_t n1 = plan.shape->m + 1;
    double legendre[64], primitive[64];
    for (const double end : {to, from}) {
        if (end > 0.0) {
            const double z = std::pow(end, plan.alpha);
            for (std::size_t p = 0; p < n1; ++p) {
                // int of P*_p(z) = sum_c (-1)^(p+c) binom(p,c) binom(p+c,c) z^c
                double coefficient = p % 2 ? -1.0 : 1.0, power = 1.0, sum = 0.0;
                for (std::size_t c = 0; c <= p; ++c) {
                    const double x = static_cast<double>(c), degree = static_cast<double>(p);
                    sum += coefficient * power / (1.0 + plan.alpha * x);
                    coefficient *= -(degree - x) * (degree + x + 1) / ((x + 1) * (x + 1));
                    power *= z;
                }
                legendre[p] = end * sum;
            }
            to_nodes(*plan.shape, legendre, primitive);
            for (std::size_t j = 0; j < n1; ++j) weights[j * stride] += level * primitive[j];
        }
        level = -level;
    }
}

// Calls piece(row, acts_on_psi, from, to, level) for everything that is integrated.
template <class Visit>
void for_each_integral(const variance_curve& curve, std::span<const double> maturities, bool basis,
                       Visit&& piece) {
    const bool driven = curve.form == curve_form::driven;
    const std::size_t per = basis ? curve.basis_size() : 1;
    for (std::size_t t = 0; t < maturities.size(); ++t) {
        if (driven) piece(t * per, false, 0.0, maturities[t], basis ? 1.0 : curve.initial);
        for_each_reversed_piece(curve, maturities[t], [&](std::size_t k, double from, double to) {
            const std::size_t row = t * per + (basis ? k + driven : 0);
            piece(row, driven, from, to, basis ? 1.0 : curve.levels[k]);
        });
    }
}

}  // namespace detail

// One row per maturity (ascending), or per maturity and elementary curve when `basis`.
inline graded_functional make_functional(const graded_meshes& meshes, const variance_curve& curve,
                                         double mean_reversion, std::span<const double> maturities,
                                         bool basis) {
    const bool driven = curve.form == curve_form::driven;
    const graded_shape& s = *meshes.plan->shape;
    const std::size_t m = s.m, elements = meshes.most - 1;
    graded_functional w{};
    w.count = maturities.size() * (basis ? curve.basis_size() : 1);
    w.mix = driven ? 0.0 : mean_reversion;
    w.uses_psi = driven;
    // weights of one element with its left edge first; split below
    std::vector<double> f(elements * (m + 1) * w.count, 0.0), psi(driven ? f.size() : 0, 0.0);
    detail::for_each_integral(
        curve, maturities, basis,
        [&](std::size_t row, bool on_psi, double from, double to, double level) {
            for (std::size_t e = elements; e-- > 0 && from < meshes.edges[e + 1];) {
                const double left = meshes.edges[e];
                if (to <= left) continue;
                const double size = level * left / (on_psi ? 1.0 : meshes.scales[e]);
                detail::add_unit_piece(s, from / left,
                                       to >= meshes.edges[e + 1] ? s.q : to / left, size,
                                       (on_psi ? psi : f).data() + e * (m + 1) * w.count + row,
                                       w.count);
            }
        });
    auto split = [&](const std::vector<double>& from, std::vector<double>& nodes,
                     std::vector<double>& left) {
        const std::size_t block = (m + 1) * w.count;
        for (std::size_t e = 0; e < elements; ++e) {
            const auto at = from.begin() + static_cast<std::ptrdiff_t>(e * block);
            const auto edge = at + static_cast<std::ptrdiff_t>(w.count);
            left.insert(left.end(), at, edge);
            nodes.insert(nodes.end(), edge, at + static_cast<std::ptrdiff_t>(block));
        }
    };
    split(f, w.f, w.left_f);
    if (driven) split(psi, w.psi, w.left_psi);
    // A shared node is stored by the solver with the scale of the element to its left.
    auto merge = [&](std::vector<double>& nodes, const std::vector<double>& left, double scale) {
        for (std::size_t e = 0; e + 1 < elements; ++e)
            for (std::size_t r = 0; r < w.count; ++r)
                nodes[(e * m + m - 1) * w.count + r] += scale * left[(e + 1) * w.count + r];
    };
    merge(w.f, w.left_f, meshes.plan->step_scale);
    if (driven) merge(w.psi, w.left_psi, 1.0);
    const std::size_t per = basis ? curve.basis_size() : 1;
    for (std::size_t e = 0, t = 0; e < meshes.most; ++e) {
        while (t < maturities.size() && maturities[t] <= (e ? meshes.edges[e - 1] : 0.0)) ++t;
        w.first_active.push_back(t * per);
    }
    return w;
}

// The first element of the mesh with `elements` elements.
inline first_element_functional make_first_functional(const graded_meshes& meshes,
                                                      const graded_functional& w,
                                                      std::size_t elements,
                                                      const variance_curve& curve,
                                                      std::span<const double> maturities,
                                                      bool basis) {
    const std::size_t m = meshes.plan->shape->m, edge = meshes.most - elements;
    const double b = meshes.edges[edge], scale = meshes.scales[edge];
    first_element_functional first;
    first.f.assign((m + 1) * w.count, 0.0);
    if (w.uses_psi) first.psi.assign((m + 1) * w.count, 0.0);
    detail::for_each_integral(
        curve, maturities, basis,
        [&](std::size_t row, bool on_psi, double from, double to, double level) {
            if (from >= b) return;
            double* to_row = (on_psi ? first.psi : first.f).data() + row;
            const double size = level * b / (on_psi ? 1.0 : scale);
            if (from == 0.0 && to >= b)
                for (std::size_t j = 0; j <= m; ++j)
                    to_row[j * w.count] += size * meshes.plan->first_total[j];
            else
                detail::add_first_piece(*meshes.plan, from / b, std::min(to / b, 1.0), size, to_row,
                                        w.count);
        });
    if (elements > 1)  // element 1 of this mesh is element edge of the common ones
        for (std::size_t r = 0; r < w.count; ++r) {
            first.f[m * w.count + r] += w.left_f[edge * w.count + r];
            if (w.uses_psi) first.psi[m * w.count + r] += w.left_psi[edge * w.count + r];
        }
    return first;
}

}  // namespace volterra
