r"""The rough transform by its power series, and option prices by quadrature, in mpmath arithmetic.

The solution of :math:`\psi = K * (c_0 + c_1\psi + c_2\psi^2)`,
:math:`K(t) = t^{\alpha-1}/\Gamma(\alpha)`, is a power series in :math:`x = t^\alpha`:

.. math::
    \psi = \sum_{k\ge1} a_k x^k, \qquad
    F = c_0 + c_1\psi + c_2\psi^2 = \sum_{k\ge0} f_k x^k, \qquad
    a_{k+1} = f_k\,\frac{\Gamma(k\alpha+1)}{\Gamma((k+1)\alpha+1)},

because :math:`K * t^{k\alpha}` has that Gamma ratio. It converges near 0 only; beyond, its diagonal
Padé approximants do. Nothing here steps in time. Source: Fractional differential equations, 1999,
chapter on power series (memory).

A value is returned only when successive orders, and two working precisions, agree; otherwise
:class:`UncertifiedError`. Not thread-safe: mpmath's precision is global.
"""

from collections.abc import Callable, Iterator, Sequence
from functools import lru_cache
from typing import Any

from numpy.typing import ArrayLike

from ._curves import primitive_weights
from ._mpmath import load_mpmath
from ._pade import Certified, UncertifiedError, certified_sum

__all__ = [
    "Certified",
    "UncertifiedError",
    "fractional_riccati",
    "log_transform",
    "log_transform_spot",
    "price_single_integral",
]


def fractional_riccati(
    c0: complex, c1: complex, c2: float, alpha: float, t: float, digits: int = 16, terms: int = 240
) -> Certified:
    r"""Solution of Caputo :math:`D^\alpha\psi = c_0 + c_1\psi + c_2\psi^2`, :math:`\psi(0) = 0`.

    Parameters
    ----------
    c0, c1, c2 : complex or mpmath number
        Coefficients.
    alpha : float
        Order, in (0, 1].
    t : float
        Time, > 0.
    digits : int, default 16
        Digits wanted: absolute ones below 1 in size, relative ones above.
    terms : int, default 240
        Longest power series tried.

    Returns
    -------
    Certified

    Raises
    ------
    UncertifiedError
        If the approximants do not settle within ``terms``.
    ImportError
        If mpmath is absent.

    Notes
    -----
    Cost: 10 ms near 0, 2 s at the limit of 240 terms; it grows with their square.
    """
    mp = load_mpmath().mp

    def series() -> Iterator[list[Any]]:
        x = mp.mpf(t) ** mp.mpf(alpha)
        for k, a, _ in _coefficients(mp, c0, c1, c2, alpha, terms):
            yield [a * x**k]

    return certified_sum(mp, series, digits, terms, lambda value: max(1, abs(value)))


def log_transform(
    u: complex,
    maturity: float,
    *,
    hurst: float,
    vol_of_vol: float,
    correlation: float,
    mean_reversion: float,
    initial_variance: float | None = None,
    drive_times: ArrayLike | None = None,
    drive_levels: ArrayLike | None = None,
    variance_times: ArrayLike | None = None,
    variance_levels: ArrayLike | None = None,
    digits: int = 16,
    terms: int = 240,
) -> Certified:
    """log E[exp(iu X_T)] for one u and piecewise-constant curves.

    Parameters
    ----------
    u : complex or mpmath.mpc
        Argument, inside the strip of finite moments.
    maturity : float
        T in years, > 0.
    hurst, vol_of_vol, correlation, mean_reversion : float
        The model.
    initial_variance, drive_times, drive_levels
        A driven curve; see :mod:`pyvolterra.reference._curves` for both formulas.
    variance_times, variance_levels
        Or a market curve. Levels hold up to their times, the last one continues.
    digits : int, default 16
        Absolute digits wanted of the transform: the error of its logarithm stays below
        10^-digits / min(1, abs(transform)), and below 0.5.
    terms : int, default 240
        Longest power series tried.

    Returns
    -------
    Certified
        The logarithm and the bound of its error.

    Raises
    ------
    ValueError
        If not exactly one curve is given, or maturity or a curve is out of range.
    UncertifiedError
        If vol_of_vol |u| T^alpha is too large for ``terms`` of the series. Tried from hurst 0.05 to
        0.5, 240 terms gave 9 digits or more up to 20, and 5 or more at 40.
    ImportError
        If mpmath is absent.

    Notes
    -----
    Beyond the explosion time of a moment there is no transform, yet a continuation of psi may be
    summed: check the strip first. Cost: that of :func:`fractional_riccati`, plus as much for each
    step of the curve before T.
    """
    mp = load_mpmath().mp
    weights = primitive_weights(
        maturity,
        mean_reversion,
        initial_variance,
        drive_times,
        drive_levels,
        variance_times,
        variance_levels,
    )
    alpha = hurst + 0.5

    def series() -> Iterator[list[Any]]:
        z, nu = mp.mpmathify(u), mp.mpf(vol_of_vol)
        c0 = -(z * z + mp.j * z) / 2
        c1 = mp.j * z * mp.mpf(correlation) * nu - mp.mpf(mean_reversion)
        powers = [mp.mpf(s) for s, _, _ in weights]  # s^(k alpha + 1)
        factors = [s ** mp.mpf(alpha) for s in powers]
        for k, a, f in _coefficients(mp, c0, c1, nu * nu / 2, alpha, terms):
            share = 1 / (k * mp.mpf(alpha) + 1)
            yield [
                power * share * (of_f * f + of_psi * a)
                for power, (_, of_f, of_psi) in zip(powers, weights, strict=True)
            ]
            powers = [p * x for p, x in zip(powers, factors, strict=True)]

    return certified_sum(mp, series, digits, terms, lambda value: mp.exp(max(0, -value.real)))


def log_transform_spot(
    u: complex,
    maturity: float,
    *,
    hurst: float,
    vol_of_vol: float,
    correlation: float,
    mean_reversion: float,
    initial_variance: float,
    long_run_variance: float,
    digits: int = 16,
    terms: int = 240,
) -> Certified:
    """:func:`log_transform` in the spot form g0 = V0 + lambda theta * (integral of K)."""
    return log_transform(
        u,
        maturity,
        hurst=hurst,
        vol_of_vol=vol_of_vol,
        correlation=correlation,
        mean_reversion=mean_reversion,
        initial_variance=initial_variance,
        drive_times=[maturity],
        drive_levels=[mean_reversion * long_run_variance],
        digits=digits,
        terms=terms,
    )


def price_single_integral(
    log_transform: Callable[[Any], Any],
    strikes: Sequence[float],
    *,
    forward: float = 1.0,
    discount: float = 1.0,
    call: bool = True,
    digits: int = 14,
) -> list[Certified]:
    r"""Option prices by the single integral along Im u = -1/2.

    .. math::
        C = D\Big[F - \frac{\sqrt{FK}}{\pi} \int_0^\infty
            \mathrm{Re}\big[(F/K)^{ix}\,\varphi(x - i/2)\big] \frac{dx}{x^2 + 1/4}\Big]

    Parameters
    ----------
    log_transform : callable
        log E[exp(iu X_T)] for one mpmath.mpc u.
    strikes : sequence of float
        Any positive ones.
    forward, discount : float, default 1
        Forward price and discount factor.
    call : bool, default True
        Calls, else puts.
    digits : int, default 14
        Digits wanted of the price per unit of forward and discount.

    Returns
    -------
    list of Certified
        One per strike. ``error`` is that of the quadrature: add the error of ``log_transform``.

    Raises
    ------
    UncertifiedError
        If 7 halvings of the step do not reach the digits.
    ImportError
        If mpmath is absent.

    Notes
    -----
    Substituting x = sinh(y)/2 leaves 2 sech y, analytic in |Im y| < pi/2: the trapezoidal rule
    converges geometrically; the step is halved until two sums agree, and their difference is the
    error reported. Sources: Option valuation under stochastic volatility, 2000 (memory); The
    exponentially convergent trapezoidal rule, SIAM Review 56, 2014 (memory). Cost: 50 to 500
    evaluations of ``log_transform``.
    """
    mp = load_mpmath().mp
    with mp.workdps(digits + 15):
        small = mp.mpf(10) ** (-digits)
        moneyness = [mp.log(mp.mpf(forward) / mp.mpf(k)) for k in strikes]

        def rows(start: Any, step: Any) -> list[Any]:
            """Sums over y = start, start + step, ... for all strikes."""
            sums, y, size = [mp.mpf(0)] * len(moneyness), start, mp.inf
            while size > small / 100:
                x = mp.sinh(y) / 2
                logarithm = mp.mpmathify(log_transform(mp.mpc(x, -0.5)))
                weight = (1 if y == 0 else 2) / mp.cosh(y)
                size = weight * mp.exp(logarithm.real)
                for i, m in enumerate(moneyness):
                    sums[i] += weight * mp.exp(logarithm + mp.j * x * m).real
                y += step
            return sums

        step = mp.mpf(1) / 2
        sums = rows(mp.mpf(0), step)
        for _ in range(7):
            finer = [a + b for a, b in zip(sums, rows(step / 2, step), strict=True)]
            change = max(abs(step * a - step / 2 * b) for a, b in zip(sums, finer, strict=True))
            sums, step = finer, step / 2
            if change < small:
                break
        else:
            raise UncertifiedError(
                f"the quadrature did not settle to {digits} digits: last change {float(change):.1e}"
            )
        results = []
        for strike, total in zip(strikes, sums, strict=True):
            scale = mp.sqrt(mp.mpf(forward) * mp.mpf(strike)) / mp.pi
            undiscounted = mp.mpf(forward if call else strike) - scale * step * total
            error = discount * float(scale * (change + small))
            results.append(Certified(discount * undiscounted, error))
        return results


@lru_cache(maxsize=8)
def _gamma_ratios(alpha: float, dps: int, terms: int) -> list[Any]:
    """Gamma(k alpha + 1) / Gamma((k + 1) alpha + 1), k < terms, with dps digits."""
    mp = load_mpmath().mp
    with mp.workdps(dps):
        gammas = [mp.gamma(k * mp.mpf(alpha) + 1) for k in range(terms + 1)]
        return [gammas[k] / gammas[k + 1] for k in range(terms)]


def _coefficients(
    mp: Any, c0: Any, c1: Any, c2: Any, alpha: float, terms: int
) -> Iterator[tuple[int, Any, Any]]:
    """k, a_k and f_k for k < terms, at mpmath's present precision."""
    ratios = _gamma_ratios(alpha, mp.dps, terms)
    a, f = mp.mpc(0), mp.mpmathify(c0)
    past = [a]
    yield 0, a, f
    for k in range(1, terms):
        a = f * ratios[k - 1]
        past.append(a)
        half = (k + 1) // 2
        square = 2 * mp.fdot(zip(past[1:half], past[k - 1 : k - half : -1], strict=True))
        if k % 2 == 0:
            square += past[half] ** 2
        f = c1 * a + c2 * square
        yield k, a, f
