r"""Blow-up of the real fractional Riccati equation, from its power series in mpmath arithmetic.

The solution of :math:`D^\alpha\psi = c_0 + c_1\psi + c_2\psi^2` is a power series in
:math:`x = t^\alpha`, rises, and blows up at X like :math:`(X-x)^{-\alpha}`. Hence

.. math:: g(x) = (d\psi/dx)^{-1/(1+\alpha)}

falls to zero linearly at X, with the next power of X - x beyond 2 alpha + 1, and is positive
before. The zero is that of the diagonal Padé approximants of g. Nothing here steps in time.
Sources: Padé Approximants, Encyclopedia of Mathematics and its Applications 59, 1996 (memory:
powers of a series whose singularity has a known exponent); Moment explosions in the rough Heston
model, arXiv 1801.09458 (power series of the transform).

Not thread-safe: mpmath's precision is global.
"""

import math
from typing import Any

from ._mpmath import load_mpmath
from ._pade import Certified, UncertifiedError

__all__ = ["blow_up_time", "explosion_time"]


def blow_up_time(
    c0: float, c1: float, c2: float, alpha: float, digits: int = 8, order: int = 60
) -> Certified:
    r"""Blow-up time of :math:`D^\alpha\psi = c_0 + c_1\psi + c_2\psi^2`, psi(0) = 0.

    Parameters
    ----------
    c0, c1, c2 : float
        Coefficients, c0 and c2 positive; the right-hand side has no zero at psi >= 0.
    alpha : float
        Order, in (1/2, 1].
    digits : int, default 8
        Relative accuracy asked for.
    order : int, default 60
        Order of the highest approximant.

    Returns
    -------
    Certified
        The time and the spread of the last four approximants, by agreement and not by proof.

    Raises
    ------
    UncertifiedError
        If the approximants do not agree.
    ImportError
        If mpmath is absent.

    Notes
    -----
    Cost: a second and a half at the default order. Slow to settle where the solution rests for
    long before it blows up (c1 near -2 sqrt(c0 c2)) or climbs over many decades (c1 far above).
    """
    mp = load_mpmath().mp
    # An entire g (alpha = 1) has coefficients down to 1/(4 order)!.
    with mp.workdps(8 * order):
        # Unit of time and psi: D^a z = 1 + 2 beta z + z^2, of radius about 1.
        root = mp.sqrt(mp.mpf(c0) * c2)
        beta = mp.mpf(c1) / (2 * root)
        # Without a linear term dz/dx is even: the approximants are those in x^2.
        stride = 1 if c1 else 2
        g = _slope_power(mp, beta, mp.mpf(alpha), 2 * order * stride + 1)[::stride]
        # psi <= y needs at least x = Gamma(1 + alpha) y / max f.
        lowest = mp.gamma(1 + mp.mpf(alpha)) / (2 * (1 + abs(beta)))
        orders = range(order - 9, order + 1, 3)
        zeros = [_first_zero(mp, g, n, lowest**stride) ** (mp.one / stride) for n in orders]
        times = [(zero / root) ** (1 / mp.mpf(alpha)) for zero in zeros]
        value = times[-1]
        error = 2 * max(abs(value - time) for time in times[:-1])
        if not error <= mp.mpf(10) ** (-digits) * value:
            raise UncertifiedError(
                f"order {order} vouches for {float(error / value):.1e} only, not for 1e-{digits}"
            )
        return Certified(value, float(error))


def explosion_time(
    moment: float,
    *,
    hurst: float,
    vol_of_vol: float,
    correlation: float,
    mean_reversion: float,
    digits: int = 8,
    order: int = 60,
) -> float:
    """First time at which E[exp(p X_T)] is infinite in the rough model; inf if it stays finite.

    Parameters
    ----------
    moment : float
        p, real.
    hurst, vol_of_vol, correlation, mean_reversion : float
        The model.
    digits, order : int
        As in :func:`blow_up_time`.

    Returns
    -------
    float
        Years.

    Raises
    ------
    UncertifiedError
        If the approximants do not agree.

    Notes
    -----
    Finite exactly when c0 > 0, c2 > 0 and c0 + c1 y + c2 y^2 has no zero at y > 0. Source: Moment
    explosions in the rough Heston model, arXiv 1801.09458.
    """
    c0, c2 = 0.5 * (moment * moment - moment), 0.5 * vol_of_vol**2
    c1 = moment * correlation * vol_of_vol - mean_reversion
    if c0 <= 0.0 or c2 == 0.0 or (c1 <= 0.0 and c1 * c1 >= 4.0 * c0 * c2):
        return math.inf
    return float(blow_up_time(c0, c1, c2, hurst + 0.5, digits, order).value)


def _slope_power(mp: Any, beta: Any, alpha: Any, terms: int) -> list[Any]:
    """Coefficients of (dz/dx)^(-1/(1+alpha)), z the solution of D^a z = 1 + 2 beta z + z^2."""
    gammas = [mp.gamma(1 + n * alpha) for n in range(terms + 1)]
    z = [mp.mpf(0)]
    for n in range(terms):
        square = mp.fdot(z[1:n], z[n - 1 : 0 : -1])
        z.append((int(n == 0) + 2 * beta * z[n] + square) * gammas[n] / gammas[n + 1])
    slope = [n * z[n] for n in range(1, terms + 1)]
    # The power s of a series d: n d0 g_n = sum_k ((s + 1) k - n) d_k g_(n-k).
    power = -1 / (1 + alpha)
    g = [slope[0] ** power]
    for n in range(1, terms):
        total = mp.fsum(((power + 1) * k - n) * slope[k] * g[n - k] for k in range(1, n + 1))
        g.append(total / (n * slope[0]))
    return g


def _first_zero(mp: Any, g: list[Any], order: int, lowest: Any) -> Any:
    """First zero beyond ``lowest`` of the approximant of degrees (order, order) of g."""
    numerator, denominator = mp.pade(g[: 2 * order + 1], order, order)

    def value(x: Any) -> Any:
        return _polynomial(mp, numerator, x) / _polynomial(mp, denominator, x)

    low, high = lowest, lowest
    while value(high) > 0:
        low, high = high, high * mp.mpf("1.02")
        if high > 1e6 * lowest:
            raise UncertifiedError("the approximant has no zero: more terms are needed")
    # A pole instead of a zero moves from order to order and is not certified.
    for _ in range(100):
        middle = (low + high) / 2
        low, high = (middle, high) if value(middle) > 0 else (low, middle)
    return low


def _polynomial(mp: Any, ascending: list[Any], x: Any) -> Any:
    total = mp.mpf(0)
    for coefficient in reversed(ascending):
        total = total * x + coefficient
    return total
