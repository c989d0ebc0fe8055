"""The result of a calibration."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .arbitrage import ArbitrageReport
from .cleaning import Rejection
from .model import VolterraHeston
from .parity import ForwardCurve
from .smile_quotes import SmileQuotes

# Below this share within bid and ask, or above this many half-widths of residual, the model does
# not describe the quotes: common practice, no source.
MIN_SHARE_INSIDE, MAX_RMS_HALF_WIDTHS = 0.5, 3.0


@dataclass(frozen=True)
class Fit:
    """A model fitted to the quotes of one underlying at one time.

    Attributes
    ----------
    model : VolterraHeston
        The fitted model, ready to price.
    parameters, standard_errors : dict of str to float
        ``hurst``, ``vol_of_vol``, ``correlation``, ``mean_reversion``, ``initial_variance`` and the
        levels ``drive_1 ... drive_n`` of the driven curve. A parameter that was fixed or ended at a
        bound has the standard error 0.
    covariance : ndarray, shape (p, p)
        Of the parameters named in ``covariance_names`` (those free and inside their bounds):
        heteroscedasticity-robust, plus the share that the uncertain forwards bring.
    at_bound : tuple of str
        Parameters that ended at a bound: read their neighbours' errors with care.
    curve_times, curve_levels : ndarray
        The drive of the forward-variance curve (:meth:`ForwardVariance.driven`).
    smiles : SmileQuotes
        The quotes that were fitted; arrays below have one element for each.
    model_volatility, residuals : ndarray
        Implied volatility of the model, and that less the quoted mid volatility.
    weights : ndarray
        1 / half-width in volatility, as used.
    forwards : ForwardCurve
        Forwards and discount factors inferred from put-call parity.
    rejections : tuple of Rejection
        Every quote that was read and not used, with its file row and reason.
    quotes_read : int
        Rows of data in the file, good or bad.
    arbitrage : ArbitrageReport
        Calendar and butterfly check of the fitted surface.
    converged : bool
    message : str
        The optimiser's verdict in words.
    evaluations : int
        Surface evaluations, those for derivatives included.
    elapsed : float
        Seconds.
    fingerprint : str
        SHA-256 of the quotes that were fitted.
    quote_time : numpy.datetime64
    source : str
        Name of the file the quotes came from.
    """

    model: VolterraHeston
    parameters: dict[str, float]
    standard_errors: dict[str, float]
    covariance: NDArray[np.float64]
    covariance_names: tuple[str, ...]
    at_bound: tuple[str, ...]
    curve_times: NDArray[np.float64]
    curve_levels: NDArray[np.float64]
    smiles: SmileQuotes
    model_volatility: NDArray[np.float64]
    residuals: NDArray[np.float64]
    weights: NDArray[np.float64]
    forwards: ForwardCurve
    rejections: tuple[Rejection, ...]
    quotes_read: int
    arbitrage: ArbitrageReport
    converged: bool
    message: str
    evaluations: int
    elapsed: float
    fingerprint: str
    quote_time: np.datetime64
    source: str

    @property
    def share_inside_bid_ask(self) -> float:
        """Share of the fitted quotes whose model volatility lies within bid and ask."""
        s = self.smiles
        low = np.nan_to_num(s.bid_volatility, nan=0.0)
        inside = (self.model_volatility >= low) & (self.model_volatility <= s.ask_volatility)
        return float(np.mean(inside))

    @property
    def rms_residual(self) -> float:
        """Root mean square of the residuals, in volatility."""
        return float(np.sqrt(np.mean(self.residuals**2)))

    @property
    def rms_half_widths(self) -> float:
        """Root mean square of the residuals, each in half-widths of its quote."""
        return float(np.sqrt(np.mean((self.weights * self.residuals) ** 2)))

    @property
    def poor(self) -> bool:
        """Whether fewer than half of the quotes hold the model within bid and ask, or the residuals
        are larger than three half-widths: then the parameters describe something else.
        """
        return (
            self.share_inside_bid_ask < MIN_SHARE_INSIDE
            or not self.rms_half_widths <= MAX_RMS_HALF_WIDTHS
        )
