"""The fit: recovers what the demo quotes were made with, and says what it did."""

import warnings
from dataclasses import replace

import numpy as np
import pytest
from invented_quotes import surface, with_changes
from scipy.stats import chi2

import pyvolterra as pv
from pyvolterra import calibration, demo


@pytest.fixture(scope="module")
def quotes(tmp_path_factory):
    return pv.read_quotes(demo.write_demo_quotes(tmp_path_factory.mktemp("demo") / "quotes.csv"))


@pytest.fixture(scope="module")
def fit(quotes):
    return pv.calibrate(quotes)


def _truth():
    values = {
        "hurst": demo.HURST,
        "vol_of_vol": demo.VOL_OF_VOL,
        "correlation": demo.CORRELATION,
        "initial_variance": demo.INITIAL_VARIANCE,
    }
    return values | {f"drive_{k + 1}": level for k, level in enumerate(demo.DRIVE)}


def test_recovers_the_parameters_of_the_demo(fit):
    assert fit.converged
    np.testing.assert_allclose(fit.curve_times, demo.demo_market().maturities[1:], rtol=1e-12)
    truth = _truth()
    for name, value in truth.items():
        assert abs(fit.parameters[name] - value) <= 3.0 * fit.standard_errors[name], name
    names = fit.covariance_names
    assert set(names) == set(truth)
    gap = np.array([fit.parameters[name] - truth[name] for name in names])
    statistic = float(gap @ np.linalg.solve(fit.covariance, gap))
    assert chi2.cdf(statistic, len(names)) < 0.999
    # and the errors are not so wide that this would be empty
    assert fit.standard_errors["hurst"] < 0.02
    assert fit.standard_errors["vol_of_vol"] < 0.05
    assert fit.standard_errors["correlation"] < 0.05


def test_verdict_is_in_plain_words(fit):
    assert fit.message in calibration.VERDICTS.values()
    assert "`" not in fit.message


def test_a_model_that_cannot_fit_is_called_poor(quotes, fit):
    assert not fit.poor
    assert fit.rms_half_widths < 1.0
    smooth = pv.calibrate(quotes, kernel="constant", mean_reversion=20.0)
    assert smooth.rms_half_widths > fit.rms_half_widths
    # either criterion is enough
    wide = replace(fit, weights=20.0 * fit.weights)
    assert wide.share_inside_bid_ask > 0.95
    assert wide.poor
    s = fit.smiles
    narrow = replace(s, ask_volatility=s.mid_volatility, bid_volatility=s.mid_volatility)
    assert replace(fit, smiles=narrow).poor


def test_fits_inside_the_quotes(fit):
    assert fit.share_inside_bid_ask > 0.95
    assert fit.rms_residual < 0.005
    assert fit.arbitrage.free
    assert fit.model.forward_variance.is_admissible(fit.model.kernel)
    assert fit.model_volatility.shape == fit.residuals.shape == fit.smiles.strike.shape
    np.testing.assert_allclose(
        fit.model.implied_volatility(
            fit.smiles.strike, fit.smiles.maturity, forward=fit.smiles.forward, tolerance=1e-6
        ),
        fit.model_volatility,
        rtol=0,
        atol=2e-4,
    )


def test_forwards_are_those_of_the_demo(fit):
    market = demo.demo_market()
    for point in fit.forwards.points:
        at = np.argmin(np.abs(market.maturities - point.maturity))
        if abs(market.maturities[at] - point.maturity) > 1e-6:
            continue  # the thin expiry
        assert abs(point.forward - market.forwards[at]) <= 4.0 * point.forward_error
        assert point.discount == pytest.approx(market.discounts[at], abs=5e-4)


def test_every_quote_is_accounted_for(fit):
    rows = [*fit.smiles.row, *(r.row for r in fit.rejections)]
    assert len(rows) <= fit.quotes_read
    reasons = {r.reason for r in fit.rejections}
    for planted in ("crossed", "zero bid", "stale", "duplicate"):
        assert any(planted in reason for reason in reasons), (planted, reasons)


def test_fixed_kernels_and_progress(quotes):
    said = []
    fit = pv.calibrate(quotes, kernel=pv.FractionalKernel(0.2), progress=said.append)
    assert fit.parameters["hurst"] == 0.2
    assert fit.standard_errors["hurst"] == 0.0
    assert "hurst" not in fit.covariance_names
    assert any("residual" in text for text in said)
    classical = pv.calibrate(quotes, kernel="constant")
    # the demo is rough: holding hurst elsewhere fits worse, the classical model worst
    assert classical.rms_residual > fit.rms_residual


def test_bad_arguments(quotes):
    with pytest.raises(TypeError, match="quotes must be Quotes"):
        pv.calibrate("quotes.csv")
    with pytest.raises(ValueError, match="kernel must be"):
        pv.calibrate(quotes, kernel="smooth")
    for value in (-1.0, 20.5):
        with pytest.raises(ValueError, match=r"mean_reversion must lie in \[0, 20\], got"):
            pv.calibrate(quotes, mean_reversion=value)


def test_too_few_quotes(quotes):
    one = quotes.select(quotes.expiry == quotes.expiry[0])
    few = one.select(np.arange(len(one)) % 8 == 0)
    with pytest.raises(pv.QuoteError):
        pv.calibrate(few)


def test_absurd_numbers_warn_of_nothing_and_move_nothing():
    # one of each: strikes, prices and widths that overflow or vanish when squared
    quotes = surface(3, days=(25, 120))
    pick = np.flatnonzero(quotes.is_call)[[3, 9, 15, 40, 45, 50]]
    spoilt = with_changes(
        quotes,
        strike=(pick[:2], [1e300, 1e-300]),
        bid=(pick[2:5], [1.6e308, 1e-300, 1e-300]),
        ask=(pick[2:5], [1.7e308, 1.2e-300, 1.7e308]),
    )
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        warnings.simplefilter("ignore", pv.AccuracyWarning)
        fit = pv.calibrate(spoilt)
    reasons = 2 * ["absurd strike"] + 3 * ["absurd price"]
    gone = {r.row: r.reason for r in fit.rejections}
    assert gone == dict(zip(quotes.row[pick[:5]].tolist(), reasons, strict=True))
    clean = pv.calibrate(quotes.select(~np.isin(np.arange(len(quotes)), pick[:5])))
    assert fit.parameters == clean.parameters
