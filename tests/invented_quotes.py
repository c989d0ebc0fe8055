"""Option quotes of an invented surface whose forwards and discount factors are known.

Black prices of a smile free of static arbitrage (the surface form of Arbitrage-free SVI volatility
surfaces, Quant. Finance 14, 2014, arXiv:1204.0646; from memory), with widths like those of an index
market and noise that never leaves bid and ask.
"""

from dataclasses import replace

import numpy as np

from pyvolterra import black
from pyvolterra.quotes import Quotes

QUOTE_TIME = np.datetime64("2031-05-13T15:30:00", "s")
DAYS = (4, 11, 25, 60, 120, 250, 500, 900)
SPOT = 2000.0


def maturity_of(expiry):
    return (expiry - QUOTE_TIME).astype(float) / (365.0 * 86400.0)


def forward(maturity):
    return SPOT * np.exp(0.011 * maturity + 0.004 * np.sqrt(maturity))


def discount(maturity):
    """Zero rates of 4.2 % at the short end, falling to 3 %."""
    return np.exp(-maturity * (0.03 + 0.012 * np.exp(-maturity / 1.3)))


def volatility(log_moneyness, maturity):
    theta, rho = 0.04 * maturity, -0.7
    x = 1.2 * log_moneyness / np.sqrt(theta + 0.01)
    variance = 0.5 * theta * (1.0 + rho * x + np.sqrt((x + rho) ** 2 + 1.0 - rho**2))
    return np.sqrt(variance / maturity)


def surface(seed=0, days=DAYS, noise=0.6, width=1.0, strikes=41):
    """Quotes of calls and puts at all strikes; ``noise`` in half-widths, at most 1.

    Options too cheap for a bid worth having are left out.
    """
    generator = np.random.default_rng(seed)
    parts = []
    for day in days:
        expiry = (QUOTE_TIME + np.timedelta64(day, "D")).astype("datetime64[D]")
        expiry = expiry.astype("datetime64[s]") + np.timedelta64(16 * 3600, "s")
        t = maturity_of(expiry)
        stdev = 0.2 * np.sqrt(t)
        grid = np.linspace(-3.0 * stdev, 2.0 * stdev, strikes)
        strike = np.unique(np.round(forward(t) * np.exp(grid)))
        for is_call in (True, False):
            vol = volatility(np.log(strike / forward(t)), t)
            true = black.price(forward(t), strike, t, vol, discount=discount(t), call=is_call)
            half = width * (0.1 + 0.01 * true**0.8)
            mid = true + noise * half * generator.uniform(-1.0, 1.0, strike.size)
            quoted = mid - half > 0.4 * half
            size = int(quoted.sum())
            parts.append(
                {
                    "expiry": np.full(size, expiry),
                    "maturity": np.full(size, t),
                    "strike": strike[quoted],
                    "is_call": np.full(size, is_call),
                    "bid": (mid - half)[quoted],
                    "ask": (mid + half)[quoted],
                }
            )
    arrays = {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}
    row = np.arange(arrays["strike"].size) + 2
    return Quotes(quote_time=QUOTE_TIME, row=row, source="invented.csv", **arrays)


def with_changes(quotes, **changes):
    """A copy with whole arrays replaced: ``name=(indices, values)`` changes some elements."""
    arrays = {}
    for name, (index, values) in changes.items():
        array = getattr(quotes, name).copy()
        array[index] = values
        arrays[name] = array
    return replace(quotes, **arrays)
