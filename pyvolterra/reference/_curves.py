r"""Step functions of the variance curve against the primitives of the Riccati solution.

With :math:`F = c_0 + c_1 \psi + c_2 \psi^2`, the logarithm of the transform is, for a driven curve
:math:`g_0(t) = V_0 + \int_0^t K(t-s)\,\theta(s)\,ds` and for a market curve :math:`\xi`,

.. math::
    V_0 \int_0^T F(s)\,ds + \int_0^T \theta(T-s)\,\psi(s)\,ds
    \quad\text{and}\quad
    \int_0^T \xi(T-s)\,(F + \lambda\psi)(s)\,ds.

Source: Affine Volterra processes, Ann. Appl. Probab. 29, 2019, arXiv 1708.08796 (memory).
For piecewise-constant curves both are sums of weights times :math:`\int_0^s F` and
:math:`\int_0^s \psi` at the points s = T - (end of a step): no quadrature ever crosses a jump.
"""

from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike


class PrimitiveWeight(NamedTuple):
    """Contribution ``of_f`` * (integral of F to s) + ``of_psi`` * (integral of psi to s)."""

    s: float
    of_f: float
    of_psi: float


def primitive_weights(
    maturity: float,
    mean_reversion: float,
    initial_variance: float | None,
    drive_times: ArrayLike | None,
    drive_levels: ArrayLike | None,
    variance_times: ArrayLike | None,
    variance_levels: ArrayLike | None,
) -> list[PrimitiveWeight]:
    """The curve as weights on the two primitives.

    ``levels[k]`` holds on (``times[k-1]``, ``times[k]``], the last level continues. Raises
    ValueError unless exactly one curve is given, driven (``initial_variance``, ``drive_times``,
    ``drive_levels``) or market (``variance_times``, ``variance_levels``).
    """
    if not maturity > 0.0:
        raise ValueError(f"maturity must be positive, got {maturity}")
    driven = (initial_variance, drive_times, drive_levels)
    market = (variance_times, variance_levels)
    if all(x is None for x in market) and initial_variance is not None:
        if drive_times is None or drive_levels is None:
            raise ValueError("a driven curve needs drive_times and drive_levels")
        weights = [PrimitiveWeight(maturity, initial_variance, 0.0)]
        for s, weight in _step_weights(maturity, drive_times, drive_levels):
            weights.append(PrimitiveWeight(s, 0.0, weight))
        return weights
    if all(x is None for x in driven) and variance_times is not None:
        if variance_levels is None:
            raise ValueError("a market curve needs variance_levels")
        return [
            PrimitiveWeight(s, weight, mean_reversion * weight)
            for s, weight in _step_weights(maturity, variance_times, variance_levels)
        ]
    raise ValueError(
        "give either initial_variance, drive_times and drive_levels, or variance_times and "
        "variance_levels"
    )


def _step_weights(
    maturity: float, times: ArrayLike, levels: ArrayLike
) -> list[tuple[float, float]]:
    """Summation by parts: the first level at s = T, each later jump at T minus its time."""
    t = np.atleast_1d(np.asarray(times, dtype=float))
    values = np.atleast_1d(np.asarray(levels, dtype=float))
    if t.ndim != 1 or t.shape != values.shape or t.size == 0:
        raise ValueError(
            f"times and levels of a curve must be 1-d, equally long and not empty, "
            f"got shapes {t.shape} and {values.shape}"
        )
    if not (t[0] > 0.0 and np.all(np.diff(t) > 0.0)):
        raise ValueError("times of a curve must be positive and increasing")
    steps = [(maturity, float(values[0]))]
    for time, jump in zip(t[:-1], np.diff(values), strict=True):
        if time < maturity:
            steps.append((maturity - float(time), float(jump)))
    return steps
