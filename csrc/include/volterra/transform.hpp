// log E[exp(iuX_T)] for many u and maturities with an error estimate, by the scheme asked for.
#pragma once

#include <algorithm>
#include <atomic>
#include <cmath>
#include <complex>
#include <cstddef>
#include <cstdint>
#include <limits>
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
    bool interpolate = true;   // automatic: along the lines Im u = 0 and -1/2 (graded_line.hpp)
};

struct transform_result {
    std::vector<std::complex<double>> values;  // maturities x u
    std::vector<double> errors;                // absolute error of phi, same shape, or empty
    double worst_ratio = 0.0;  // largest error / (tolerance phi(i Im u)); above 1: tolerance missed
};

// One request in progress: maturities ascend, every array is maturities x u. `errors` may be empty
// if no estimate is asked for.
class transform_request {
public:
    using complex = std::complex<double>;

    transform_request(const target_kernels& kernels, const model_parameters& m,
                      const variance_curve& curve, std::span<const complex> u,
                      std::span<const double> maturities, const transform_options& options,
                      std::span<complex> values, std::span<double> errors)
        : kernels_(kernels), m_(m), curve_(curve), u_(u), maturities_(maturities),
          options_(options), values_(values), errors_(errors),
          closed_form_(options.method == scheme::automatic && m.hurst == 0.5) {}

    // Returns the largest error as a multiple of its bound.
    double run() {
        scale_bounds();
        if (closed_form_)
            solve_closed_form();
        else if (options_.method == scheme::adams)
            for (std::size_t t = 0; t < maturities_.size(); ++t) solve_uniform(t);
        else
            solve_on_graded_mesh();
        return worst_;
    }

private:
    std::size_t at(std::size_t t, std::size_t i) const { return t * u_.size() + i; }

    // Takes note of the error of one value.
    void record(std::size_t t, std::size_t i, double error) {
        const std::size_t k = at(t, i);
        if (std::isnan(values_[k].real()) || std::isnan(error))
            error = std::numeric_limits<double>::infinity();
        if (!errors_.empty()) errors_[k] = error;
        worst_ = std::max(worst_, error / bounds_(t, i));
    }

    // The tolerance is relative to phi(i Im u), which is 1 on the real axis; on the way every
    // moment is checked to be finite.
    void scale_bounds() {
        const double longest = detail::integrated_curve(curve_, m_.alpha(), maturities_.back());
        std::vector<complex> axis;
        std::vector<double> fixed;  // scale of each line, 0 where it has to be computed
        bounds_.number(u_, [&](double y) {
            const bool known = y == 0.0 || y == -1.0;  // E[1] = E[exp X] = 1
            if (!known) require_finite_moment(m_, -y, maturities_);
            // Between the two, exp(p E[X]) <= E[exp(pX)] <= 1, p = -Im u, E[X] >= -int g0 / 2.
            const bool close = -1.0 < y && y < 0.0 && -y * longest < 0.1;
            fixed.push_back(known ? 1.0 : close ? 0.95 : 0.0);
            if (fixed.back() == 0.0) axis.emplace_back(0.0, y);
        });
        const auto sizes = rough_values(axis);
        for (std::size_t t = 0; t < maturities_.size(); ++t)
            for (std::size_t l = 0, k = 0; l < fixed.size(); ++l) {
                largest_.push_back(fixed[l] > 0.0
                                       ? 1.0
                                       : std::exp(sizes[t * axis.size() + k++].real()));
                bounds_.bound.push_back(options_.tolerance *
                                        (fixed[l] > 0.0 ? fixed[l] : largest_.back()));
            }
    }

    double largest(std::size_t t, std::size_t i) const {
        return largest_[t * bounds_.lines + bounds_.line[i]];
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
        const error_bounds rough{1, std::vector<std::uint32_t>(u.size(), 0),
                                 std::vector<double>(maturities_.size(), 1e-3)};
        solve_log_transform(kernels_, m_, curve_, u, maturities_, rough, false, values,
                            {});
        return values;
    }

    complex classical(complex z, double maturity) const {
        std::vector<complex> basis(curve_.basis_size());
        classical_basis(m_, curve_, z, maturity, basis.data());
        return curve_.combine(basis.data());
    }

    void solve_closed_form() {
        for (std::size_t t = 0; t < maturities_.size(); ++t)
            for (std::size_t i = 0; i < u_.size(); ++i) {
                values_[at(t, i)] = classical(u_[i], maturities_[t]);
                record(t, i, rounding_error(t, i));
            }
    }

    void solve_uniform(std::size_t t) {
        const std::span<complex> values(values_.data() + at(t, 0), u_.size());
        std::vector<double> errors(u_.size()), bounds, most;
        for (std::size_t i = 0; i < u_.size(); ++i) {
            bounds.push_back(bounds_(t, i));
            most.push_back(largest(t, i));
        }
        if (options_.steps)
            adams_with_error(kernels_, m_, curve_, u_, maturities_[t], options_.steps, most, values,
                             errors);
        else
            adams_to_tolerance(kernels_, m_, curve_, u_, maturities_[t], bounds, most, values,
                               errors);
        for (std::size_t i = 0; i < u_.size(); ++i) record(t, i, errors[i] + rounding_error(t, i));
    }

    void solve_on_graded_mesh() {
        worst_ = solve_log_transform(kernels_, m_, curve_, u_, maturities_, bounds_,
                                     options_.method == scheme::automatic && options_.interpolate,
                                     values_, errors_);
        // A u that no mesh could solve goes to the uniform scheme, with that scheme's error.
        for (std::size_t k = 0; k < values_.size(); ++k) {
            if (!std::isnan(values_[k].real())) continue;
            const std::size_t t = k / u_.size(), i = k % u_.size();
            const double bound = bounds_(t, i), most = largest(t, i);
            double error = 0.0;
            adams_to_tolerance(kernels_, m_, curve_, u_.subspan(i, 1), maturities_[t], {&bound, 1},
                               {&most, 1}, values_.subspan(k, 1), {&error, 1});
            record(t, i, error + rounding_error(t, i));
        }
    }

    // log phi is a sum of terms of size |c0| int xi, each with a relative error of some ulp.
    double rounding_error(std::size_t t, std::size_t i) const {
        constexpr double ulp = std::numeric_limits<double>::epsilon();
        const complex value = values_[at(t, i)];
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
    std::span<complex> values_;
    std::span<double> errors_;
    bool closed_form_;
    double worst_ = 0.0;
    error_bounds bounds_;
    std::vector<double> largest_;  // phi(i Im u) >= |phi(u)|, maturities x lines
};

// The u of one request: enough to fill the lanes, few enough to keep the working memory small.
inline constexpr std::size_t transform_chunk = 2048;

// Maturities in any order, repetitions allowed. With more than one thread the u are shared out;
// as no value depends on its companions, the bits are the same for any number of threads.
// Returns the largest error as a multiple of its bound; `errors` may be empty.
inline double log_transform_into(const target_kernels& kernels, const model_parameters& m,
                                 const variance_curve& curve,
                                 std::span<const std::complex<double>> u,
                                 std::span<const double> maturities,
                                 const transform_options& options,
                                 std::span<std::complex<double>> values,
                                 std::span<double> errors) {
    if (values.empty()) return 0.0;
    std::vector<double> ascending(maturities.begin(), maturities.end());
    std::sort(ascending.begin(), ascending.end());
    ascending.erase(std::unique(ascending.begin(), ascending.end()), ascending.end());
    std::vector<std::size_t> rows;  // of each requested maturity among the ascending ones
    for (double maturity : maturities)
        rows.push_back(static_cast<std::size_t>(
            std::lower_bound(ascending.begin(), ascending.end(), maturity) - ascending.begin()));
    const bool in_place = std::equal(ascending.begin(), ascending.end(), maturities.begin(),
                                     maturities.end());

    const std::size_t n = u.size();
    std::atomic<double> worst{0.0};
    constexpr std::size_t least = 64;  // u: below that a thread costs more than it saves
    for_each_part(n, options.threads, least, [&](std::size_t part_begin, std::size_t part_end) {
        std::vector<std::complex<double>> part_values;
        std::vector<double> part_errors;
        for (std::size_t begin = part_begin; begin < part_end; begin += transform_chunk) {
            const std::size_t size = std::min(part_end - begin, transform_chunk);
            const bool whole = in_place && size == n;
            if (!whole) {
                part_values.resize(ascending.size() * size);
                part_errors.resize(errors.empty() ? 0 : part_values.size());
            }
            transform_request request(kernels, m, curve, u.subspan(begin, size), ascending, options,
                                      whole ? values : std::span(part_values),
                                      whole ? errors : std::span(part_errors));
            const double ratio = request.run();
            for (double seen = worst; !(ratio <= seen);)
                if (worst.compare_exchange_weak(seen, ratio)) break;
            for (std::size_t t = 0; !whole && t < rows.size(); ++t) {
                const std::size_t from = rows[t] * size, to = t * n + begin;
                std::copy_n(part_values.data() + from, size, values.data() + to);
                if (!errors.empty())
                    std::copy_n(part_errors.data() + from, size, errors.data() + to);
            }
        }
    });
    return worst;
}

inline transform_result log_transform(const target_kernels& kernels, const model_parameters& m,
                                      const variance_curve& curve,
                                      std::span<const std::complex<double>> u,
                                      std::span<const double> maturities,
                                      const transform_options& options) {
    transform_result result;
    result.values.resize(maturities.size() * u.size());
    if (options.estimate) result.errors.resize(result.values.size());
    result.worst_ratio = log_transform_into(kernels, m, curve, u, maturities, options,
                                            result.values, result.errors);
    return result;
}

}  // namespace volterra
