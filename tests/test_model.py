"""The transform's contract: shapes, identities, the classical limit, accuracy, bad input."""

import math
import pickle
import warnings

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import pyvolterra as pv
from pyvolterra.reference import classical, oracle

CURVE = pv.ForwardVariance.flat(0.04)
ROUGH = pv.VolterraHeston(pv.FractionalKernel(0.12), 0.331, -0.681, CURVE, 0.1)
CLASSICAL = pv.VolterraHeston(pv.ConstantKernel(), 0.6, -0.7, CURVE, 1.0)


@pytest.mark.parametrize("model", [ROUGH, CLASSICAL], ids=["rough", "classical"])
def test_shapes(model):
    u, t = np.array([1.0, 2.0 - 0.5j, 3.0]), np.array([0.5, 1.0])
    full = model.characteristic_function(u, t, tolerance=1e-5)
    assert full.shape == (2, 3)
    assert full.dtype == complex
    assert model.characteristic_function(u, 0.5, tolerance=1e-5).shape == (3,)
    assert model.characteristic_function(1.0, t, tolerance=1e-5).shape == (2,)
    scalar = model.characteristic_function(1.0, 0.5, tolerance=1e-5)
    assert isinstance(scalar, complex)
    assert model.characteristic_function([], t).shape == (2, 0)
    assert model.characteristic_function(u, []).shape == (0, 3)
    # within the tolerance; see below for what is equal bit for bit
    assert scalar == pytest.approx(full[0, 0], abs=1e-5)
    values, info = model.log_characteristic_function(u, t, tolerance=1e-5, full_output=True)
    assert info.error_estimate.shape == values.shape == (2, 3)
    np.testing.assert_array_equal(np.exp(values), full)


@pytest.mark.parametrize("scheme", ["graded", "adams"])
def test_batch_independence_bit_for_bit(scheme):
    u = np.linspace(0.0, 120.0, 101) - 0.5j
    maturities = [1.0, 0.1, 1.0]
    options = {"tolerance": 1e-4, "scheme": scheme}
    together = ROUGH.log_characteristic_function(u, maturities, **options)
    np.testing.assert_array_equal(together[0], together[2])
    for i in (0, 1, 50, 100):
        alone = ROUGH.log_characteristic_function(u[i], maturities, **options)
        np.testing.assert_array_equal(alone, together[:, i])
    one = ROUGH.log_characteristic_function(u, 1.0, **options)
    np.testing.assert_array_equal(one, together[0])  # the longest maturity makes the mesh


PARAMETERS = st.fixed_dictionaries(
    {
        "hurst": st.floats(0.02, 0.5),
        "nu": st.floats(0.05, 1.0),
        "rho": st.floats(-1.0, 0.5),
        "reversion": st.floats(0.0, 3.0),
        "maturity": st.floats(0.003, 5.0),
    }
)


@settings(max_examples=40, deadline=None)
@given(PARAMETERS, st.floats(0.0, 50.0))
def test_identities(p, x):
    kernel = pv.FractionalKernel(p["hurst"])
    curve = pv.ForwardVariance.piecewise_constant([0.1, 1.0], [0.03, 0.05])
    model = pv.VolterraHeston(kernel, p["nu"], p["rho"], curve, p["reversion"])
    t = p["maturity"]
    options = {"tolerance": 1e-3}
    # total mass and martingale
    np.testing.assert_allclose(
        model.characteristic_function([0.0, -1j], t, **options), 1.0, atol=1e-13
    )
    # conjugate symmetry
    z = x - 0.5j
    left = model.characteristic_function(z, t, **options)
    right = model.characteristic_function(-np.conj(z), t, **options)
    assert left == pytest.approx(np.conj(right), abs=1e-13)
    # a transform on the real line is bounded by 1
    assert abs(model.characteristic_function(x, t, **options)) <= 1.0 + 1e-3
    # additivity in the curve
    parts = [
        pv.VolterraHeston(
            kernel,
            p["nu"],
            p["rho"],
            pv.ForwardVariance.piecewise_constant([0.1, 1.0], levels),
            p["reversion"],
        ).log_characteristic_function(z, t, scheme="adams", steps=64)
        for levels in ([0.03, 0.0], [0.0, 0.05], [0.03, 0.05])
    ]
    assert parts[0] + parts[1] == pytest.approx(parts[2], rel=1e-12, abs=1e-14)


@pytest.mark.parametrize("maturity", [0.01, 1.0, 10.0])
@pytest.mark.parametrize(
    ("nu", "rho", "reversion"),
    [(0.6, -0.7, 1.0), (1.0, -0.9, 0.0), (1e-6, -0.5, 2.0), (0.3, 0.4, 0.2)],
)
def test_classical_closed_form(nu, rho, reversion, maturity):
    # Closed form of the classical model in mpmath arithmetic: A closed-form solution for options
    # with stochastic volatility, Rev. Financ. Stud. 6, 1993 (memory).
    u = np.array([0.0, 1e-6, 0.5, 3.0, 40.0, 200.0, 1.0 - 0.5j, 50.0 - 0.5j, -1j])
    spot = pv.VolterraHeston.from_spot_variance(
        pv.FractionalKernel(0.5),
        vol_of_vol=nu,
        correlation=rho,
        mean_reversion=reversion,
        initial_variance=0.05,
        long_run_variance=0.03,
    )
    value = spot.log_characteristic_function(u, maturity)
    expected = np.array(
        [
            complex(
                classical.log_transform_mp(
                    z,
                    maturity,
                    vol_of_vol=nu,
                    correlation=rho,
                    mean_reversion=reversion,
                    initial_variance=0.05,
                    long_run_variance=0.03,
                )
            )
            for z in u
        ]
    )
    np.testing.assert_allclose(np.exp(value), np.exp(expected), rtol=0, atol=1e-13)
    np.testing.assert_allclose(value, expected, rtol=1e-12, atol=1e-13)


def test_error_estimate_bounds_the_true_error():
    # Against the power-series oracle, which shares nothing with time stepping.
    model = pv.VolterraHeston.from_spot_variance(
        pv.FractionalKernel(0.12),
        vol_of_vol=0.331,
        correlation=-0.681,
        mean_reversion=0.1,
        initial_variance=0.0392,
        long_run_variance=0.3156,
    )
    u = np.array([0.7, 3.0, 8.0, 2.0 - 0.5j, 10.0 - 0.5j])
    exact = np.exp(
        [
            complex(
                oracle.log_transform_spot(
                    z,
                    0.5,
                    hurst=0.12,
                    vol_of_vol=0.331,
                    correlation=-0.681,
                    mean_reversion=0.1,
                    initial_variance=0.0392,
                    long_run_variance=0.3156,
                ).value
            )
            for z in u
        ]
    )
    requests = [
        (scheme, 10.0**-k)
        for scheme, most in (("adams", 6), ("graded", 12))
        for k in range(3, most + 1)
    ]
    for scheme, tolerance in requests:
        value, info = model.characteristic_function(
            u, 0.5, tolerance=tolerance, scheme=scheme, full_output=True
        )
        error = np.abs(value - exact)
        assert np.all(error <= info.error_estimate)
        assert np.all(info.error_estimate <= 1.01 * tolerance)
    for steps in (50, 200, 800):
        value, info = model.characteristic_function(
            u, 0.5, scheme="adams", steps=steps, full_output=True
        )
        assert np.all(np.abs(value - exact) <= info.error_estimate)


def test_a_tolerance_that_cannot_be_met_is_announced():
    with pytest.warns(pv.AccuracyWarning, match="tolerance 1.0e-13 not met") as record:
        ROUGH.characteristic_function(30.0, 1.0, tolerance=1e-13, scheme="adams")
    assert record[0].filename == __file__


def test_kernel_equivalence_and_pickle():
    a = pv.VolterraHeston(pv.ConstantKernel(), 0.6, -0.7, CURVE, 1.0)
    b = pv.VolterraHeston(pv.FractionalKernel(0.5), 0.6, -0.7, CURVE, 1.0)
    assert a.characteristic_function(3.0, 1.0) == b.characteristic_function(3.0, 1.0)
    again = pickle.loads(pickle.dumps(ROUGH))
    assert again.characteristic_function(3.0, 1.0, tolerance=1e-4) == (
        ROUGH.characteristic_function(3.0, 1.0, tolerance=1e-4)
    )


def test_moments_outside_the_strip():
    # Explosion times of the COS paper's parameters (A novel pricing method for European options
    # based on Fourier-cosine series expansions, SIAM J. Sci. Comput. 31, 2008) from the closed form
    # of Moment explosions in stochastic volatility models, Finance Stoch. 11, 2007: computed.
    model = pv.VolterraHeston.from_spot_variance(
        pv.ConstantKernel(),
        vol_of_vol=0.5751,
        correlation=-0.5711,
        mean_reversion=1.5768,
        initial_variance=0.0175,
        long_run_variance=0.0398,
    )
    for moment, time in ((20.0, 0.619044908851), (-5.0, 0.984375126517)):
        value = model.log_characteristic_function(-1j * moment, 0.999999 * time)
        assert math.isfinite(value.real)
        with pytest.raises(pv.MomentExplosionError, match=r"maturity 0\.\d+.*critical moment"):
            model.log_characteristic_function(-1j * moment, 1.000001 * time)
    for moment in (-1.0, 5.0):
        model.log_characteristic_function(-1j * moment, 100.0)
    rough = pv.VolterraHeston(pv.FractionalKernel(0.1), 0.6, -0.6, CURVE)
    with pytest.raises(pv.MomentExplosionError):
        rough.characteristic_function(1.0 + 30j, [0.1, 1.0])


@pytest.mark.parametrize(
    ("call", "error", "message"),
    [
        (lambda m: m.characteristic_function(math.nan, 1.0), ValueError, "u must be finite"),
        (lambda m: m.characteristic_function([1.0, math.inf], 1.0), ValueError, r"u\[1\] must be"),
        (lambda m: m.characteristic_function("a", 1.0), TypeError, "u must hold"),
        (lambda m: m.characteristic_function(1.0, 0.0), ValueError, "maturities must be positive"),
        (lambda m: m.characteristic_function(1.0, [1.0, -1.0]), ValueError, r"maturities\[1\]"),
        (lambda m: m.characteristic_function([[1.0]], 1.0), ValueError, "one-dimensional"),
        (lambda m: m.characteristic_function(1.0, 1.0, scheme="euler"), ValueError, "scheme must"),
        (lambda m: m.characteristic_function(1.0, 1.0, steps=10), ValueError, "steps needs"),
        (
            lambda m: m.characteristic_function(1.0, 1.0, scheme="adams", steps=0),
            ValueError,
            "steps must be at least 1",
        ),
        (
            lambda m: m.characteristic_function(1.0, 1.0, scheme="adams", steps=1.5),
            TypeError,
            "steps must be an integer",
        ),
        (lambda m: m.characteristic_function(1.0, 1.0, tolerance=0.0), ValueError, "tolerance"),
    ],
)
def test_bad_arguments(call, error, message):
    with pytest.raises(error, match=message):
        call(ROUGH)


@pytest.mark.parametrize(
    ("arguments", "error", "message"),
    [
        ({"vol_of_vol": -0.1}, ValueError, "vol_of_vol must be non-negative"),
        ({"correlation": 1.01}, ValueError, r"correlation must lie in \[-1, 1\], got 1.01"),
        ({"correlation": math.nan}, ValueError, "correlation must be finite"),
        ({"mean_reversion": -1.0}, ValueError, "mean_reversion must be non-negative"),
        ({"kernel": 0.1}, TypeError, "kernel must be"),
        ({"forward_variance": 0.04}, TypeError, "forward_variance must be a ForwardVariance"),
        (
            {
                "forward_variance": pv.ForwardVariance.driven(
                    pv.FractionalKernel(0.2), 0.04, [1.0], [0.0]
                )
            },
            ValueError,
            "was driven by",
        ),
    ],
)
def test_bad_parameters(arguments, error, message):
    good = {
        "kernel": pv.FractionalKernel(0.1),
        "vol_of_vol": 0.3,
        "correlation": -0.7,
        "forward_variance": CURVE,
    }
    with pytest.raises(error, match=message):
        pv.VolterraHeston(**(good | arguments))


def test_negative_spot_variance_is_named():
    common = {"vol_of_vol": 0.3, "correlation": -0.7, "mean_reversion": 1.0}
    with pytest.raises(ValueError, match="initial_variance must be non-negative"):
        pv.VolterraHeston.from_spot_variance(
            pv.ConstantKernel(), initial_variance=-0.1, long_run_variance=0.1, **common
        )
    with pytest.raises(ValueError, match="long_run_variance must be a variance"):
        pv.VolterraHeston.from_spot_variance(
            pv.ConstantKernel(), initial_variance=0.1, long_run_variance=-0.1, **common
        )


def test_a_model_is_immutable():
    with pytest.raises(AttributeError, match="immutable"):
        ROUGH.vol_of_vol = 1.0


def test_no_warning_where_the_tolerance_is_met():
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        CLASSICAL.characteristic_function(np.linspace(0, 100, 50), [0.1, 1.0])
        ROUGH.characteristic_function([1.0, 2.0], 1.0, tolerance=1e-4)
