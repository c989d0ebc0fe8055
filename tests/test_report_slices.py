"""The numbers behind the pictures of a report."""

import math
from dataclasses import replace

import numpy as np
import pytest
from reported_fits import replace_model, with_model

import pyvolterra as pv
from pyvolterra import demo
from pyvolterra.report import files, slices


def test_half_widths_say_inside_exactly_up_to_one(demo_fit):
    worse = with_model(demo_fit, replace_model(demo_fit, vol_of_vol=0.5))
    for case in (demo_fit, worse):
        scaled, within = slices.half_widths(case), slices.inside(case)
        np.testing.assert_array_equal(np.abs(scaled) <= 1.0, within)
        assert within.mean() == case.share_inside_bid_ask
    assert not slices.inside(worse).all()


def test_slices_hold_every_fitted_quote_once_and_the_models_curve(demo_fit):
    parts = slices.expiry_slices(demo_fit)
    assert sum(len(s) for s in parts) == demo_fit.residuals.size
    assert all(np.diff([s.maturity for s in parts]) > 0.0)
    for s in parts:
        on_curve = np.interp(s.log_moneyness, s.curve_log_moneyness, s.curve)
        np.testing.assert_allclose(on_curve, s.model, rtol=0, atol=2e-3)
        assert s.level == pytest.approx(np.interp(0.0, s.curve_log_moneyness, s.curve), abs=1e-3)


@pytest.mark.parametrize("hurst", [0.1, 0.3, 0.5])
def test_model_skew_at_short_maturity(hurst):
    # rho nu T^(H-1/2) / (2 sqrt(V0) Gamma(H+5/2)) as T -> 0: Short-term at-the-money asymptotics
    # under stochastic volatility models, SIAM J. Financ. Math. 10, 2019 (memory, reproduced).
    kernel = pv.ConstantKernel() if hurst == 0.5 else pv.FractionalKernel(hurst)
    model = pv.VolterraHeston(kernel, 0.1, -0.6, pv.ForwardVariance.flat(0.04))
    t = np.array([2e-3])
    limit = -0.6 * 0.1 * t ** (hurst - 0.5) / (2.0 * 0.2 * math.gamma(hurst + 2.5))
    np.testing.assert_allclose(slices.model_skew(model, t), limit, rtol=0.02)


def test_market_skew_is_the_models_plus_the_slope_of_the_residuals(demo_fit):
    s = demo_fit.smiles
    # mid volatilities that differ from the model's by a known line in log-moneyness
    tilted = demo_fit.model_volatility + 0.01 + 0.05 * s.log_moneyness
    case = replace(
        demo_fit,
        smiles=replace(s, mid_volatility=tilted, ask_volatility=tilted + 0.002),
        residuals=demo_fit.model_volatility - tilted,
    )
    skew = slices.market_skew(demo_fit.model, slices.expiry_slices(case))
    assert skew.maturity.size == np.unique(s.maturity).size
    expected = slices.model_skew(demo_fit.model, skew.maturity) + 0.05
    np.testing.assert_allclose(skew.market, expected, rtol=0, atol=1e-9)
    assert np.all(skew.error < 1e-9)
    # and the true market of the demo lies within its errors of the truth
    real = slices.market_skew(demo_fit.model, slices.expiry_slices(demo_fit))
    truth = slices.model_skew(demo.demo_market().model, real.maturity)
    assert np.mean(np.abs(real.market - truth) <= 3.0 * real.error + 0.02 * np.abs(truth)) > 0.9


def test_curve_errors(demo_fit):
    times = np.array([0.01, 0.2, 1.0])
    only = replace(demo_fit, covariance_names=("initial_variance",), covariance=np.array([[4e-6]]))
    # without mean reversion xi(t) = V0 + ...: its error is that of V0
    np.testing.assert_allclose(slices.curve_errors(only, times), 2e-3, rtol=1e-6)
    # and in the last drive it is linear: the response t -> (t - start)^(H+1/2) / Gamma(H+3/2)
    last = f"drive_{demo_fit.curve_times.size}"
    only = replace(demo_fit, covariance_names=(last,), covariance=np.array([[1e-4]]))
    t = demo_fit.curve_times[-1] + 0.5
    alpha = demo_fit.model.kernel.hurst + 0.5
    response = (t - demo_fit.curve_times[-2]) ** alpha / math.gamma(alpha + 1.0)
    error = slices.curve_errors(only, np.array([t]))
    np.testing.assert_allclose(error, 1e-2 * response, rtol=1e-6)
    np.testing.assert_array_equal(
        slices.curve_errors(replace(demo_fit, covariance_names=()), times), np.zeros(3)
    )


def test_labels_tell_two_expiries_of_a_day_apart():
    moments = np.array(
        ["2031-05-16T13:30", "2031-05-16T20:00", "2031-05-17T16:00"], dtype="datetime64[s]"
    )
    assert slices.expiry_labels(moments) == ["2031-05-16 13:30", "2031-05-16 20:00", "2031-05-17"]
    names = files.smile_names(moments)
    assert names[0] == "smiles/smile-2031-05-16T1330.png"
    assert len(set(names)) == 3
