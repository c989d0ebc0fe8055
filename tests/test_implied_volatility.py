"""Implied volatilities: mpmath at the limit of the conditioning, round trips, bad prices."""

import math
from concurrent.futures import ThreadPoolExecutor

import mpmath as mp
import numpy as np
import pytest
from black_oracle import EPS, black_terms, random_points
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy.special import ndtri

from pyvolterra import _core, black


def exact_prices(points):
    """mpmath prices of random points, the double nearest to each, and p / (s dp/ds)."""
    terms = [black_terms(*point, digits=20) for point in zip(*points, strict=True)]
    nearest = np.array([float(price) for price, _, _ in terms])
    return terms, nearest


def test_out_of_the_money_against_mpmath():
    # Required: 4 eps (1 + p / (s dp/ds)) wherever the price is at least 1e-300 of the bound. The
    # exact answer is that of the rounded price: one Newton step from the volatility behind it.
    points = random_points(seed=2, size=13_000)
    terms, nearest = exact_prices(points)
    forward, strike, maturity, volatility = points
    bound = np.minimum(forward, strike)
    keep = (nearest >= 1e-300 * np.maximum(bound, 1.0)) & (nearest < bound)
    assert keep.sum() >= 10_000
    values = black.implied_volatility(
        np.where(keep, nearest, -1.0), forward, strike, maturity, call=strike >= forward,
        errors="nan",
    )  # fmt: skip
    assert np.isnan(values[~keep]).all()
    for i in np.flatnonzero(keep):
        price, _, slope = terms[i]
        exact = mp.mpf(volatility[i]) * (1 + (mp.mpf(nearest[i]) - price) / slope)
        allowed = 4.0 * EPS * (1.0 + float(price / slope)) * volatility[i]
        assert abs(values[i] - exact) <= allowed, tuple(float(a[i]) for a in points)


def test_in_the_money_against_mpmath():
    # The same bar, p being the whole price: its last digit is all there is of the time value.
    points = random_points(seed=3, size=4_000)
    terms, _ = exact_prices(points)
    forward, strike = points[:2]
    call = forward > strike
    discount = 0.9371
    checked = 0
    for i, (otm, _, slope) in enumerate(terms):
        f, k, t, v = (float(a[i]) for a in points)
        whole = otm + abs(mp.mpf(f) - mp.mpf(k))
        price = float(discount * whole)
        if not price < discount * max(f, k) or whole * EPS > 1e-3 * slope:
            continue
        checked += 1
        exact = v * (1 + (mp.mpf(price) / discount - whole) / slope)
        value = black.implied_volatility(price, f, k, t, discount=discount, call=bool(call[i]))
        assert abs(value - exact) <= 4.0 * EPS * (1.0 + float(whole / slope)) * v, (f, k, t, v)
    assert checked >= 1_000


# The computed normalised prices of test_black.py, backwards: x, s, price per sqrt(F K).
@pytest.mark.parametrize(
    ("x", "s", "price"),
    [
        (0.0, 0.01, 0.0039894061814816446),
        (-1.0, 0.1, 7.4653976115685746e-26),
        (-16.0, 1.0, 3.5001061087397043e-59),
        (-0.5, 3.0, 0.64640138673324614),
    ],
)
def test_published_normalised_prices(x, s, price):
    value = black.implied_volatility(price, math.exp(x / 2), math.exp(-x / 2), 1.0)
    assert value == pytest.approx(s, rel=2e-15)


def test_textbook_volatilities():
    # Options, Futures and Other Derivatives (textbook; memory, reproduced): 4.76 at 20 %; half a
    # unit of the printed price is 5e-4 of volatility. The Complete Guide to Option Pricing Formulas
    # (textbook; memory, reproduced): 1.7011 at 28 %.
    f, d = 42 * math.exp(0.05), math.exp(-0.05)
    assert abs(black.implied_volatility(4.76, f, 40.0, 0.5, discount=d) - 0.2) < 6e-4
    futures = black.implied_volatility(1.7011, 19.0, 19.0, 0.75, discount=math.exp(-0.075))
    assert abs(futures - 0.28) < 2e-5


def test_at_the_money_closed_form():
    # p = F (2 Phi(s/2) - 1), inverted by the normal quantile of a general library.
    p = np.concatenate([np.geomspace(1e-3, 0.5, 50), 1.0 - np.geomspace(0.5, 1e-9, 50)])
    exact = -2.0 * ndtri(0.5 * (1.0 - p))
    np.testing.assert_allclose(black.implied_volatility(p, 1.0, 1.0, 1.0), exact, rtol=1e-12)


@given(
    st.floats(1.0, 100.0),
    st.floats(-3.0, 3.0),
    st.floats(1e-3, 30.0),
    st.floats(0.01, 3.0),
    st.floats(0.1, 1.1),
    st.booleans(),
)
def test_round_trip(f, z, t, v, d, call):
    k = f * math.exp(z * v * math.sqrt(t))
    price = black.price(f, k, t, v, discount=d, call=call)
    conditioning = 1.0 + price / (v * black.vega(f, k, t, v, discount=d))
    assume(conditioning * EPS < 1e-3)  # otherwise the price does not know its volatility
    value = black.implied_volatility(price, f, k, t, discount=d, call=call)
    assert value == pytest.approx(v, rel=12.0 * EPS * conditioning)


@given(st.floats(1e-12, 0.99), st.floats(-2.0, 2.0), st.floats(1.001, 1.5))
def test_increases_with_the_price(q, x, factor):
    strike = math.exp(x)
    call = x >= 0.0
    low = q * min(1.0, strike)
    high = min(factor * low, 0.5 * (low + min(1.0, strike)))
    a, b = black.implied_volatility([low, high], 1.0, strike, 1.0, call=call)
    assert a < b


@given(st.floats(1e-12, 0.99), st.floats(-2.0, 2.0), st.floats(0.1, 10.0))
def test_scaling_is_exact_for_powers_of_two(q, x, t):
    strike = math.exp(x)
    price = q * min(1.0, strike)
    value = black.implied_volatility(price, 1.0, strike, t, call=x >= 0.0)
    scaled = black.implied_volatility(
        2.0 * price, 8.0, 8.0 * strike, 4.0 * t, discount=0.25, call=x >= 0.0
    )
    assert scaled == value / 2.0


def test_every_double_price_has_an_answer():
    # Down to the smallest positive double and up to the last one before the bound.
    for k in (1.0, 1.0 + 1e-15, 1.0 + 1e-9, 1.01, 1.5, 20.0, 21.0, 1e10, 1e300):
        p = np.concatenate([[5e-324, 1e-310], np.geomspace(1e-307, 0.9, 2000), [1.0 - 2.0**-53]])
        values = black.implied_volatility(p, 1.0, k, 1.0)
        assert np.isfinite(values).all()
        assert (np.diff(values) > 0.0).all()


def test_a_price_at_intrinsic_has_no_volatility():
    assert black.implied_volatility(0.0, 100.0, 110.0, 1.0) == 0.0
    assert black.implied_volatility(10.0, 100.0, 90.0, 1.0) == 0.0
    d, f, k = 0.97, 103.7, 88.1  # the same after rounding
    assert black.implied_volatility(d * (f - k), f, k, 1.0, discount=d) == pytest.approx(0, abs=0.1)
    assert black.implied_volatility(math.nextafter(10.0, 0.0), 100.0, 90.0, 1.0) == 0.0


@pytest.mark.parametrize(
    ("price", "strike", "call", "message"),
    [
        (-1e-9, 110.0, True, r"price = -1e-09 is below the intrinsic value .* = 0\.0"),
        (4.9, 90.0, True, r"price = 4\.9 is below .* max\(forward - strike, 0\) = 5\.0"),
        (4.9, 110.0, False, r"price = 4\.9 is below .* max\(strike - forward, 0\) = 5\.0"),
        (50.0, 110.0, True, r"price = 50\.0 must be below .* discount \* forward = 50\.0"),
        (60.0, 110.0, False, r"price = 60\.0 must be below .* discount \* strike = 55\.0"),
        (1.7e308, 90.0, True, r"must be below its upper bound"),
    ],
)
def test_prices_outside_the_bounds(price, strike, call, message):
    with pytest.raises(ValueError, match=message):
        black.implied_volatility(price, 100.0, strike, 1.0, discount=0.5, call=call)
    assert math.isnan(
        black.implied_volatility(price, 100.0, strike, 1.0, discount=0.5, call=call, errors="nan")
    )


@given(st.floats(1.0, 100.0), st.floats(1.0, 100.0), st.floats(0.1, 1.1), st.booleans())
def test_exactly_at_the_bounds(f, k, d, call):
    upper, payoff = (f, f - k) if call else (k, k - f)
    with pytest.raises(ValueError, match="upper bound"):
        black.implied_volatility(d * upper, f, k, 1.0, discount=d, call=call)
    # Rounding may leave the intrinsic value a digit above, never below.
    value = black.implied_volatility(d * max(payoff, 0.0), f, k, 1.0, discount=d, call=call)
    assert value >= 0.0
    assert black.price(f, k, 1.0, value, call=call) <= max(payoff, 0.0) + 4.0 * EPS * upper


def test_the_message_names_the_element():
    with pytest.raises(ValueError, match=r"price\[1, 0\] = 200\.0 must be below"):
        black.implied_volatility([[5.0], [200.0]], 100.0, [100.0, 110.0], 1.0)
    values = black.implied_volatility([5.0, 200.0, -1.0], 100.0, 100.0, 1.0, errors="nan")
    np.testing.assert_array_equal(np.isnan(values), [False, True, True])


@pytest.mark.parametrize(
    ("change", "error", "message"),
    [
        ({"price": [1.0, math.nan]}, ValueError, r"price\[1\] must be finite, got nan"),
        ({"price": math.inf}, ValueError, r"price must be finite, got inf"),
        ({"forward": -1.0}, ValueError, r"forward must be positive, got -1\.0"),
        ({"strike": 0.0}, ValueError, r"strike must be positive, got 0\.0"),
        ({"maturity": 0.0}, ValueError, r"maturity must be positive, got 0\.0"),
        ({"discount": -0.5}, ValueError, r"discount must be positive, got -0\.5"),
        ({"call": 1}, TypeError, r"call must hold booleans"),
        ({"price": None}, TypeError, r"price must hold real numbers"),
        ({"errors": "ignore"}, ValueError, r"errors must be \"raise\" or \"nan\", got 'ignore'"),
        ({"price": [1.0, 2.0], "strike": [1.0, 2.0, 3.0]}, ValueError, r"do not broadcast: price"),
    ],
)
@pytest.mark.parametrize("errors", ["raise", "nan"])
def test_bad_input_raises_in_either_mode(errors, change, error, message):
    good = {"price": 5.0, "forward": 100.0, "strike": 100.0, "maturity": 1.0, "errors": errors}
    with pytest.raises(error, match=message):
        black.implied_volatility(**(good | change))


def test_threads_and_batches_do_not_change_a_bit():
    forward, strike, maturity, volatility = random_points(seed=4, size=4_000)
    call = strike >= forward
    price = black.price(forward, strike, maturity, volatility, call=call)

    def invert(members):
        return black.implied_volatility(
            price[members], forward[members], strike[members], maturity[members],
            call=call[members], errors="nan",
        )  # fmt: skip

    whole = invert(slice(None))
    parts = [slice(i, i + 37) for i in range(0, price.size, 37)]
    with ThreadPoolExecutor(4) as pool:
        np.testing.assert_array_equal(np.concatenate(list(pool.map(invert, parts))), whole)
    singles = [invert(slice(i, i + 1))[0] for i in range(100)]
    np.testing.assert_array_equal(singles, whole[:100])


def test_the_core_checks_lengths_and_types():
    one, two = np.ones(1), np.ones(2)
    with pytest.raises(ValueError, match="strike must have 1 elements, got 2"):
        _core.black_implied_volatility(one, one, two, one, one, np.ones(1, dtype=bool))
    with pytest.raises(TypeError, match="is_call must be a C-contiguous array of bool"):
        _core.black_price(one, one, one, one, one, one)
