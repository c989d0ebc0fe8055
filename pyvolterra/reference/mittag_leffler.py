r"""Mittag-Leffler functions and the mean of the variance, in mpmath arithmetic."""

import math
from typing import Any

from ._mpmath import load_mpmath


def mittag_leffler(z: float, alpha: float, beta: float = 1.0, digits: int = 20) -> Any:
    r""":math:`E_{\alpha,\beta}(z) = \sum_k z^k/\Gamma(\alpha k+\beta)` for real z.

    Parameters
    ----------
    z : float
        Any z <= 0, and positive z up to about :math:`200^\alpha`.
    alpha : float
        In (0, 1].
    beta : float, default 1
        > 0.
    digits : int, default 20
        Significant digits wanted.

    Returns
    -------
    mpmath.mpf

    Raises
    ------
    ValueError
        If alpha or beta is out of range.
    ImportError
        If mpmath is absent.

    Notes
    -----
    The series, with as many additional digits as its terms cancel (they reach
    :math:`\exp|z|^{1/\alpha}`); for large negative z and alpha < 1 the asymptotic series
    :math:`-\sum_{k\ge1} z^{-k}/\Gamma(\beta-\alpha k)`, taken where :math:`\exp(-|z|^{1/\alpha})`
    is below the square of the accuracy. Source: Higher Transcendental Functions III, section 18.1,
    1955 (memory). Cost: milliseconds to a second. Not thread-safe: mpmath's precision is global.
    """
    if not 0.0 < alpha <= 1.0:
        raise ValueError(f"alpha must lie in (0, 1], got {alpha}")
    if not beta > 0.0:
        raise ValueError(f"beta must be positive, got {beta}")
    mp = load_mpmath().mp
    exponent = abs(z) ** (1.0 / alpha)
    if z < 0.0 and alpha < 1.0 and exponent > 2.0 * (digits + 5) * math.log(10.0):
        return _asymptotic(mp, z, alpha, beta, digits)
    with mp.workdps(digits + 15 + int(exponent / math.log(10.0))):
        x, a, b = mp.mpf(z), mp.mpf(alpha), mp.mpf(beta)
        total, power, k = mp.mpf(0), mp.mpf(1), 0
        smallest = mp.mpf(10) ** (-mp.dps)
        while True:
            term = power * mp.rgamma(a * k + b)
            total += term
            if abs(term) < smallest and a * k > exponent:
                return total
            power *= x
            k += 1


def _asymptotic(mp: Any, z: float, alpha: float, beta: float, digits: int) -> Any:
    with mp.workdps(digits + 15):
        x, a, b = mp.mpf(z), mp.mpf(alpha), mp.mpf(beta)
        total, k = mp.mpf(0), 1
        while True:
            total -= x**-k * mp.rgamma(b - a * k)
            k += 1
            # |1/Gamma(b - ak)| <= Gamma(ak + 1 - b)/pi bounds the terms without their zeros.
            if a * k > b:
                size = abs(x) ** -k * mp.gamma(a * k + 1 - b) / mp.pi
                if size < mp.mpf(10) ** (-digits - 2) * abs(total):
                    return total


def mean_variance(
    t: float,
    hurst: float,
    mean_reversion: float,
    initial_variance: float,
    long_run_variance: float,
) -> Any:
    r""":math:`E[V_t] = \theta + (V_0-\theta) E_{\alpha,1}(-\lambda t^\alpha)`, alpha = hurst + 1/2.

    Parameters
    ----------
    t : float
        Years, >= 0.
    hurst : float
        In (0, 1/2].
    mean_reversion : float
        lambda >= 0.
    initial_variance, long_run_variance : float
        V_0 and theta, per year.

    Returns
    -------
    mpmath.mpf

    Raises
    ------
    ValueError, ImportError
        As :func:`mittag_leffler`.

    Notes
    -----
    Source: The characteristic function of rough Heston models, Math. Finance 29, 2019, arXiv
    1609.02108 (memory). Accuracy, cost and threads: as :func:`mittag_leffler`.
    """
    alpha = hurst + 0.5
    decay = mittag_leffler(-mean_reversion * t**alpha, alpha)
    return long_run_variance + (initial_variance - long_run_variance) * decay
