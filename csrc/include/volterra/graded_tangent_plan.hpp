// What the tangent equations of the graded scheme need to know about one hurst index: the weights of
// graded_table.hpp and their derivatives with respect to alpha, all multiplied by W^-1.
//
// The derivatives are those of the Chebyshev series, so they belong to the very weights the solver
// uses. Measured error: below 1e-12 relative to the row sums.
#pragma once

#include <algorithm>
#include <array>
#include <cstddef>
#include <memory>
#include <mutex>
#include <utility>
#include <vector>

#include "volterra/graded_table.hpp"

namespace volterra {

// Column-major blocks, arranged like those of graded_plan. "Change" is the derivative with respect to
// alpha at fixed nodes: fixed t, but fixed (t/b)^alpha on the first element. Immutable once made.
struct graded_tangent_plan {
    struct element {
        std::vector<double> inverse;     // W^-1
        std::vector<double> own_change;  // W^-1 dW/dalpha
    };
    element start, step;
    std::vector<double> from_zero, from_zero_change;
    std::vector<double> from_first, from_first_change;
    std::vector<double> lag, lag_change;
    std::vector<double> first_total_change;  // m + 1: derivative of graded_plan::first_total
};

namespace detail {

inline graded_tangent_plan::element make_tangent_element(const graded_operator& op,
                                                         const double* own_change, std::size_t m,
                                                         std::size_t stride) {
    graded_tangent_plan::element e;
    e.inverse.resize(m * m), e.own_change.resize(m * m);
    std::vector<double> rows(m * m);  // B^-1 W^-1, row-major
    transpose(op.history.data(), m, m, m, rows.data());
    product(op.basis.data(), rows.data(), m, m, m, 1.0, e.inverse.data());
    product(e.inverse.data(), own_change, m, m, stride, 1.0, e.own_change.data());
    return e;
}

}  // namespace detail

inline graded_tangent_plan make_graded_tangent_plan(const target_kernels& kernels,
                                                    const graded_plan& plan) {
    const graded_shape& shape = *plan.shape;
    const graded_table& table = table_of(shape.m, shape.q);
    const std::size_t m = shape.m, n1 = m + 1, elements = plan.elements;
    const std::size_t count = graded_table::size(m, elements);

    // T_n and T_n' = n U_(n-1)
    constexpr std::size_t terms = graded_table::terms;
    const double x = (plan.alpha - 0.75) / 0.25;
    double first_kind[terms] = {1.0, x}, second_kind[terms] = {1.0, 2.0 * x}, slope[terms] = {};
    for (std::size_t n = 2; n < terms; ++n) {
        first_kind[n] = 2.0 * x * first_kind[n - 1] - first_kind[n - 2];
        second_kind[n] = 2.0 * x * second_kind[n - 1] - second_kind[n - 2];
    }
    for (std::size_t n = 1; n < terms; ++n)
        slope[n] = static_cast<double>(n) * second_kind[n - 1] / 0.25;
    std::vector<double> values(count), changes(count);
    kernels.sum_series(table.series.data(), table.numbers, terms, first_kind, count, values.data());
    kernels.sum_series(table.series.data(), table.numbers, terms, slope, count, changes.data());

    graded_tangent_plan to;
    const double *value = values.data(), *change = changes.data();
    to.start = detail::make_tangent_element(plan.start, change + 1, m, n1);
    to.from_zero.resize(m), to.from_zero_change.resize(m);
    detail::product(to.start.inverse.data(), value, m, 1, n1, 1.0, to.from_zero.data());
    detail::product(to.start.inverse.data(), change, m, 1, n1, 1.0, to.from_zero_change.data());
    value += m * n1, change += m * n1;
    to.step = detail::make_tangent_element(plan.step, change, m, m);
    value += m * m, change += m * m;

    const std::size_t lags = elements > 2 ? elements - 2 : 0;
    to.from_first.resize((elements - 1) * m * n1), to.from_first_change = to.from_first;
    to.lag.resize(lags * m * m), to.lag_change = to.lag;
    const double* const inverse = to.step.inverse.data();
    const double decay = plan.step_scale / shape.q;  // its derivative: decay log q
    double scale = decay;
    std::vector<double> moved(m * n1);
    for (std::size_t k = 1; k < elements; ++k, scale *= decay) {
        const double rate = static_cast<double>(k) * shape.log_q;
        auto block = [&](std::size_t width, double* of_value, double* of_change) {
            for (std::size_t i = 0; i < m * width; ++i) moved[i] = change[i] + rate * value[i];
            detail::product(inverse, value, m, width, width, scale, of_value);
            detail::product(inverse, moved.data(), m, width, width, scale, of_change);
        };
        const std::size_t first = (k - 1) * m * n1;
        block(n1, &to.from_first[first], &to.from_first_change[first]);
        value += m * n1, change += m * n1;
        if (k <= lags) {
            const std::size_t at = (lags - k) * m * m;
            block(m, &to.lag[at], &to.lag_change[at]);
        }
        value += m * m, change += m * m;
    }

    // The moments of make_graded_plan, prod (beta - p)/(beta + p) with beta = 1/alpha.
    const double beta = 1.0 / plan.alpha;
    double moment = 1.0, moment_change = 0.0, moment_changes[graded_most_nodes + 1] = {};
    for (std::size_t p = 1; p < n1; ++p) {
        const double n = static_cast<double>(p), ratio = (beta - n) / (beta + n);
        moment_change = moment_change * ratio +
                        moment * 2.0 * n / ((beta + n) * (beta + n)) * (-beta * beta);
        moment *= ratio;
        moment_changes[p] = moment_change;
    }
    to.first_total_change.resize(n1);
    detail::to_nodes(shape, moment_changes, to.first_total_change.data());
    return to;
}

// The tangent plan that belongs to `plan`, shared with whoever asked for it lately. Safe to call from
// any thread; two threads that miss at once both make it.
inline std::shared_ptr<const graded_tangent_plan> tangent_plan_of(
    const target_kernels& kernels, const std::shared_ptr<const graded_plan>& plan) {
    using entry = std::pair<std::shared_ptr<const graded_plan>,
                            std::shared_ptr<const graded_tangent_plan>>;
    static std::mutex guard;
    static std::array<entry, 8> recent;  // latest first
    {
        const std::lock_guard lock(guard);
        const auto found = std::find_if(recent.begin(), recent.end(),
                                        [&](const entry& e) { return e.first == plan; });
        if (found != recent.end()) {
            std::rotate(recent.begin(), found, found + 1);
            return recent.front().second;
        }
    }
    auto made = std::make_shared<const graded_tangent_plan>(make_graded_tangent_plan(kernels, *plan));
    const std::lock_guard lock(guard);
    std::rotate(recent.begin(), recent.end() - 1, recent.end());
    recent.front() = {plan, made};
    return made;
}

}  // namespace volterra
