"""The power-series oracle: closed forms, computed values, its certificates, option prices."""

import math
import sys

import mpmath
import numpy as np
import pytest

from pyvolterra.reference import classical, oracle
from pyvolterra.reference.mittag_leffler import mittag_leffler

SPOT = {
    "hurst": 0.12,
    "vol_of_vol": 0.331,
    "correlation": -0.681,
    "mean_reversion": 0.1,
    "initial_variance": 0.0392,
    "long_run_variance": 0.3156,
}
MODEL = {name: SPOT[name] for name in ("hurst", "vol_of_vol", "correlation", "mean_reversion")}


def test_alpha_one_is_the_hyperbolic_tangent():
    # Poles at i pi/2: t = 3 and 6 lie far outside the disc of convergence.
    for t in (0.3, 3.0, 6.0):
        value, error = oracle.fractional_riccati(1.0, 0.0, -1.0, 1.0, t, digits=25)
        with mpmath.workdps(40):
            assert abs(value - mpmath.tanh(t)) <= error <= 1e-25
    shift = 0.5 * math.log((math.sqrt(2.0) - 1.0) / (math.sqrt(2.0) + 1.0))
    expected = 1.0 + math.sqrt(2.0) * math.tanh(math.sqrt(2.0) * 2.0 + shift)
    value = oracle.fractional_riccati(1.0, 2.0, -1.0, 1.0, 2.0).value
    assert float(value.real) == pytest.approx(expected, rel=1e-15)


@pytest.mark.parametrize(
    ("alpha", "values"),
    [  # D^alpha y = 1 - y^2 at .2 ... 1 (computed; several published columns are wrong)
        (0.5, [0.43683874, 0.55378186, 0.62101364, 0.66601874, 0.69873923]),
        (0.75, [0.30997528, 0.48163169, 0.59778267, 0.67884950, 0.73683667]),
    ],
)
def test_fractional_riccati(alpha, values):
    for t, value in zip((0.2, 0.4, 0.6, 0.8, 1.0), values, strict=True):
        result = oracle.fractional_riccati(1.0, 0.0, -1.0, alpha, t)
        assert float(result.value.real) == pytest.approx(value, abs=5.1e-9)


@pytest.mark.parametrize(
    ("alpha", "value"), [(0.5, 1.79821473), (0.75, 1.81850983), (0.9, 1.76527519)]
)
def test_fractional_riccati_with_drift(alpha, value):
    # D^alpha y = 1 + 2y - y^2 at 1 (computed).
    result = oracle.fractional_riccati(1.0, 2.0, -1.0, alpha, 1.0)
    assert float(result.value.real) == pytest.approx(value, abs=5.1e-9)


def test_without_a_square_it_is_a_mittag_leffler_function():
    # D^alpha y = 1 - y, y(0) = 0: y = 1 - E_alpha(-t^alpha).
    for t in (0.5, 4.0):
        value, error = oracle.fractional_riccati(1.0, -1.0, 0.0, 0.6, t, digits=18)
        expected = 1.0 - mittag_leffler(-(mpmath.mpf(t) ** 0.6), 0.6, digits=30)
        assert abs(value - expected) <= error + 1e-16


def test_scaling_in_time_and_argument():
    # kappa psi(kappa^(1/alpha) t) solves the equation with kappa^2 c0, kappa c1, c2; Small-time,
    # large-time and H -> 0 asymptotics for the rough Heston model, Math. Finance 2021, arXiv
    # 1906.09034 (read).
    c0, c1, c2, alpha, kappa = -3.0 + 1j, -0.4 - 2.0j, 0.06, 0.6, 4.0
    left = oracle.fractional_riccati(c0, c1, c2, alpha, kappa ** (1.0 / alpha) * 0.1)
    right = oracle.fractional_riccati(kappa**2 * c0, kappa * c1, c2, alpha, 0.1)
    assert complex(kappa * left.value) == pytest.approx(complex(right.value), rel=1e-13)


def test_polynomials_are_exact():
    # c0 = 0 gives 0; c1 = c2 = 0 gives c0 t^alpha/Gamma(alpha + 1).
    assert oracle.fractional_riccati(0.0, 1.0, 1.0, 0.6, 3.0) == (0, 0.0)
    value, error = oracle.fractional_riccati(2.0, 0.0, 0.0, 0.6, 3.0)
    assert complex(value).real == pytest.approx(2.0 * 3.0**0.6 / math.gamma(1.6), rel=1e-15)
    assert error < 1e-30


CURVES = [
    {"initial_variance": 0.05, "drive_times": [0.2, 0.7], "drive_levels": [0.03, 0.08]},
    {"variance_times": [0.2, 0.7], "variance_levels": [0.03, 0.08]},
]


@pytest.mark.parametrize("curve", CURVES, ids=["driven", "market"])
@pytest.mark.parametrize("maturity", [0.15, 1.0])
def test_half_is_the_classical_model(curve, maturity):
    model = {"vol_of_vol": 0.6, "correlation": -0.7, "mean_reversion": 1.0}
    for u in (0.4, 5.0, 20.0, 12.0 - 0.5j):
        value, error = oracle.log_transform(u, maturity, hurst=0.5, **model, **curve)
        expected = classical.log_transform(u, maturity, **model, **curve)[0]
        assert complex(value) == pytest.approx(expected, rel=1e-12)
        assert abs(np.exp(complex(value))) * error < 1e-15


@pytest.mark.parametrize("curve", CURVES, ids=["driven", "market"])
def test_identities(curve):
    for martingale in (0.0, -1j):
        assert oracle.log_transform(martingale, 0.9, **MODEL, **curve).value == 0
    left = oracle.log_transform(7.0 - 0.3j, 0.9, **MODEL, **curve).value
    right = oracle.log_transform(-7.0 - 0.3j, 0.9, **MODEL, **curve).value
    assert complex(left) == pytest.approx(complex(right).conjugate(), rel=1e-14)


def test_the_bound_covers_the_error():
    fine = oracle.log_transform_spot(12.0 - 0.5j, 0.5, **SPOT, digits=20)
    for digits in (3, 6, 12):
        value, error = oracle.log_transform_spot(12.0 - 0.5j, 0.5, **SPOT, digits=digits)
        assert abs(value - fine.value) <= error
        assert abs(np.exp(complex(value))) * error <= 1.01 * 10.0**-digits


def test_refuses_what_it_cannot_certify():
    with pytest.raises(oracle.UncertifiedError, match="60 terms vouch for"):
        oracle.log_transform_spot(2000.0, 10.0, **SPOT, terms=60)


@pytest.mark.parametrize(
    ("vol_of_vol", "calls"),
    [
        # Rough parameters in common use, T = 1, forward 1, strikes .8 ... 1.2 (computed): with nu
        # plain, and with the diffusion written lambda nu sqrt(V) as in The characteristic function
        # of rough Heston models, Math. Finance 29, 2019, arXiv 1609.02108.
        (0.331, [0.2263391805, 0.1478497570, 0.0829411229, 0.0374133085, 0.0135056183]),
        (0.1 * 0.331, [0.2213663834, 0.1496722327, 0.0947371840, 0.0562346038, 0.0314246060]),
    ],
)
def test_rough_prices_in_both_conventions(vol_of_vol, calls):
    # The certificates are cautious: of 6 and 8 digits asked, 10 are obtained.
    spot = SPOT | {"vol_of_vol": vol_of_vol}
    results = oracle.price_single_integral(
        lambda z: oracle.log_transform_spot(z, 1.0, **spot, digits=8).value,
        [0.8, 0.9, 1.0, 1.1, 1.2],
        digits=6,
    )
    np.testing.assert_allclose([float(r.value) for r in results], calls, rtol=0, atol=2e-10)
    assert all(r.error < 1e-6 for r in results)


def test_prices_without_vol_of_vol_are_blacks():
    # Black formula: The pricing of commodity contracts, J. Financ. Econ. 3, 1976 (memory).
    total, forward, discount = 0.09, 19.0, 0.93
    strikes = [15.0, 19.0, 30.0]
    for call in (True, False):
        results = oracle.price_single_integral(
            lambda z: -(z * z + 1j * z) * total / 2,
            strikes,
            forward=forward,
            discount=discount,
            call=call,
        )
        sign = 1.0 if call else -1.0
        for strike, result in zip(strikes, results, strict=True):
            d1 = (math.log(forward / strike) + total / 2) / math.sqrt(total)
            cdf = [0.5 * math.erfc(-sign * d / math.sqrt(2)) for d in (d1, d1 - math.sqrt(total))]
            black = sign * discount * (forward * cdf[0] - strike * cdf[1])
            assert float(result.value) == pytest.approx(black, abs=1e-13)
            assert result.error < 1e-11


def test_says_what_to_install_without_mpmath(monkeypatch):
    monkeypatch.setitem(sys.modules, "mpmath", None)
    with pytest.raises(ImportError, match=r'pip install "pyvolterra\[test\]"'):
        oracle.fractional_riccati(1.0, 0.0, -1.0, 0.5, 1.0)
