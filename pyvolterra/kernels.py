"""Kernels: the memory of the variance."""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ._validation import finite_number, finite_reals, require


@dataclass(frozen=True)
class FractionalKernel:
    r"""The fractional (rough) kernel :math:`K(t) = t^{H-1/2} / \Gamma(H+1/2)`.

    Parameters
    ----------
    hurst : float
        Roughness index *H* in (0, 1/2]; 1/2 is the classical model, small values are rough.

    Raises
    ------
    ValueError
        If ``hurst`` is not a finite number in (0, 0.5].
    TypeError
        If ``hurst`` is not a real number.

    Notes
    -----
    Immutable, hashable, safe to share between threads.
    """

    hurst: float

    def __post_init__(self) -> None:
        hurst = finite_number(self.hurst, "hurst")
        if not 0.0 < hurst <= 0.5:
            raise ValueError(f"hurst must lie in (0, 0.5], got {hurst}")
        object.__setattr__(self, "hurst", hurst)

    @property
    def alpha(self) -> float:
        """Order of the fractional integral, ``hurst + 1/2``."""
        return self.hurst + 0.5

    def __call__(self, t: ArrayLike) -> NDArray[np.float64]:
        """Value at times ``t`` >= 0 (years), any shape; infinite at 0 when rough."""
        times = _times(t)
        with np.errstate(divide="ignore"):
            return np.asarray(times ** (self.alpha - 1.0) / math.gamma(self.alpha))


@dataclass(frozen=True)
class ConstantKernel:
    """The constant kernel 1: the classical (Markovian) model, the same as ``hurst = 1/2``."""

    @property
    def hurst(self) -> float:
        """0.5."""
        return 0.5

    @property
    def alpha(self) -> float:
        """1.0."""
        return 1.0

    def __call__(self, t: ArrayLike) -> NDArray[np.float64]:
        """1 at every time ``t`` >= 0 (years), any shape."""
        return np.ones_like(_times(t))


def _times(t: ArrayLike) -> NDArray[np.float64]:
    times = finite_reals(t, "t")
    require(times >= 0.0, times, "t", "non-negative")
    return times


Kernel = FractionalKernel | ConstantKernel
