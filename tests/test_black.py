"""Black prices and vegas: published values, mpmath, identities, bad input."""

import math

import mpmath as mp
import numpy as np
import pytest
from black_oracle import EPS, black_terms, random_points
from hypothesis import given
from hypothesis import strategies as st

from pyvolterra import black

# Options, Futures and Other Derivatives (textbook; memory, reproduced): S=42, K=40, r=.1, sigma=.2,
# T=.5, call 4.76 and put .81. Futures option of The Complete Guide to Option Pricing Formulas
# (textbook; memory, reproduced): F=K=19, T=.75, r=.1, sigma=.28: 1.7011.
TEXTBOOK = [
    (42 * math.exp(0.05), 40, 0.5, 0.2, math.exp(-0.05), True, 4.76, 0.005),
    (42 * math.exp(0.05), 40, 0.5, 0.2, math.exp(-0.05), False, 0.81, 0.005),
    (19, 19, 0.75, 0.28, math.exp(-0.075), True, 1.7011, 0.00005),
]

# e^(x/2) Phi(x/s + s/2) - e^(-x/2) Phi(x/s - s/2) (computed with 40 digits). The forwards below
# carry x with a rounding error that moves the second value by 1e-9, so each has its own tolerance.
NORMALISED = [
    (0.0, 0.01, 0.0039894061814816446, 4e-16),
    (-1e-8, 1e-6, 3.9396222734921184e-7, 1e-9),
    (-0.01, 0.001, 7.4745593377628338e-28, 1e-11),
    (-1.0, 0.1, 7.4653976115685746e-26, 1e-13),
    (-16.0, 1.0, 3.5001061087397043e-59, 1e-13),
    (-0.5, 3.0, 0.64640138673324614, 1e-15),
]

positive = st.floats(0.01, 1000.0)
maturities = st.floats(1e-3, 30.0)
volatilities = st.floats(0.01, 3.0)


@pytest.mark.parametrize(("f", "k", "t", "v", "d", "call", "expected", "half_digit"), TEXTBOOK)
def test_textbook_prices(f, k, t, v, d, call, expected, half_digit):
    assert abs(black.price(f, k, t, v, discount=d, call=call) - expected) <= half_digit


@pytest.mark.parametrize(("x", "s", "expected", "tolerance"), NORMALISED)
def test_normalised_prices(x, s, expected, tolerance):
    value = black.price(math.exp(x / 2), math.exp(-x / 2), 1.0, s)
    assert value == pytest.approx(expected, rel=tolerance)


def test_out_of_the_money_prices_against_mpmath():
    # 4 eps (1 + s p'/p): p'/p is what the rounding of the volatility alone does.
    forward, strike, maturity, volatility = random_points(seed=1, size=13_000)
    assert forward.size >= 10_000
    call = strike >= forward
    prices = black.price(forward, strike, maturity, volatility, call=call)
    vegas = black.vega(forward, strike, maturity, volatility)
    checked = 0
    points = zip(forward, strike, maturity, volatility, prices, vegas, strict=True)
    for f, k, t, v, price, vega in points:
        exact, _, slope = black_terms(f, k, t, v, digits=20)
        if exact < 1e-300 * max(1.0, min(f, k)):
            continue
        checked += 1
        conditioning = 1.0 + float(slope / exact)
        assert abs(price - exact) <= 4.0 * EPS * conditioning * exact, (f, k, t, v)
        # The density loses what its exponent z^2/2 loses by the rounding of z.
        exponent = float(mp.log(min(f, k) / slope)) + abs(math.log(f / k)) + 1.0
        assert abs(vega * v - slope) <= 8.0 * EPS * (1.0 + abs(exponent)) * slope, (f, k, t, v)
    assert checked >= 10_000


def test_in_the_money_price_is_the_other_side_plus_intrinsic():
    f, k, t, v = 120.0, np.array([60.0, 90.0, 119.999999, 119.9]), 0.5, 0.25
    for call, (a, b) in ((True, (f, k)), (False, (k, f))):
        exact = [black_terms(x, y, t, v)[0] + abs(mp.mpf(x) - y) for x, y in np.broadcast(a, b)]
        value = black.price(a, b, t, v, call=call)
        np.testing.assert_allclose(value, np.array(exact, dtype=float), rtol=8.0 * EPS)


def test_edges():
    assert black.price(100.0, 90.0, 1.0, 0.0) == 10.0
    assert black.price(100.0, 110.0, 0.0, 0.3) == 0.0
    assert black.price(100.0, 110.0, 0.0, 0.3, call=False, discount=0.5) == 5.0
    assert black.price(100.0, 100.0, 1.0, 0.0) == 0.0
    assert black.price(100.0, 110.0, 1.0, 1e3) == 100.0  # the bounds at infinite volatility
    assert black.price(100.0, 110.0, 1.0, 1e3, call=False) == 110.0
    assert black.price(1e-300, 1e300, 1.0, 0.2) == 0.0
    assert black.price(1e300, 1e-300, 1.0, 0.2) == 1e300
    assert black.vega(100.0, 110.0, 1.0, 0.0) == 0.0
    assert black.vega(100.0, 100.0, 4.0, 0.0) == pytest.approx(200.0 / math.sqrt(2 * math.pi))


@given(positive, positive, maturities, volatilities, st.floats(0.1, 1.1))
def test_put_call_parity(f, k, t, v, d):
    call = black.price(f, k, t, v, discount=d)
    put = black.price(f, k, t, v, discount=d, call=False)
    assert abs(call - put - d * (f - k)) <= 4.0 * EPS * (call + put)


@given(positive, positive, maturities, volatilities, st.booleans())
def test_bounds_and_monotonicity(f, k, t, v, call):
    price = black.price(f, k, t, v, call=call)
    payoff, bound = (f - k, f) if call else (k - f, k)
    assert max(payoff, 0.0) <= price <= bound
    # Weak inequalities: steps are far larger than rounding, but prices saturate at both ends.
    assert black.price(f, k, t, 1.01 * v, call=call) >= price
    assert black.price(f, k, 1.01 * t, v, call=call) >= price
    higher = black.price(1.01 * f, k, t, v, call=call)
    assert higher >= price if call else higher <= price


@given(positive, positive, maturities, volatilities, st.booleans())
def test_scaling_is_exact_for_powers_of_two(f, k, t, v, call):
    price = black.price(f, k, t, v, call=call)
    assert black.price(8.0 * f, 8.0 * k, t, v, call=call) == 8.0 * price
    assert black.price(f, k, 4.0 * t, v / 2.0, call=call) == price
    assert black.price(f, k, t, v, call=call, discount=0.5) == 0.5 * price


@given(positive, positive, maturities, volatilities)
def test_call_and_put_swap_with_forward_and_strike(f, k, t, v):
    call, put = black.price(f, k, t, v), black.price(k, f, t, v, call=False)
    assert put == pytest.approx(call, rel=1e-12, abs=1e-305)


def test_broadcasting_and_types():
    surface = black.price(
        100, np.array([[90.0, 100.0, 110.0]]), np.array([[0.5], [1.0]]), np.float32(0.5)
    )
    assert surface.shape == (2, 3)
    assert surface.dtype == np.float64
    for i, t in enumerate((0.5, 1.0)):
        for j, k in enumerate((90, 100, 110)):
            single = black.price(100.0, k, t, 0.5)
            assert type(single) is float
            assert surface[i, j] == single
    strikes = np.arange(80.0, 120.0)
    np.testing.assert_array_equal(
        black.vega(100.0, strikes[::-2], 1.0, 0.2), black.vega(100.0, strikes, 1.0, 0.2)[::-2]
    )
    assert black.price(100.0, np.empty((0, 3)), 1.0, 0.2).shape == (0, 3)
    assert black.price(100.0, [90.0, 110.0], 1.0, 0.2, call=[False, True]).shape == (2,)


@pytest.mark.parametrize(
    ("change", "error", "message"),
    [
        ({"forward": 0.0}, ValueError, r"forward must be positive, got 0\.0"),
        ({"strike": [90.0, -1.0]}, ValueError, r"strike\[1\] must be positive, got -1\.0"),
        ({"maturity": -0.5}, ValueError, r"maturity must be zero or positive, got -0\.5"),
        ({"volatility": -0.1}, ValueError, r"volatility must be zero or positive, got -0\.1"),
        ({"discount": 0.0}, ValueError, r"discount must be positive, got 0\.0"),
        ({"forward": math.nan}, ValueError, r"forward must be finite, got nan"),
        ({"volatility": [0.1, math.inf]}, ValueError, r"volatility\[1\] must be finite, got inf"),
        ({"strike": "100"}, TypeError, r"strike must hold real numbers"),
        ({"strike": 100 + 1j}, TypeError, r"strike must hold real numbers"),
        ({"strike": [1.0, 2.0], "maturity": [1.0, 2.0, 3.0]}, ValueError, r"strike \(2,\), matur"),
    ],
)
@pytest.mark.parametrize("function", [black.price, black.vega])
def test_bad_input(function, change, error, message):
    good = {"forward": 100.0, "strike": 100.0, "maturity": 1.0, "volatility": 0.2}
    with pytest.raises(error, match=message):
        function(**(good | change))


def test_call_must_be_boolean():
    with pytest.raises(TypeError, match="call must hold booleans"):
        black.price(100.0, 100.0, 1.0, 0.2, call="put")
