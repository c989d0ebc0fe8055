"""Forwards and discount factors from put-call parity.

For European options C - P = D (F - K): at each expiry the difference of the mids is a straight line
in the strike, whose slope is the discount factor D and whose zero is the forward F. The slope of
one expiry is too noisy to be a discount factor (0.3 points of noise at 40 strikes make an error of
1.6e-4, which is 0.8 % in a weekly rate), so all slopes together fix one smooth zero-rate curve;
forwards are then inferred with that discount.
"""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ._validation import finite_reals, require
from .errors import QuoteError
from .quotes import Quotes

__all__ = ["ForwardCurve", "ForwardPoint", "infer_forwards", "rough_forwards"]

FloatArray = NDArray[np.float64]

# Pairs of call and put that an expiry needs to have a say in the discount curve.
MIN_PAIRS = 5
# The biweight ignores residuals beyond this many scales; 95 % efficient for Gaussian noise (The
# fitting of power series, meaning polynomials, illustrated on band-spectroscopic data,
# Technometrics 16, 1974, doi:10.1080/00401706.1974.10489171; from memory).
BIWEIGHT = 4.685
# Scale of the noise in half-widths: never below the floor (prices are rounded to ticks), and drawn
# towards the scale of all expiries as if that were so many more pairs.
SCALE_FLOOR, POOLED_PAIRS = 0.01, 10.0
# The zero rate is a level plus slopes that fade on these scales of years. Prior standard deviations
# of level and slopes hold what the quotes leave open: common practice, no source.
RATE_SCALES = np.array([4.0, 1.0, 0.25])
RATE_PRIOR = np.array([0.10, 0.03, 0.02, 0.005])
# Each expiry may depart from such a curve by about 1 basis point: common practice, no source.
RATE_MISFIT = 1e-4
# A larger zero rate, of either sign, means that calls and puts are not what they are said to be.
MAX_RATE = 1.0
# Nothing is quoted more finely: half-width over strike, and error of a discount factor.
MIN_RELATIVE_WIDTH, MIN_DISCOUNT_ERROR = 1e-12, 1e-9
# Uncertainty of an interpolated carry per year: common practice, no source.
CARRY_ERROR = 0.005


@dataclass(frozen=True)
class ForwardPoint:
    """Forward and discount factor of one expiry.

    Attributes
    ----------
    expiry : numpy.datetime64
        Instant, UTC.
    maturity : float
        Years, ACT/365F.
    forward, forward_error : float
        Forward and its standard error, in the unit of the strikes.
    discount : float
        Discount factor, from the curve common to all expiries.
    pairs : int
        Strikes with both a call and a put.
    method : str
        ``"regression"``: the expiry has a say in the discount curve. ``"interpolated discount"``:
        too few pairs for that, but a forward of its own. ``"interpolated carry"``: no pair, and the
        forward comes from its neighbours.
    """

    expiry: np.datetime64
    maturity: float
    forward: float
    discount: float
    forward_error: float
    pairs: int
    method: str


@dataclass(frozen=True)
class ForwardCurve:
    """Forwards and discount factors of all expiries, in order of maturity."""

    points: tuple[ForwardPoint, ...]

    def forward(self, maturity: ArrayLike) -> Any:
        """Forward, log-linear between the expiries.

        Parameters
        ----------
        maturity : array_like of float
            Years; positive.

        Returns
        -------
        float or ndarray of float64
            Outside the expiries the carry of the nearest two continues.

        Raises
        ------
        ValueError, TypeError
            If a maturity is not positive and finite, or not a real number.
        """
        t = np.array([point.maturity for point in self.points])
        logs = np.log([point.forward for point in self.points])
        return np.exp(_linear(_maturities(maturity), t, logs))[()]

    def discount(self, maturity: ArrayLike) -> Any:
        """Discount factor, log-linear from 1 at maturity 0 through the expiries.

        Parameters, returns and errors as :meth:`forward`; the last forward rate continues.
        """
        t = np.array([0.0, *(point.maturity for point in self.points)])
        logs = np.log([1.0, *(point.discount for point in self.points)])
        return np.exp(_linear(_maturities(maturity), t, logs))[()]


def _maturities(maturity: ArrayLike) -> FloatArray:
    array = finite_reals(maturity, "maturity")
    require(array > 0.0, array, "maturity", "positive")
    return array


def _linear(x: FloatArray, nodes: FloatArray, values: FloatArray) -> FloatArray:
    # Linear interpolation that goes on outside with the slope of the nearest segment.
    if nodes.size == 1:
        return np.broadcast_to(values[0], x.shape)
    left = np.clip(np.searchsorted(nodes, x, side="right") - 1, 0, nodes.size - 2)
    share = (x - nodes[left]) / (nodes[left + 1] - nodes[left])
    result: FloatArray = (1.0 - share) * values[left] + share * values[left + 1]
    return result


@dataclass(eq=False)
class _Line:
    """The pairs of one expiry and the robust line through them."""

    expiry: np.datetime64
    maturity: float
    strike: FloatArray
    difference: FloatArray  # call mid less put mid
    half_width: FloatArray  # of the difference, as if both sides were independent
    emphasis: FloatArray  # near the money more
    scale: float = np.nan  # of the residuals, in half-widths

    def weights(self, residual: FloatArray) -> FloatArray:
        u = residual / (BIWEIGHT * self.scale * self.half_width)
        trust: FloatArray = np.maximum(1.0 - u * u, 0.0) ** 2
        return self.emphasis / self.half_width**2 * trust


def infer_forwards(quotes: Quotes) -> ForwardCurve:
    """Infer the forward and discount factor of every expiry from put-call parity.

    Parameters
    ----------
    quotes : Quotes
        Cleaned quotes of European options; those of several sides or rows at one strike should
        have been removed (the tightest counts).

    Returns
    -------
    ForwardCurve
        One point per expiry in the quotes.

    Raises
    ------
    QuoteError
        If no expiry has at least 5 strikes with both a call and a put, or parity gives a forward
        that is not positive or a rate beyond 100 % (calls and puts mixed up, units that differ).

    Notes
    -----
    Each line starts from the weighted median of pairwise slopes and is then fitted by iteratively
    reweighted least squares with the biweight: a few bad pairs have no influence. Weights come from
    the widths of call and put, and favour strikes near the money. The discount curve is
    exp(-r(T) T), r a level plus slopes (1 - exp(-T/s)) / (T/s) as in Parsimonious modeling of yield
    curves (J. Business 60, 1987, doi:10.1086/296409; from memory), on three scales s and held by a
    weak prior, from which an expiry with a precise slope may depart a little. Standard errors
    are of the sandwich kind, not below what the noise of all expiries implies, and include the
    uncertainty of the discount. Early exercise, wide dividend forecasts inside a pair's life and
    quotes that are not simultaneous bias the result; nothing here can see that. Cost: a few
    milliseconds per expiry. Thread-safe.
    """
    lines = [_pair_up(quotes, expiry) for expiry in np.unique(quotes.expiry)]
    regressed = [line for line in lines if line.strike.size >= MIN_PAIRS]
    if not regressed:
        best = max((line.strike.size for line in lines), default=0)
        raise QuoteError(
            f"{quotes.source}: forwards need an expiry with at least {MIN_PAIRS} strikes that have "
            f"both a usable call and a usable put; the best has {best}"
        )
    starts = {line.expiry: _start(line) for line in regressed}
    pooled = float(np.median([line.scale for line in regressed]))
    slope, slope_error = np.full(len(lines), np.nan), np.full(len(lines), np.inf)
    for i, line in enumerate(lines):
        own = line.strike.size if line.expiry in starts else 0
        known = own * line.scale**2 if own else 0.0
        line.scale = float(np.sqrt((known + POOLED_PAIRS * pooled**2) / (own + POOLED_PAIRS)))
        if own:
            slope[i], slope_error[i] = _fit_slope(line, starts[line.expiry])
    maturity = np.array([line.maturity for line in lines])
    rates, rate_errors = _rate_curve(maturity, slope, slope_error)
    points = []
    for line, rate, rate_error in zip(lines, rates, rate_errors, strict=True):
        discount = float(np.exp(-line.maturity * rate))
        discount_error = line.maturity * discount * float(rate_error)
        forward, error = _fit_forward(line, discount, discount_error)
        if abs(rate) > MAX_RATE or forward <= 0.0:
            raise QuoteError(
                f"{quotes.source}: at expiry {line.expiry}Z put-call parity gives the forward "
                f"{forward:.6g} and the discount factor {discount:.6g}, must be positive and of a "
                f"rate within {MAX_RATE:.0%}; are calls and puts mixed up, or the units of strikes "
                "and prices different?"
            )
        pairs = line.strike.size
        method = "regression" if pairs >= MIN_PAIRS else "interpolated discount"
        points.append(
            ForwardPoint(line.expiry, line.maturity, forward, discount, error, pairs, method)
        )
    return ForwardCurve(_fill_gaps(points))


def rough_forwards(quotes: Quotes) -> dict[np.datetime64, float]:
    """A forward for each expiry that has a pair, good to tell the sides of the money apart."""
    forwards = {}
    for expiry in np.unique(quotes.expiry):
        strike, call, put = _pairs(quotes, expiry)
        if strike.size:
            forwards[expiry] = _rough_forward(strike, quotes.mid[call] - quotes.mid[put])
    return forwards


def _rough_forward(strike: FloatArray, difference: FloatArray) -> float:
    # Strike plus call less put, at the few strikes where these two are closest: there discounting
    # hardly matters, and the median ignores a bad pair.
    nearest = np.argsort(np.abs(difference), kind="stable")[:5]
    return float(np.median((strike + difference)[nearest]))


def _pairs(
    quotes: Quotes, expiry: np.datetime64
) -> tuple[FloatArray, NDArray[np.intp], NDArray[np.intp]]:
    # Strikes with both sides, and the indices of their calls and puts; the tightest of several.
    sides = []
    for is_call in (True, False):
        index = np.flatnonzero((quotes.expiry == expiry) & (quotes.is_call == is_call))
        index = index[np.lexsort((quotes.ask[index] - quotes.bid[index], quotes.strike[index]))]
        strike, first = np.unique(quotes.strike[index], return_index=True)
        sides.append((strike, index[first]))
    common, at_call, at_put = np.intersect1d(
        sides[0][0], sides[1][0], assume_unique=True, return_indices=True
    )
    return common, sides[0][1][at_call], sides[1][1][at_put]


def _pair_up(quotes: Quotes, expiry: np.datetime64) -> _Line:
    strike, call, put = _pairs(quotes, expiry)
    half_call = 0.5 * (quotes.ask - quotes.bid)[call]
    half_put = 0.5 * (quotes.ask - quotes.bid)[put]
    half_width = np.hypot(half_call, half_put)
    maturity = float(quotes.maturity[quotes.expiry == expiry][0])
    difference = quotes.mid[call] - quotes.mid[put]
    emphasis = np.ones(strike.size)
    if strike.size:
        # No pair counts as more than ten times sharper than the median; a locked one has no width.
        floor = 0.1 * np.median(half_width)
        lowest = MIN_RELATIVE_WIDTH if floor > 0.0 else 1e-6
        half_width = np.maximum(half_width, np.maximum(floor, lowest * strike))
        # A straddle at the forward costs 0.8 standard deviations of the price.
        forward = _rough_forward(strike, difference)
        nearest = int(np.argmin(np.abs(strike - forward)))
        straddle = quotes.mid[call[nearest]] + quotes.mid[put[nearest]]
        deviations = (strike - forward) / max(straddle / 0.8, float(np.median(half_width)))
        emphasis = 1.0 / (1.0 + 0.25 * deviations**2)
    return _Line(expiry, maturity, strike, difference, half_width, emphasis)


def _weighted_median(values: FloatArray, weights: FloatArray) -> float:
    order = np.argsort(values)
    share = np.cumsum(weights[order])
    return float(values[order][np.searchsorted(share, 0.5 * share[-1])])


def _start(line: _Line) -> float:
    # The discount as the weighted median of pairwise slopes; sets the scale of the residuals.
    i, j = np.triu_indices(line.strike.size, 1)
    distance = line.strike[j] - line.strike[i]
    slopes = (line.difference[i] - line.difference[j]) / distance
    weight = np.sqrt(line.emphasis / line.half_width**2)
    slope = _weighted_median(slopes, distance * weight[i] * weight[j])
    residual = line.difference + slope * line.strike
    residual = (residual - _weighted_median(residual, weight)) / line.half_width
    # 1.4826 median |x| is the standard deviation for Gaussian x; two parameters are fitted.
    spare = line.strike.size / (line.strike.size - 2)
    line.scale = max(1.4826 * float(np.median(np.abs(residual))) * spare**0.5, SCALE_FLOOR)
    return slope


def _fit_slope(line: _Line, slope: float) -> tuple[float, float]:
    # The discount factor of one expiry alone, and its standard error.
    level = _weighted_median(line.difference + slope * line.strike, 1.0 / line.half_width)
    for _ in range(50):
        weight = line.weights(line.difference + slope * line.strike - level)
        total = weight.sum()
        if not total > 0.0:  # cannot be from a median, whatever the data; for safety
            return slope, np.inf
        centre = float(weight @ line.strike / total)
        mean = float(weight @ line.difference / total)
        x = line.strike - centre
        information = float(weight @ x**2)
        if not information > 0.0:
            return slope, np.inf
        previous, slope = slope, -float(weight @ (x * (line.difference - mean))) / information
        level = mean + slope * centre
        if abs(slope - previous) < 1e-12:
            break
    residual = line.difference + slope * line.strike - level
    used = max(total**2 / float(weight @ weight), 3.0)  # as many pairs of equal weight
    sandwich = np.sqrt(np.sum((weight * x * residual) ** 2) * used / (used - 2.0)) / information
    expected = line.scale * np.sqrt(np.sum((weight * x * line.half_width) ** 2)) / information
    return slope, float(max(sandwich, expected))


def _rate_curve(
    maturity: FloatArray, discount: FloatArray, error: FloatArray
) -> tuple[FloatArray, FloatArray]:
    # Zero rates at the maturities and their errors from noisy discount factors (nan with an
    # infinite error where there is none). Gauss-Newton on D = exp(-r T): that needs no logarithm
    # of a slope that noise may have made negative.
    x = maturity[:, None] / RATE_SCALES
    smooth = np.column_stack([np.ones(maturity.size), -np.expm1(-x) / x])
    basis = np.column_stack([smooth, np.eye(maturity.size)])
    prior = np.diag(1.0 / np.concatenate([RATE_PRIOR, np.full(maturity.size, RATE_MISFIT)]))
    coefficients = np.zeros(basis.shape[1])
    error = np.maximum(error, MIN_DISCOUNT_ERROR)
    for _ in range(50):
        model = np.exp(-maturity * (basis @ coefficients))
        residual = np.where(np.isfinite(error), discount - model, 0.0)
        jacobian = -(maturity * model)[:, None] * basis
        # An expiry more than three errors off the curve has less and less say.
        trust = 1.0 / np.maximum(np.abs(residual) / (3.0 * error), 1.0)
        weight = np.sqrt(trust) / error
        # By orthogonal factors: data and prior may differ by a factor 1e10.
        q, r = np.linalg.qr(np.concatenate([weight[:, None] * jacobian, prior]))
        step = np.linalg.solve(r, q.T @ np.append(weight * residual, -prior @ coefficients))
        coefficients += step
        if np.abs(step).max() < 1e-13:
            break
    errors: FloatArray = np.linalg.norm(np.linalg.solve(r.T, basis.T), axis=0)
    return basis @ coefficients, errors


def _fit_forward(line: _Line, discount: float, discount_error: float) -> tuple[float, float]:
    if not line.strike.size:
        return np.nan, np.nan
    # Every pair gives a forward; its noise is that of the difference over the discount.
    forwards = line.strike + line.difference / discount
    forward = _weighted_median(forwards, np.sqrt(line.emphasis) / line.half_width)
    for _ in range(50):
        weight = line.emphasis * line.weights(discount * (forwards - forward))
        previous, forward = forward, float(weight @ forwards / weight.sum())
        if abs(forward - previous) <= 1e-13 * abs(forward):
            break
    total = weight.sum()
    used = total**2 / float(weight @ weight)  # as many pairs of equal weight
    error = line.scale * np.sqrt(np.sum((weight * line.half_width) ** 2)) / (discount * total)
    if used > 1.5:
        spread = np.sqrt(np.sum((weight * (forwards - forward)) ** 2) * used / (used - 1)) / total
        error = max(error, spread)
    # A wrong discount turns the line round the centre of the pairs, which is not the forward. It
    # comes from the same quotes, so that the errors may add up.
    lever = float(weight @ (forwards - line.strike)) / total
    return forward, float(error + abs(lever) * discount_error / discount)


def _fill_gaps(points: list[ForwardPoint]) -> tuple[ForwardPoint, ...]:
    known = [point for point in points if point.pairs]
    curve = ForwardCurve(tuple(known))
    filled = []
    for point in points:
        if point.pairs:
            filled.append(point)
            continue
        nearest = min(known, key=lambda other: abs(other.maturity - point.maturity))
        forward = float(curve.forward(point.maturity))
        carry = CARRY_ERROR * abs(nearest.maturity - point.maturity) * forward
        error = float(np.hypot(nearest.forward_error, carry))
        filled.append(
            ForwardPoint(
                point.expiry,
                point.maturity,
                forward,
                point.discount,
                error,
                0,
                "interpolated carry",
            )
        )
    return tuple(filled)
