"""An invented quote file to try everything on.

The scenario: the Lantern Coast 40, an index that does not exist, one afternoon in 2031. Its options
are priced with a rough model and an admissible forward-variance curve, given bid-ask widths, noise
and ticks, and then spoilt here and there, as real files are: stale, crossed, duplicate, zero-bid
and unreadable quotes, and one expiry that hardly trades. Any likeness to a market is accidental.
"""

import csv
import os
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from . import black
from .forward_variance import ForwardVariance
from .kernels import FractionalKernel
from .model import VolterraHeston

QUOTE_TIME = datetime(2031, 5, 13, 15, 30, tzinfo=UTC)
EXPIRY_DAYS = (3, 8, 15, 24, 38, 59, 87, 122, 178, 269, 360, 542, 731, 1095)
THIN_EXPIRY_DAYS = 213  # a listed expiry with next to no quotes
SPOT = 4200.0
TICK = 0.05
SEED = 20310513
# Noise of a mid in half-widths: quotes are wider than they are uncertain.
NOISE = 0.4

HURST, VOL_OF_VOL, CORRELATION, INITIAL_VARIANCE = 0.11, 0.36, -0.68, 0.021
DRIVE = (0.034, 0.021, 0.026, 0.019, 0.014, 0.016, 0.011, 0.012, 0.008, 0.009, 0.007, 0.006, 0.006)


@dataclass(frozen=True)
class DemoMarket:
    """The truth behind the demo file: what a fit should recover.

    Attributes
    ----------
    model : VolterraHeston
    maturities : ndarray of float64
        Of the quoted expiries, years (ACT/365F).
    forwards, discounts : ndarray of float64
        One for each maturity.
    """

    model: VolterraHeston
    maturities: NDArray[np.float64]
    forwards: NDArray[np.float64]
    discounts: NDArray[np.float64]


def _expiry(days: int) -> datetime:
    return (QUOTE_TIME + timedelta(days=days)).replace(hour=16, minute=0)


def _years(expiry: datetime) -> float:
    return (expiry - QUOTE_TIME).total_seconds() / (365.0 * 86400.0)


def _rate(maturity: float) -> float:
    return 0.031 - 0.006 * float(np.exp(-maturity / 0.8))


def _dividend_yield(maturity: float) -> float:
    return 0.017 - 0.004 * float(np.exp(-maturity / 1.5))


def demo_market() -> DemoMarket:
    """The invented model, forwards and discount factors."""
    maturities = np.array([_years(_expiry(days)) for days in EXPIRY_DAYS])
    kernel = FractionalKernel(HURST)
    curve = ForwardVariance.driven(kernel, INITIAL_VARIANCE, maturities[1:], DRIVE)
    model = VolterraHeston(kernel, VOL_OF_VOL, CORRELATION, curve)
    rates = np.array([_rate(t) for t in maturities])
    dividends = np.array([_dividend_yield(t) for t in maturities])
    return DemoMarket(
        model,
        maturities,
        SPOT * np.exp((rates - dividends) * maturities),
        np.exp(-rates * maturities),
    )


def write_demo_quotes(path: str | os.PathLike[str], *, seed: int = SEED) -> Path:
    """Write the invented quotes as CSV, the same bytes for the same seed.

    Parameters
    ----------
    path : path-like
        File to write; replaced whole if it exists.
    seed : int
        Of the noise and of the planted faults.

    Returns
    -------
    pathlib.Path
        ``path``.
    """
    generator = np.random.default_rng(seed)
    market = demo_market()
    rows: list[dict[str, Any]] = []
    for i, days in enumerate(EXPIRY_DAYS):
        expiry = _expiry(days)
        rows += _expiry_rows(
            generator, market.model, expiry, market.forwards[i], market.discounts[i]
        )
        if days < THIN_EXPIRY_DAYS < EXPIRY_DAYS[min(i + 1, len(EXPIRY_DAYS) - 1)]:
            thin = _expiry(THIN_EXPIRY_DAYS)
            t = _years(thin)
            forward = SPOT * np.exp((_rate(t) - _dividend_yield(t)) * t)
            discount = np.exp(-_rate(t) * t)
            few = _expiry_rows(generator, market.model, thin, forward, discount)
            rows += [few[len(few) // 3], few[2 * len(few) // 3]]
    _plant_faults(generator, rows)
    return _write(Path(path), rows)


def _strikes(forward: float, maturity: float, volatility: float) -> NDArray[np.float64]:
    # Round strikes from 4 standard deviations below to 2.5 above, 15 to 60 of them.
    stdev = volatility * np.sqrt(maturity)
    low, high = forward * np.exp(-4.0 * stdev), forward * np.exp(2.5 * stdev)
    for step in (5.0, 10.0, 25.0, 50.0, 100.0, 200.0):
        if (high - low) / step <= 45.0:
            break
    return np.arange(np.ceil(low / step) * step, high, step)


def _expiry_rows(
    generator: np.random.Generator,
    model: VolterraHeston,
    expiry: datetime,
    forward: float,
    discount: float,
) -> list[dict[str, Any]]:
    maturity = _years(expiry)
    level = float(np.sqrt(model.forward_variance.total_variance(maturity) / maturity))
    strikes = _strikes(forward, maturity, level)
    volatility = model.implied_volatility(strikes, maturity, forward=forward, tolerance=1e-6)
    strikes, volatility = strikes[~np.isnan(volatility)], volatility[~np.isnan(volatility)]
    z = np.log(strikes / forward) / (level * np.sqrt(maturity))
    half_width = (0.0018 + 0.0006 / np.sqrt(maturity + 0.01)) * (1.0 + 0.35 * z**2)
    rows = []
    for call in (True, False):
        noisy = volatility + NOISE * half_width * generator.standard_normal(strikes.size)
        middle = black.price(forward, strikes, maturity, noisy, discount=discount, call=call)
        vega = black.vega(forward, strikes, maturity, volatility, discount=discount)
        width = np.maximum(vega * half_width, 0.5 * TICK)
        bid = np.floor(np.maximum(middle - width, 0.0) / TICK + 1e-9) * TICK
        ask = np.ceil((middle + width) / TICK - 1e-9) * TICK
        age = generator.integers(1, 240, strikes.size)
        rows += [
            {
                "quote_time": _iso(QUOTE_TIME),
                "expiry": _iso(expiry),
                "strike": f"{k:.0f}",
                "option_type": "C" if call else "P",
                "bid": f"{b:.2f}",
                "ask": f"{a:.2f}",
                "last_update": _iso(QUOTE_TIME - timedelta(seconds=int(s))),
            }
            for k, b, a, s in zip(strikes, bid, ask, age, strict=True)
        ]
    return rows


def _plant_faults(generator: np.random.Generator, rows: list[dict[str, Any]]) -> None:
    picks = iter(generator.choice(len(rows), 24, replace=False))
    for _ in range(6):  # stale: not touched for hours, and the market has moved since
        row = rows[next(picks)]
        row["last_update"] = _iso(QUOTE_TIME - timedelta(hours=int(generator.integers(4, 30))))
        row["bid"] = f"{0.85 * float(row['bid']):.2f}"
        row["ask"] = f"{0.85 * float(row['ask']):.2f}"
    for _ in range(5):  # crossed
        row = rows[next(picks)]
        row["bid"], row["ask"] = f"{float(row['ask']) + TICK:.2f}", row["bid"]
    for _ in range(5):  # no bid
        rows[next(picks)]["bid"] = "0.00"
    for _ in range(2):  # unreadable
        rows[next(picks)]["bid"] = "n/a"
    for _ in range(6):  # sent twice
        row = rows[next(picks)]
        rows.insert(int(generator.integers(len(rows))), dict(row))


def _iso(moment: datetime) -> str:
    return moment.strftime("%Y-%m-%dT%H:%M:%SZ")


def _write(path: Path, rows: list[dict[str, Any]]) -> Path:
    beside = path.with_name(path.name + ".partial")
    try:
        with open(beside, "w", newline="", encoding="utf-8") as file:
            writer = csv.DictWriter(file, fieldnames=list(rows[0]))
            writer.writeheader()
            writer.writerows(rows)
        os.replace(beside, path)
    finally:
        beside.unlink(missing_ok=True)
    return path
