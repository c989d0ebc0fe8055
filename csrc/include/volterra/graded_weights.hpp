// Product-integration weights of the fractional kernel t^(a-1)/Gamma(a) on a geometric mesh.
//
// (K * G)(t_i) = sum over elements of int K(t_i - s) G(s) ds with G replaced by its interpolant.
// With an element's left edge as its unit of time, the weights from element l to element k depend
// on the lag k - l alone (times left^a): a mesh of any length costs one small block per lag. The
// first element, [0, b], has polynomials of its own in (t/b)^a and one block per distance.
//
// Every block is a sum without cancellation: closed-form moments of shifted Legendre polynomials
// against y^(a-1), Gauss rules in log(t - s) next door, binomial series further away, a
// double-exponential rule for the first element. Checked against mpmath to 1e-14 relative to the
// row sums. Source of the moments: Handbook of Mathematical Functions, 1964, 22.13 (from memory,
// reproduced).
#pragma once

#include <algorithm>
#include <cmath>
#include <cstddef>
#include <memory>
#include <vector>

#include "volterra/graded_shape.hpp"

namespace volterra {

struct graded_weights {
    double alpha;
    std::shared_ptr<const graded_shape> shape;
    std::size_t elements;            // the most a mesh may have, the first one included
    double step_scale;               // q^alpha: left^alpha grows by it from element to element
    std::vector<double> first;       // m x (m+1): first element to itself, unit b
    std::vector<double> own_left;    // m: left edge of an element to its nodes
    std::vector<double> own;         // m x m
    std::vector<double> lag;         // lag[d - 1], d = 1 .. elements - 2: m x m
    std::vector<double> from_first;  // from_first[k - 1], k = 1 .. elements - 1: m x (m+1)

    std::size_t nodes() const { return shape->m; }
};

namespace detail {

// int_0^1 z^(beta-1) P*_p(z) dz, p = 0 .. count - 1, times `scale`.
inline void legendre_moments(double beta, std::size_t count, double scale, double* moments) {
    double value = scale / beta;
    for (std::size_t p = 0; p < count; ++p) {
        if (p) value *= (beta - static_cast<double>(p)) / (beta + static_cast<double>(p));
        moments[p] = value;
    }
}

// from[j] = sum_p in_legendre[p] legendre_of[p][j]
inline void to_nodes(const graded_shape& shape, const double* in_legendre, double* from) {
    const std::size_t n1 = shape.m + 1;
    for (std::size_t j = 0; j < n1; ++j) from[j] = 0.0;
    for (std::size_t p = 0; p < n1; ++p)
        for (std::size_t j = 0; j < n1; ++j)
            from[j] += in_legendre[p] * shape.legendre_of[p * n1 + j];
}

// How many terms of a geometric-like series of ratio r are needed.
inline std::size_t series_terms(double r, std::size_t most) {
    return std::min(most, static_cast<std::size_t>(39.0 / -std::log(r)) + 2);
}

}  // namespace detail

inline graded_weights make_graded_weights(double alpha, std::shared_ptr<const graded_shape> table,
                                          std::size_t elements) {
    const graded_shape& s = *table;
    const std::size_t m = s.m, n1 = m + 1;
    const double scale = 1.0 / std::tgamma(alpha);
    graded_weights w{alpha, table, elements, std::exp(alpha * s.log_q), {}, {}, {}, {}, {}};

    // lag 0: y^(alpha-1) against Legendre polynomials
    double moments[graded_shape::own_terms];
    detail::legendre_moments(alpha, graded_shape::own_terms, scale, moments);
    w.own.resize(m * m), w.own_left.resize(m);
    for (std::size_t i = 0; i < m; ++i) {
        const double size = std::pow(s.tau[i + 1] - 1.0, alpha);
        for (std::size_t j = 0; j < n1; ++j) {
            const double* a = &s.own[(i * n1 + j) * graded_shape::own_terms];
            double sum = 0.0;
            for (std::size_t k = graded_shape::own_terms; k-- > 0;) sum += a[k] * moments[k];
            (j ? w.own[i * m + j - 1] : w.own_left[i]) = size * sum;
        }
    }

    // lags >= 1 as plain blocks m x (m+1), then the shared nodes are merged
    const std::size_t lags = elements > 2 ? elements - 2 : 0;
    std::vector<double> plain((lags + 1) * m * n1, 0.0);
    double binomial[graded_shape::far_terms];
    for (std::size_t k = 0; k < graded_shape::far_terms; ++k)
        binomial[k] = k ? binomial[k - 1] * (k - alpha) / static_cast<double>(k) : scale;
    double edge = s.q;  // q^d
    for (std::size_t d = 1; d <= lags; ++d, edge *= s.q)
        for (std::size_t i = 0; i < m; ++i) {
            double* row = &plain[(d * m + i) * n1];
            if (d == 1) {
                for (std::size_t n = 0; n < graded_shape::near_nodes; ++n) {
                    const std::size_t at = i * graded_shape::near_nodes + n;
                    const double power = scale * std::exp(alpha * s.near_log[at]);
                    for (std::size_t j = 0; j < n1; ++j) row[j] += power * s.near_base[at * n1 + j];
                }
                continue;
            }
            const double gap = edge * s.tau[i + 1] - s.centre, ratio = s.half / gap;
            double power = std::pow(gap, alpha - 1.0);
            const std::size_t terms = detail::series_terms(ratio, graded_shape::far_terms);
            for (std::size_t n = 0; n < terms; ++n, power *= ratio)
                for (std::size_t j = 0; j < n1; ++j)
                    row[j] += binomial[n] * power * s.far_moments[n * n1 + j];
        }
    w.lag.resize(lags * m * m);
    for (std::size_t d = 1; d <= lags; ++d)
        for (std::size_t i = 0; i < m; ++i) {
            const double* row = &plain[(d * m + i) * n1];
            double* to = &w.lag[((d - 1) * m + i) * m];
            for (std::size_t j = 1; j < n1; ++j) to[j - 1] = row[j];
            to[m - 1] += w.step_scale * (d == 1 ? w.own_left[i] : plain[((d - 1) * m + i) * n1]);
        }

    // The first element to itself: z_i int_0^1 (1-v)^(alpha-1) P_j(z_i v^alpha) dv.
    std::vector<double> sums(std::max(m, std::size_t{1}) * n1, 0.0), p(n1);
    const std::size_t rule = s.de_value.size();
    std::vector<double> power_of_node(rule);  // v^alpha
    for (std::size_t n = 0; n < rule; ++n) power_of_node[n] = std::exp(alpha * s.de_log[n]);
    for (std::size_t n = 0; n < rule; ++n) {
        const double kernel =
            scale * s.de_weight[n] * std::exp((alpha - 1.0) * s.de_log_complement[n]);
        for (std::size_t i = 0; i < m; ++i) {
            detail::shifted_legendre(s.x[i + 1] * power_of_node[n], n1, p.data());
            for (std::size_t k = 0; k < n1; ++k) sums[i * n1 + k] += s.x[i + 1] * kernel * p[k];
        }
    }
    w.first.resize(m * n1);
    for (std::size_t i = 0; i < m; ++i) detail::to_nodes(s, &sums[i * n1], &w.first[i * n1]);

    // The first element to the others.
    w.from_first.resize((elements - 1) * m * n1);
    std::vector<double> legendre_at(rule * n1);
    for (std::size_t n = 0; n < rule; ++n)
        detail::shifted_legendre(power_of_node[n], n1, &legendre_at[n * n1]);
    std::vector<double> series;  // moments int s^n P*_p(s^alpha) ds
    edge = 1.0;                  // q^(k-1)
    for (std::size_t k = 1; k < elements; ++k, edge *= s.q)
        for (std::size_t i = 0; i < m; ++i) {
            const double t = edge * s.tau[i + 1];
            double row[64] = {};
            if (edge < 2.5) {
                for (std::size_t n = 0; n < rule; ++n) {
                    const double kernel =
                        scale * s.de_weight[n] *
                        std::exp((alpha - 1.0) * std::log((t - 1.0) + s.de_complement[n]));
                    for (std::size_t j = 0; j < n1; ++j) row[j] += kernel * legendre_at[n * n1 + j];
                }
            } else {
                const std::size_t terms = detail::series_terms(1.0 / t, 64);
                double power = scale * std::pow(t, alpha - 1.0);
                for (std::size_t n = 0; n < terms; ++n) {
                    if (series.size() < (n + 1) * n1) {
                        series.resize((n + 1) * n1);
                        detail::legendre_moments((n + 1) / alpha, n1, 1.0 / alpha, &series[n * n1]);
                    }
                    for (std::size_t j = 0; j < n1; ++j) row[j] += power * series[n * n1 + j];
                    power *= (n + 1 - alpha) / static_cast<double>(n + 1) / t;
                }
            }
            double* to = &w.from_first[((k - 1) * m + i) * n1];
            detail::to_nodes(s, row, to);
            to[m] += k == 1 ? w.own_left[i] : plain[((k - 1) * m + i) * n1];
        }
    return w;
}

}  // namespace volterra
