r"""Fractional Adams schemes on a uniform mesh (product integration with the trapezoid).

The corrector replaces the right-hand side by its piecewise-linear interpolant:

.. math::
    \int_0^{t_n} \frac{(t_n-s)^{\alpha-1}}{\Gamma(\alpha)} f(s)\,ds \approx
    \frac{h^\alpha}{\Gamma(\alpha+2)} \sum_{j=0}^{n} a_{j,n} f(t_j),

:math:`a_{0,n} = (n-1)^{\alpha+1} - (n-1-\alpha) n^\alpha`,
:math:`a_{j,n} = (m+1)^{\alpha+1} - 2 m^{\alpha+1} + (m-1)^{\alpha+1}` with m = n - j, and
:math:`a_{n,n} = 1`. Source: Detailed error analysis for a fractional Adams method, Numer.
Algorithms 36, 2004 (memory). Order min(2, 1 + alpha) for smooth right-hand sides, less near t = 0
for rough ones. Cost: steps^2 / 2 multiply-adds per unknown. All functions are pure: thread-safe.
"""

import math
from collections.abc import Callable

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import gamma

from ._curves import primitive_weights

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


def corrector_weights(alpha: float, steps: int) -> tuple[FloatArray, FloatArray]:
    r"""Weights of the corrector, before the factor :math:`h^\alpha/\Gamma(\alpha+2)`.

    Parameters
    ----------
    alpha : float
        Order of the integral, in (0, 2).
    steps : int
        Number of steps, >= 1.

    Returns
    -------
    first, lagged : ndarray of float64, shape (steps + 1,)
        ``first[n]`` is a_{0,n}; ``lagged[m]`` is a_{n-m,n}, ``lagged[0]`` = 1. ``first[0]`` is 0.

    Notes
    -----
    The differences are summed by the binomial series where they would cancel: relative accuracy
    about 1e-15 throughout.
    """
    n = np.arange(steps + 1, dtype=float)
    power = alpha + 1.0
    binomial = np.cumprod([1.0, *((power - k) / (k + 1.0) for k in range(27))])
    first, lagged = np.zeros(steps + 1), np.ones(steps + 1)
    few = n[1:4]
    first[1:4] = (few - 1.0) ** power - (few - 1.0 - alpha) * few**alpha
    lagged[1:4] = (few + 1.0) ** power - 2.0 * few**power + (few - 1.0) ** power
    many = n[4:]
    # first = n^(a+1) sum_{k>=2} C(a+1, k) (-1/n)^k, lagged = 2 n^(a+1) sum_{k>=1} C(a+1, 2k) n^-2k.
    # Terms beyond the 27th are below 4^-27 of the sum.
    x = 1.0 / many
    first[4:] = np.polynomial.polynomial.polyval(-x, binomial[2:]) * many ** (alpha - 1.0)
    lagged[4:] = (
        2.0 * np.polynomial.polynomial.polyval(x * x, binomial[2::2]) * many ** (alpha - 1.0)
    )
    return first, lagged


def fractional_adams(
    right_hand_side: Callable[[float, NDArray[np.generic]], ArrayLike],
    alpha: float,
    horizon: float,
    steps: int,
    initial: ArrayLike | None = None,
) -> tuple[FloatArray, NDArray[np.generic]]:
    r"""Predict, evaluate, correct, evaluate, for Caputo :math:`D^\alpha y = f(t, y)`.

    Parameters
    ----------
    right_hand_side : callable
        f(t, y) with y of shape (...), returning the shape of y.
    alpha : float
        Order, in (0, 2).
    horizon : float
        Last time, > 0.
    steps : int
        Number of uniform steps, >= 1.
    initial : array_like, shape (ceil(alpha), ...), default zeros, shape (ceil(alpha),)
        y(0) and, for alpha > 1, y'(0).

    Returns
    -------
    times : ndarray of float64, shape (steps + 1,)
    y : ndarray, shape (steps + 1, ...)

    Raises
    ------
    ValueError
        If alpha, horizon, steps or the shape of ``initial`` is out of range.

    Notes
    -----
    Explicit, hence unstable where h^alpha times the Lipschitz constant of f is large. Source:
    Detailed error analysis for a fractional Adams method, Numer. Algorithms 36, 2004 (memory).
    """
    if not 0.0 < alpha < 2.0:
        raise ValueError(f"alpha must lie in (0, 2), got {alpha}")
    _check_mesh(horizon, steps)
    order = math.ceil(alpha)
    start = np.zeros(order) if initial is None else np.asarray(initial)
    if start.ndim == 0 or start.shape[0] != order:
        raise ValueError(f"initial must have shape ({order}, ...), got {start.shape}")
    times = np.linspace(0.0, horizon, steps + 1)
    h = horizon / steps
    f0 = np.asarray(right_hand_side(0.0, start[0]))
    dtype = np.result_type(start, f0, np.float64)
    y = np.empty((steps + 1, *start.shape[1:]), dtype)
    f = np.empty_like(y)
    y[0], f[0] = start[0], f0
    first, lagged = corrector_weights(alpha, steps)
    corrector = h**alpha / gamma(alpha + 2.0)
    n = np.arange(steps + 1, dtype=float)
    predictor = h**alpha / gamma(alpha + 1.0) * np.diff(n**alpha)
    for i in range(1, steps + 1):
        taylor = start[0] + (times[i] * start[1] if order == 2 else 0.0)
        history = np.tensordot(lagged[i - 1 : 0 : -1], f[1:i], axes=1) + first[i] * f[0]
        guess = taylor + np.tensordot(predictor[i - 1 :: -1], f[:i], axes=1)
        y[i] = taylor + corrector * (history + right_hand_side(times[i], guess))
        f[i] = right_hand_side(times[i], y[i])
    return times, y


def riccati_adams(
    hurst: float,
    c0: ArrayLike,
    c1: ArrayLike,
    c2: float,
    horizon: float,
    steps: int,
) -> tuple[FloatArray, ComplexArray, ComplexArray]:
    r"""Implicit Adams–Moulton for :math:`\psi = K * (c_0 + c_1\psi + c_2\psi^2)`.

    :math:`K(t) = t^{\alpha-1}/\Gamma(\alpha)`, alpha = hurst + 1/2.

    Parameters
    ----------
    hurst : float
        In (-1/2, 1/2]; the model needs (0, 1/2].
    c0, c1 : array_like of complex, shape (n,)
        Coefficients, one equation per element; a scalar serves all.
    c2 : float
        Coefficient of the square, common to all.
    horizon : float
        Last time, > 0.
    steps : int
        Number of uniform steps, >= 1.

    Returns
    -------
    times : ndarray of float64, shape (steps + 1,)
    psi, F : ndarray of complex128, shape (steps + 1, n)
        The solution and :math:`c_0 + c_1\psi + c_2\psi^2`.

    Raises
    ------
    ValueError
        If hurst, horizon, steps or a shape is out of range.

    Notes
    -----
    Step n solves :math:`\psi = r + w (c_0 + c_1\psi + c_2\psi^2)`, r the sum over the past and
    :math:`w = h^\alpha/\Gamma(\alpha+2)`, by the root :math:`2e/(q + s)`, :math:`q = 1 - w c_1`,
    :math:`e = r + w c_0`, s the principal root of :math:`q^2 - 4 w c_2 e`. There
    :math:`1 - w(c_1 + 2 c_2\psi) = s` has a non-negative real part: the stable root, the one
    continuous from w = 0 and the one nearest to any accurate predictor. It stays right where an
    explicit predictor overflows. Past the explosion time of a real moment it returns finite, wrong
    numbers.
    """
    if not -0.5 < hurst <= 0.5:
        raise ValueError(f"hurst must lie in (-1/2, 1/2], got {hurst}")
    _check_mesh(horizon, steps)
    a0, a1 = np.broadcast_arrays(
        np.atleast_1d(np.asarray(c0, dtype=np.complex128)),
        np.atleast_1d(np.asarray(c1, dtype=np.complex128)),
    )
    if a0.ndim != 1:
        raise ValueError(f"c0 and c1 must be one-dimensional, got shape {a0.shape}")
    alpha = hurst + 0.5
    w = (horizon / steps) ** alpha / gamma(alpha + 2.0)
    first, lagged = corrector_weights(alpha, steps)
    first, backward = w * first, w * lagged[:0:-1]  # lags steps, ..., 2, 1
    psi = np.zeros((steps + 1, a0.size), np.complex128)
    F = np.empty_like(psi)
    F[0] = a0
    parts = F.view(np.float64)  # real weights: products of real matrices cost half
    q = 1.0 - w * a1
    q_squared, constant, factor = q * q, w * a0, 4.0 * w * c2
    for n in range(1, steps + 1):
        history = (backward[steps - n + 1 :] @ parts[1:n]).view(np.complex128)
        e = history + first[n] * a0 + constant
        p = 2.0 * e / (q + np.sqrt(q_squared - factor * e))
        psi[n] = p
        F[n] = a0 + (a1 + c2 * p) * p
    return np.linspace(0.0, horizon, steps + 1), psi, F


def log_transform_adams(
    u: ArrayLike,
    maturity: float,
    steps: int,
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
) -> ComplexArray:
    r"""log E[exp(iu X_T)] by :func:`riccati_adams` with exactly ``steps`` steps to ``maturity``.

    Parameters
    ----------
    u : array_like of complex, shape (n,)
        Arguments.
    maturity : float
        T in years, > 0.
    steps : int
        Number of uniform steps, >= 1.
    hurst, vol_of_vol, correlation, mean_reversion : float
        The model; vol_of_vol multiplies sqrt(V) plainly.
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
        If not exactly one curve is given, or an argument is out of range.

    Notes
    -----
    The piecewise-linear interpolants of psi and F are integrated exactly against the steps of the
    curve.
    """
    weights = primitive_weights(
        maturity,
        mean_reversion,
        initial_variance,
        drive_times,
        drive_levels,
        variance_times,
        variance_levels,
    )
    z = np.atleast_1d(np.asarray(u, dtype=np.complex128))
    c0 = -0.5 * (z * z + 1j * z)
    c1 = 1j * z * correlation * vol_of_vol - mean_reversion
    _, psi, F = riccati_adams(hurst, c0, c1, 0.5 * vol_of_vol**2, maturity, steps)
    h = maturity / steps
    integral_of_f, integral_of_psi = _trapezoids(F, h), _trapezoids(psi, h)
    total = np.zeros(z.shape, np.complex128)
    for s, of_f, of_psi in weights:
        if of_f != 0.0:
            total += of_f * _primitive(F, integral_of_f, s, h)
        if of_psi != 0.0:
            total += of_psi * _primitive(psi, integral_of_psi, s, h)
    return total


def _trapezoids(values: ComplexArray, h: float) -> ComplexArray:
    """Integral of the piecewise-linear interpolant up to each node, shape of ``values``."""
    result = np.zeros_like(values)
    np.cumsum(0.5 * h * (values[1:] + values[:-1]), axis=0, out=result[1:])
    return result


def _primitive(values: ComplexArray, integral: ComplexArray, s: float, h: float) -> ComplexArray:
    """Integral of the piecewise-linear interpolant from 0 to s, shape (n,)."""
    cell = min(int(s / h), len(values) - 2)
    x = s - cell * h
    slope = (values[cell + 1] - values[cell]) / h
    result: ComplexArray = integral[cell] + x * (values[cell] + 0.5 * x * slope)
    return result


def _check_mesh(horizon: float, steps: int) -> None:
    if not (horizon > 0.0 and math.isfinite(horizon)):
        raise ValueError(f"horizon must be positive and finite, got {horizon}")
    if steps < 1:
        raise ValueError(f"steps must be at least 1, got {steps}")
