"""From prices to implied volatilities: which quotes, which side, and the numbers."""

from dataclasses import fields, replace

import numpy as np
import pytest
from invented_quotes import discount, forward, maturity_of, surface, volatility, with_changes
from scipy.optimize import brentq
from scipy.stats import norm

import pyvolterra as pv
from pyvolterra.parity import ForwardCurve, ForwardPoint, infer_forwards
from pyvolterra.smile_quotes import implied_volatility_quotes


def true_forwards(quotes):
    points = []
    for expiry in np.unique(quotes.expiry):
        t = maturity_of(expiry)
        points.append(ForwardPoint(expiry, t, forward(t), discount(t), 0.0, 9, "regression"))
    return ForwardCurve(tuple(points))


def textbook_price(f, k, t, d, vol, is_call):
    stdev = vol * np.sqrt(t)
    d1 = np.log(f / k) / stdev + 0.5 * stdev
    sign = 1.0 if is_call else -1.0
    return d * sign * (f * norm.cdf(sign * d1) - k * norm.cdf(sign * (d1 - stdev)))


def test_exact_prices_give_back_their_volatilities():
    quotes = surface(noise=0.0)
    smiles, rejections = implied_volatility_quotes(quotes, true_forwards(quotes))
    assert rejections == ()
    expected = volatility(smiles.log_moneyness, smiles.maturity)
    np.testing.assert_allclose(smiles.mid_volatility, expected, rtol=1e-9)
    np.testing.assert_allclose(smiles.log_moneyness, np.log(smiles.strike / smiles.forward))
    np.testing.assert_allclose(smiles.forward, forward(smiles.maturity), rtol=1e-15)
    np.testing.assert_allclose(smiles.discount, discount(smiles.maturity), rtol=1e-15)
    assert np.all(smiles.bid_volatility < smiles.mid_volatility)
    assert np.all(smiles.mid_volatility < smiles.ask_volatility)


def test_volatilities_and_vega_by_a_general_root_finder():
    quotes = surface(3)
    smiles, _ = implied_volatility_quotes(quotes, true_forwards(quotes))
    for i in range(0, len(smiles), 17):
        option = (smiles.forward[i], smiles.strike[i], smiles.maturity[i], smiles.discount[i])
        side = smiles.is_call[i]
        for name in ("bid", "mid", "ask"):
            price = getattr(smiles, name)[i]
            root = brentq(
                lambda vol, option=option, side=side, price=price: (
                    textbook_price(*option, vol, side) - price
                ),
                1e-3,
                3.0,
                xtol=1e-13,
            )
            assert getattr(smiles, f"{name}_volatility")[i] == pytest.approx(root, rel=1e-8)
        vol, h = smiles.mid_volatility[i], 1e-5
        slope = textbook_price(*option, vol + h, side) - textbook_price(*option, vol - h, side)
        assert smiles.vega[i] == pytest.approx(slope / (2.0 * h), rel=1e-6)


def test_inferred_forwards_keep_volatilities_inside_the_quotes():
    quotes = surface(4)
    smiles, rejections = implied_volatility_quotes(quotes, infer_forwards(quotes))
    assert rejections == ()
    k = np.log(smiles.strike / forward(smiles.maturity))
    true = volatility(k, smiles.maturity)
    inside = (smiles.bid_volatility <= true) & (true <= smiles.ask_volatility)
    assert inside.mean() > 0.99


def test_sides_and_order():
    quotes = surface(5)
    smiles, _ = implied_volatility_quotes(quotes, true_forwards(quotes))
    far = np.abs(smiles.strike / smiles.forward - 1.0) > 1e-3
    np.testing.assert_array_equal(smiles.is_call[far], smiles.strike[far] > smiles.forward[far])
    keys = list(zip(smiles.maturity, smiles.strike, strict=True))
    assert keys == sorted(set(keys))
    assert {array.shape for array in (getattr(smiles, f.name) for f in fields(smiles))} == {
        (len(smiles),)
    }
    by_row = {int(row): i for i, row in enumerate(quotes.row)}
    at = np.array([by_row[int(row)] for row in smiles.row])
    for name in ("expiry", "maturity", "strike", "is_call", "bid", "ask", "mid"):
        np.testing.assert_array_equal(getattr(smiles, name), getattr(quotes, name)[at])


def test_at_the_forward_the_tighter_side_serves():
    quotes = surface(6)
    curve = true_forwards(quotes)
    point = curve.points[3]
    here = quotes.expiry == point.expiry
    strike = np.unique(quotes.strike[here])
    strike = strike[np.argmin(np.abs(strike - point.forward))]
    # The forward falls on the strike, and one side or the other is made tighter.
    moved = ForwardCurve(
        tuple(replace(p, forward=strike + 0.5) if p is point else p for p in curve.points)
    )
    for call_is_tighter in (True, False):
        i = np.flatnonzero(here & (quotes.strike == strike) & (quotes.is_call == call_is_tighter))
        width = (quotes.ask - quotes.bid)[i]
        tight = with_changes(
            quotes, bid=(i, quotes.bid[i] + 0.2 * width), ask=(i, quotes.ask[i] - 0.2 * width)
        )
        smiles, _ = implied_volatility_quotes(tight, moved)
        at = (smiles.expiry == point.expiry) & (smiles.strike == strike)
        np.testing.assert_array_equal(smiles.is_call[at], [call_is_tighter])
        # and where only one side is quoted, that one
        one = quotes.is_call == call_is_tighter
        smiles, _ = implied_volatility_quotes(tight.select(~here | one), moved)
        at = (smiles.expiry == point.expiry) & (smiles.strike == strike)
        np.testing.assert_array_equal(smiles.is_call[at], [call_is_tighter])


@pytest.mark.parametrize("offset", [-0.5, 0.5])
def test_of_equal_widths_the_out_of_the_money_side_serves(offset):
    quotes = surface(6)
    curve = true_forwards(quotes)
    point = curve.points[3]
    here = quotes.expiry == point.expiry
    strike = np.unique(quotes.strike[here])
    strike = strike[np.argmin(np.abs(strike - point.forward))]
    moved = ForwardCurve(
        tuple(replace(p, forward=strike + offset) if p is point else p for p in curve.points)
    )
    pair = np.flatnonzero(here & (quotes.strike == strike))
    assert pair.size == 2
    for rounding in (0.0, 1e-12, -1e-12):  # as of a decimal width that binary cannot hold
        widths = np.where(quotes.is_call[pair], 0.5, 0.5 + rounding)
        equal = with_changes(quotes, ask=(pair, quotes.bid[pair] + widths))
        smiles, _ = implied_volatility_quotes(equal, moved)
        at = (smiles.expiry == point.expiry) & (smiles.strike == strike)
        np.testing.assert_array_equal(smiles.is_call[at], [offset < 0.0])


def test_prices_without_a_volatility_are_rejected():
    quotes = surface(7)
    curve = true_forwards(quotes)
    t = quotes.maturity
    otm = np.flatnonzero(quotes.is_call & (quotes.strike > 1.05 * forward(t)) & (t > 0.3))
    i, j, k = otm[[0, 10, 20]]
    over = 1.01 * discount(t) * forward(t)
    spoilt = with_changes(
        quotes,
        bid=(np.array([i, k]), [over[i], 0.0]),
        ask=(np.array([i, j]), [over[i] + 1.0, over[j]]),
    )
    smiles, rejections = implied_volatility_quotes(spoilt, curve)
    reasons = {r.row: r.reason for r in rejections}
    assert reasons == {
        int(quotes.row[i]): "mid outside its bounds",
        int(quotes.row[j]): "ask outside its bounds",
        int(quotes.row[k]): "bid outside its bounds",
    }
    assert not set(reasons) & set(smiles.row.tolist())
    for rejection in rejections:
        assert rejection.stage == "clean"
        assert "must lie between the intrinsic value 0 and" in rejection.detail
    complete, _ = implied_volatility_quotes(quotes, curve)
    assert len(smiles) == len(complete) - 3


def test_an_expiry_off_the_curve_is_interpolated():
    quotes = surface(8, noise=0.0)
    curve = true_forwards(quotes)
    smiles, _ = implied_volatility_quotes(quotes, ForwardCurve(curve.points[:3] + curve.points[4:]))
    t = curve.points[3].maturity
    at = smiles.maturity == t
    np.testing.assert_allclose(smiles.forward[at], forward(t), rtol=1e-3)
    assert at.sum() > 20


def test_nothing_left():
    quotes = surface(9)
    deep = quotes.select(quotes.is_call & (quotes.strike < 1900.0))
    with pytest.raises(pv.QuoteError, match="no out-of-the-money quote"):
        implied_volatility_quotes(deep, true_forwards(quotes))
