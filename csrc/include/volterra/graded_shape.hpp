// What the graded scheme can tabulate before it knows the hurst index: one element of the mesh.
//
// The mesh is geometric: [0, b], [b, qb], [qb, q^2 b], ... On every element but the first the
// right-hand side is a polynomial in x = log(t/left)/log q through m + 1 Lobatto nodes, the first
// of which is the last node of the element before; on the first one it is a polynomial in
// z = (t/b)^alpha at the same nodes. In units of its left edge an element is [1, q], so everything
// here depends on (m, q) alone. Moments and quadrature nodes are chosen so that the weights of a
// new hurst index (graded_weights.hpp) are short sums of positive-exponent powers.
//
// Tables are made in long double once per (m, q) and shared by all threads.
#pragma once

#include <array>
#include <cmath>
#include <cstddef>
#include <map>
#include <memory>
#include <mutex>
#include <utility>
#include <vector>

namespace volterra {

namespace detail {

struct quadrature {
    std::vector<long double> x, w;  // on [0, 1]
};

// P_n(x) and P_n'(x), |x| < 1.
inline std::pair<long double, long double> legendre(std::size_t n, long double x) {
    long double p0 = 1, p1 = x;
    if (n == 0) return {1, 0};
    for (std::size_t k = 2; k <= n; ++k) {
        const long double p2 = ((2 * k - 1) * x * p1 - (k - 1) * p0) / k;
        p0 = p1, p1 = p2;
    }
    return {p1, n * (x * p1 - p0) / (x * x - 1)};
}

inline quadrature gauss_legendre(std::size_t n) {
    quadrature rule;
    for (std::size_t i = 0; i < n; ++i) {
        long double x = -std::cos(std::acos(-1.0L) * (i + 0.75L) / (n + 0.5L));
        for (int k = 0; k < 8; ++k) {
            const auto [p, dp] = legendre(n, x);
            x -= p / dp;
        }
        const long double dp = legendre(n, x).second;
        rule.x.push_back((1 + x) / 2);
        rule.w.push_back(1 / ((1 - x * x) * dp * dp));
    }
    return rule;
}

// The m + 1 Lobatto points on [0, 1]: both ends and the roots of P_m'.
inline std::vector<long double> lobatto_nodes(std::size_t m) {
    std::vector<long double> nodes = {0};
    for (std::size_t i = 1; i < m; ++i) {
        long double x = -std::cos(std::acos(-1.0L) * i / m);
        for (int k = 0; k < 12; ++k) {
            const auto [p, dp] = legendre(m, x);  // (1-x^2) P'' = 2 x P' - m(m+1) P
            x -= dp * (1 - x * x) / (2 * x * dp - m * (m + 1.0L) * p);
        }
        nodes.push_back((1 + x) / 2);
    }
    nodes.push_back(1);
    return nodes;
}

// Values at y of the Lagrange basis on `nodes`.
inline std::vector<long double> lagrange(const std::vector<long double>& nodes, long double y) {
    std::vector<long double> values(nodes.size(), 1);
    for (std::size_t j = 0; j < nodes.size(); ++j)
        for (std::size_t k = 0; k < nodes.size(); ++k)
            if (k != j) values[j] *= (y - nodes[k]) / (nodes[j] - nodes[k]);
    return values;
}

// Values at y in [0, 1] of the shifted Legendre polynomials 0 .. n - 1.
template <class Real>
inline void shifted_legendre(Real y, std::size_t n, Real* values) {
    const Real x = 2 * y - 1;
    values[0] = 1;
    if (n > 1) values[1] = x;
    for (std::size_t k = 2; k < n; ++k)
        values[k] = ((2 * k - 1) * x * values[k - 1] - (k - 1) * values[k - 2]) / k;
}

}  // namespace detail

struct graded_shape {
    static constexpr std::size_t own_terms = 60;     // Legendre terms on [1, tau_i]
    static constexpr std::size_t near_nodes = 32;    // Gauss nodes in log(t - s), next element
    static constexpr std::size_t far_terms = 30;     // binomial terms, lag >= 2
    static constexpr std::size_t primitive_extra = 16;

    std::size_t m;
    double q, log_q;
    std::vector<double> x;    // m + 1 nodes on [0, 1]
    std::vector<double> tau;  // q^x

    // l_j(x(s)) on [1, tau_i], expanded in Legendre polynomials of y = (tau_i - s)/(tau_i - 1)
    std::vector<double> own;        // m x (m+1) x own_terms
    std::vector<double> near_log;   // m x near_nodes: log(q tau_i - s_n)
    std::vector<double> near_base;  // m x near_nodes x (m+1): weight_n l_j(s_n)
    double centre, half;            // of [1, q]
    std::vector<double> far_moments;   // far_terms x (m+1): int ((s - centre)/half)^n l_j ds
    std::vector<double> legendre_of;   // (m+1) x (m+1): basis polynomial j = sum_p [p][j] P*_p(z)
    std::vector<double> extrapolation; // m x (m+1): l_j(1 + x_i)
    std::vector<double> leading;       // m+1: leading coefficient of the interpolant in P*_m(x)
    std::vector<double> primitive;     // (m+1) x primitive_terms, Legendre in x: int_1^{q^x} l_j ds
    std::vector<double> total;         // m+1: int_1^q l_j ds
    std::size_t primitive_terms;

    // Double-exponential nodes on [0, 1]: v and 1 - v to full relative accuracy.
    std::vector<double> de_log, de_log_complement, de_value, de_complement, de_weight;

    graded_shape(std::size_t nodes, double ratio);
    double primitive_at(std::size_t j, const double* legendre) const {
        double sum = 0.0;
        for (std::size_t n = 0; n < primitive_terms; ++n)
            sum += primitive[j * primitive_terms + n] * legendre[n];
        return sum;
    }
};

inline graded_shape::graded_shape(std::size_t nodes, double ratio)
    : m(nodes), q(ratio), log_q(std::log(ratio)), primitive_terms(nodes + primitive_extra) {
    const std::size_t n1 = m + 1;
    const long double Q = ratio, LQ = std::log(Q);
    const auto xs = detail::lobatto_nodes(m);
    std::vector<long double> taus;
    for (auto xi : xs) {
        taus.push_back(std::exp(LQ * xi));
        x.push_back(static_cast<double>(xi));
        tau.push_back(static_cast<double>(taus.back()));
    }
    taus[m] = Q, tau[m] = ratio;
    auto basis = [&](long double s) { return detail::lagrange(xs, std::log(s) / LQ); };

    const auto fine = detail::gauss_legendre(72);
    std::vector<long double> p(std::max(own_terms, primitive_terms));
    own.assign(m * n1 * own_terms, 0.0);
    for (std::size_t i = 1; i <= m; ++i) {
        std::vector<long double> sums(n1 * own_terms, 0);
        for (std::size_t n = 0; n < fine.x.size(); ++n) {
            const auto l = basis(taus[i] - (taus[i] - 1) * fine.x[n]);
            detail::shifted_legendre(fine.x[n], own_terms, p.data());
            for (std::size_t j = 0; j < n1; ++j)
                for (std::size_t k = 0; k < own_terms; ++k)
                    sums[j * own_terms + k] += fine.w[n] * (2 * k + 1) * p[k] * l[j];
        }
        for (std::size_t k = 0; k < sums.size(); ++k)
            own[(i - 1) * n1 * own_terms + k] = static_cast<double>(sums[k]);
    }

    const auto gauss = detail::gauss_legendre(near_nodes);
    for (std::size_t i = 1; i <= m; ++i) {
        const long double t = Q * taus[i], low = std::log(t - Q), high = std::log(t - 1);
        for (std::size_t n = 0; n < near_nodes; ++n) {
            const long double v = low + (high - low) * gauss.x[n];
            const auto l = basis(t - std::exp(v));
            near_log.push_back(static_cast<double>(v));
            for (std::size_t j = 0; j < n1; ++j)
                near_base.push_back(static_cast<double>(gauss.w[n] * (high - low) * l[j]));
        }
    }

    centre = 0.5 * (1 + ratio), half = 0.5 * (ratio - 1);
    std::vector<long double> moments(far_terms * n1, 0);
    std::vector<long double> extrapolated(n1, 0), coefficients(n1 * n1, 0);
    for (std::size_t n = 0; n < fine.x.size(); ++n) {
        const auto l = basis(1 + (Q - 1) * fine.x[n]);
        long double power = fine.w[n] * (Q - 1);
        for (std::size_t k = 0; k < far_terms; ++k, power *= 2 * fine.x[n] - 1)
            for (std::size_t j = 0; j < n1; ++j) moments[k * n1 + j] += power * l[j];
        const auto b = detail::lagrange(xs, fine.x[n]);
        detail::shifted_legendre(fine.x[n], n1, p.data());
        for (std::size_t k = 0; k < n1; ++k)
            for (std::size_t j = 0; j < n1; ++j)
                coefficients[k * n1 + j] += fine.w[n] * (2 * k + 1) * p[k] * b[j];
    }
    far_moments.assign(moments.begin(), moments.end());
    legendre_of.assign(coefficients.begin(), coefficients.end());
    leading.assign(legendre_of.end() - static_cast<std::ptrdiff_t>(n1), legendre_of.end());
    for (std::size_t i = 1; i <= m; ++i)
        for (auto l : detail::lagrange(xs, 1 + xs[i])) extrapolation.push_back(static_cast<double>(l));

    std::vector<long double> sums(n1 * primitive_terms, 0);
    for (std::size_t n = 0; n < fine.x.size(); ++n) {
        detail::shifted_legendre(fine.x[n], primitive_terms, p.data());
        std::vector<long double> integral(n1, 0);
        for (std::size_t k = 0; k < fine.x.size(); ++k) {
            const long double y = fine.x[n] * fine.x[k];
            const auto b = detail::lagrange(xs, y);
            const long double w = fine.w[k] * fine.x[n] * LQ * std::exp(LQ * y);
            for (std::size_t j = 0; j < n1; ++j) integral[j] += w * b[j];
        }
        for (std::size_t j = 0; j < n1; ++j)
            for (std::size_t k = 0; k < primitive_terms; ++k)
                sums[j * primitive_terms + k] += fine.w[n] * (2 * k + 1) * p[k] * integral[j];
    }
    primitive.assign(sums.begin(), sums.end());
    total.resize(n1);
    for (std::size_t j = 0; j < n1; ++j) total[j] = static_cast<double>(moments[j]);

    // v = 1/(1 + exp(-pi sinh r)); cut where v^(1/2) resp. 1 - v fall below 1e-17.
    const long double pi = std::acos(-1.0L), step = 1 / 12.0L;
    for (int k = -40; k <= 47; ++k) {
        const long double r = step * k, a = pi * std::sinh(r);
        const long double v = 1 / (1 + std::exp(-a)), c = 1 / (1 + std::exp(a));
        de_value.push_back(static_cast<double>(v));
        de_complement.push_back(static_cast<double>(c));
        de_log.push_back(static_cast<double>(-std::log1p(std::exp(-a))));
        de_log_complement.push_back(static_cast<double>(-std::log1p(std::exp(a))));
        de_weight.push_back(static_cast<double>(step * pi * std::cosh(r) * v * c));
    }
}

// The shared table of (m, q); made on first use. Safe to call from any thread.
inline std::shared_ptr<const graded_shape> shape_of(std::size_t nodes, double ratio) {
    static std::mutex guard;
    static std::map<std::pair<std::size_t, double>, std::shared_ptr<const graded_shape>> shapes;
    const std::lock_guard lock(guard);
    auto& entry = shapes[{nodes, ratio}];
    if (!entry) entry = std::make_shared<const graded_shape>(nodes, ratio);
    return entry;
}

}  // namespace volterra
