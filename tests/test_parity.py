"""Forwards and discount factors recovered from quotes whose forwards and discounts are known."""

import warnings
from dataclasses import replace

import numpy as np
import pytest
from invented_quotes import DAYS, discount, forward, surface, with_changes

import pyvolterra as pv
from pyvolterra.parity import ForwardCurve, ForwardPoint, infer_forwards, rough_forwards


def values(curve):
    names = ("maturity", "forward", "discount", "forward_error")
    return tuple(np.array([getattr(point, name) for point in curve.points]) for name in names)


def without_pairs(quotes, expiry_index, keep):
    """Leave ``keep`` pairs near the money at one expiry; other strikes keep one side."""
    expiry = np.unique(quotes.expiry)[expiry_index]
    here = quotes.expiry == expiry
    paired = np.intersect1d(
        quotes.strike[here & quotes.is_call], quotes.strike[here & ~quotes.is_call]
    )
    spared = paired[np.argsort(np.abs(paired - 2000.0))[:keep]]
    out_of_the_money = quotes.is_call == (quotes.strike > 2000.0)
    return quotes.select(~here | out_of_the_money | np.isin(quotes.strike, spared))


def test_exact_prices_give_exact_forwards():
    curve = infer_forwards(surface(noise=0.0))
    t, f, d, error = values(curve)
    np.testing.assert_allclose(f, forward(t), rtol=3e-6)
    # The prior and the smooth curve leave less than half a basis point of rate; the widths say
    # that the quotes know it no better.
    np.testing.assert_allclose(-np.log(d) / t, -np.log(discount(t)) / t, rtol=0, atol=5e-5)
    assert np.all(error < 0.05)
    assert [p.method for p in curve.points] == ["regression"] * len(DAYS)


def test_noise_stays_within_the_stated_errors():
    scores, misses = [], []
    for seed in range(40):
        t, f, d, error = values(infer_forwards(surface(seed)))
        scores.append((f - forward(t)) / error)
        misses.append(-np.log(d) / t + np.log(discount(t)) / t)
        assert np.all((error > 0.0) & (error < 1e-4 * forward(t)))  # 1 bp: the errors say something
    scores = np.array(scores)
    rms = np.sqrt(np.mean(scores**2, axis=0))
    assert np.all((rms > 0.5) & (rms < 1.3)), rms
    assert np.abs(scores).max() < 4.5
    assert np.sqrt(np.mean(np.square(misses))) < 8e-4


def test_one_curve_calms_weekly_discount_factors():
    # The rate of the shortest expiry alone is noise of several per cent; with all it is not.
    alone, together = [], []
    for seed in range(10):
        quotes = surface(seed)
        first = quotes.expiry == quotes.expiry.min()
        t = quotes.maturity[first][0]
        line = quotes.select(first)
        call, put = line.select(line.is_call), line.select(~line.is_call)
        strike, i, j = np.intersect1d(call.strike, put.strike, return_indices=True)
        slope = np.polyfit(strike, call.mid[i] - put.mid[j], 1)[0]
        alone.append(-slope - discount(t))
        together.append(infer_forwards(quotes).points[0].discount - discount(t))
    assert np.sqrt(np.mean(np.square(together))) < 2e-5
    assert np.sqrt(np.mean(np.square(alone))) > 10.0 * np.sqrt(np.mean(np.square(together)))


def test_a_few_bad_pairs_do_no_harm():
    for seed in range(5):
        quotes = surface(seed)
        generator = np.random.default_rng(seed)
        bad = generator.choice(len(quotes), 30, replace=False)
        spoilt = with_changes(
            quotes, bid=(bad, 1.3 * quotes.bid[bad]), ask=(bad, 1.3 * quotes.ask[bad])
        )
        t, f, _, error = values(infer_forwards(spoilt))
        assert np.all(np.abs(f - forward(t)) < 4.5 * error)
        assert np.all(error < 2e-4 * f)


@pytest.mark.parametrize("pairs", [4, 1, 0])
def test_expiries_with_few_pairs(pairs):
    for index in (0, 3, len(DAYS) - 1):
        curve = infer_forwards(without_pairs(surface(8), index, pairs))
        point = curve.points[index]
        method = "interpolated discount" if pairs else "interpolated carry"
        assert (point.pairs, point.method) == (pairs, method)
        assert abs(point.forward - forward(point.maturity)) < 4.0 * point.forward_error
        assert point.forward_error < 0.01 * point.forward
        # a year off the last expiry the curve is extrapolated: half a per cent of rate
        rate_miss = np.log(point.discount / discount(point.maturity)) / point.maturity
        assert abs(rate_miss) < 5e-3
        assert [p.method for p in curve.points].count("regression") == len(DAYS) - 1


def test_one_expiry_alone_and_negative_rates():
    quotes = surface(9, days=(120,))
    (point,) = infer_forwards(quotes).points
    assert abs(point.forward - forward(point.maturity)) < 4.0 * point.forward_error
    assert abs(point.discount - discount(point.maturity)) < 5e-3
    # the same prices in another unit of account whose discount factor is above one
    factor = 1.03 / discount(point.maturity)
    negative = replace(quotes, bid=factor * quotes.bid, ask=factor * quotes.ask)
    (point,) = infer_forwards(negative).points
    assert point.discount == pytest.approx(1.03, abs=5e-3)
    assert abs(point.forward - forward(point.maturity)) < 4.0 * point.forward_error


def test_units_do_not_matter():
    quotes = surface(10)
    scaled = replace(
        quotes, strike=100.0 * quotes.strike, bid=100.0 * quotes.bid, ask=100.0 * quotes.ask
    )
    _, f, d, error = values(infer_forwards(quotes))
    _, f100, d100, error100 = values(infer_forwards(scaled))
    np.testing.assert_allclose(f100, 100.0 * f, rtol=1e-10)
    np.testing.assert_allclose(d100, d, rtol=1e-10)
    np.testing.assert_allclose(error100, 100.0 * error, rtol=1e-6)


def test_locked_and_doubled_quotes_are_survived():
    quotes = surface(11)
    middle = quotes.mid
    t, f, _, _ = values(infer_forwards(replace(quotes, bid=middle, ask=middle)))
    np.testing.assert_allclose(f, forward(t), rtol=2e-4)
    doubled = np.concatenate([np.arange(len(quotes)), np.arange(0, len(quotes), 3)])
    names = ("row", "expiry", "maturity", "strike", "is_call", "bid", "ask")
    twice = replace(quotes, **{name: getattr(quotes, name)[doubled] for name in names})
    assert values(infer_forwards(twice))[1].tolist() == values(infer_forwards(quotes))[1].tolist()


def test_no_pairs_anywhere():
    quotes = surface(12)
    words = r"at least 5 strikes that have both .* call and .* put; the best has 0"
    with pytest.raises(pv.QuoteError, match=words):
        infer_forwards(quotes.select(quotes.is_call))


def test_quotes_that_are_not_what_they_say():
    quotes = surface(12)
    mixed_up = replace(quotes, is_call=~quotes.is_call)
    in_cents = replace(quotes, bid=100.0 * quotes.bid, ask=100.0 * quotes.ask)
    for wrong in (mixed_up, in_cents):
        with pytest.raises(pv.QuoteError, match=r"expiry 20\d\d-.* calls and puts mixed up, or"):
            infer_forwards(wrong)


def test_rough_forwards():
    quotes = surface(13)
    t = {e: quotes.maturity[quotes.expiry == e][0] for e in np.unique(quotes.expiry)}
    rough = rough_forwards(quotes)
    assert set(rough) == set(t)
    for expiry, value in rough.items():
        assert value == pytest.approx(forward(t[expiry]), rel=5e-3)
    assert rough_forwards(quotes.select(quotes.is_call)) == {}


def test_interpolation():
    def point(t, f, d):
        return ForwardPoint(np.datetime64("2031-01-01", "s"), t, f, d, 0.1, 9, "regression")

    curve = ForwardCurve((point(0.5, 100.0, 0.99), point(1.0, 104.0, 0.96)))
    assert curve.forward(0.5) == pytest.approx(100.0, rel=1e-15)
    assert curve.discount(1.0) == pytest.approx(0.96, rel=1e-15)
    # halfway the geometric mean; outside, the carry and the last forward rate go on
    np.testing.assert_allclose(
        curve.forward([0.25, 0.75, 1.5]),
        [100.0 / 1.04**0.5, (100.0 * 104.0) ** 0.5, 104.0 * 1.04],
        rtol=1e-14,
    )
    np.testing.assert_allclose(
        curve.discount([0.25, 0.75, 1.5]),
        [0.99**0.5, (0.99 * 0.96) ** 0.5, 0.96 * 0.96 / 0.99],
        rtol=1e-14,
    )
    single = ForwardCurve((point(0.5, 100.0, 0.99),))
    assert single.forward(2.0) == pytest.approx(100.0)
    assert single.discount(1.0) == pytest.approx(0.99**2)
    for bad in (0.0, -1.0, np.nan, [0.5, np.inf]):
        with pytest.raises(ValueError, match="maturity"):
            curve.forward(bad)
    with pytest.raises(TypeError, match="maturity"):
        curve.discount("soon")


@pytest.mark.parametrize("width", [1e-7, 1e-12])
def test_hardly_any_width_at_long_maturities(width):
    # The data outweigh the prior of the rates by twenty orders of magnitude.
    quotes = surface(1, days=(5000,), noise=0.0, width=width, strikes=9)
    (point,) = infer_forwards(quotes).points
    assert point.forward == pytest.approx(forward(point.maturity), rel=1e-6)
    assert point.discount == pytest.approx(discount(point.maturity), rel=1e-6)


def test_widths_that_vanish_when_squared():
    quotes = surface(1, days=(60,), noise=0.0)
    tiny = replace(quotes, bid=quotes.mid * (1.0 - 1e-16), ask=quotes.mid)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        (point,) = infer_forwards(tiny).points
    assert point.forward == pytest.approx(forward(point.maturity), rel=1e-6)
