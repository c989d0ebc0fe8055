r"""The classical model (hurst 1/2, constant kernel) in closed form.

With :math:`b = \lambda - iu\rho\nu`, :math:`d = \sqrt{b^2 + \nu^2(u^2+iu)}`, Re d >= 0,
:math:`e = \exp(-dt)` and :math:`s = (1-e)/d`,

.. math::
    \psi(t) = \frac{2 c_0 s}{1 + e + bs}, \qquad
    \int_0^t \psi = \frac{2 c_0 t}{b+d} - \frac{1}{c_2}\log\frac{1 + e + bs}{2}.

The decaying exponential keeps the principal logarithm continuous. Sources: A closed-form solution
for options with stochastic volatility, Rev. Financ. Stud. 6, 1993 (memory); for the branch,
Complex logarithms in Heston-like models, Math. Finance 20, 2010 (memory). Functions without
``_mp`` are pure NumPy and thread-safe.
"""

import math
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ._curves import primitive_weights
from ._mpmath import load_mpmath

ComplexArray = NDArray[np.complex128]


def psi(
    u: ArrayLike, t: ArrayLike, *, vol_of_vol: float, correlation: float, mean_reversion: float
) -> ComplexArray:
    r"""Solution of :math:`\psi' = c_0 + c_1\psi + c_2\psi^2`, zero at t = 0.

    Parameters
    ----------
    u : array_like of complex
        Arguments, inside the strip of finite moments.
    t : array_like of float
        Years, >= 0; broadcasts with ``u``.
    vol_of_vol, correlation, mean_reversion : float
        The model; vol_of_vol may be 0.

    Returns
    -------
    ndarray of complex128, the broadcast shape

    Notes
    -----
    Also the integral of F = c0 + c1 psi + c2 psi^2. Relative accuracy about 1e-14 for real u or
    -1 <= Im u <= 0 and vol_of_vol from 0 up.
    """
    return _solve(u, t, vol_of_vol, correlation, mean_reversion)[0]


def integral_of_psi(
    u: ArrayLike, t: ArrayLike, *, vol_of_vol: float, correlation: float, mean_reversion: float
) -> ComplexArray:
    r""":math:`\int_0^t \psi(s)\,ds`; arguments and accuracy as :func:`psi`."""
    return _solve(u, t, vol_of_vol, correlation, mean_reversion)[1]


def _solve(
    u: ArrayLike, t: ArrayLike, vol_of_vol: float, correlation: float, mean_reversion: float
) -> tuple[ComplexArray, ComplexArray]:
    """psi and its integral without the cancellations of the formulas above.

    b - d and b + d have the product 4 c0 c2, so the small one is a quotient. With x = dt and
    z = s (b - d) / 2 the logarithm is log(1 + z), and t - s log(1 + z)/z, in which everything
    cancels for short times, is t x phi(x) + s z chi(z) in the functions below. Both results are
    even in d: for Re b < 0 (positive moments and correlations) the root near b is the accurate
    one, unless its growing exponential is large or turns through the cut of the logarithm.
    """
    u, t = np.broadcast_arrays(np.asarray(u, dtype=np.complex128), np.asarray(t, dtype=np.float64))
    c0, c2 = -0.5 * u * (u + 1j), 0.5 * vol_of_vol**2
    b = mean_reversion - 1j * u * (correlation * vol_of_vol)
    d = np.sqrt(b * b - 4.0 * c0 * c2)
    left = b.real < 0.0
    turned = left & (np.abs(d.imag * t) < 1.0) & (d.real * t < 300.0)
    d = np.where(turned, -d, d)
    far = left & ~turned
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        plus = np.where(far, 4.0 * c0 * c2 / (b - d), b + d)
        minus = np.where(far, b - d, 4.0 * c0 * c2 / (b + d))
        ratio = np.where(far, (b - d) / (2.0 * c2) if c2 > 0.0 else 0.0, 2.0 * c0 / (b + d))
        x = d * t
        e, s = np.exp(-x), np.where(x == 0.0, t, -np.expm1(-x) / d)
        z = np.asarray(0.5 * s * minus, dtype=np.complex128)
        # 1 + e + bs: the first form where the second cancels
        denominator = np.where(left & (np.abs(x) > 1.0), (plus - minus * e) / d, 1.0 + e + b * s)
        solution = 2.0 * c0 * s / denominator
        near = ratio * (t * x * _phi(x) + s * z * _chi(z))
        plain = far | (turned & (np.abs(z) > 0.25))
        integral = np.where(plain, ratio * t - np.log(0.5 * denominator) / c2, near)
    still = b + d == 0.0  # no reversion, and no vol-of-vol or u = 0
    return solution, np.where(still & ~far, 0.5 * c0 * t * t, integral)


def _phi(x: ComplexArray) -> ComplexArray:
    """(e^-x - 1 + x) / x^2, by its series for |x| < 1/2."""
    series = [(-1.0) ** k / math.factorial(k + 2) for k in range(15)]
    return _by_series(x, 0.5, series, lambda y: (np.expm1(-y) + y) / (y * y))


def _chi(z: ComplexArray) -> ComplexArray:
    """(z - log(1 + z)) / z^2, by its series for |z| < 1/4."""
    series = [(-1.0) ** k / (k + 2) for k in range(26)]
    return _by_series(z, 0.25, series, lambda y: (y - np.log(1.0 + y)) / (y * y))


def _by_series(x: ComplexArray, radius: float, series: list[float], formula: Any) -> ComplexArray:
    inside = np.abs(x) < radius
    result = formula(np.where(inside, 1.0, x))
    small = np.polynomial.polynomial.polyval(np.where(inside, x, 0.0), series)
    return np.where(inside, small, result)


def log_transform(
    u: ArrayLike,
    maturity: float,
    *,
    vol_of_vol: float,
    correlation: float,
    mean_reversion: float,
    initial_variance: float | None = None,
    drive_times: ArrayLike | None = None,
    drive_levels: ArrayLike | None = None,
    variance_times: ArrayLike | None = None,
    variance_levels: ArrayLike | None = None,
) -> ComplexArray:
    """log E[exp(iu X_T)] for piecewise-constant curves.

    Parameters
    ----------
    u : array_like of complex, shape (n,)
        Arguments, inside the strip of finite moments.
    maturity : float
        T in years, > 0.
    vol_of_vol, correlation, mean_reversion : float
        The model.
    initial_variance, drive_times, drive_levels
        A driven curve; see :mod:`pyvolterra.reference._curves` for both formulas.
    variance_times, variance_levels
        Or a market curve. Levels hold up to their times, the last one continues.

    Returns
    -------
    ndarray of complex128, shape (n,)

    Raises
    ------
    ValueError
        If not exactly one curve is given, or maturity or a curve is out of range.

    Notes
    -----
    Accuracy: that of :func:`psi`, relative to the largest of the terms of the curve.
    """
    z = np.atleast_1d(np.asarray(u, dtype=np.complex128))
    total = np.zeros(z.shape, np.complex128)
    for s, of_f, of_psi in primitive_weights(
        maturity,
        mean_reversion,
        initial_variance,
        drive_times,
        drive_levels,
        variance_times,
        variance_levels,
    ):
        integral_of_f, integral = _solve(z, s, vol_of_vol, correlation, mean_reversion)
        total += of_f * integral_of_f + of_psi * integral
    return total


def log_transform_spot(
    u: ArrayLike,
    maturities: ArrayLike,
    vol_of_vol: float,
    correlation: float,
    mean_reversion: float,
    initial_variance: float,
    long_run_variance: float,
) -> ComplexArray:
    """The textbook transform on a grid, as fast as plain NumPy gives it.

    Parameters
    ----------
    u : array_like of complex, shape (n,)
        Arguments.
    maturities : array_like of float, shape (m,)
        Years, > 0.
    vol_of_vol, correlation, mean_reversion, initial_variance, long_run_variance : float
        The model; vol_of_vol > 0.

    Returns
    -------
    ndarray of complex128, shape (m, n)

    Notes
    -----
    The yardstick of the speed benchmarks: one complex exponential, one logarithm and about ten
    operations per element. It loses digits as vol_of_vol tends to 0, and is undefined at u = -i
    when mean_reversion < correlation * vol_of_vol: :func:`log_transform` does not.
    """
    z = np.asarray(u, dtype=np.complex128)
    t = np.asarray(maturities, dtype=np.float64)[:, None]
    variance = vol_of_vol * vol_of_vol
    b = mean_reversion - 1j * correlation * vol_of_vol * z
    d = np.sqrt(b * b + variance * (z * z + 1j * z))
    root = (b - d) / variance
    g = (b - d) / (b + d)
    drive = mean_reversion * long_run_variance
    e = np.exp(-d * t)
    q = 1.0 - g * e
    result: ComplexArray = (initial_variance * root) * (1.0 - e) / q
    result += (drive * root) * t
    result -= (2.0 * drive / variance) * np.log(q / (1.0 - g))
    return result


def log_transform_mp(
    u: Any,
    maturity: float,
    *,
    vol_of_vol: float,
    correlation: float,
    mean_reversion: float,
    initial_variance: float,
    long_run_variance: float,
) -> Any:
    """log E[exp(iu X_T)] in the spot form, for one u, by mpmath with 40 guard digits.

    Parameters
    ----------
    u : complex or mpmath.mpc
        Argument, inside the strip of finite moments.
    maturity : float
        T in years, > 0.
    vol_of_vol, correlation, mean_reversion, initial_variance, long_run_variance : float
        The model; vol_of_vol may be 0.

    Returns
    -------
    mpmath.mpc
        Accurate to the precision set in mpmath at the time of the call, at least 15 digits.

    Raises
    ------
    ImportError
        If mpmath is absent.

    Notes
    -----
    The formulas at the head of this file. Cost: under a millisecond. Not thread-safe: mpmath's
    precision is global.
    """
    mp = load_mpmath().mp
    with mp.workdps(mp.dps + 40):
        z, t = mp.mpmathify(u), mp.mpf(maturity)
        nu, rho, reversion = mp.mpf(vol_of_vol), mp.mpf(correlation), mp.mpf(mean_reversion)
        c0, c2 = -(z * z + mp.j * z) / 2, nu * nu / 2
        if c0 == 0:
            return mp.mpc(0)  # total mass and martingale
        b = reversion - mp.j * z * rho * nu
        d = mp.sqrt(b * b - 4 * c0 * c2)
        e = mp.exp(-d * t)
        s = (1 - e) / d if d != 0 else t
        # 1 + e + bs, the first form where the second cancels.
        left = mp.re(b) < 0 and d != 0
        denominator = (4 * c0 * c2 / (b - d) - (b - d) * e) / d if left else 1 + e + b * s
        solution = 2 * c0 * s / denominator
        if c2 == 0:
            integral = c0 * (t - s) / b if b != 0 else c0 * t * t / 2
        else:
            integral = ((b - d) * t / 2 - mp.log(denominator / 2)) / c2
        drive = reversion * mp.mpf(long_run_variance)
        return initial_variance * solution + drive * integral


def explosion_time(
    moment: float, *, vol_of_vol: float, correlation: float, mean_reversion: float
) -> float:
    r"""First time at which E[exp(p X_T)] is infinite; inf if it stays finite.

    Parameters
    ----------
    moment : float
        p, real.
    vol_of_vol, correlation, mean_reversion : float
        The model.

    Returns
    -------
    float
        Years.

    Notes
    -----
    Source: Moment explosions in stochastic volatility models, Finance Stoch. 11, 2007 (memory).
    With :math:`c_0 = (p^2-p)/2`, :math:`c_1 = p\rho\nu - \lambda`, D = c1^2 - 4 c0 c2: the time is
    :math:`\log[(c_1+\sqrt D)/(c_1-\sqrt D)]/\sqrt D` for D > 0 and c1 > 0,
    :math:`2\,\mathrm{atan2}(\sqrt{-D}, c_1)/\sqrt{-D}` for D < 0. Thread-safe.
    """
    c0, c2 = 0.5 * (moment * moment - moment), 0.5 * vol_of_vol**2
    c1 = moment * correlation * vol_of_vol - mean_reversion
    discriminant = c1 * c1 - 4.0 * c0 * c2
    if c0 <= 0.0 or c2 == 0.0 or (discriminant >= 0.0 and c1 <= 0.0):
        return math.inf
    if discriminant > 0.0:
        root = math.sqrt(discriminant)
        return 2.0 * math.atanh(root / c1) / root
    if discriminant == 0.0:
        return 2.0 / c1
    root = math.sqrt(-discriminant)
    return 2.0 * math.atan2(root, c1) / root
