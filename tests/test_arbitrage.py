"""The surface check: finds the arbitrage of a curve known to have it, and none elsewhere."""

import numpy as np
import pytest

import pyvolterra as pv
from pyvolterra.arbitrage import check_arbitrage

ROUGH = pv.FractionalKernel(0.1)


def test_an_admissible_curve_is_free():
    curve = pv.ForwardVariance.driven(ROUGH, 0.04, [0.25, 1.0], [0.02, 0.01])
    model = pv.VolterraHeston(ROUGH, 0.4, -0.7, curve)
    report = check_arbitrage(model, [0.1, 0.25, 0.5, 1.0], np.linspace(-0.6, 0.4, 21))
    assert report.free
    assert "4 maturities" in report.grid


def test_a_falling_step_makes_calendar_arbitrage():
    # A down-step of the curve: computed, C(T+.004) - C(T) = -3e-4 of the forward.
    curve = pv.ForwardVariance.piecewise_constant([0.25, 1.0], [0.09, 0.01])
    model = pv.VolterraHeston(ROUGH, 0.4, -0.7, curve)
    report = check_arbitrage(model, [0.25, 0.254], np.linspace(-0.6, 0.4, 41), tolerance=1e-5)
    assert not report.free
    assert report.calendar
    assert report.worst_calendar == pytest.approx(-3e-4, rel=0.5)
    assert "the call falls by" in report.calendar[0]


def test_bad_grids():
    model = pv.VolterraHeston(ROUGH, 0.4, -0.7, pv.ForwardVariance.flat(0.04))
    with pytest.raises(ValueError, match=r"maturities\[1\] must be positive and increasing"):
        check_arbitrage(model, [1.0, 0.5], [-0.1, 0.0, 0.1])
    with pytest.raises(ValueError, match="at least 3"):
        check_arbitrage(model, [1.0], [0.0, 0.1])
