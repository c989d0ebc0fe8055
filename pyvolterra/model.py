"""The affine Volterra model of one rough variance factor: transforms, prices, volatilities."""

from collections.abc import Iterable
from typing import Any, Self

import numpy as np
from numpy.typing import ArrayLike

from . import _core, prices
from ._validation import finite_number, positive_number
from .forward_variance import ForwardVariance
from .kernels import Kernel
from .sensitivities import TransformSensitivities, transform_sensitivities
from .transform import log_transform


class VolterraHeston:
    r"""Volterra Heston model: :math:`dX = -V/2\,dt + \sqrt{V}\,dB`, d<W,B> = ρ dt, and

    .. math:: V_t = g_0(t) + \int_0^t K(t-s)\,(-\lambda V_s\,ds + \nu\sqrt{V_s}\,dW_s).

    X is the logarithm of the underlying over its forward; times in years, variance per year.

    Parameters
    ----------
    kernel : FractionalKernel or ConstantKernel
        Memory of the variance, K.
    vol_of_vol : float
        ν >= 0. **Convention:** ν multiplies sqrt(V) plainly. Part of the literature (The
        characteristic function of rough Heston models, Math. Finance 29, 2019, arXiv 1609.02108)
        writes λν sqrt(V); multiply that paper's ν by its λ before passing it here.
    correlation : float
        ρ in [-1, 1].
    forward_variance : ForwardVariance
        Curve of E[V_t]. A driven curve must have been built with the same kernel and mean
        reversion.
    mean_reversion : float, default 0
        λ >= 0, per year^(H+1/2).

    Raises
    ------
    TypeError, ValueError
        Naming the argument and the rule it breaks.

    Notes
    -----
    Immutable: every method may be called from several threads at once; the numerical core runs
    without the global interpreter lock.
    """

    __slots__ = (
        "_core_model",
        "correlation",
        "forward_variance",
        "kernel",
        "mean_reversion",
        "vol_of_vol",
    )

    def __init__(
        self,
        kernel: Kernel,
        vol_of_vol: float,
        correlation: float,
        forward_variance: ForwardVariance,
        mean_reversion: float = 0.0,
    ) -> None:
        if not isinstance(kernel, Kernel):
            raise TypeError(
                f"kernel must be a FractionalKernel or ConstantKernel, got {type(kernel).__name__}"
            )
        if not isinstance(forward_variance, ForwardVariance):
            raise TypeError(
                f"forward_variance must be a ForwardVariance, got {type(forward_variance).__name__}"
            )
        nu = finite_number(vol_of_vol, "vol_of_vol")
        if nu < 0.0:
            raise ValueError(f"vol_of_vol must be non-negative, got {nu}")
        rho = finite_number(correlation, "correlation")
        if not -1.0 <= rho <= 1.0:
            raise ValueError(f"correlation must lie in [-1, 1], got {rho}")
        reversion = finite_number(mean_reversion, "mean_reversion")
        if reversion < 0.0:
            raise ValueError(f"mean_reversion must be non-negative, got {reversion}")
        driver = forward_variance.kernel
        if driver is not None and (
            driver.hurst != kernel.hurst or forward_variance.mean_reversion != reversion
        ):
            raise ValueError(
                f"forward_variance was driven by {driver} with mean_reversion "
                f"{forward_variance.mean_reversion}, the model has {kernel} with {reversion}: "
                "build the curve with the model's own"
            )
        object.__setattr__(self, "kernel", kernel)
        object.__setattr__(self, "vol_of_vol", nu)
        object.__setattr__(self, "correlation", rho)
        object.__setattr__(self, "forward_variance", forward_variance)
        object.__setattr__(self, "mean_reversion", reversion)
        object.__setattr__(self, "_core_model", (kernel.hurst, nu, rho, reversion))

    kernel: Kernel
    vol_of_vol: float
    correlation: float
    forward_variance: ForwardVariance
    mean_reversion: float
    _core_model: tuple[float, float, float, float]

    def __setattr__(self, name: str, value: object) -> None:
        raise AttributeError(f"{type(self).__name__} is immutable: cannot set {name}")

    def __delattr__(self, name: str) -> None:
        raise AttributeError(f"{type(self).__name__} is immutable: cannot delete {name}")

    def __reduce__(self) -> tuple[Any, ...]:
        arguments = (
            self.kernel,
            self.vol_of_vol,
            self.correlation,
            self.forward_variance,
            self.mean_reversion,
        )
        return type(self), arguments

    def __repr__(self) -> str:
        return (
            f"VolterraHeston({self.kernel}, vol_of_vol={self.vol_of_vol:.6g}, "
            f"correlation={self.correlation:.6g}, mean_reversion={self.mean_reversion:.6g})"
        )

    @classmethod
    def from_spot_variance(
        cls,
        kernel: Kernel,
        *,
        vol_of_vol: float,
        correlation: float,
        mean_reversion: float,
        initial_variance: float,
        long_run_variance: float,
    ) -> Self:
        r"""The model with :math:`g_0(t) = V_0 + \lambda\theta\int_0^t K`.

        Parameters
        ----------
        initial_variance, long_run_variance : float
            V0 and θ, variance per year, >= 0. The others as in the class.
        """
        long_run = finite_number(long_run_variance, "long_run_variance")
        if long_run < 0.0:
            raise ValueError(
                f"long_run_variance must be a variance, hence non-negative, got {long_run}"
            )
        reversion = finite_number(mean_reversion, "mean_reversion")
        curve = ForwardVariance.driven(
            kernel, initial_variance, [1.0], [reversion * long_run], reversion
        )
        return cls(kernel, vol_of_vol, correlation, curve, reversion)

    def log_characteristic_function(
        self,
        u: ArrayLike,
        maturities: ArrayLike,
        *,
        tolerance: float = 1e-8,
        scheme: str = "auto",
        steps: int | None = None,
        threads: int | None = None,
        full_output: bool = False,
    ) -> Any:
        r"""log E[exp(iuX_T)], continuous in u and zero at u = 0.

        Parameters
        ----------
        u : complex or array_like of complex, shape (n,)
            Fourier arguments inside the strip of finite moments.
        maturities : float or array_like of float, shape (m,)
            Years, > 0.
        tolerance : float, default 1e-8
            Bound on the absolute error of the characteristic function divided by its value at
            ``i Im u``: the plain absolute error for real ``u``.
        scheme : {"auto", "graded", "adams"}
            ``"graded"``: high-order product integration on a geometric mesh chosen for each u, one
            solve for all maturities. ``"adams"``: uniform fractional Adams scheme, order
            min(2, 3/2 + H), steps doubled from 64 to at most 2048 for each u and maturity.
            ``"auto"``: the closed form at hurst 1/2, else ``"graded"``, on the lines Im u = 0 and
            Im u = -1/2 solved for at 16 to 128 nodes and interpolated in between.
        steps : int, optional
            With ``scheme="adams"``: exactly this many steps to each maturity, whatever the
            tolerance.
        threads : int, optional
            At most this many threads; :func:`pyvolterra.default_threads` if not given. The values
            are the same bit for bit for any number.
        full_output : bool, default False
            Return ``(values, info)`` with a :class:`TransformInfo`.

        Returns
        -------
        ndarray of complex128, shape (m, n)
            A scalar ``u`` or maturity drops its axis; two scalars give a scalar.

        Raises
        ------
        MomentExplosionError
            If ``u`` lies outside the strip where the transform is finite.
        TypeError, ValueError
            For NaN or infinite input, maturities <= 0, shapes, unknown schemes.

        Warns
        -----
        AccuracyWarning
            If the tolerance could not be met; the message gives the estimated error.

        Notes
        -----
        With ``full_output`` every u of ``"graded"`` is solved a second time on a finer mesh, and
        again until the estimated error meets the tolerance. Without, the mesh is trusted where the
        solver's own indicator raises no doubt: about twice as fast. In 520,000 random values at
        1e-6, 1e-8 and 1e-10 (``bench/tolerance.py``: vol_of_vol .1 to 1, correlation -1 to .5, mean
        reversion 0 to 3, a day to 10 years, |u| to 1000) none was beyond its tolerance; in 340,000
        far outside (vol_of_vol to 5, any correlation, to 30 years) 15 were, by up to 80 times at
        correlation 1, and none with ``full_output``. The estimate of
        ``"adams"`` extrapolates three meshes. All include a rounding bound.

        Values never depend on the other u of the call, bit for bit; those of ``"graded"`` depend,
        within the tolerance, on the longest maturity. Where the characteristic function is far
        below the tolerance its logarithm is only a rough one.

        Cost for all maturities together: about half a microsecond per u (graded); a fixed 20 to 80
        microseconds and then a tenth of that per u on an interpolated line; O(N^1.6) per u and
        maturity (adams). Safe to call from several threads, which share the tables of the scheme.
        Formula: Affine forward variance models, Finance Stoch. 23, 2019 (from memory).
        """
        return log_transform(self, u, maturities, tolerance, scheme, steps, threads, full_output)

    def characteristic_function(
        self,
        u: ArrayLike,
        maturities: ArrayLike,
        *,
        tolerance: float = 1e-8,
        scheme: str = "auto",
        steps: int | None = None,
        threads: int | None = None,
        full_output: bool = False,
    ) -> Any:
        """E[exp(iuX_T)]; arguments, shapes, errors and accuracy as in
        :meth:`log_characteristic_function`.
        """
        found = log_transform(self, u, maturities, tolerance, scheme, steps, threads, full_output)
        logarithm, info = found if full_output else (found, None)
        result = np.exp(logarithm)
        if np.ndim(result) == 0:
            result = complex(result)
        return (result, info) if full_output else result

    def transform_sensitivities(
        self,
        u: ArrayLike,
        maturities: ArrayLike,
        parameters: Iterable[str] | None = None,
        *,
        tolerance: float = 1e-8,
        threads: int | None = None,
    ) -> TransformSensitivities:
        r"""log E[exp(iuX_T)] and its derivatives with respect to the parameters.

        **Held fixed** is the curve as it is given: :math:`\xi` of a market curve, :math:`V_0` and
        the drive :math:`\theta` of a driven one, whose :math:`\xi` moves with hurst and mean
        reversion. With :math:`F = c_0 + c_1\psi + c_2\psi^2` these are the derivatives of

        .. math:: \int_0^T \xi(T-s)\,(F + \lambda\psi)(s)\,ds \quad\text{and}\quad
            V_0\int_0^T F(s)\,ds + \int_0^T \theta(T-s)\,\psi(s)\,ds.

        Parameters
        ----------
        u, maturities
            As in :meth:`log_characteristic_function`.
        parameters : iterable of str, optional
            Among ``"hurst"``, ``"vol_of_vol"``, ``"correlation"``, ``"mean_reversion"``,
            ``"forward_variance"`` (one derivative per level of the curve) and, for a driven curve,
            ``"initial_variance"``. All that apply if not given.
        tolerance : float, default 1e-8
            Of the values, as in :meth:`log_characteristic_function`.
        threads : int, optional
            At most this many threads; :func:`pyvolterra.default_threads` if not given. The results
            are the same bit for bit for any number.

        Returns
        -------
        TransformSensitivities
            ``values``, shape (m, n), and ``derivatives`` by name, each (m, n);
            ``"forward_variance"`` is (levels, m, n). Scalars drop their axes.

        Raises
        ------
        MomentExplosionError
            If ``u`` lies outside the strip where the transform is finite.
        TypeError, ValueError
            For NaN or infinite input, maturities <= 0, shapes, unknown or repeated names.

        Warns
        -----
        AccuracyWarning
            If some u could not be solved to the tolerance, or not at all: its results are nan.

        Notes
        -----
        The graded scheme and its tangent equations on the same mesh, one level finer than the
        tolerance asks for. At hurst 1/2 values and the derivatives by the curve come from the
        closed form, and the one by hurst is one-sided. The derivatives by the curve are exact given
        the values, which are linear in it.
        Accuracy: ten times the tolerance, relative to the largest derivative along the line of u.
        Measured at 1e-8 against the scheme's finest mesh: 10 of 3200 random models exceed 1e-7
        somewhere, the worst with 6e-7, by hurst at a maturity where that derivative changes sign.
        Cost for all parameters together, against ``scheme="graded"`` without an error estimate: 3.6
        to 4.3 times as much; 1.8 to 2 times on the lines Im u = 0 and -1/2, which are interpolated.
        Results never depend on the other u of the call. Safe to call from several threads.
        Source: Affine forward variance models, Finance Stoch. 23, 2019 (from memory), for the
        transform; the tangents are its derivatives.
        """
        return transform_sensitivities(self, u, maturities, parameters, tolerance, threads)

    def price(
        self,
        strikes: ArrayLike,
        maturities: ArrayLike,
        *,
        forward: ArrayLike = 1.0,
        discount: ArrayLike = 1.0,
        call: ArrayLike = True,
        tolerance: float = 1e-10,
    ) -> Any:
        """Prices of European calls and puts.

        Parameters
        ----------
        strikes, maturities, forward, discount : array_like of float
            All positive; they broadcast against each other and against ``call``.
        call : array_like of bool, default True
            True for calls, False for puts.
        tolerance : float, default 1e-10
            Absolute error per unit of ``forward * discount``.

        Returns
        -------
        float or ndarray of float64
            In the unit of ``forward * discount``, of the broadcast shape.

        Warns
        -----
        AccuracyWarning
            If the estimated error exceeds the tolerance.

        Notes
        -----
        Out-of-the-money prices come from a Fourier integral on the line Im u = -1/2 with a Black
        control variate and an exponentially convergent rule whose step is halved until the
        estimate meets the tolerance; in-the-money ones follow from put-call parity. Cost: one
        transform of 40 to 200 arguments per distinct maturity.
        """
        return prices.price(self, strikes, maturities, forward, discount, call, tolerance)

    def implied_volatility(
        self,
        strikes: ArrayLike,
        maturities: ArrayLike,
        *,
        forward: ArrayLike = 1.0,
        tolerance: float = 1e-10,
    ) -> Any:
        """Black implied volatilities of the model's prices.

        Parameters
        ----------
        strikes, maturities, forward : array_like of float
            All positive; they broadcast against each other. Maturities in years, at most 1000.
        tolerance : float, default 1e-10
            Absolute error of the prices per unit of ``forward``.

        Returns
        -------
        float or ndarray of float64
            Volatilities per sqrt(year), of the broadcast shape; nan at strikes so far out that the
            out-of-the-money price is below the tolerance.

        Raises
        ------
        TypeError, ValueError
            As :meth:`price`.

        Warns
        -----
        AccuracyWarning
            If the estimated price error exceeds the tolerance.

        Notes
        -----
        The error of a volatility is that of the price over forward times the Black vega. Cost: that
        of :meth:`price` plus the inversion.
        """
        return prices.implied_volatility(self, strikes, maturities, forward, tolerance)

    def moment_strip(self, maturity: float) -> tuple[float, float]:
        """Critical moments: E[exp(p X_T)] is finite for every p between them.

        Parameters
        ----------
        maturity : float
            T in years, > 0.

        Returns
        -------
        lower, upper : float
            lower <= 0 and upper >= 1, -inf and inf where no moment explodes before the maturity.
            A Fourier argument u is admissible when ``lower < -u.imag < upper``.

        Raises
        ------
        TypeError, ValueError
            If the maturity is not a positive finite number.

        Notes
        -----
        The strip does not depend on the variance curve, which is taken to be positive. Relative
        error of the distances from 0 and 1 below 1e-8, beside the late explosions described at
        :meth:`explosion_time` below 1e-4. Cost: the root in p of ``explosion_time(p) = maturity``,
        1 to 3 ms, 2 microseconds at hurst 1/2. Thread-safe. Published source: Moment explosions in
        the rough Heston model, arXiv 1801.09458.

        The lowest and highest moments bound the decay of the tails, hence the wings of the smile:
        The moment formula for implied volatility at extreme strikes, Math. Finance 14, 2004 (from
        memory). They are moments of the model and carry its risk.
        """
        return _core.moment_strip(self._core_model, positive_number(maturity, "maturity"))

    def explosion_time(self, moment: float) -> float:
        r"""First maturity at which E[exp(p X_T)] is infinite.

        Parameters
        ----------
        moment : float
            p, any real number.

        Returns
        -------
        float
            Years; inf if the moment is finite at every maturity, as for 0 <= p <= 1.

        Raises
        ------
        TypeError, ValueError
            If the moment is not a finite number.

        Notes
        -----
        The blow-up time of the Riccati-Volterra equation
        :math:`\psi = K * [\tfrac12 (p^2 - p) + (p\rho\nu - \lambda)\psi + \tfrac12\nu^2\psi^2]`.
        It does not depend on the variance curve, which is taken to be positive. At hurst 1/2 the
        closed form; else product integration, relative error below 1e-9 as a rule and below 1e-7
        while the roots of the quadratic, a complex pair, are 1e-5 of their size apart. Where they
        all but meet the moment explodes late, after 1e7 of the equation's own units of time or
        more, and that time is good to 1e-4. Cost: 0.06 to 0.3 ms. Thread-safe.

        Published sources: Moment explosions in stochastic volatility models, Finance Stoch. 11,
        2007 (closed form); Moment explosions in the rough Heston model, arXiv 1801.09458 (a moment
        explodes exactly when it does in the classical model of the same parameters).
        """
        return _core.explosion_time(self._core_model, finite_number(moment, "moment"))
