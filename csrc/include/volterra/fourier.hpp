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
#include <limits>
#include <span>
#include <utility>
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

// Node j of the line with step h.
struct sinh_map {
    double scale;

    double node(double y) const { return scale * std::sinh(y); }
    // h dv/dy / (v^2 + 1/4), half of it at the end y = 0 of the even integrand
    double weight(double y, double h) const {
        const double v = node(y);
        return (y > 0.0 ? h : 0.5 * h) * scale * std::cosh(y) / (v * v + 0.25);
    }
};

// A line for all strikes within `reach` of the forward in log-moneyness, with what was found on it.
struct priced_line {
    fourier_line line;
    std::vector<std::complex<double>> log_phi;  // at nodes - i/2
    double error = 0.0;     // of quadrature and transform, per unit of e^{max(k, 0)/2}
    double edge_put = 0.0;  // out-of-the-money prices at k = -reach and k = reach
    double edge_call = 0.0;
};

// Chooses the line by halving the step until the estimate meets the tolerance. The estimate looks
// at a fixed grid of strikes, never at those asked for, so that no price depends on its companions.
//
// The rule converges like exp(-D/h): of two successive differences d0, d1 the next is d1 (d1/d0)^2.
// Ten times that is the estimate, and d1 itself where that is less. `evaluate(u, values, errors)`
// fills the log-transform and the absolute error of phi.
template <class Evaluate>
priced_line choose_line(Evaluate&& evaluate, double total_variance, double reach,
                        double tolerance) {
    using complex = std::complex<double>;
    constexpr std::size_t strikes = 33, batch = 8, furthest = 200;
    constexpr int finest = 6;
    const double stdev = std::sqrt(total_variance);
    const sinh_map map{1.0 / stdev + 0.5};
    const double spacing = 2.0 * reach / (strikes - 1);
    priced_line result;
    std::vector<double> errors;

    auto evaluate_at = [&](std::size_t first, std::size_t stride, std::size_t count, double h) {
        std::vector<complex> u(count), values(count);
        std::vector<double> e(count);
        for (std::size_t j = 0; j < count; ++j)
            u[j] = {map.node(static_cast<double>(first + j * stride) * h), -0.5};
        evaluate(std::span<const complex>(u), std::span<complex>(values), std::span<double>(e));
        return std::pair{values, e};
    };
    // sum over the nodes first, first + stride, ... of weight(h) Re e^{-ivk} (phi - phi_w) / pi for
    // every strike of the grid; the factors of neighbouring strikes differ by a rotation
    auto grid_sums = [&](std::size_t first, std::size_t stride, double h) {
        std::vector<double> sums(strikes, 0.0);
        for (std::size_t j = first; j < result.log_phi.size(); j += stride) {
            const double y = static_cast<double>(j) * h, v = map.node(y);
            const complex z = (std::exp(result.log_phi[j]) - black_transform(v, total_variance)) *
                              (map.weight(y, h) / pi);
            complex factor = std::polar(1.0, v * reach);
            const complex rotation = std::polar(1.0, -v * spacing);
            for (auto& sum : sums) {
                sum += factor.real() * z.real() - factor.imag() * z.imag();
                factor = {factor.real() * rotation.real() - factor.imag() * rotation.imag(),
                          factor.real() * rotation.imag() + factor.imag() * rotation.real()};
            }
        }
        return sums;
    };

    double h = 0.25;
    // March outwards until three nodes in a row no longer matter to any price.
    for (std::size_t small = 0; small < 3 && result.log_phi.size() < furthest;) {
        const auto [values, e] = evaluate_at(result.log_phi.size(), 1, batch, h);
        for (std::size_t j = 0; j < batch && small < 3; ++j) {
            const double y = static_cast<double>(result.log_phi.size()) * h;
            const double size =
                std::exp(values[j].real()) + black_transform(map.node(y), total_variance);
            small = size * map.weight(y, h) < 0.01 * tolerance ? small + 1 : 0;
            result.log_phi.push_back(values[j]);
            errors.push_back(e[j]);
        }
    }
    std::vector<double> sums = grid_sums(0, 1, h);
    double before = std::numeric_limits<double>::infinity(), quadrature = before;
    for (int level = 1; level <= finest; ++level) {
        const std::size_t old = result.log_phi.size();
        h *= 0.5;
        const auto [values, e] = evaluate_at(1, 2, old, h);
        std::vector<complex> merged(2 * old);
        std::vector<double> merged_errors(2 * old);
        for (std::size_t j = 0; j < old; ++j) {
            merged[2 * j] = result.log_phi[j], merged[2 * j + 1] = values[j];
            merged_errors[2 * j] = errors[j], merged_errors[2 * j + 1] = e[j];
        }
        result.log_phi.swap(merged), errors.swap(merged_errors);
        const auto added = grid_sums(1, 2, h);
        double difference = 0.0;
        for (std::size_t i = 0; i < strikes; ++i) {
            const double next = 0.5 * sums[i] + added[i];
            difference = std::max(difference, std::abs(next - sums[i]));
            if (std::isnan(next)) difference = std::numeric_limits<double>::infinity();
            sums[i] = next;
        }
        const double ratio = difference / before;
        quadrature = std::min(difference, 10.0 * difference * ratio * ratio);
        if (before == std::numeric_limits<double>::infinity()) quadrature = difference;
        before = difference;
        if (quadrature <= 0.5 * tolerance) break;
    }
    double transform = 0.0;
    for (std::size_t j = 0; j < result.log_phi.size(); ++j) {
        const double y = static_cast<double>(j) * h;
        result.line.nodes.push_back(map.node(y));
        result.line.weights.push_back(map.weight(y, h));
        transform += errors[j] * result.line.weights.back() / pi;
    }
    result.error = quadrature + transform;
    const double control = out_of_the_money_price(reach, stdev);
    result.edge_put = std::max(std::exp(-reach) * control - std::exp(-0.5 * reach) * sums.front(), 0.0);
    result.edge_call = std::max(control - std::exp(0.5 * reach) * sums.back(), 0.0);
    return result;
}

}  // namespace volterra
