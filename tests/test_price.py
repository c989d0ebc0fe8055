"""Prices and implied volatilities of the model against published and computed values."""

import math

import numpy as np
import pytest

import pyvolterra as pv


def classical(vol_of_vol, correlation, mean_reversion, initial_variance, long_run_variance):
    return pv.VolterraHeston.from_spot_variance(
        pv.ConstantKernel(),
        vol_of_vol=vol_of_vol,
        correlation=correlation,
        mean_reversion=mean_reversion,
        initial_variance=initial_variance,
        long_run_variance=long_run_variance,
    )


# Lewis's reference prices (web note of 15 Feb 2019, about 20 digits vouched; read, reproduced).
# S=100, r=.01, q=.02, T=1, v0=.04, kappa=4, theta=.25, xi=1, rho=-.5.
LEWIS = [
    (80, 7.958878113256768285213, 26.774758743998854221382),
    (90, 12.017966707346304987710, 20.933349000596710388139),
    (100, 17.055270961270109413523, 16.070154917028834278213),
    (110, 23.017825898442800538909, 12.132211516709844867861),
    (120, 29.811026202682471843341, 9.024913483457835636553),
]
# The same model at T = 0.01 (computed with 40 digits).
LEWIS_SHORT = [
    (90, False, 2.7291051903436856e-5),
    (95, False, 0.013459205968239052),
    (100, True, 0.82536231024952415),
    (105, True, 0.0029045282404359385),
    (110, True, 9.618389904733128e-8),
]


def test_lewis_reference_prices():
    model = classical(1.0, -0.5, 4.0, 0.04, 0.25)
    strikes, puts, calls = np.array(LEWIS).T
    forward, discount = 100.0 * math.exp(0.01 - 0.02), math.exp(-0.01)
    common = {"forward": forward, "discount": discount, "tolerance": 1e-13}
    np.testing.assert_allclose(model.price(strikes, 1.0, call=True, **common), calls, rtol=1e-12)
    np.testing.assert_allclose(model.price(strikes, 1.0, call=False, **common), puts, rtol=1e-12)


def test_lewis_model_at_a_short_maturity():
    model = classical(1.0, -0.5, 4.0, 0.04, 0.25)
    t = 0.01
    for strike, call, expected in LEWIS_SHORT:
        value = model.price(
            strike,
            t,
            forward=100.0 * math.exp(-0.01 * t),
            discount=math.exp(-0.01 * t),
            call=call,
            tolerance=1e-14,
        )
        assert value == pytest.approx(expected, abs=1e-12)


def test_cos_paper_parameters():
    # A novel pricing method for European options based on Fourier-cosine series expansions, SIAM
    # J. Sci. Comput. 31, 2008 (memory). Printed: 5.785155450 (T=1) and 22.318945791474590 (T=10);
    # those digits are wrong past about 8 and 11 significant ones, the values here are computed.
    model = classical(0.5751, -0.5711, 1.5768, 0.0175, 0.0398)
    value = model.price(100.0, [1.0, 10.0], forward=100.0, tolerance=1e-14)
    np.testing.assert_allclose(value, [5.785155434376189028140, 22.318945791154489180], rtol=1e-12)


@pytest.mark.parametrize(
    ("parameters", "maturity", "rate", "expected"),
    [
        # Exact simulation of stochastic volatility and other affine jump diffusion processes,
        # Oper. Res. 54, 2006 (memory, reproduced).
        ((0.61, -0.7, 6.21, 0.010201, 0.019), 1.0, 0.0319, [(100, 6.8061, 4)]),
        ((1.0, -0.3, 2.0, 0.09, 0.09), 5.0, 0.05, [(100, 34.9998, 4)]),
        # Simple and efficient simulation of the Heston stochastic volatility model, J. Comput.
        # Finance 11, 2008, cases I-III (memory, reproduced).
        (
            (1.0, -0.9, 0.5, 0.04, 0.04),
            10.0,
            0.0,
            [(60, 44.330, 3), (100, 13.085, 3), (140, 0.296, 3)],
        ),
        (
            (0.9, -0.5, 0.3, 0.04, 0.04),
            15.0,
            0.0,
            [(60, 45.287, 3), (100, 16.649, 3), (140, 5.138, 3)],
        ),
        (
            (1.0, -0.3, 1.0, 0.09, 0.09),
            5.0,
            0.05,
            [(60, 56.575, 3), (100, 33.597, 3), (140, 18.157, 3)],
        ),
    ],
)
def test_published_prices_to_print(parameters, maturity, rate, expected):
    model = classical(*parameters)
    for strike, price, digits in expected:
        value = model.price(
            strike,
            maturity,
            forward=100.0 * math.exp(rate * maturity),
            discount=math.exp(-rate * maturity),
        )
        assert abs(value - price) <= 0.5000001 * 10.0**-digits


@pytest.mark.parametrize(
    ("vol_of_vol", "calls"),
    [
        # Rough parameters in common use, computed (not published): forward 1, T = 1, strikes
        # 0.8 ... 1.2; with nu plain, and with the convention lambda nu.
        (0.331, [0.2263391805, 0.1478497570, 0.0829411229, 0.0374133085, 0.0135056183]),
        (0.0331, [0.2213663834, 0.1496722327, 0.0947371840, 0.0562346038, 0.0314246060]),
    ],
)
def test_rough_prices_in_both_conventions(vol_of_vol, calls):
    model = pv.VolterraHeston.from_spot_variance(
        pv.FractionalKernel(0.12),
        vol_of_vol=vol_of_vol,
        correlation=-0.681,
        mean_reversion=0.1,
        initial_variance=0.0392,
        long_run_variance=0.3156,
    )
    value = model.price([0.8, 0.9, 1.0, 1.1, 1.2], 1.0, tolerance=1e-6)
    np.testing.assert_allclose(value, calls, rtol=0, atol=1e-6)


def test_at_the_money_skew_approaches_its_limit():
    # Short-term at-the-money asymptotics under stochastic volatility models, SIAM J. Financ. Math.
    # 10, 2019 (memory, rederived): skew T^(1/2-H) -> rho nu / (2 sqrt(V0) Gamma(H + 5/2)). Values
    # on the way: computed.
    model = pv.VolterraHeston.from_spot_variance(
        pv.FractionalKernel(0.12),
        vol_of_vol=0.331,
        correlation=-0.681,
        mean_reversion=0.1,
        initial_variance=0.0392,
        long_run_variance=0.3156,
    )
    limit = -0.681 * 0.331 / (2.0 * math.sqrt(0.0392) * math.gamma(2.62))
    assert limit == pytest.approx(-0.39221, abs=1e-5)
    scaled = []
    for maturity, expected in ((1e-2, -0.37109), (1e-3, -0.38520), (1e-4, -0.39003)):
        k = 0.05 * math.sqrt(0.0392 * maturity)
        up, down = model.implied_volatility(np.exp([k, -k]), maturity, tolerance=3e-9)
        scaled.append((up - down) / (2.0 * k) * maturity ** (0.5 - 0.12))
        assert scaled[-1] == pytest.approx(expected, abs=2e-3)
    assert scaled[0] > scaled[1] > scaled[2] > limit


@pytest.mark.parametrize("hurst", [0.1, 0.5])
def test_without_vol_of_vol_the_model_is_black(hurst):
    curve = pv.ForwardVariance.piecewise_constant([0.5, 1.0], [0.02, 0.06])
    model = pv.VolterraHeston(pv.FractionalKernel(hurst), 0.0, -0.5, curve)
    strikes = np.array([0.7, 0.95, 1.0, 1.2])
    for maturity in (0.1, 0.9, 3.0):
        expected = math.sqrt(float(curve.total_variance(maturity)) / maturity)
        value = model.implied_volatility(strikes, maturity, tolerance=1e-11)
        np.testing.assert_allclose(value[~np.isnan(value)], expected, rtol=1e-7)
        price = model.price(strikes, maturity, tolerance=1e-12)
        black = pv.black.price(1.0, strikes, maturity, expected)
        np.testing.assert_allclose(price, black, rtol=0, atol=1e-12)


def test_put_call_parity_and_broadcasting():
    model = classical(0.6, -0.7, 1.0, 0.04, 0.05)
    strikes = np.array([80.0, 100.0, 120.0])
    maturities = np.array([[0.1], [1.0]])
    discount = np.exp(-0.03 * maturities)
    calls = model.price(strikes, maturities, forward=101.0, discount=discount)
    puts = model.price(strikes, maturities, forward=101.0, discount=discount, call=False)
    assert calls.shape == puts.shape == (2, 3)
    np.testing.assert_allclose(calls - puts, discount * (101.0 - strikes), rtol=0, atol=1e-12)
    both = model.price(strikes[:, None], 1.0, forward=101.0, call=np.array([True, False]))
    assert both.shape == (3, 2)
    assert isinstance(model.price(1.0, 1.0), float)


def test_an_unmet_tolerance_is_announced():
    model = pv.VolterraHeston(pv.FractionalKernel(0.1), 0.4, -0.7, pv.ForwardVariance.flat(0.04))
    with pytest.warns(pv.AccuracyWarning, match="not met: estimated price error") as record:
        model.price(1.0, 1.0, tolerance=1e-16)
    assert record[0].filename == __file__


@pytest.mark.parametrize(
    ("arguments", "error", "message"),
    [
        ({"strikes": [1.0, 0.0]}, ValueError, r"strikes\[1\] must be positive"),
        ({"maturities": -1.0}, ValueError, "maturities must be positive"),
        ({"forward": math.nan}, ValueError, "forward must be finite"),
        ({"discount": 0.0}, ValueError, "discount must be positive"),
        ({"call": 1}, TypeError, "call must hold booleans"),
        (
            {"strikes": [1.0, 2.0], "maturities": [1.0, 2.0, 3.0]},
            ValueError,
            r"shapes do not broadcast: strikes \(2,\), maturities \(3,\)",
        ),
        ({"tolerance": -1.0}, ValueError, "tolerance must be positive"),
    ],
)
def test_bad_arguments(arguments, error, message):
    model = classical(0.6, -0.7, 1.0, 0.04, 0.05)
    with pytest.raises(error, match=message):
        model.price(**({"strikes": 1.0, "maturities": 1.0} | arguments))
