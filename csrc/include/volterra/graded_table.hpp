// The weights of graded_weights.hpp as Chebyshev series in alpha, and the plan of the graded
// scheme: weights of one hurst index in the arrangement the solver reads.
//
// A new hurst index costs a few hundred short sums instead of quadratures: a few microseconds.
// Measured error of the series: below 1e-15 relative to the row sums.
#pragma once

#include <cmath>
#include <cstddef>
#include <map>
#include <memory>
#include <mutex>
#include <utility>
#include <vector>

#include "volterra/graded_weights.hpp"
#include "volterra/real_schur.hpp"

namespace volterra {

inline constexpr std::size_t graded_most_elements = 64;

// Numbers of one alpha, in this order: first, own, then (from_first, lag) by distance, the
// distance-k pair divided by q^(k (alpha - 1)).
struct graded_table {
    static constexpr std::size_t terms = 18;
    std::shared_ptr<const graded_shape> shape;
    std::size_t numbers;
    std::vector<double> series;  // terms x numbers

    static std::size_t size(std::size_t m, std::size_t elements) {
        return m * (m + 1) + m * m + (elements - 1) * (m * (m + 1) + m * m);
    }

    explicit graded_table(std::shared_ptr<const graded_shape> table)
        : shape(std::move(table)), numbers(size(shape->m, graded_most_elements)),
          series(terms * numbers, 0.0) {
        const std::size_t m = shape->m;
        const double pi = std::acos(-1.0);
        for (std::size_t node = 0; node < terms; ++node) {
            const double angle = pi * (static_cast<double>(node) + 0.5) / terms;
            const double alpha = 0.75 + 0.25 * std::cos(angle);
            const auto w = make_graded_weights(alpha, shape, graded_most_elements + 1);
            std::vector<double> values(w.first);
            values.insert(values.end(), w.own.begin(), w.own.end());
            for (std::size_t k = 1; k < graded_most_elements; ++k) {
                const double scale = std::exp((1.0 - alpha) * static_cast<double>(k) * shape->log_q);
                for (std::size_t i = 0; i < m * (m + 1); ++i)
                    values.push_back(scale * w.from_first[(k - 1) * m * (m + 1) + i]);
                for (std::size_t i = 0; i < m * m; ++i)
                    values.push_back(scale * w.lag[(k - 1) * m * m + i]);
            }
            for (std::size_t n = 0; n < terms; ++n) {
                const double f = (n ? 2.0 : 1.0) / terms * std::cos(static_cast<double>(n) * angle);
                for (std::size_t i = 0; i < numbers; ++i) series[n * numbers + i] += f * values[i];
            }
        }
    }
};

// The shared table of (m, q); made on first use. Safe to call from any thread.
inline const graded_table& table_of(std::size_t nodes, double ratio) {
    static std::mutex guard;
    static std::map<std::pair<std::size_t, double>, std::unique_ptr<const graded_table>> tables;
    const std::lock_guard lock(guard);
    auto& entry = tables[{nodes, ratio}];
    if (!entry) entry = std::make_unique<const graded_table>(shape_of(nodes, ratio));
    return *entry;
}

// What the solver needs to know about one hurst index and one kind of mesh. Immutable once made:
// one plan may be used by any number of threads, for any lanes, parameters and curves.
struct graded_plan {
    double alpha;
    const graded_shape* shape;
    std::size_t elements;  // the most a mesh may have, the first one included
    double step_scale;     // q^alpha
    // Column-major blocks (one column per source node).
    std::vector<double> first;           // m x (m+1): first element to itself
    std::vector<double> own;             // m x m: W
    std::vector<double> q, q_transposed; // columns of Q, of Q^T: W^-1 = Q S Q^T
    std::vector<double> s;               // m x m, row-major
    std::vector<double> to_history;      // columns of W Q: from the solver's h to K * G
    std::vector<double> from_first;      // per distance k = 1 ..: Q^T W^-1 times the block
    std::vector<double> lag;             // per distance from elements - 2 down to 1, likewise
    std::vector<double> extrapolation;   // m x (m+1): previous element's psi to this one's
    std::vector<double> tau_power;       // m: (node / left edge)^alpha
    std::vector<double> first_total;     // m + 1: int_0^1 P_j(s^alpha) ds
    double series[3];                    // Gamma(1 + k alpha)/Gamma(1 + (k+1) alpha), k = 0, 1, 2
    bool paired;                         // S is in aligned 2 x 2 blocks: the fast iteration works
};

inline graded_plan make_graded_plan(double alpha, const graded_table& table, std::size_t elements) {
    const graded_shape& shape = *table.shape;
    const std::size_t m = shape.m, n1 = m + 1;
    graded_plan plan{};
    plan.alpha = alpha, plan.shape = &shape, plan.elements = elements;
    plan.step_scale = std::exp(alpha * shape.log_q);

    const std::size_t count = graded_table::size(m, elements);
    std::vector<double> values(count, 0.0);
    double before = 0.0, chebyshev = 1.0;
    const double x = (alpha - 0.75) / 0.25;
    for (std::size_t n = 0; n < graded_table::terms; ++n) {
        const double* from = &table.series[n * table.numbers];
        for (std::size_t i = 0; i < count; ++i) values[i] += chebyshev * from[i];
        const double next = n ? 2 * x * chebyshev - before : x;
        before = chebyshev, chebyshev = next;
    }
    const double* first = values.data();
    const double* own = first + m * n1;
    auto columns = [](const double* block, std::size_t rows, std::size_t width, double* to) {
        for (std::size_t i = 0; i < rows; ++i)
            for (std::size_t j = 0; j < width; ++j) to[j * rows + i] = block[i * width + j];
    };
    plan.first.resize(m * n1);
    columns(first, m, n1, plan.first.data());
    plan.own.resize(m * m);
    columns(own, m, m, plan.own.data());

    // inverse of W by elimination; W is well conditioned (below 100) and needs no pivoting
    std::vector<double> a(own, own + m * m), inverse(m * m, 0.0);
    for (std::size_t i = 0; i < m; ++i) inverse[i * n1] = 1.0;
    for (std::size_t k = 0; k < m; ++k) {
        const double pivot = 1.0 / a[k * n1];
        for (std::size_t j = 0; j < m; ++j) a[k * m + j] *= pivot, inverse[k * m + j] *= pivot;
        for (std::size_t i = 0; i < m; ++i) {
            if (i == k) continue;
            const double f = a[i * m + k];
            for (std::size_t j = 0; j < m; ++j)
                a[i * m + j] -= f * a[k * m + j], inverse[i * m + j] -= f * inverse[k * m + j];
        }
    }
    plan.s = inverse, plan.q.resize(m * m);
    plan.paired = real_schur(plan.s.data(), plan.q.data(), m);
    for (std::size_t i = 2; i < m; i += 2) plan.paired &= plan.s[i * m + i - 1] == 0.0;
    plan.q_transposed = plan.q;  // row-major Q is column-major Q^T
    columns(plan.q_transposed.data(), m, m, plan.q.data());

    // z = Q^T W^-1, then z times every block, scaled back; left factors and results column-major
    auto product = [&](const double* l, const double* r, std::size_t width, double f, double* to) {
        for (std::size_t j = 0; j < width; ++j)
            for (std::size_t i = 0; i < m; ++i) to[j * m + i] = 0.0;
        for (std::size_t j = 0; j < width; ++j)
            for (std::size_t k = 0; k < m; ++k) {
                const double g = f * r[k * width + j];
                for (std::size_t i = 0; i < m; ++i) to[j * m + i] += l[k * m + i] * g;
            }
    };
    std::vector<double> z(m * m);
    product(plan.q_transposed.data(), inverse.data(), m, 1.0, z.data());
    plan.from_first.resize((elements - 1) * m * n1);
    const std::size_t lags = elements > 2 ? elements - 2 : 0;
    plan.lag.resize(lags * m * m);
    const double* block = own + m * m;
    const double decay = plan.step_scale / shape.q;
    double scale = decay;
    for (std::size_t k = 1; k < elements; ++k, scale *= decay) {
        product(z.data(), block, n1, scale, &plan.from_first[(k - 1) * m * n1]);
        block += m * n1;
        if (k <= lags) product(z.data(), block, m, scale, &plan.lag[(lags - k) * m * m]);
        block += m * m;
    }
    // W Q, column-major: sum_k W[i][k] Q[k][j]
    plan.to_history.assign(m * m, 0.0);
    for (std::size_t i = 0; i < m; ++i)
        for (std::size_t k = 0; k < m; ++k)
            for (std::size_t j = 0; j < m; ++j)
                plan.to_history[j * m + i] += own[i * m + k] * plan.q[j * m + k];
    plan.extrapolation.resize(m * n1);
    columns(shape.extrapolation.data(), m, n1, plan.extrapolation.data());
    for (std::size_t i = 1; i <= m; ++i)
        plan.tau_power.push_back(std::exp(alpha * shape.log_q * shape.x[i]));
    // int_0^1 P*_p(s^alpha) ds = (1/alpha) int_0^1 z^(1/alpha - 1) P*_p(z) dz
    double moments[32];
    detail::legendre_moments(1.0 / alpha, n1, 1.0 / alpha, moments);
    plan.first_total.resize(n1);
    detail::to_nodes(shape, moments, plan.first_total.data());
    double gamma = 1.0;
    for (int k = 0; k < 3; ++k) {
        const double next = std::tgamma(1.0 + (k + 1) * alpha);
        plan.series[k] = gamma / next;
        gamma = next;
    }
    return plan;
}

}  // namespace volterra
