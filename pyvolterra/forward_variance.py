"""Forward variance curves: today's expectation of the variance at each future time."""

import math
from dataclasses import dataclass, field
from typing import Self

import numpy as np
from numpy.typing import ArrayLike, NDArray

from . import _core
from ._validation import finite_number, finite_reals, require
from .kernels import Kernel

# The form in which a curve crosses the border: driven?, initial variance, times, levels.
CoreCurve = tuple[bool, float, NDArray[np.float64], NDArray[np.float64]]


@dataclass(frozen=True, eq=False)
class ForwardVariance:
    r"""The curve :math:`\xi(t) = E[V_t]`, variance per year against time in years.

    Build one with :meth:`flat`, :meth:`piecewise_constant` (a free market curve) or
    :meth:`driven` (admissible by construction). Immutable; safe to share between threads.

    Attributes
    ----------
    form : {"market", "driven"}
        Whether ``levels`` are of the curve itself or of the drive behind it.
    times, levels : ndarray of float64, shape (n,)
        ``levels[k]`` holds on (``times[k-1]``, ``times[k]``]; the last one continues for ever.
    kernel, initial_variance, mean_reversion
        Of a driven curve; ``None``, 0 and 0 otherwise.

    Raises
    ------
    TypeError, ValueError
        If a value is of the wrong type or out of range, however the curve is built.
    """

    form: str
    times: NDArray[np.float64]
    levels: NDArray[np.float64]
    kernel: Kernel | None = None
    initial_variance: float = 0.0
    mean_reversion: float = 0.0
    _arguments: CoreCurve = field(init=False, repr=False)

    def __post_init__(self) -> None:
        if self.form not in ("market", "driven"):
            raise ValueError(f"form must be 'market' or 'driven', got {self.form!r}")
        driven = self.form == "driven"
        times, levels = _steps(self.times, self.levels)
        start = _non_negative(self.initial_variance, "initial_variance")
        reversion = _non_negative(self.mean_reversion, "mean_reversion")
        if driven and not isinstance(self.kernel, Kernel):
            raise TypeError(
                "kernel must be a FractionalKernel or ConstantKernel, "
                f"got {type(self.kernel).__name__}"
            )
        if not driven:
            require(levels >= 0.0, levels, "levels", "a variance, hence non-negative")
            if self.kernel is not None or start != 0.0 or reversion != 0.0:
                raise ValueError(
                    "kernel, initial_variance and mean_reversion belong to a driven curve; a "
                    "market curve has None, 0 and 0"
                )
        times.setflags(write=False)
        levels.setflags(write=False)
        values = {
            "times": times,
            "levels": levels,
            "initial_variance": start,
            "mean_reversion": reversion,
            "_arguments": (driven, start, times, levels),
        }
        for name, value in values.items():
            object.__setattr__(self, name, value)
        if driven:
            self._check_driven()

    def _check_driven(self) -> None:
        tolerance = 1e-14 * (self.initial_variance + float(np.abs(self.levels).max()))
        at_times = self(self.times)
        if np.any(at_times < -tolerance):
            k = int(np.argmax(at_times < -tolerance))
            raise ValueError(
                f"levels make the forward variance negative: {at_times[k]:.6g} at time "
                f"{self.times[k]:.6g}"
            )

    @classmethod
    def flat(cls, level: float) -> Self:
        """A constant curve.

        Parameters
        ----------
        level : float
            Variance per year, >= 0.
        """
        value = finite_number(level, "level")
        if value < 0.0:
            raise ValueError(f"level must be a variance, hence non-negative, got {value}")
        return cls("market", np.array([1.0]), np.array([value]))

    @classmethod
    def piecewise_constant(cls, times: ArrayLike, levels: ArrayLike) -> Self:
        """A market curve with steps.

        Parameters
        ----------
        times : array_like, shape (n,)
            Ends of the steps in years, positive and increasing.
        levels : array_like, shape (n,)
            Variance per year, >= 0; ``levels[k]`` up to ``times[k]``, the last one continues.

        Notes
        -----
        A curve with a down-step is not the mean of any variance process of the class (see
        :meth:`is_admissible`): use :meth:`driven` when the model must be free of arbitrage.
        """
        return cls("market", np.asarray(times), np.asarray(levels))

    @classmethod
    def driven(
        cls,
        kernel: Kernel,
        initial_variance: float,
        times: ArrayLike,
        levels: ArrayLike,
        mean_reversion: float = 0.0,
    ) -> Self:
        r"""The curve behind :math:`g_0(t) = V_0 + \int_0^t K(t-s)\,\theta(s)\,ds`.

        Parameters
        ----------
        kernel : FractionalKernel or ConstantKernel
            The kernel of the model the curve is meant for.
        initial_variance : float
            Spot variance :math:`V_0` >= 0, per year.
        times, levels : array_like, shape (n,)
            Piecewise-constant drive :math:`\theta`: ``levels[k]`` up to ``times[k]``, the last one
            continues. With mean reversion towards a long-run variance, the drive is
            ``mean_reversion * long_run_variance``.
        mean_reversion : float, default 0
            The model's; :math:`\xi = g_0 - R * g_0` depends on it.

        Raises
        ------
        ValueError
            If a value is out of range, or the curve is negative at one of ``times``.

        Notes
        -----
        Admissible when :math:`\theta(s)\,ds + V_0 L(ds) \ge 0`, L the first-kind resolvent.
        Source: Affine Volterra processes, Ann. Appl. Probab. 29, 2019 (from memory).
        """
        return cls(
            "driven",
            np.asarray(times),
            np.asarray(levels),
            kernel,
            initial_variance,
            mean_reversion,
        )

    def __call__(self, t: ArrayLike) -> NDArray[np.float64]:
        """Forward variance at times ``t`` >= 0 (years): array of the shape of ``t``.

        Cost: one evaluation of a Mittag-Leffler function per time and step of a driven curve with
        mean reversion, powers otherwise; relative accuracy 1e-13.
        """
        times = finite_reals(t, "t")
        require(times >= 0.0, times, "t", "non-negative")
        if self.form == "market":
            index = np.searchsorted(self.times, times, side="left")
            return np.asarray(self.levels[np.minimum(index, self.levels.size - 1)])
        return self._driven(times, 0.0)

    def total_variance(self, t: ArrayLike) -> NDArray[np.float64]:
        """Integral of the curve from 0 to ``t`` (the fair total variance), shape of ``t``."""
        times = finite_reals(t, "t")
        require(times >= 0.0, times, "t", "non-negative")
        if self.form == "market":
            starts = np.concatenate([[0.0], self.times[:-1]])
            ends = np.append(self.times[:-1], np.inf)
            spans = np.clip(times[..., None], starts, ends) - starts
            return np.asarray(spans @ self.levels)
        return self._driven(times, 1.0)

    def _driven(self, times: NDArray[np.float64], integrals: float) -> NDArray[np.float64]:
        # xi = V0 E_{a,1}(-l t^a) + sum theta_k [step response at t - t_{k-1} less that at t - t_k],
        # step response t^a E_{a,a+1}(-l t^a); each integral in time raises the second index by 1.
        assert self.kernel is not None
        alpha, rate = self.kernel.alpha, self.mean_reversion
        flat = np.ascontiguousarray(times.ravel())

        def response(beta: float, t: NDArray[np.float64]) -> NDArray[np.float64]:
            return _core.mittag_leffler_kernel(alpha, beta, rate, np.maximum(t, 0.0))

        result = self.initial_variance * response(1.0 + integrals, flat)
        start = 0.0
        beta = alpha + 1.0 + integrals
        for k, level in enumerate(self.levels):
            step = response(beta, flat - start)
            if k + 1 < self.levels.size:
                start = float(self.times[k])
                step = step - response(beta, flat - start)
            result = result + level * step
        return np.asarray(result.reshape(times.shape))

    def is_admissible(self, kernel: Kernel) -> bool:
        """Whether a model with ``kernel`` can have this curve: V stays non-negative.

        A driven curve is admissible when ``theta(t) + V0 L(t) >= 0`` on every step, L the density
        of the kernel's first-kind resolvent; a piecewise-constant market curve when it has no
        down-step (a sudden fall of E[V] needs negative variance just after it).
        """
        if self.form == "market":
            return bool(np.all(np.diff(self.levels) >= 0.0))
        if self.kernel is None or self.kernel.hurst != kernel.hurst:
            raise ValueError(f"the curve is driven by {self.kernel}, not by {kernel}")
        floor = self.lowest_drive(kernel, self.initial_variance, self.times)
        return bool(np.all(self.levels >= floor - 1e-14))

    @staticmethod
    def lowest_drive(
        kernel: Kernel, initial_variance: float, times: NDArray[np.float64]
    ) -> NDArray[np.float64]:
        """Smallest admissible level of each step: ``-V0 L(times[k])``, and 0 on the last step."""
        floor = np.zeros(times.size)
        if kernel.alpha < 1.0 and initial_variance > 0.0:
            with np.errstate(over="ignore"):  # no floor at all at a time of next to nothing
                density = times[:-1] ** -kernel.alpha / math.gamma(1.0 - kernel.alpha)
            floor[:-1] = -initial_variance * density
        return floor

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, ForwardVariance):
            return NotImplemented
        return (
            (self.form, self.kernel, self.initial_variance, self.mean_reversion)
            == (other.form, other.kernel, other.initial_variance, other.mean_reversion)
            and np.array_equal(self.times, other.times)
            and np.array_equal(self.levels, other.levels)
        )

    def __hash__(self) -> int:
        return hash((self.form, self.times.tobytes(), self.levels.tobytes()))


def _non_negative(value: object, name: str) -> float:
    number = finite_number(value, name)
    if number < 0.0:
        raise ValueError(f"{name} must be non-negative, got {number}")
    return number


def _steps(times: object, levels: object) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    t, values = finite_reals(times, "times"), finite_reals(levels, "levels")
    if t.ndim != 1 or t.size == 0:
        raise ValueError(f"times must be a non-empty one-dimensional array, got shape {t.shape}")
    if values.shape != t.shape:
        raise ValueError(f"levels must have the shape of times {t.shape}, got {values.shape}")
    require(np.diff(t, prepend=0.0) > 0.0, t, "times", "positive and increasing")
    return t, values
