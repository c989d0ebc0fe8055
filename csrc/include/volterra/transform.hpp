// log E[exp(iuX_T)] for many u and maturities with an error estimate, by the scheme asked for.
#pragma once

#include <algorithm>
#include <atomic>
#include <cmath>
#include <complex>
#include <cstddef>
#include <limits>
#include <map>
#include <span>
#include <vector>

#include "volterra/adams_transform.hpp"
#include "volterra/classical.hpp"
#include "volterra/explosion.hpp"
#include "volterra/graded_transform.hpp"
#include "volterra/model.hpp"
#include "volterra/parallel.hpp"

namespace volterra {

// automatic: the closed form at hurst 1/2, graded elsewhere.
enum class scheme { automatic, graded, adams };

struct transform_options {
    scheme method = scheme::automatic;
    std::size_t steps = 0;     // adams: exactly this many steps to each maturity; 0: by tolerance
    double tolerance = 1e-8;   // bound on |error of phi(u)| / phi(i Im u)
    std::size_t threads = 1;
    bool estimate = true;      // whether the errors are wanted
};

struct transform_result {
    std::vector<std::complex<double>> values;  // maturities x u
    std::vector<double> errors;                // absolute error of phi, same shape, or empty
    double worst_ratio = 0.0;  // largest error / (tolerance phi(i Im u)); above 1: tolerance missed
};

// One request in progress: maturities ascend, every array is maturities x u.
class transform_request {
public:
    using complex = std::complex<double>;

    transform_request(const target_kernels& kernels, const model_parameters& m,
                      const variance_curve& curve, std::span<const complex> u,
                      std::span<const double> maturities, const transform_options& options)
        : kernels_(kernels), m_(m), curve_(curve), u_(u), maturities_(maturities),
          options_(options), closed_form_(options.method == scheme::automatic && m.hurst == 0.5) {
        const std::size_t size = u.size() * maturities.size();
        result.values.resize(size);
        if (needs_errors()) result.errors.assign(size, 0.0);
        bounds_.assign(size, options.tolerance);
        largest_.assign(size, 1.0);
    }

    void run() {
        if (result.values.empty()) return;
        scale_bounds();
        if (closed_form_)
            solve_closed_form();
        else if (options_.method == scheme::adams)
            for (std::size_t t = 0; t < maturities_.size(); ++t) solve_uniform(t);
        else
            solve_on_graded_mesh();
        constexpr double infinity = std::numeric_limits<double>::infinity();
        for (std::size_t i = 0; i < result.errors.size(); ++i) {
            if (std::isnan(result.values[i].real()) || std::isnan(result.errors[i]))
                result.errors[i] = infinity;
            result.worst_ratio = std::max(result.worst_ratio, result.errors[i] / bounds_[i]);
        }
    }

    transform_result result;

private:
    // The graded scheme can do without: it trusts its mesh where the solver raises no doubt.
    bool needs_errors() const {
        return options_.estimate || closed_form_ || options_.method == scheme::adams;
    }

    std::size_t at(std::size_t t, std::size_t i) const { return t * u_.size() + i; }

    // The tolerance is relative to phi(i Im u), which is 1 on the real axis; on the way every
    // moment is checked to be finite.
    void scale_bounds() {
        std::map<double, std::size_t> moments;  // Im u -> position on the axis, or `inside`
        constexpr std::size_t inside = std::numeric_limits<std::size_t>::max();
        const double longest =
            detail::integrated_curve(curve_, m_.alpha(), maturities_.back());
        std::vector<complex> axis;
        for (const auto& z : u_) {
            const double y = z.imag();
            if (y == 0.0 || y == -1.0) continue;  // E[1] = E[exp X] = 1
            const auto [entry, is_new] = moments.try_emplace(y, inside);
            if (!is_new) continue;
            for (double maturity : maturities_) require_finite_moment(m_, -y, maturity);
            // Between the two, exp(p E[X]) <= E[exp(pX)] <= 1, p = -Im u, E[X] >= -int g0 / 2.
            if (-1.0 < y && y < 0.0 && -y * longest < 0.1) continue;
            entry->second = axis.size();
            axis.emplace_back(0.0, y);
        }
        if (moments.empty()) return;
        constexpr double least_inside = 0.95;  // exp(-0.1 / 2)
        std::size_t position = inside;
        const auto sizes = rough_values(axis);
        for (std::size_t t = 0; t < maturities_.size(); ++t)
            for (std::size_t i = 0; i < u_.size(); ++i) {
                const double y = u_[i].imag();
                if (y == 0.0 || y == -1.0) continue;
                if (i == 0 || y != u_[i - 1].imag()) position = moments[y];
                if (position == inside) {
                    bounds_[at(t, i)] *= least_inside;
                    continue;
                }
                largest_[at(t, i)] = std::exp(sizes[t * axis.size() + position].real());
                bounds_[at(t, i)] *= largest_[at(t, i)];
            }
    }

    // Values good to a few digits, for scales.
    std::vector<complex> rough_values(std::span<const complex> u) const {
        std::vector<complex> values(maturities_.size() * u.size());
        if (values.empty()) return values;
        if (closed_form_) {
            for (std::size_t t = 0; t < maturities_.size(); ++t)
                for (std::size_t i = 0; i < u.size(); ++i)
                    values[t * u.size() + i] = classical(u[i], maturities_[t]);
            return values;
        }
        const std::vector<double> bounds(values.size(), 1e-3);
        solve_log_transform(kernels_, m_, curve_, u, maturities_, bounds, values, {});
        return values;
    }

    complex classical(complex z, double maturity) const {
        std::vector<complex> basis(curve_.basis_size());
        classical_basis(m_, curve_, z, maturity, basis.data());
        const bool driven = curve_.form == curve_form::driven;
        complex sum = driven ? curve_.initial * basis[0] : 0.0;
        for (std::size_t k = 0; k < curve_.levels.size(); ++k)
            sum += curve_.levels[k] * basis[k + driven];
        return sum;
    }

    void solve_closed_form() {
        for (std::size_t t = 0; t < maturities_.size(); ++t)
            for (std::size_t i = 0; i < u_.size(); ++i) {
                result.values[at(t, i)] = classical(u_[i], maturities_[t]);
                result.errors[at(t, i)] = rounding_error(t, i);
            }
    }

    void solve_uniform(std::size_t t) {
        const std::span<complex> values(result.values.data() + at(t, 0), u_.size());
        const std::span<double> errors(result.errors.data() + at(t, 0), u_.size());
        const std::span<const double> bounds(bounds_.data() + at(t, 0), u_.size());
        const std::span<const double> largest(largest_.data() + at(t, 0), u_.size());
        if (options_.steps)
            adams_with_error(kernels_, m_, curve_, u_, maturities_[t], options_.steps, largest,
                             values, errors);
        else
            adams_to_tolerance(kernels_, m_, curve_, u_, maturities_[t], bounds, largest, values,
                               errors);
        for (std::size_t i = 0; i < u_.size(); ++i) errors[i] += rounding_error(t, i);
    }

    void solve_on_graded_mesh() {
        result.worst_ratio = solve_log_transform(kernels_, m_, curve_, u_, maturities_, bounds_,
                                                 result.values, result.errors);
        // A u that no mesh could solve goes to the uniform scheme, with that scheme's error.
        for (std::size_t k = 0; k < result.values.size(); ++k) {
            if (!std::isnan(result.values[k].real()) &&
                (result.errors.empty() || !std::isinf(result.errors[k])))
                continue;
            const std::size_t t = k / u_.size(), i = k % u_.size();
            double error = 0.0;
            adams_to_tolerance(kernels_, m_, curve_, u_.subspan(i, 1), maturities_[t],
                               {&bounds_[k], 1}, {&largest_[k], 1}, {&result.values[k], 1},
                               {&error, 1});
            error += rounding_error(t, i);
            if (!result.errors.empty()) result.errors[k] = error;
            const double ratio = std::isnan(result.values[k].real())
                                     ? std::numeric_limits<double>::infinity()
                                     : error / bounds_[k];
            result.worst_ratio = ratio <= result.worst_ratio ? result.worst_ratio : ratio;
        }
    }

    // log phi is a sum of terms of size |c0| int xi, each with a relative error of some ulp.
    double rounding_error(std::size_t t, std::size_t i) const {
        constexpr double ulp = std::numeric_limits<double>::epsilon();
        const complex value = result.values[at(t, i)];
        const double size =
            std::abs(riccati(m_, u_[i]).c0) *
                detail::integrated_curve(curve_, m_.alpha(), maturities_[t]) +
            std::abs(value);
        return 4.0 * ulp * size * std::exp(value.real());
    }

    const target_kernels& kernels_;
    const model_parameters& m_;
    const variance_curve& curve_;
    std::span<const complex> u_;
    std::span<const double> maturities_;
    transform_options options_;
    bool closed_form_;
    std::vector<double> bounds_;
    std::vector<double> largest_;  // phi(i Im u) >= |phi(u)|
};

// Maturities in any order, repetitions allowed. With more than one thread the u are shared out;
// as no value depends on its companions, the bits are the same for any number of threads.
inline transform_result log_transform(const target_kernels& kernels, const model_parameters& m,
                                      const variance_curve& curve,
                                      std::span<const std::complex<double>> u,
                                      std::span<const double> maturities,
                                      const transform_options& options) {
    std::vector<double> ascending(maturities.begin(), maturities.end());
    std::sort(ascending.begin(), ascending.end());
    ascending.erase(std::unique(ascending.begin(), ascending.end()), ascending.end());
    std::vector<std::size_t> rows;  // of each requested maturity among the ascending ones
    for (double maturity : maturities)
        rows.push_back(static_cast<std::size_t>(
            std::lower_bound(ascending.begin(), ascending.end(), maturity) - ascending.begin()));

    const std::size_t n = u.size();
    transform_result result;
    result.values.resize(maturities.size() * n);
    if (options.estimate) result.errors.resize(maturities.size() * n);
    std::atomic<double> worst{0.0};
    constexpr std::size_t least = 64;  // u: below that a thread costs more than it saves
    for_each_part(n, options.threads, least, [&](std::size_t begin, std::size_t end) {
        transform_request request(kernels, m, curve, u.subspan(begin, end - begin), ascending,
                                  options);
        request.run();
        const auto& part = request.result;
        const bool estimated = options.estimate;
        for (std::size_t t = 0; t < rows.size(); ++t) {
            const std::size_t from = rows[t] * (end - begin), to = t * n + begin;
            std::copy_n(part.values.data() + from, end - begin, result.values.data() + to);
            if (estimated)
                std::copy_n(part.errors.data() + from, end - begin, result.errors.data() + to);
        }
        for (double seen = worst; seen < part.worst_ratio;)
            if (worst.compare_exchange_weak(seen, part.worst_ratio)) break;
    });
    result.worst_ratio = worst;
    return result;
}

}  // namespace volterra
