"""Forward variance curves against closed forms, quadrature and the Mittag-Leffler oracle."""

import math

import numpy as np
import pytest
from scipy.integrate import quad

import pyvolterra as pv
from pyvolterra.reference.mittag_leffler import mean_variance

ROUGH = pv.FractionalKernel(0.12)


def test_flat():
    curve = pv.ForwardVariance.flat(0.04)
    np.testing.assert_array_equal(curve([0.0, 1.0, 30.0]), 0.04)
    np.testing.assert_allclose(curve.total_variance([0.5, 2.0]), [0.02, 0.08], rtol=1e-15)
    assert curve.is_admissible(ROUGH)


def test_piecewise_constant_levels_hold_up_to_their_times():
    curve = pv.ForwardVariance.piecewise_constant([0.25, 1.0], [0.09, 0.01])
    np.testing.assert_array_equal(
        curve([0.0, 0.25, 0.2500001, 1.0, 5.0]), [0.09, 0.09, 0.01, 0.01, 0.01]
    )
    np.testing.assert_allclose(curve.total_variance([0.25, 2.0]), [0.0225, 0.0225 + 0.0175])
    assert not curve.is_admissible(ROUGH)  # a down-step
    assert pv.ForwardVariance.piecewise_constant([0.25, 1.0], [0.01, 0.09]).is_admissible(ROUGH)


def test_driven_curve_is_the_initial_variance_plus_the_kernel_against_the_drive():
    curve = pv.ForwardVariance.driven(ROUGH, 0.02, [0.1, 0.5, 1.0], [0.03, -0.01, 0.02])

    def drive(s):
        return np.array([0.03, -0.01, 0.02])[np.searchsorted([0.1, 0.5], s)]

    for t in (0.05, 0.3, 0.7, 2.0):
        # int_0^t K(t-s) theta(s) ds with the singularity removed by x = (t-s)^alpha
        breaks = [(t - s) ** ROUGH.alpha for s in (0.1, 0.5) if s < t]
        value, _ = quad(
            lambda x, t=t: drive(t - x ** (1 / ROUGH.alpha)),
            0.0,
            t**ROUGH.alpha,
            points=sorted(breaks) or None,
            epsabs=1e-14,
        )
        expected = 0.02 + value / math.gamma(ROUGH.alpha + 1.0)
        assert curve(t) == pytest.approx(expected, rel=1e-10)


def test_mean_reversion_gives_the_known_mean_variance():
    # E[V_t] = theta + (V0 - theta) E_{alpha,1}(-lambda t^alpha); The characteristic function of
    # rough Heston models, Math. Finance 29, 2019, arXiv 1609.02108 (memory).
    rate, long_run, start = 0.7, 0.06, 0.02
    curve = pv.ForwardVariance.driven(ROUGH, start, [1.0], [rate * long_run], rate)
    for t in (0.01, 0.5, 3.0, 20.0):
        expected = float(mean_variance(t, ROUGH.hurst, rate, start, long_run))
        assert float(curve(t)) == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize("rate", [0.0, 0.4, 3.0])
def test_total_variance_is_the_integral(rate):
    curve = pv.ForwardVariance.driven(ROUGH, 0.02, [0.1, 1.0], [0.05, 0.02], rate)
    value, _ = quad(curve, 0.0, 1.7, points=[0.1, 1.0], epsabs=1e-12, limit=200)
    assert float(curve.total_variance(1.7)) == pytest.approx(value, rel=1e-9)


def test_admissible_floor_is_the_first_kind_resolvent():
    # L(t) = t^(-alpha)/Gamma(1-alpha): theta may fall to -V0 L on each step, to 0 on the last.
    floor = pv.ForwardVariance.lowest_drive(ROUGH, 0.04, np.array([0.5, 1.0]))
    assert floor[0] == pytest.approx(-0.04 * 0.5**-0.62 / math.gamma(0.38))
    assert floor[1] == 0.0
    ok = pv.ForwardVariance.driven(ROUGH, 0.04, [0.5, 1.0], [0.999 * floor[0], 0.0])
    low = pv.ForwardVariance.driven(ROUGH, 0.04, [0.5, 1.0], [1.01 * floor[0], 0.0])
    assert ok.is_admissible(ROUGH)
    assert not low.is_admissible(ROUGH)


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: pv.ForwardVariance.flat(-0.01), "level must be a variance"),
        (lambda: pv.ForwardVariance.flat(math.nan), "level must be finite"),
        (
            lambda: pv.ForwardVariance.piecewise_constant([1.0, 0.5], [0.1, 0.1]),
            r"times\[1\] must be positive and increasing",
        ),
        (
            lambda: pv.ForwardVariance.piecewise_constant([0.5, 1.0], [0.1]),
            r"levels must have the shape of times \(2,\), got \(1,\)",
        ),
        (
            lambda: pv.ForwardVariance.piecewise_constant([0.5, 1.0], [0.1, -0.1]),
            r"levels\[1\] must be a variance, hence non-negative, got -0.1",
        ),
        (lambda: pv.ForwardVariance.driven(ROUGH, -0.1, [1.0], [0.1]), "initial_variance must"),
        (
            lambda: pv.ForwardVariance.driven(ROUGH, 0.01, [1.0], [-1.0]),
            "levels make the forward variance negative",
        ),
        (lambda: pv.ForwardVariance.flat(0.1)([-1.0]), r"t\[0\] must be non-negative"),
    ],
)
def test_bad_values(make, message):
    with pytest.raises(ValueError, match=message):
        make()


@pytest.mark.parametrize("hurst", [0.5, math.nextafter(0.5, 0.0)])
def test_without_a_resolvent_to_lean_on_the_floor_is_zero(hurst):
    # just below one half hurst + 1/2 rounds to 1, and 1/Gamma(0) = 0
    floor = pv.ForwardVariance.lowest_drive(pv.FractionalKernel(hurst), 0.04, np.array([0.5, 1.0]))
    np.testing.assert_array_equal(floor, 0.0)


@pytest.mark.filterwarnings("error")
@pytest.mark.parametrize(("initial_variance", "floor"), [(0.04, -np.inf), (0.0, 0.0)])
def test_the_floor_where_the_resolvent_overflows(initial_variance, floor):
    kernel, times = pv.FractionalKernel(0.49), np.array([1e-320, 1.0])
    found = pv.ForwardVariance.lowest_drive(kernel, initial_variance, times)
    np.testing.assert_array_equal(found, [floor, 0.0])
    curve = pv.ForwardVariance.driven(kernel, initial_variance, times, [0.1, 0.1])
    assert curve.is_admissible(kernel)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (("free", [1.0], [0.1]), "form must be 'market' or 'driven', got 'free'"),
        (("market", [1.0], [-0.1]), r"levels\[0\] must be a variance"),
        (("market", [1.0, 1.0], [0.1, 0.1]), r"times\[1\] must be positive and increasing"),
        (("market", [1.0], [0.1], ROUGH, 0.1), "initial_variance and .* belong to a driven curve"),
        (("driven", [1.0], [0.1], ROUGH, -0.1), "initial_variance must be non-negative"),
        (("driven", [1.0], [0.1], ROUGH, 0.1, math.nan), "mean_reversion must be finite"),
        (("driven", [1.0], [-1.0], ROUGH, 0.01), "levels make the forward variance negative"),
    ],
)
def test_the_constructor_checks_like_the_builders(arguments, message):
    with pytest.raises(ValueError, match=message):
        pv.ForwardVariance(*arguments)
    with pytest.raises(TypeError, match="kernel must be"):
        pv.ForwardVariance("driven", np.array([1.0]), np.array([0.1]))


def test_the_constructor_leaves_the_callers_arrays_alone():
    times, levels = np.array([0.5, 1.0]), np.array([0.1, 0.2])
    curve = pv.ForwardVariance("market", times, levels)
    levels[0] = 9.0
    times[0] = 0.1
    assert curve(0.4) == 0.1
    assert curve == pv.ForwardVariance.piecewise_constant([0.5, 1.0], [0.1, 0.2])
    with pytest.raises(ValueError, match="read-only"):
        curve.levels[0] = 1.0


def test_bad_types():
    with pytest.raises(TypeError, match="kernel must be"):
        pv.ForwardVariance.driven(0.1, 0.04, [1.0], [0.1])
    with pytest.raises(TypeError, match="levels must hold real numbers"):
        pv.ForwardVariance.piecewise_constant([1.0], ["a"])
