"""A first guess for the fit from the quotes themselves, so that no user guess is needed."""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from . import _core
from .forward_variance import ForwardVariance
from .kernels import FractionalKernel
from .smile_quotes import SmileQuotes


@dataclass(frozen=True)
class SmileSummary:
    """At-the-money level and skew of each expiry, by a weighted parabola near the forward."""

    maturity: NDArray[np.float64]
    volatility: NDArray[np.float64]
    skew: NDArray[np.float64]  # d volatility / d log-moneyness at the forward


def summarise_smiles(smiles: SmileQuotes) -> SmileSummary:
    """Fit ``vol = a + b z + c z^2``, z = k / (sigma sqrt(T)), to the quotes with |z| <= 2."""
    rows = []
    for maturity in np.unique(smiles.maturity):
        here = smiles.maturity == maturity
        k, vol = smiles.log_moneyness[here], smiles.mid_volatility[here]
        stdev = vol[np.argmin(np.abs(k))] * math.sqrt(maturity)
        z = k / stdev
        near = np.abs(z) <= 2.0
        if near.sum() < 3:
            near = np.argsort(np.abs(z))[:3]
        degree = min(2, len(np.unique(z[near])) - 1)
        width = (smiles.ask_volatility[here] - vol)[near]
        coefficients = np.polynomial.polynomial.polyfit(
            z[near], vol[near], degree, w=1.0 / np.maximum(width, 1e-4)
        )
        level = max(float(coefficients[0]), 1e-3)
        slope = float(coefficients[1]) / stdev if degree else 0.0
        rows.append((maturity, level, slope))
    table = np.array(rows)
    return SmileSummary(table[:, 0], table[:, 1], table[:, 2])


def roughness_from_skew(summary: SmileSummary) -> tuple[float, float]:
    """Hurst index and correlation times vol-of-vol from the term structure of the skew.

    For short maturities the skew behaves like ``rho nu T^(H-1/2) / (2 sqrt(V0) Gamma(H+5/2))``
    (Short-term at-the-money asymptotics under stochastic volatility models, SIAM J. Financ. Math.
    10, 2019): a straight line on logarithmic axes.
    """
    used = (np.abs(summary.skew) > 1e-4) & (np.sign(summary.skew) == np.sign(summary.skew.sum()))
    hurst, product = 0.15, -0.25
    if used.sum() >= 2 and np.ptp(np.log(summary.maturity[used])) > 0.5:
        x, y = np.log(summary.maturity[used]), np.log(np.abs(summary.skew[used]))
        slope, level = np.polyfit(x, y, 1)
        hurst = float(np.clip(slope + 0.5, 0.03, 0.45))
        scale = 2.0 * float(np.median(summary.volatility)) * math.gamma(hurst + 2.5)
        product = float(np.sign(summary.skew.sum()) * math.exp(level) * scale)
    return hurst, product


def drive_from_variances(
    kernel_hurst: float,
    mean_reversion: float,
    summary: SmileSummary,
    times: NDArray[np.float64],
) -> tuple[float, NDArray[np.float64]]:
    """Initial variance and excess drive over the admissible floor that match the at-the-money
    total variances best, by non-negative least squares (the problem is linear).
    """
    from scipy.optimize import nnls

    kernel = FractionalKernel(kernel_hurst)
    total = summary.volatility**2 * summary.maturity
    floor = ForwardVariance.lowest_drive(kernel, 1.0, times)
    alpha = kernel.alpha

    def response(beta: float, t: NDArray[np.float64]) -> NDArray[np.float64]:
        t = np.ascontiguousarray(np.maximum(t, 0.0))
        return _core.mittag_leffler_kernel(alpha, beta, mean_reversion, t)

    starts = np.concatenate([[0.0], times[:-1]])
    steps = np.column_stack([response(alpha + 2.0, summary.maturity - s) for s in starts])
    steps[:, :-1] -= steps[:, 1:].copy()
    initial = response(2.0, summary.maturity) + steps @ floor
    matrix = np.column_stack([initial, steps]) / total[:, None]
    solution, _ = nnls(matrix, np.ones(total.size))
    return max(float(solution[0]), 1e-5), solution[1:]
