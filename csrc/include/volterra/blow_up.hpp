// Blow-up time of the real fractional Riccati equation D^alpha y = a + b y + y^2, y(0) = 0.
//
// Product integration on elements [t, t + h] with f = a + b y + y^2 a polynomial through the Gauss
// points. The past enters through a sum of exponentials,
//
//   t^(alpha-1)/Gamma(alpha) = sin(pi alpha)/pi int_0^oo x^-alpha exp(-x t) dx,
//
// by the trapezoidal rule in log x, step log(3/2), relative error below 1e-10 (measured). Element
// lengths lie on the same geometric lattice as the rates x, so one table of exp(-x h c) and of the
// weights of int exp(-x (h - s)) f(s) ds serves every element, rate and alpha.
//
// Near the blow-up at T, y + b/2 = C (T - t)^-alpha (1 + O((T - t)^(2 alpha))) with
// C = Gamma(2 alpha)/Gamma(alpha): the power and the constant balance the equation, the shift b/2
// removes its logarithm. Elements shrink in proportion to (C/(y + b/2))^(1/alpha) until
// t + (C/(y + b/2))^(1/alpha) settles.
//
// Measured relative error of T: see blow_up_time. Source of the growth law: Growth rates for blow-up
// solutions of nonlinear Volterra equations, Quart. Appl. Math. 54, 1996 (memory; rederived).
#pragma once

#include <algorithm>
#include <array>
#include <cmath>
#include <cstddef>
#include <limits>
#include <vector>

namespace volterra {

struct scaled_riccati {
    double alpha;    // in (1/2, 1)
    double a, b;     // 0 < a <= 1, |b| <= 1, one of them 1 in size; a + b y + y^2 > 0 for y >= 0
    double shifted;  // a - b^2/4, given apart because it may cancel
};

namespace detail {

constexpr std::size_t blow_up_nodes = 8;
constexpr double lattice_ratio = 1.5;

// What depends on neither alpha nor the equation.
struct blow_up_table {
    static constexpr std::size_t m = blow_up_nodes;
    static constexpr int lowest = -64, highest = 46;  // (3/2)^n: 5e-12 to 1e8

    std::array<double, m> node, weight;           // Gauss rule on [0, 1]
    std::array<double, m> last_legendre;          // f -> its coefficient of degree m - 1
    std::array<std::array<long double, m>, m> monomial;  // [k][j]: s^k in the Lagrange polynomial j
    struct row {
        std::array<double, m + 1> decay;   // exp(-q c) at the nodes and at 1
        std::array<double, m> integral;    // int_0^1 exp(-q (1 - s)) l_j(s) ds
    };
    std::vector<row> rows;  // q = lattice_ratio^n, n = lowest..highest

    const row& at(int n) const {
        return rows[static_cast<std::size_t>(std::clamp(n, lowest, highest) - lowest)];
    }

    blow_up_table() {
        std::array<long double, m> c;
        for (std::size_t j = 0; j < m; ++j) gauss_point(j, c);
        for (std::size_t j = 0; j < m; ++j) {
            std::array<long double, m> p{1.0L};
            for (std::size_t i = 0, degree = 0; i < m; ++i) {
                if (i == j) continue;
                const long double scale = 1.0L / (c[j] - c[i]);
                ++degree;
                for (std::size_t k = degree + 1; k-- > 0;)
                    p[k] = scale * ((k ? p[k - 1] : 0.0L) - c[i] * p[k]);
            }
            for (std::size_t k = 0; k < m; ++k) monomial[k][j] = p[k];
        }
        const long double step = std::log(static_cast<long double>(lattice_ratio));
        for (int n = lowest; n <= highest; ++n) rows.push_back(make_row(std::exp(n * step), c));
    }

private:
    // Newton's method on the Legendre polynomial of degree m.
    void gauss_point(std::size_t j, std::array<long double, m>& c) {
        const long double pi = std::acos(-1.0L);
        long double x = std::cos(pi * (m - j - 0.25L) / (m + 0.5L)), slope = 0.0L, below = 0.0L;
        for (int iteration = 0; iteration < 10; ++iteration) {
            long double p = 1.0L, q = 0.0L;
            for (std::size_t n = 0; n < m; ++n) {
                const long double next = ((2.0L * n + 1.0L) * x * p - n * q) / (n + 1.0L);
                q = p;
                p = next;
            }
            below = q;
            slope = m * (x * p - q) / (x * x - 1.0L);
            x -= p / slope;
        }
        c[j] = 0.5L * (1.0L + x);
        node[j] = static_cast<double>(c[j]);
        weight[j] = static_cast<double>(1.0L / ((1.0L - x * x) * slope * slope));
        last_legendre[j] = (2.0 * m - 1.0) * weight[j] * static_cast<double>(below);
    }

    row make_row(long double q, const std::array<long double, m>& c) const {
        row r;
        for (std::size_t j = 0; j < m; ++j) r.decay[j] = static_cast<double>(std::exp(-q * c[j]));
        r.decay[m] = static_cast<double>(std::exp(-q));
        if (q < 2.0L) {  // the Gauss rule is exact to 1e-13
            for (std::size_t j = 0; j < m; ++j)
                r.integral[j] = weight[j] * static_cast<double>(std::exp(-q * (1.0L - c[j])));
            return r;
        }
        // Moments int_0^1 exp(-q v) v^k dv by the forward recurrence, which loses two digits at
        // q = 2; the Gauss points are symmetric, so l_j(1 - v) = l_(m-1-j)(v).
        std::array<long double, m> moment;
        const long double tail = std::exp(-q);
        moment[0] = (1.0L - tail) / q;
        for (std::size_t k = 1; k < m; ++k) moment[k] = (k * moment[k - 1] - tail) / q;
        for (std::size_t j = 0; j < m; ++j) {
            long double sum = 0.0L;
            for (std::size_t k = 0; k < m; ++k) sum += monomial[k][m - 1 - j] * moment[k];
            r.integral[j] = static_cast<double>(sum);
        }
        return r;
    }
};

inline const blow_up_table& blow_up_constants() {
    static const blow_up_table table;
    return table;
}

// The past of f, as the values int_0^t exp(-x (t - s)) f(s) ds for rates x = lattice_ratio^i.
class exponential_memory {
public:
    static constexpr std::size_t m = blow_up_nodes;

    // `shortest`: the smallest element that will be asked for; its first node must see the kernel.
    exponential_memory(double alpha, double shortest)
        : beta_(1.0 - alpha),
          scale_(step() * std::sin(pi() * alpha) / pi()),
          top_(static_cast<int>(std::ceil(std::log(1e3 / shortest) / step()))) {}

    // Adds the element [t, t + h], h = lattice_ratio^k, with the values f at its nodes.
    void append(int k, double h, const std::array<double, m>& f) {
        const auto& table = blow_up_constants();
        end_ += h;
        // A rate enters when its exponential first differs from 1; until then its value is the
        // plain integral, as for all lower rates.
        for (int i; std::exp((i = bottom()) * step()) * end_ > 1e-12;) {
            value_.push_back(integral_);
            factor_.push_back(scale_ * std::exp(beta_ * step() * i));
        }
        for (std::size_t n = 0; n < value_.size(); ++n) {
            const auto& row = table.at(top_ - static_cast<int>(n) + k);
            double sum = 0.0;
            for (std::size_t j = 0; j < m; ++j) sum += row.integral[j] * f[j];
            value_[n] = row.decay[m] * value_[n] + h * sum;
        }
        for (std::size_t j = 0; j < m; ++j) integral_ += h * table.weight[j] * f[j];
    }

    // int_0^t K(s' - s) f(s) ds at the nodes s' of the element [t, t + lattice_ratio^k] and its end.
    std::array<double, m + 1> at_nodes(int k) const {
        const auto& table = blow_up_constants();
        std::array<double, m + 1> sum;
        // The rates below, a geometric sum of equal exponentials.
        const double rest = scale_ * std::exp(beta_ * step() * bottom()) /
                            -std::expm1(-beta_ * step()) * integral_;
        sum.fill(rest);
        for (std::size_t n = 0; n < value_.size(); ++n) {
            const auto& row = table.at(top_ - static_cast<int>(n) + k);
            const double v = factor_[n] * value_[n];
            for (std::size_t j = 0; j <= m; ++j) sum[j] += row.decay[j] * v;
        }
        return sum;
    }

    double end() const { return end_; }
    static double step() { return std::log(lattice_ratio); }
    static double pi() { return std::acos(-1.0); }

private:
    int bottom() const { return top_ - static_cast<int>(value_.size()); }

    double beta_, scale_;
    int top_;               // exponent of the highest rate
    double end_ = 0.0;      // t
    double integral_ = 0.0;  // int_0^t f
    std::vector<double> value_, factor_;  // downwards from the highest rate; weight of each rate
};

// Solves the m x m system a x = b in place by elimination with partial pivoting.
template <std::size_t m>
void solve_dense(std::array<std::array<double, m>, m>& a, std::array<double, m>& b) {
    for (std::size_t k = 0; k < m; ++k) {
        std::size_t pivot = k;
        for (std::size_t i = k + 1; i < m; ++i)
            if (std::abs(a[i][k]) > std::abs(a[pivot][k])) pivot = i;
        std::swap(a[k], a[pivot]);
        std::swap(b[k], b[pivot]);
        const double inverse = 1.0 / a[k][k];
        for (std::size_t i = k + 1; i < m; ++i) {
            const double factor = a[i][k] * inverse;
            for (std::size_t j = k + 1; j < m; ++j) a[i][j] -= factor * a[k][j];
            b[i] -= factor * b[k];
        }
    }
    for (std::size_t k = m; k-- > 0;) {
        for (std::size_t j = k + 1; j < m; ++j) b[k] -= a[k][j] * b[j];
        b[k] /= a[k][k];
    }
}

class blow_up_solver {
public:
    explicit blow_up_solver(const scaled_riccati& e)
        : e_(e), table_(blow_up_constants()), memory_(e.alpha, 1e-7) {
        for (std::size_t j = 0; j <= m; ++j) {
            const double c = j < m ? table_.node[j] : 1.0;
            std::array<long double, m> power;  // I^alpha s^k at c
            for (std::size_t k = 0; k < m; ++k)
                power[k] = std::pow(c, k + e.alpha) * std::tgamma(k + 1.0) /
                           std::tgamma(k + 1.0 + e.alpha);
            for (std::size_t i = 0; i < m; ++i) {
                long double sum = 0.0L;
                for (std::size_t k = 0; k < m; ++k) sum += table_.monomial[k][i] * power[k];
                own_[j][i] = static_cast<double>(sum);
            }
        }
    }

    // The blow-up time, or infinity if it is later than `horizon`.
    double run(double horizon) {
        constexpr double never = std::numeric_limits<double>::infinity();
        const double constant = std::tgamma(2.0 * e_.alpha) / std::tgamma(e_.alpha);
        int k = start();
        double last = 0.0;
        bool settled = false;
        for (int element = 0; element < 4000; ++element) {
            const double t = memory_.end(), w = y_ + 0.5 * e_.b;
            if (t > horizon) return never;
            if (w > 0.0) {
                const double left = std::pow(constant / w, 1.0 / e_.alpha);
                const bool close = std::abs(t + left - last) <= settle * t;
                if (close && settled) return t + left;
                settled = close;
                last = t + left;
                k = std::min(k, static_cast<int>(std::floor(std::log(shrink * left) /
                                                            exponential_memory::step())));
            }
            double roughness = advance(k);
            for (int retry = 0; !(roughness <= rough) && retry < 60; ++retry)
                roughness = advance(--k);
            if (!(roughness <= rough)) return std::max(t, end_of_rest());
            if (roughness < 0.02 * rough) ++k;
        }
        return never;
    }

private:
    static constexpr std::size_t m = blow_up_nodes;
    // Measured: 1e-6 keeps the error of the blow-up time near 1e-10 relative.
    static constexpr double rough = 1e-6, settle = 1e-9, shrink = 0.4;

    // a + b y + y^2 without cancellation on either side.
    double f(double y) const {
        if (e_.b >= 0.0 || y < -0.25 * e_.b) return e_.a + y * (e_.b + y);
        const double w = y + 0.5 * e_.b;
        return e_.shifted + w * w;
    }

    // The power series in t^alpha on the first elements; returns the exponent of the next length.
    int start() {
        constexpr int terms = 20;
        std::array<double, terms> y{};  // coefficients of t^(n alpha)
        double gamma = 1.0;             // Gamma(1 + n alpha)
        for (int n = 0; n + 1 < terms; ++n) {
            double c = n == 0 ? e_.a : e_.b * y[n];
            for (int i = 1; i < n; ++i) c += y[i] * y[n - i];
            const double next = std::tgamma(1.0 + (n + 1) * e_.alpha);
            y[n + 1] = c * gamma / next;
            gamma = next;
        }
        const auto value = [&](double t) {
            const double x = std::pow(t, e_.alpha);
            double sum = 0.0;
            for (int n = terms; n-- > 1;) sum = (sum + y[n]) * x;
            return sum;
        };
        // The radius of convergence is at least Gamma(1 + alpha)/3 > 0.29 (the bound of
        // explosion.hpp for the series of moduli): 20 terms are good to 1e-12 at x = 0.07.
        constexpr int elements = 24;
        const double step = exponential_memory::step();
        const int last =
            static_cast<int>(std::floor(std::log(0.07) / e_.alpha / step + std::log(0.5) / step));
        // Elements of length r^k fill (r^first/(r-1), r^(last+1)/(r-1)]; before it f is its mean.
        const int first = last - elements;
        for (int k = first; k <= last; ++k) {
            const double h = std::exp(k * step);
            std::array<double, m> values;
            if (k == first) {  // r^first/(r - 1) is twice r^first
                values.fill(f(0.5 * value(2.0 * h)));
                memory_.append(k, h, values);
                memory_.append(k, h, values);
            }
            for (std::size_t j = 0; j < m; ++j)
                values[j] = f(value(memory_.end() + h * table_.node[j]));
            memory_.append(k, h, values);
        }
        y_ = value(memory_.end());
        return last + 1;
    }

    // With b < 0 and a small `shifted` the solution rests below -b/2, where the derivative of that
    // constant, -b/2 t^-alpha / Gamma(1 - alpha), is yet above `shifted`; it is past the fold a
    // fraction shifted^(1/(1 + 2 alpha)) later.
    double end_of_rest() const {
        return std::pow(-2.0 * e_.shifted * std::tgamma(1.0 - e_.alpha) / e_.b, -1.0 / e_.alpha);
    }

    // Tries the next element; keeps it and returns its roughness if that is small enough.
    double advance(int k) {
        const double h = std::exp(k * exponential_memory::step()), scale = std::pow(h, e_.alpha);
        const auto past = memory_.at_nodes(k);
        std::array<double, m> y, values;
        y.fill(y_);
        bool converged = false;
        for (int iteration = 0; iteration < 12 && !converged; ++iteration) {
            std::array<std::array<double, m>, m> jacobian;
            std::array<double, m> residual;
            for (std::size_t j = 0; j < m; ++j) values[j] = f(y[j]);
            for (std::size_t j = 0; j < m; ++j) {
                double sum = past[j] - y[j];
                for (std::size_t i = 0; i < m; ++i) {
                    sum += scale * own_[j][i] * values[i];
                    jacobian[j][i] = -scale * own_[j][i] * (e_.b + 2.0 * y[i]);
                }
                jacobian[j][j] += 1.0;
                residual[j] = sum;
            }
            solve_dense(jacobian, residual);
            double change = 0.0;
            for (std::size_t j = 0; j < m; ++j) {
                y[j] += residual[j];
                change = std::max(change, std::abs(residual[j]));
            }
            const double size = std::abs(y[m - 1]), shifted = std::abs(y[m - 1] + 0.5 * e_.b);
            converged = change <= std::max(1e-9 * std::min(size, shifted), 2e-15 * size);
        }
        double end = past[m], largest = 0.0, top = 0.0;
        const double rounding = 2e-15 * y_;
        bool rising = converged && y[0] > y_ - rounding;
        for (std::size_t j = 0; j < m; ++j) {
            values[j] = f(y[j]);
            end += scale * own_[m][j] * values[j];
            largest = std::max(largest, std::abs(values[j]));
            top += table_.last_legendre[j] * values[j];
            rising = rising && (j == 0 || y[j] > y[j - 1] - rounding);
        }
        // The solution rises; a fall is the other root of the element's equations.
        if (!rising || !(end > y[m - 1] - rounding)) return std::numeric_limits<double>::infinity();
        const double roughness = std::abs(top) / largest;
        if (roughness <= rough) {
            memory_.append(k, h, values);
            y_ = end;
        }
        return roughness;
    }

    scaled_riccati e_;
    const blow_up_table& table_;
    exponential_memory memory_;
    std::array<std::array<double, m>, m + 1> own_;  // I^alpha of the Lagrange polynomials
    double y_ = 0.0;                                // at the end of the memory
};

}  // namespace detail

// The blow-up time, or infinity if it is later than `horizon`; 0.06 to 0.3 ms. Relative error, by
// comparison with finer elements (the power series agrees within its own 1e-10 to 1e-6): below 1e-9
// while b > 0 or shifted > 1e-3, below 1e-7 while shifted > 1e-10. Below that the solution passes a
// fold that may be lost in rounding, after 1e7 units of time or more; the limit of a vanishing fold
// is then good to 1e-4.
inline double blow_up_time(const scaled_riccati& e,
                           double horizon = std::numeric_limits<double>::infinity()) {
    return detail::blow_up_solver(e).run(horizon);
}

}  // namespace volterra
