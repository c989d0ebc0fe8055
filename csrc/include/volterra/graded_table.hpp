// The weights of graded_weights.hpp as Chebyshev series in alpha, and the plan of the graded
// scheme: weights of one hurst index in the arrangement the solver reads.
//
// A new hurst index costs a few hundred short sums instead of quadratures: a few microseconds.
// Measured error of the series: below 1e-15 relative to the row sums.
#pragma once

#include <algorithm>
#include <array>
#include <cmath>
#include <cstddef>
#include <map>
#include <memory>
#include <mutex>
#include <utility>
#include <vector>

#include "targets.hpp"
#include "volterra/graded_limits.hpp"
#include "volterra/graded_weights.hpp"
#include "volterra/real_schur.hpp"

namespace volterra {

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

// One element's weights to itself, W, and W^-1 = B S B^-1 with S in 2 x 2 blocks: block diagonal, B
// real eigenvectors, for up to graded_diagonal_nodes nodes, where B is well conditioned (below 1e4);
// block triangular, B orthogonal, for more. Column-major but for s.
struct graded_operator {
    std::vector<double> own;             // W
    std::vector<double> basis, to_basis; // B, B^-1
    std::vector<double> s;               // row-major
    std::vector<double> to_history;      // W B: from B^-1 W^-1 h, which the solver keeps, to h
    std::vector<double> history;         // B^-1 W^-1, for the maker of a plan
    bool paired;                         // S is in aligned 2 x 2 blocks: the fast iteration works
};

// What the solver needs to know about one hurst index and one kind of mesh. Immutable once made:
// one plan may be used by any number of threads, for any lanes, parameters and curves.
struct graded_plan {
    double alpha;
    const graded_shape* shape;
    std::size_t elements;  // the most a mesh may have, the first one included
    double step_scale;     // q^alpha
    // Column-major blocks (one column per source node).
    std::vector<double> from_zero;       // m: B^-1 W^-1 times the weights of t = 0 in the first element
    graded_operator start, step;         // of the first element and of all others
    std::vector<double> from_first;      // per distance k = 1 ..: B^-1 W^-1 times the block
    std::vector<double> lag;             // per distance from elements - 2 down to 1, likewise
    std::vector<double> extrapolation;   // m x (m+1): previous element's psi to this one's
    std::vector<double> tau_power;       // m: (node / left edge)^alpha
    std::vector<double> first_total;     // m + 1: int_0^1 P_j(s^alpha) ds
    double series[3];                    // Gamma(1 + k alpha)/Gamma(1 + (k+1) alpha), k = 0, 1, 2
};

namespace detail {

// to = factor l r, l and `to` column-major m x m and m x width, r row-major, its rows `stride` apart.
template <std::size_t m>
inline void product_of(const double* l, const double* r, std::size_t width, std::size_t stride,
                       double factor, double* to) {
    for (std::size_t j = 0; j < width; ++j) {
        double sum[m] = {};
        for (std::size_t k = 0; k < m; ++k) {
            const double g = factor * r[k * stride + j];
            for (std::size_t i = 0; i < m; ++i) sum[i] += l[k * m + i] * g;
        }
        for (std::size_t i = 0; i < m; ++i) to[j * m + i] = sum[i];
    }
}

inline void product(const double* l, const double* r, std::size_t m, std::size_t width,
                    std::size_t stride, double factor, double* to) {
    switch (m) {
        case 4: return product_of<4>(l, r, width, stride, factor, to);
        case 6: return product_of<6>(l, r, width, stride, factor, to);
        case 8: return product_of<8>(l, r, width, stride, factor, to);
        case 10: return product_of<10>(l, r, width, stride, factor, to);
    }
}

inline void transpose(const double* from, std::size_t rows, std::size_t columns,
                      std::size_t stride, double* to) {
    for (std::size_t i = 0; i < rows; ++i)
        for (std::size_t j = 0; j < columns; ++j) to[j * rows + i] = from[i * stride + j];
}

// `own` is row-major, its rows `stride` apart.
inline graded_operator make_operator(const double* own, std::size_t m, std::size_t stride) {
    graded_operator op;
    for (auto* matrix : {&op.own, &op.basis, &op.to_basis, &op.to_history, &op.history})
        matrix->resize(m * m);
    transpose(own, m, m, stride, op.own.data());
    // inverse of W by elimination; W is well conditioned (below 100) and needs no pivoting
    std::vector<double> a(m * m), inverse(m * m, 0.0);
    for (std::size_t i = 0; i < m; ++i) {
        for (std::size_t j = 0; j < m; ++j) a[i * m + j] = own[i * stride + j];
        inverse[i * m + i] = 1.0;
    }
    for (std::size_t k = 0; k < m; ++k) {
        const double pivot = 1.0 / a[k * m + k];
        for (std::size_t j = 0; j < m; ++j) a[k * m + j] *= pivot, inverse[k * m + j] *= pivot;
        for (std::size_t i = 0; i < m; ++i) {
            if (i == k) continue;
            const double f = a[i * m + k];
            for (std::size_t j = 0; j < m; ++j)
                a[i * m + j] -= f * a[k * m + j], inverse[i * m + j] -= f * inverse[k * m + j];
        }
    }
    op.s = inverse;
    std::vector<double> q(m * m), x(m * m);  // row-major
    switch (m) {
        case 4: op.paired = real_schur<4>(op.s.data(), q.data()); break;
        case 6: op.paired = real_schur<6>(op.s.data(), q.data()); break;
        case 8: op.paired = real_schur<8>(op.s.data(), q.data()); break;
        case 10: op.paired = real_schur<10>(op.s.data(), q.data()); break;
    }
    align_schur(op.s.data(), q.data(), m);
    for (std::size_t i = 2; i < m; i += 2) op.paired &= op.s[i * m + i - 1] == 0.0;
    op.to_basis = q;  // B^-1 = Q^T row-major is Q column-major, and the other way round
    transpose(q.data(), m, m, m, op.basis.data());
    if (m <= graded_diagonal_nodes) {
        op.paired = op.paired && block_eigenvectors(op.s.data(), x.data(), m);
        for (std::size_t j = 0; j < m; ++j)  // B = Q X
            for (std::size_t i = 0; i < m; ++i) {
                double sum = 0.0;
                for (std::size_t k = 0; k <= (j | 1); ++k) sum += q[i * m + k] * x[k * m + j];
                op.basis[j * m + i] = sum;
            }
        for (std::size_t j = 0; j < m; ++j)  // X B^-1 = Q^T
            for (std::size_t i = m; i-- > 0;)
                for (std::size_t k = (i | 1) + 1; k < m; ++k)
                    op.to_basis[j * m + i] -= x[i * m + k] * op.to_basis[j * m + k];
        for (std::size_t i = 0; i < m; ++i)
            for (std::size_t j = (i | 1) + 1; j < m; ++j) op.s[i * m + j] = 0.0;
    }
    std::vector<double> rows(m * m);  // B row-major
    transpose(op.basis.data(), m, m, m, rows.data());
    product(op.to_basis.data(), inverse.data(), m, m, m, 1.0, op.history.data());
    product(op.own.data(), rows.data(), m, m, m, 1.0, op.to_history.data());
    return op;
}
}  // namespace detail

inline graded_plan make_graded_plan(const target_kernels& kernels, double alpha,
                                    const graded_table& table, std::size_t elements) {
    const graded_shape& shape = *table.shape;
    const std::size_t m = shape.m, n1 = m + 1;
    graded_plan plan{};
    plan.alpha = alpha, plan.shape = &shape, plan.elements = elements;
    plan.step_scale = std::exp(alpha * shape.log_q);

    const std::size_t count = graded_table::size(m, elements);
    std::vector<double> values(count);
    double chebyshev[graded_table::terms] = {1.0, (alpha - 0.75) / 0.25};
    for (std::size_t n = 2; n < graded_table::terms; ++n)
        chebyshev[n] = 2.0 * chebyshev[1] * chebyshev[n - 1] - chebyshev[n - 2];
    kernels.sum_series(table.series.data(), table.numbers, graded_table::terms, chebyshev, count,
                       values.data());
    const double* first = values.data();
    const double* own = first + m * n1;
    plan.start = detail::make_operator(first + 1, m, n1);
    plan.step = detail::make_operator(own, m, m);
    plan.from_zero.resize(m);
    detail::product(plan.start.history.data(), first, m, 1, n1, 1.0, plan.from_zero.data());
    plan.from_first.resize((elements - 1) * m * n1);
    const std::size_t lags = elements > 2 ? elements - 2 : 0;
    plan.lag.resize(lags * m * m);
    const double* block = own + m * m;
    const double decay = plan.step_scale / shape.q;
    double scale = decay;
    for (std::size_t k = 1; k < elements; ++k, scale *= decay) {
        detail::product(plan.step.history.data(), block, m, n1, n1, scale,
                        &plan.from_first[(k - 1) * m * n1]);
        block += m * n1;
        if (k <= lags)
            detail::product(plan.step.history.data(), block, m, m, m, scale,
                            &plan.lag[(lags - k) * m * m]);
        block += m * m;
    }
    plan.extrapolation.resize(m * n1);
    detail::transpose(shape.extrapolation.data(), m, n1, n1, plan.extrapolation.data());
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

// A plan for at least `elements` elements, shared with whoever asked for the same one lately. Safe to
// call from any thread; two threads that miss at once both make it.
inline std::shared_ptr<const graded_plan> plan_of(const target_kernels& kernels, double alpha,
                                                  std::size_t nodes, double ratio,
                                                  std::size_t elements) {
    struct entry {
        const target_kernels* kernels;
        double alpha, ratio;
        std::size_t nodes, elements;
        std::shared_ptr<const graded_plan> plan;
    };
    static std::mutex guard;
    static std::array<entry, 16> recent;  // latest first
    elements = std::min((elements + 7) / 8 * 8, graded_most_elements);
    auto matches = [&](const entry& e) {
        return e.plan && e.alpha == alpha && e.nodes == nodes && e.ratio == ratio &&
               e.elements >= elements && e.kernels == &kernels;
    };
    {
        const std::lock_guard lock(guard);
        const auto found = std::find_if(recent.begin(), recent.end(), matches);
        if (found != recent.end()) {
            std::rotate(recent.begin(), found, found + 1);
            return recent.front().plan;
        }
    }
    auto plan = std::make_shared<const graded_plan>(
        make_graded_plan(kernels, alpha, table_of(nodes, ratio), elements));
    const std::lock_guard lock(guard);
    std::rotate(recent.begin(), recent.end() - 1, recent.end());
    recent.front() = {&kernels, alpha, ratio, nodes, elements, plan};
    return plan;
}

}  // namespace volterra
