// Out-of-the-money prices of one maturity from the log-transform on the line Im u = -1/2.
//
//   call/F = b_call(k; w) - e^{k/2}/pi int_0^inf Re[ e^{-ivk} (phi(v - i/2) - phi_w(v - i/2)) ]
//                                                 / (v^2 + 1/4) dv,      k = log(K/F),
//
// with phi_w, b the transform and the normalised price of a Black model with total variance w;
// puts have the same integral. Both transforms equal 1 at u = 0 and u = -i, so the poles at
// v = +-i/2 cancel and the integrand is as smooth as the strip of finite moments is wide.
//
// Nodes: v = c sinh(y), y = j h, the trapezoidal rule in y, exponentially convergent; halving h
// keeps the old nodes. Formula: A simple option formula for general jump-diffusion and other
// exponential Levy processes (2001, SSRN 282110; from memory), with a control variate.
#pragma once

#include <algorithm>
#include <cmath>
#include <complex>
#include <cstddef>
#include <span>
#include <vector>

#include "volterra/black.hpp"

namespace volterra {

inline constexpr double pi = 3.14159265358979323846;

// Nodes and quadrature weights of the line, without the factor e^{k/2 - ivk}/pi.
struct fourier_line {
    std::vector<double> nodes, weights;
};

// exp(-(v^2 + 1/4) w/2): the Black transform on the line.
inline double black_transform(double v, double total_variance) {
    return std::exp(-0.5 * total_variance * (v * v + 0.25));
}

// A maturity's strikes on a given line: the oscillating factors, ready for any transform values.
class fourier_slice {
public:
    fourier_slice(fourier_line line, std::span<const double> log_moneyness, double total_variance)
        : line_(std::move(line)), k_(log_moneyness.begin(), log_moneyness.end()),
          total_variance_(total_variance), factors_(k_.size() * line_.nodes.size()),
          control_(k_.size()) {
        const std::size_t n = line_.nodes.size();
        for (std::size_t i = 0; i < k_.size(); ++i) {
            const double scale = std::exp(0.5 * k_[i]) / pi;
            for (std::size_t j = 0; j < n; ++j) {
                const double angle = line_.nodes[j] * k_[i];
                factors_[i * n + j] = {scale * line_.weights[j] * std::cos(angle),
                                       scale * line_.weights[j] * std::sin(angle)};
            }
            control_[i] = out_of_the_money_price(std::abs(k_[i]), std::sqrt(total_variance_)) *
                          std::exp(std::min(k_[i], 0.0));
        }
    }

    std::size_t strikes() const { return k_.size(); }
    std::size_t nodes() const { return line_.nodes.size(); }
    const fourier_line& line() const { return line_; }

    // Out-of-the-money prices per unit of forward; `log_phi` at nodes - i/2.
    void prices(std::span<const std::complex<double>> log_phi, std::span<double> out) const {
        const std::size_t n = nodes();
        std::vector<std::complex<double>> difference(n);
        for (std::size_t j = 0; j < n; ++j)
            difference[j] =
                std::exp(log_phi[j]) - black_transform(line_.nodes[j], total_variance_);
        for (std::size_t i = 0; i < k_.size(); ++i) out[i] = control_[i] - dot(i, difference.data());
    }

    // Change of the prices along a direction of log phi: d_log_phi has one row per direction,
    // out one row per direction and one column per strike.
    void tangents(std::span<const std::complex<double>> log_phi,
                  std::span<const std::complex<double>> d_log_phi, std::span<double> out) const {
        const std::size_t n = nodes(), directions = d_log_phi.size() / n;
        std::vector<std::complex<double>> phi(n), change(n);
        for (std::size_t j = 0; j < n; ++j) phi[j] = std::exp(log_phi[j]);
        for (std::size_t d = 0; d < directions; ++d) {
            for (std::size_t j = 0; j < n; ++j) change[j] = phi[j] * d_log_phi[d * n + j];
            for (std::size_t i = 0; i < k_.size(); ++i)
                out[d * k_.size() + i] = -dot(i, change.data());
        }
    }

private:
    // Re sum_j weight_j e^{-i v_j k} z_j
    double dot(std::size_t strike, const std::complex<double>* z) const {
        const std::complex<double>* f = factors_.data() + strike * nodes();
        double sum = 0.0;
        for (std::size_t j = 0; j < nodes(); ++j)
            sum += f[j].real() * z[j].real() + f[j].imag() * z[j].imag();
        return sum;
    }

    fourier_line line_;
    std::vector<double> k_;
    double total_variance_;
    std::vector<std::complex<double>> factors_;
    std::vector<double> control_;
};

struct slice_prices {
    std::vector<double> values;  // per unit of forward, out of the money
    double error = 0.0;          // of the quadrature plus the transform
};

// Chooses the line for `log_moneyness` and prices it. `evaluate(u, values, errors)` fills the
// log-transform and the absolute error of phi. On return `line` is the one used.
//
// The rule's error squares when h is halved: E(h/2) ~ C E(h)^2 / stdev, C <= 25 over the classical
// and rough models that were tried (maturities 1 hour to 15 years, 0.1 <= vol_of_vol <= 1).
template <class Evaluate>
slice_prices price_slice(Evaluate&& evaluate, std::span<const double> log_moneyness,
                         double total_variance, double tolerance, fourier_line* line = nullptr) {
    using complex = std::complex<double>;
    const double stdev = std::sqrt(total_variance);
    const double scale = 1.0 / stdev + 0.5;
    std::vector<complex> log_phi;
    std::vector<double> errors;
    std::vector<double> nodes;
    slice_prices result;
    std::vector<double> previous;

    auto evaluate_at = [&](std::size_t first, std::size_t stride, std::size_t count, double h) {
        std::vector<complex> u(count), values(count);
        std::vector<double> e(count);
        for (std::size_t j = 0; j < count; ++j)
            u[j] = {scale * std::sinh(static_cast<double>(first + j * stride) * h), -0.5};
        evaluate(std::span<const complex>(u), std::span<complex>(values), std::span<double>(e));
        return std::pair{values, e};
    };
    auto jacobian = [&](double y) { return scale * std::cosh(y); };
    auto contribution = [&](double y, complex value) {  // bound on a node's share of any price
        const double v = scale * std::sinh(y);
        return (std::exp(value.real()) + black_transform(v, total_variance)) * jacobian(y) /
               (v * v + 0.25);
    };

    double h = 0.25;
    // March outwards until three nodes in a row no longer matter.
    constexpr std::size_t batch = 8, furthest = 200;
    for (std::size_t small = 0; small < 3 && log_phi.size() < furthest;) {
        const auto [values, e] = evaluate_at(log_phi.size(), 1, batch, h);
        for (std::size_t j = 0; j < batch && small < 3; ++j) {
            const double y = static_cast<double>(log_phi.size()) * h;
            small = contribution(y, values[j]) * h < 0.01 * tolerance ? small + 1 : 0;
            log_phi.push_back(values[j]);
            errors.push_back(e[j]);
        }
    }
    for (int level = 0;; ++level) {
        fourier_line current;
        double transform_error = 0.0;
        for (std::size_t j = 0; j < log_phi.size(); ++j) {
            const double y = static_cast<double>(j) * h, v = scale * std::sinh(y);
            current.nodes.push_back(v);
            current.weights.push_back((j ? h : 0.5 * h) * jacobian(y) / (v * v + 0.25));
            transform_error += errors[j] * current.weights[j] / pi;
        }
        const fourier_slice slice(current, log_moneyness, total_variance);
        result.values.resize(log_moneyness.size());
        slice.prices(log_phi, result.values);
        double quadrature_error = 1.0;
        if (!previous.empty()) {
            quadrature_error = 0.0;
            for (std::size_t i = 0; i < previous.size(); ++i) {
                const double d = std::abs(previous[i] - result.values[i]);
                quadrature_error = std::max(quadrature_error, std::min(d, 25.0 * d * d / stdev));
            }
        }
        // phi enters under e^{k/2}, which exceeds 1 for strikes above the forward only.
        double largest = 1.0;
        for (double k : log_moneyness) largest = std::max(largest, std::exp(0.5 * k));
        result.error = quadrature_error + transform_error * largest;
        if (line) *line = current;
        if (quadrature_error <= 0.5 * tolerance || level == 6) return result;
        previous = result.values;
        const std::size_t old = log_phi.size();
        const auto [values, e] = evaluate_at(1, 2, old, 0.5 * h);
        std::vector<complex> merged(2 * old);
        std::vector<double> merged_errors(2 * old);
        for (std::size_t j = 0; j < old; ++j) {
            merged[2 * j] = log_phi[j], merged[2 * j + 1] = values[j];
            merged_errors[2 * j] = errors[j], merged_errors[2 * j + 1] = e[j];
        }
        log_phi.swap(merged), errors.swap(merged_errors);
        h *= 0.5;
    }
}

}  // namespace volterra
