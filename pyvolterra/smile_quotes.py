"""Out-of-the-money quotes as implied volatilities."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from . import black
from .errors import QuoteError
from .parity import ForwardCurve
from .quotes import Quotes, Rejection

__all__ = ["SmileQuotes", "implied_volatility_quotes"]

FloatArray = NDArray[np.float64]

# Within this share of the forward either side of a strike may serve: the tighter one does.
NEAR_THE_FORWARD = 1e-3


@dataclass(frozen=True, eq=False)
class SmileQuotes:
    """Out-of-the-money quotes with their volatilities, sorted by maturity and strike.

    Attributes
    ----------
    row : ndarray of int64, shape (n,)
        Row of the file, the header being row 1. All arrays have this shape.
    expiry : ndarray of datetime64[s]
    maturity : ndarray of float64
        Years, ACT/365F.
    strike : ndarray of float64
    is_call : ndarray of bool
    forward, discount : ndarray of float64
        Of the expiry.
    log_moneyness : ndarray of float64
        log(strike / forward).
    bid, ask, mid : ndarray of float64
        Prices as quoted.
    bid_volatility, mid_volatility, ask_volatility : ndarray of float64
        Black implied volatilities, decimals per square root of year; positive and increasing.
    vega : ndarray of float64
        Price per unit of volatility at the mid, discount included.
    """

    row: NDArray[np.int64]
    expiry: NDArray[np.datetime64]
    maturity: FloatArray
    strike: FloatArray
    is_call: NDArray[np.bool_]
    forward: FloatArray
    discount: FloatArray
    log_moneyness: FloatArray
    bid: FloatArray
    ask: FloatArray
    mid: FloatArray
    bid_volatility: FloatArray
    mid_volatility: FloatArray
    ask_volatility: FloatArray
    vega: FloatArray

    def __len__(self) -> int:
        return int(self.row.size)


def implied_volatility_quotes(
    quotes: Quotes, forwards: ForwardCurve
) -> tuple[SmileQuotes, tuple[Rejection, ...]]:
    """Turn the out-of-the-money quotes into implied volatilities of bid, mid and ask.

    Parameters
    ----------
    quotes : Quotes
        Cleaned quotes.
    forwards : ForwardCurve
        From :func:`pyvolterra.parity.infer_forwards`; an expiry that is not one of its points is
        interpolated.

    Returns
    -------
    smiles : SmileQuotes
        At most one quote per expiry and strike: puts below the forward, calls above, and within
        0.1 % of it the one with the narrower bid-ask, of equals the out-of-the-money one.
    rejections : tuple of Rejection
        Out-of-the-money quotes whose bid, mid or ask lies outside the no-arbitrage bounds, so that
        it has no volatility. In-the-money quotes are not listed: they have served put-call parity.

    Raises
    ------
    QuoteError
        If no quote is left.

    Notes
    -----
    Volatilities are exact to rounding for the inferred forward; see
    :func:`pyvolterra.black.implied_volatility` for accuracy and cost. Thread-safe.
    """
    forward, discount = _at_expiries(quotes, forwards)
    distance = quotes.strike / forward - 1.0
    near = np.abs(distance) <= NEAR_THE_FORWARD
    candidate = np.flatnonzero(near | (quotes.is_call == (distance > 0.0)))

    def of(array: FloatArray) -> FloatArray:
        return array[candidate]

    volatility = {
        name: np.asarray(
            black.implied_volatility(
                of(price),
                of(forward),
                of(quotes.strike),
                of(quotes.maturity),
                discount=of(discount),
                call=quotes.is_call[candidate],
                errors="nan",
            )
        )
        for name, price in (("bid", quotes.bid), ("mid", quotes.mid), ("ask", quotes.ask))
    }
    rejections = []
    usable = np.ones(candidate.size, dtype=np.bool_)
    for name, price in (("mid", quotes.mid), ("ask", quotes.ask), ("bid", quotes.bid)):
        # At its intrinsic value a price has the volatility 0, which is no information either.
        for at in np.flatnonzero(usable & ~(volatility[name] > 0.0)):
            usable[at] = False
            i = int(candidate[at])
            detail = _outside(quotes, i, name, price[i], forward[i], discount[i])
            rejections.append(quotes.rejection(i, f"{name} outside its bounds", detail))

    # One quote per strike: sort so that the tighter comes first, and keep the first.
    order = np.flatnonzero(usable)
    # Of equals the out-of-the-money one: else the rounding of the widths would decide.
    in_the_money = (quotes.is_call != (distance > 0.0))[candidate]
    spread = (of(quotes.ask - quotes.bid) * (1.0 + 1e-9 * in_the_money))[order]
    order = order[np.lexsort((spread, of(quotes.strike)[order], of(quotes.maturity)[order]))]
    index = candidate[order]
    first = np.ones(index.size, dtype=np.bool_)
    first[1:] = (np.diff(quotes.strike[index]) != 0.0) | (np.diff(quotes.maturity[index]) != 0.0)
    order, index = order[first], index[first]
    if not index.size:
        raise QuoteError(
            f"{quotes.source}: no out-of-the-money quote with an implied volatility is left"
        )
    smiles = SmileQuotes(
        row=quotes.row[index],
        expiry=quotes.expiry[index],
        maturity=quotes.maturity[index],
        strike=quotes.strike[index],
        is_call=quotes.is_call[index],
        forward=forward[index],
        discount=discount[index],
        # Exact near the money too, where the quotient would lose digits.
        log_moneyness=np.log1p((quotes.strike[index] - forward[index]) / forward[index]),
        bid=quotes.bid[index],
        ask=quotes.ask[index],
        mid=quotes.mid[index],
        bid_volatility=volatility["bid"][order],
        mid_volatility=volatility["mid"][order],
        ask_volatility=volatility["ask"][order],
        vega=np.asarray(
            black.vega(
                forward[index],
                quotes.strike[index],
                quotes.maturity[index],
                volatility["mid"][order],
                discount=discount[index],
            )
        ),
    )
    return smiles, tuple(sorted(rejections, key=lambda rejection: rejection.row))


def _at_expiries(quotes: Quotes, forwards: ForwardCurve) -> tuple[FloatArray, FloatArray]:
    forward, discount = np.empty(len(quotes)), np.empty(len(quotes))
    points = {point.expiry: (point.forward, point.discount) for point in forwards.points}
    for expiry in np.unique(quotes.expiry):
        here = quotes.expiry == expiry
        maturity = quotes.maturity[here][0]
        known = points.get(expiry) or (forwards.forward(maturity), forwards.discount(maturity))
        forward[here], discount[here] = known
    return forward, discount


def _outside(
    quotes: Quotes, index: int, name: str, price: float, forward: float, discount: float
) -> str:
    strike = quotes.strike[index]
    sign = 1.0 if quotes.is_call[index] else -1.0
    lower = discount * max(sign * (forward - strike), 0.0)
    upper = discount * (forward if quotes.is_call[index] else strike)
    return (
        f"{name} is {price:.10g}, must lie between the intrinsic value {lower:.10g} and "
        f"{upper:.10g} (forward {forward:.10g}, discount {discount:.8g}) to have a volatility"
    )
