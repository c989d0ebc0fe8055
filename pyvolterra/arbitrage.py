"""Does a surface of prices admit static arbitrage?"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ._validation import finite_reals, require
from .model import VolterraHeston


@dataclass(frozen=True)
class ArbitrageReport:
    """Violations found on a grid, per unit of forward; empty when the surface is free of them.

    Attributes
    ----------
    calendar, butterfly : tuple of str
        One sentence for each violation beyond the tolerance.
    worst_calendar, worst_butterfly : float
        The most negative calendar spread, and the most negative butterfly spread (the price of a
        non-negative payoff), 0 when none is negative.
    grid : str
        What was checked.
    """

    calendar: tuple[str, ...]
    butterfly: tuple[str, ...]
    worst_calendar: float
    worst_butterfly: float
    grid: str

    @property
    def free(self) -> bool:
        """Whether no violation was found."""
        return not self.calendar and not self.butterfly


def check_arbitrage(
    model: VolterraHeston,
    maturities: ArrayLike,
    log_moneyness: ArrayLike,
    *,
    tolerance: float = 1e-6,
) -> ArbitrageReport:
    """Check calendar and butterfly spreads of the model's prices on a grid.

    Parameters
    ----------
    model : VolterraHeston
    maturities : array_like, shape (m,)
        Years, positive and increasing.
    log_moneyness : array_like, shape (k,)
        log(strike / forward), increasing.
    tolerance : float, default 1e-6
        Prices per unit of forward are computed to a tenth of this; a spread counts as a violation
        when it is more negative than this.

    Returns
    -------
    ArbitrageReport

    Notes
    -----
    Forward prices at equal moneyness must not fall with maturity, and call prices must be convex in
    the strike (standard no-arbitrage conditions; common practice, no source). Cost: one pricing of
    the grid.
    """
    t = finite_reals(maturities, "maturities").ravel()
    k = finite_reals(log_moneyness, "log_moneyness").ravel()
    require(np.diff(t, prepend=0.0) > 0.0, t, "maturities", "positive and increasing")
    if k.size < 3:
        raise ValueError(f"log_moneyness must have at least 3 values, got {k.size}")
    require(np.diff(k, prepend=-np.inf) > 0.0, k, "log_moneyness", "increasing")
    strikes = np.exp(k)
    calls = model.price(strikes, t[:, None], tolerance=0.1 * tolerance)
    calendar, worst_calendar = _calendar(t, k, calls, tolerance)
    butterfly, worst_butterfly = _butterfly(t, k, strikes, calls, tolerance)
    grid = (
        f"{t.size} maturities from {t[0]:.4g} to {t[-1]:.4g} years x {k.size} strikes, "
        f"log-moneyness {k[0]:.2f} to {k[-1]:.2f}"
    )
    return ArbitrageReport(calendar, butterfly, worst_calendar, worst_butterfly, grid)


def _calendar(
    t: NDArray[np.float64], k: NDArray[np.float64], calls: NDArray[np.float64], tolerance: float
) -> tuple[tuple[str, ...], float]:
    spread = np.diff(calls, axis=0)
    found = tuple(
        f"between {t[i]:.4g} and {t[i + 1]:.4g} years at log-moneyness {k[j]:.2f} the call falls "
        f"by {-spread[i, j]:.2e} of the forward"
        for i, j in np.argwhere(spread < -tolerance)
    )
    return found, float(min(spread.min(initial=0.0), 0.0))


def _butterfly(
    t: NDArray[np.float64],
    k: NDArray[np.float64],
    strikes: NDArray[np.float64],
    calls: NDArray[np.float64],
    tolerance: float,
) -> tuple[tuple[str, ...], float]:
    left = (strikes[2:] - strikes[1:-1]) / (strikes[2:] - strikes[:-2])
    spread = left * calls[:, :-2] + (1.0 - left) * calls[:, 2:] - calls[:, 1:-1]
    found = tuple(
        f"at {t[i]:.4g} years the butterfly around log-moneyness {k[j + 1]:.2f} costs "
        f"{spread[i, j]:.2e} of the forward"
        for i, j in np.argwhere(spread < -tolerance)
    )
    return found, float(min(spread.min(initial=0.0), 0.0))
