"""How far to trust fitted parameters: robust standard errors."""

import numpy as np
from numpy.typing import NDArray

Bounds = tuple[NDArray[np.float64], NDArray[np.float64]]


def parameter_covariance(
    names: tuple[str, ...],
    x: NDArray[np.float64],
    bounds: Bounds,
    residuals: NDArray[np.float64],
    jacobian: NDArray[np.float64],
    shared_errors: NDArray[np.float64],
    parameter_map: NDArray[np.float64],
) -> tuple[tuple[str, ...], NDArray[np.float64], tuple[str, ...]]:
    """Covariance of the parameters that are inside their bounds.

    A bid-ask half-width is not a standard deviation, so the size of the noise is taken from the
    residuals, quote by quote, each over one less its leverage (the third estimator of Some
    heteroskedasticity-consistent covariance matrix estimators with improved finite sample
    properties, J. Econometrics 29, 1985; from memory): curve levels rest on few quotes, whose
    residuals are smaller than their noise. To that comes the spread caused by errors that whole
    groups of quotes share, one column of ``shared_errors`` (change of the residuals at one standard
    error) per source: the uncertain forwards.

    Returns
    -------
    names : tuple of str
        Parameters inside their bounds, in the order of the rows of the covariance.
    covariance : ndarray, shape (p, p)
        Of the reported parameters, ``parameter_map`` being their derivative to ``x``.
    at_bound : tuple of str
        The others.
    """
    lower, upper = bounds
    # A coordinate this close to its bound is held there: its optimum may lie beyond.
    span = np.maximum(np.abs(x), 1e-3)
    inside = (x - lower > 1e-5 * span) & (upper - x > 1e-5 * span)
    columns = jacobian[:, inside]
    scale = np.linalg.norm(columns, axis=0)
    scale[scale == 0.0] = 1.0
    pseudo_inverse = np.linalg.pinv(columns / scale, rcond=1e-12) / scale[:, None]
    leverage = np.einsum("ij,ji->i", columns, pseudo_inverse)
    spread = pseudo_inverse * (residuals / np.maximum(1.0 - leverage, 0.05))
    covariance = spread @ spread.T
    shared = pseudo_inverse @ shared_errors
    covariance = covariance + shared @ shared.T
    to_reported = parameter_map[np.ix_(inside, inside)]
    covariance = to_reported @ covariance @ to_reported.T
    free = tuple(name for name, keep in zip(names, inside, strict=True) if keep)
    held = tuple(name for name, keep in zip(names, inside, strict=True) if not keep)
    return free, covariance, held
