"""A fit seen expiry by expiry: what the pictures draw and the tables print."""

import math
import warnings
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..errors import AccuracyWarning
from ..fit import Fit
from ..forward_variance import ForwardVariance
from ..kernels import ConstantKernel, FractionalKernel
from ..model import VolterraHeston

_Floats = NDArray[np.float64]

# Price tolerance, per unit of forward, of curves that are only looked at: well below a tick.
_DRAWING_TOLERANCE = 1e-6


@dataclass(frozen=True)
class ExpirySlice:
    """The fitted quotes of one expiry and the model's smile through them.

    Attributes
    ----------
    label : str
        Date of the expiry, with its time when another expiry falls on the same date.
    expiry, maturity, days : datetime64, float, float
        Instant; years ACT/365F; calendar days.
    forward, discount : float
    level : float
        At-the-money volatility of the model.
    log_moneyness, bid, mid, ask, model : ndarray
        One element per quote; volatilities as decimals.
    residual, half_widths : ndarray
        Model less mid volatility, as a decimal and in half-widths (see :func:`half_widths`).
    inside : ndarray of bool
        Model within bid and ask.
    curve_log_moneyness, curve : ndarray
        The model's smile on a fine grid.
    """

    label: str
    expiry: np.datetime64
    maturity: float
    days: float
    forward: float
    discount: float
    level: float
    log_moneyness: _Floats
    bid: _Floats
    mid: _Floats
    ask: _Floats
    model: _Floats
    residual: _Floats
    half_widths: _Floats
    inside: NDArray[np.bool_]
    curve_log_moneyness: _Floats
    curve: _Floats

    def __len__(self) -> int:
        return self.mid.size

    @property
    def rms(self) -> float:
        """Root mean square of the residuals, in volatility."""
        return float(np.sqrt(np.mean(self.residual**2)))

    @property
    def share_inside(self) -> float:
        """Share of the quotes with the model within bid and ask."""
        return float(np.mean(self.inside))

    def standardise(self, log_moneyness: _Floats) -> _Floats:
        """Log-moneyness in at-the-money standard deviations."""
        return np.asarray(log_moneyness / (self.level * math.sqrt(self.maturity)))


def half_widths(fit: Fit) -> _Floats:
    """Residuals in units of the distance from mid to the bid or the ask, whichever is on that side.

    So -1 is a model at the bid, +1 one at the ask, and the model is within bid and ask exactly
    when the absolute value is at most 1. A bid below intrinsic value counts as volatility 0.
    """
    smiles = fit.smiles
    below = smiles.mid_volatility - np.nan_to_num(smiles.bid_volatility, nan=0.0)
    above = smiles.ask_volatility - smiles.mid_volatility
    width = np.where(fit.residuals < 0.0, below, above)
    return np.asarray(fit.residuals / np.maximum(width, 1e-12))


def inside(fit: Fit) -> NDArray[np.bool_]:
    """Whether the model volatility of each quote lies within bid and ask."""
    low = np.nan_to_num(fit.smiles.bid_volatility, nan=0.0)
    high = fit.smiles.ask_volatility
    return np.asarray((fit.model_volatility >= low) & (fit.model_volatility <= high))


def model_volatility(model: VolterraHeston, log_moneyness: _Floats, maturities: _Floats) -> _Floats:
    """Implied volatilities for drawing, nan where the price is too small to tell."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", AccuracyWarning)
        values = model.implied_volatility(
            np.exp(log_moneyness), maturities, tolerance=_DRAWING_TOLERANCE
        )
    return np.asarray(values, dtype=np.float64)


def expiry_slices(fit: Fit, *, points: int = 81) -> tuple[ExpirySlice, ...]:
    """The expiries of a fit from the shortest to the longest."""
    smiles = fit.smiles
    maturities = np.unique(smiles.maturity)
    members = [np.flatnonzero(smiles.maturity == t) for t in maturities]
    grids = np.array([_grid(smiles.log_moneyness[at], points) for at in members])
    curves = model_volatility(fit.model, grids, maturities[:, None])
    levels = model_volatility(fit.model, np.zeros(maturities.size), maturities)
    labels = expiry_labels(np.array([smiles.expiry[at[0]] for at in members]))
    in_half_widths, within = half_widths(fit), inside(fit)
    slices = []
    for i, at in enumerate(members):
        nearest = at[np.argmin(np.abs(smiles.log_moneyness[at]))]
        level = levels[i] if levels[i] > 0.0 else smiles.mid_volatility[nearest]
        shown = np.isfinite(curves[i])
        slices.append(
            ExpirySlice(
                label=labels[i],
                expiry=smiles.expiry[at[0]],
                maturity=float(maturities[i]),
                days=float(maturities[i]) * 365.0,
                forward=float(smiles.forward[at[0]]),
                discount=float(smiles.discount[at[0]]),
                level=float(level),
                log_moneyness=smiles.log_moneyness[at],
                bid=smiles.bid_volatility[at],
                mid=smiles.mid_volatility[at],
                ask=smiles.ask_volatility[at],
                model=fit.model_volatility[at],
                residual=fit.residuals[at],
                half_widths=in_half_widths[at],
                inside=within[at],
                curve_log_moneyness=grids[i][shown],
                curve=curves[i][shown],
            )
        )
    return tuple(slices)


def _grid(log_moneyness: _Floats, points: int) -> _Floats:
    low, high = float(log_moneyness.min()), float(log_moneyness.max())
    return np.linspace(min(low, 0.0), max(high, 0.0), points)


def expiry_labels(expiries: NDArray[np.datetime64]) -> list[str]:
    """Dates; with the time of day where two expiries share a date."""
    dates = [str(e.astype("datetime64[D]")) for e in expiries]
    return [
        date if dates.count(date) == 1 else f"{date} {str(e.astype('datetime64[m]'))[11:]}"
        for date, e in zip(dates, expiries, strict=True)
    ]


def price_decimals(price: float) -> int:
    """Decimals that show a price to about six digits."""
    return min(max(5 - math.floor(math.log10(price)), 0), 6) if price > 0.0 else 2


@dataclass(frozen=True)
class Skew:
    """At-the-money skew, d volatility / d log-moneyness at the forward, by maturity.

    ``error`` is the standard error of the market's, from the scatter about the local fit.
    """

    maturity: _Floats
    market: _Floats
    error: _Floats


def market_skew(
    model: VolterraHeston, slices: tuple[ExpirySlice, ...], *, reach: float = 1.5
) -> Skew:
    """Skew of the mid volatilities: the model's, plus the slope at the forward of mid less model.

    The slope is that of a local cubic (fewer quotes: a lower degree) through the quotes within
    ``reach`` standard deviations of the forward, weighted by bid-ask width. A polynomial through
    the volatilities themselves would be 5 to 10 % too flat, since a smile bends sharply just above
    the forward; the model takes that bend out. Expiries with fewer than four quotes there, or with
    none on one side, have no estimate (common practice, no source).
    """
    base = model_skew(model, np.array([s.maturity for s in slices]))
    rows = []
    for s, skew in zip(slices, base, strict=True):
        z = s.standardise(s.log_moneyness)
        near = np.abs(z) <= reach
        if near.sum() < 4 or not (z[near].min() < 0.0 < z[near].max()):
            continue
        x, y = z[near], -s.residual[near]
        weight = 1.0 / np.maximum(s.ask[near] - s.mid[near], 1e-4)
        degree = 3 if x.size >= 8 else 2 if x.size >= 5 else 1
        design = np.vander(x, degree + 1, increasing=True)
        inverse = np.linalg.pinv(design * weight[:, None])
        coefficients = inverse @ (y * weight)
        scatter = (y - design @ coefficients) * weight
        variance = scatter @ scatter / (x.size - degree - 1) * (inverse[1] @ inverse[1])
        scale = s.level * math.sqrt(s.maturity)
        rows.append((s.maturity, skew + coefficients[1] / scale, math.sqrt(variance) / scale))
    table = np.array(rows).reshape(-1, 3)
    table = table[np.isfinite(table).all(axis=1)]
    return Skew(table[:, 0], table[:, 1], table[:, 2])


def model_skew(model: VolterraHeston, maturities: _Floats) -> _Floats:
    """Skew of the model by central differences, a twentieth of a standard deviation each way."""
    level = model_volatility(model, np.zeros(maturities.size), maturities)
    step = 0.05 * level * np.sqrt(maturities)
    down, up = model_volatility(model, np.array([-step, step]), maturities)
    return np.asarray((up - down) / (2.0 * step))


def curve_errors(fit: Fit, times: _Floats) -> _Floats:
    """Standard errors of the fitted xi(t), by the delta method from the covariance of the fit."""
    if not fit.covariance_names:
        return np.zeros(times.size)
    base = _curve(fit.parameters, fit.curve_times)(times)
    gradient = []
    for name in fit.covariance_names:
        if name in {"vol_of_vol", "correlation"}:
            gradient.append(np.zeros(times.size))
            continue
        # Downwards and in proportion, so that no parameter leaves its range.
        step = 1e-5 * abs(fit.parameters[name]) or 1e-7
        moved = fit.parameters | {name: fit.parameters[name] - step}
        gradient.append((base - _curve(moved, fit.curve_times)(times)) / step)
    g = np.array(gradient)
    return np.asarray(np.sqrt(np.maximum(np.einsum("it,ij,jt->t", g, fit.covariance, g), 0.0)))


def _curve(parameters: dict[str, float], times: _Floats) -> ForwardVariance:
    hurst = parameters["hurst"]
    kernel = ConstantKernel() if hurst == 0.5 else FractionalKernel(hurst)
    levels = [parameters[f"drive_{k + 1}"] for k in range(times.size)]
    return ForwardVariance.driven(
        kernel, parameters["initial_variance"], times, levels, parameters["mean_reversion"]
    )
