// The numbers that define a model: its parameters and its variance curve.
//
//   V_t = g0(t) + int_0^t K(t-s) (-lambda V_s ds + nu sqrt(V_s) dW_s),   d<W,B> = rho dt
//
// Times in years, variance per year, X = log(S / forward).
#pragma once

#include <algorithm>
#include <complex>
#include <cstddef>
#include <stdexcept>
#include <string>
#include <vector>

namespace volterra {

struct model_parameters {
    double hurst;  // K(t) = t^(hurst - 1/2) / Gamma(hurst + 1/2), hurst in (0, 1/2]
    double vol_of_vol;
    double correlation;
    double mean_reversion;

    double alpha() const { return hurst + 0.5; }
};

// `market`: levels are of xi(t) = E[V_t].
// `driven`: levels are of theta in g0(t) = initial + int_0^t K(t-s) theta(s) ds.
// levels[k] holds on (times[k-1], times[k]]; the last level continues for ever.
enum class curve_form { market, driven };

struct variance_curve {
    curve_form form;
    double initial;  // V0 of a driven curve; unused in the market form
    std::vector<double> times;
    std::vector<double> levels;

    // Elementary curves whose linear combination is this one: V0 first when driven, then levels.
    std::size_t basis_size() const { return levels.size() + (form == curve_form::driven); }

    // How much of elementary curve k this one holds.
    double amount(std::size_t k) const {
        if (form == curve_form::market) return levels[k];
        return k ? levels[k - 1] : initial;
    }

    // This curve's value of a functional from those of the elementary curves.
    template <class Value>
    Value combine(const Value* elementary) const {
        Value sum = amount(0) * elementary[0];
        for (std::size_t k = 1; k < basis_size(); ++k) sum += amount(k) * elementary[k];
        return sum;
    }
};

// Calls visit(k, from, to) for the pieces of s -> level(maturity - s) on [0, maturity], k the index
// of the level that holds on [from, to].
template <class Visit>
void for_each_reversed_piece(const variance_curve& curve, double maturity, Visit&& visit) {
    double start = 0.0;
    for (std::size_t k = 0; k < curve.levels.size() && start < maturity; ++k) {
        const bool last = k + 1 == curve.levels.size();
        const double end = last ? maturity : std::min(curve.times[k], maturity);
        if (end > start) visit(k, maturity - end, maturity - start);
        start = end;
    }
}

// Coefficients of the Riccati–Volterra equation psi = K * [c0 + c1 psi + c2 psi^2] at u.
struct riccati_coefficients {
    std::complex<double> c0, c1;
    double c2;
};

inline riccati_coefficients riccati(const model_parameters& p, std::complex<double> u) {
    const double x = u.real(), y = u.imag();
    const double rn = p.correlation * p.vol_of_vol;
    // u^2 + iu = u (u + i), expanded so that it is exactly 0 at u = 0 and u = -i.
    return {{-0.5 * (x * x - y * (y + 1.0)), -0.5 * (x * (2.0 * y + 1.0))},
            {-y * rn - p.mean_reversion, x * rn},
            0.5 * p.vol_of_vol * p.vol_of_vol};
}

// u lies outside the strip where E[exp(iuX_T)] is finite.
class moment_explosion_error : public std::domain_error {
    using std::domain_error::domain_error;
};

}  // namespace volterra
