"""The Mittag-Leffler oracle against computed values and the complementary error function."""

import math

import pytest
from scipy.special import erfcx

from pyvolterra.reference.mittag_leffler import mean_variance, mittag_leffler


@pytest.mark.parametrize(
    ("alpha", "beta", "z", "value"),
    [  # computed
        (0.5, 1.0, -1.0, 0.4275835761558070044),
        (0.5, 0.5, -1.0, 0.1366060073919492825),
        (0.5, 1.0, -5.0, 0.1107046377330686264),
        (0.6, 1.0, -1.0, 0.4133273409431062974),
        (0.6, 0.6, -1.0, 0.1711022833839167603),
        (0.6, 1.0, -3.0, 0.1597034802650912161),
        (0.75, 1.0, -1.0, 0.3931083028157540618),
        (0.9, 1.0, -1.0, 0.3760660214246418811),
    ],
)
def test_computed_values(alpha, beta, z, value):
    assert float(mittag_leffler(z, alpha, beta)) == pytest.approx(value, rel=1e-15)


@pytest.mark.parametrize("z", [0.0, 0.3, 2.0, 9.0, 11.0, 20.0, 300.0, 1e5])
def test_one_half_is_the_scaled_complementary_error_function(z):
    # E_{1/2,1}(-z) = exp(z^2) erfc z, series and asymptotic regime both.
    assert float(mittag_leffler(-z, 0.5)) == pytest.approx(erfcx(z), rel=1e-14)


@pytest.mark.parametrize("z", [-30.0, -1.0, 2.0])
def test_one_is_the_exponential(z):
    assert float(mittag_leffler(z, 1.0)) == pytest.approx(math.exp(z), rel=1e-14)


@pytest.mark.parametrize("alpha", [0.55, 0.62, 0.9, 0.99])
@pytest.mark.parametrize("beta_is_alpha", [False, True])
def test_series_and_asymptotics_meet(alpha, beta_is_alpha):
    beta = alpha if beta_is_alpha else 1.0
    z = -(150.0**alpha)
    asymptotic = mittag_leffler(z, alpha, beta, digits=20)
    series = mittag_leffler(z, alpha, beta, digits=40)  # more digits keep to the series
    assert float(abs(asymptotic / series - 1.0)) < 1e-19


def test_mean_variance():
    # The characteristic function of rough Heston models, Math. Finance 29, 2019, arXiv 1609.02108
    # (memory). At hurst 1/2 the mean decays exponentially.
    assert float(mean_variance(2.0, 0.5, 0.7, 0.02, 0.06)) == pytest.approx(
        0.06 - 0.04 * math.exp(-1.4), rel=1e-15
    )
    assert float(mean_variance(1.0, 0.1, 1.0, 1.0, 0.0)) == pytest.approx(
        0.4133273409431062974, rel=1e-14
    )
    assert float(mean_variance(0.0, 0.1, 0.7, 0.02, 0.06)) == pytest.approx(0.02, rel=1e-15)
    assert float(mean_variance(5.0, 0.1, 0.0, 0.02, 0.06)) == pytest.approx(0.02, rel=1e-15)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [((-1.0, 0.0), "alpha must lie"), ((-1.0, 1.1), "alpha must lie"), ((-1.0, 0.5, 0.0), "beta")],
)
def test_bad_arguments(arguments, message):
    with pytest.raises(ValueError, match=message):
        mittag_leffler(*arguments)
