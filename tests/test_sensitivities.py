"""Derivatives of the log-transform against independent differences in high precision."""

import os
import subprocess
import sys
import warnings

import mpmath
import numpy as np
import pytest

import pyvolterra as pv
from pyvolterra import _core
from pyvolterra.reference import oracle

NAMES = ("hurst", "vol_of_vol", "correlation", "mean_reversion")
TIMES, LEVELS = [0.2, 0.5, 1.0], [0.04, 0.05, 0.03]
# hurst, vol_of_vol, correlation, mean_reversion, driven
CASES = [
    (0.12, 0.4, -0.7, 0.5, False),
    (0.12, 0.4, -0.7, 0.5, True),
    (0.03, 0.6, -0.9, 0.0, False),
    (0.27, 0.3, 0.3, 1.5, True),
    (0.46, 0.5, -0.5, 0.0, True),
]


def make_model(hurst, vol_of_vol, correlation, mean_reversion, driven):
    kernel = pv.FractionalKernel(hurst) if hurst < 0.5 else pv.ConstantKernel()
    if driven:
        curve = pv.ForwardVariance.driven(kernel, 0.03, TIMES, LEVELS, mean_reversion)
    else:
        curve = pv.ForwardVariance.piecewise_constant(TIMES, LEVELS)
    return pv.VolterraHeston(kernel, vol_of_vol, correlation, curve, mean_reversion)


def exact(values, driven, u, maturity, name):
    """Central difference (backward for hurst 1/2) of the certified power series, 40 digits."""
    with mpmath.mp.workdps(40):
        base = dict(zip(NAMES, map(mpmath.mpf, values), strict=True))
        curve = (
            {"initial_variance": 0.03, "drive_times": TIMES, "drive_levels": LEVELS}
            if driven
            else {"variance_times": TIMES, "variance_levels": LEVELS}
        )

        def transform(shift):
            moved = {**base, name: base[name] + shift}
            return oracle.log_transform(u, maturity, **moved, **curve, digits=20).value

        step = mpmath.mpf(10) ** -6
        if name == "hurst" and values[0] == 0.5:
            ends = 3 * transform(0) - 4 * transform(-step) + transform(-2 * step)
        else:
            ends = transform(step) - transform(-step)
        return complex(ends / (2 * step))


@pytest.mark.parametrize("case", CASES)
def test_oracle(case):
    # computed here from the series: Fractional differential equations, 1999 (memory)
    model, u, maturities = make_model(*case), [0.5 - 0.5j, 9 - 0.5j, 5 + 0.1j], [0.04, 0.4]
    found = model.transform_sensitivities(u, maturities, NAMES)
    for name in NAMES:
        for t, maturity in enumerate(maturities):
            wanted = np.array([exact(case[:4], case[4], z, maturity, name) for z in u])
            error = np.abs(found[name][t] - wanted).max() / np.abs(wanted).max()
            assert error < 1e-7, (name, maturity, error)


def test_random_cases():
    rng = np.random.default_rng(20240611)
    for _ in range(16):
        values = (
            rng.uniform(0.02, 0.49),
            rng.uniform(0.1, 1.0),
            rng.uniform(-0.99, 0.5),
            rng.uniform(0.0, 3.0),
        )
        driven = bool(rng.integers(2))
        maturity = float(np.exp(rng.uniform(np.log(1 / 365), 0.0)))
        largest = 3.0 / (values[1] * maturity ** (values[0] + 0.5))
        u = complex(rng.uniform(0.3, 1.0) * largest, rng.choice([0.0, -0.5, -0.3]))
        name = NAMES[rng.integers(4)]
        found = make_model(*values, driven).transform_sensitivities(u, maturity, [name])[name]
        wanted = exact(values, driven, u, maturity, name)
        assert abs(found - wanted) < 3e-7 * abs(wanted), (values, driven, u, maturity, name)


@pytest.mark.parametrize("driven", [False, True])
def test_hurst_one_half(driven):
    """Values and curve from the closed form; hurst is one-sided."""
    values, u, maturities = (0.5, 0.5, -0.6, 0.8), [2.0, 15 - 0.5j], [0.3, 0.9]
    found = make_model(*values, driven).transform_sensitivities(u, maturities)
    plain = make_model(*values, driven).log_characteristic_function(u, maturities)
    assert np.array_equal(found.values, plain)
    step = 1e-5
    for k, name in enumerate(NAMES):
        if name == "hurst":
            wanted = np.array([[exact(values, driven, z, t, name) for z in u] for t in maturities])
        else:
            low, high = list(values), list(values)
            low[k], high[k] = values[k] - step, values[k] + step
            ends = [
                make_model(*v, driven).log_characteristic_function(u, maturities)
                for v in (low, high)
            ]
            wanted = (ends[1] - ends[0]) / (2 * step)
        error = np.abs(found[name] - wanted).max(axis=1) / np.abs(wanted).max(axis=1)
        assert (error < 1e-7).all(), (name, error)


@pytest.mark.parametrize("hurst", [0.1, 0.5])
@pytest.mark.parametrize("driven", [False, True])
def test_linear_in_the_curve(hurst, driven):
    model = make_model(hurst, 0.4, -0.7, 0.5, driven)
    u, maturities = np.linspace(0.0, 60.0, 9) - 0.4j, [0.1, 0.45, 2.0]
    found = model.transform_sensitivities(u, maturities)
    total = np.tensordot(LEVELS, found["forward_variance"], 1)
    if driven:
        total = total + 0.03 * found["initial_variance"]
    scale = np.abs(found.values).max(axis=1, keepdims=True)
    assert (np.abs(total - found.values) <= 1e-12 * scale).all()
    # and a derivative: the difference of two curves
    other = np.add(LEVELS, [0.0, 0.01, 0.0])
    kernel = model.kernel
    if driven:
        curve = pv.ForwardVariance.driven(kernel, 0.03, TIMES, other, 0.5)
    else:
        curve = pv.ForwardVariance.piecewise_constant(TIMES, other)
    moved = pv.VolterraHeston(kernel, 0.4, -0.7, curve, 0.5)
    difference = (moved.transform_sensitivities(u, maturities, []).values - found.values) / 0.01
    assert np.abs(difference - found["forward_variance"][1]).max() < 1e-6 * scale.max()


def test_values_meet_the_tolerance():
    model = make_model(0.1, 0.4, -0.7, 0.5, True)
    u, maturities = np.linspace(0.0, 300.0, 40), [0.02, 0.3, 3.0]
    wanted = model.characteristic_function(u, maturities, tolerance=1e-12, scheme="graded")
    for tolerance in (1e-5, 1e-8, 1e-10):
        found = model.transform_sensitivities(u, maturities, ["hurst"], tolerance=tolerance)
        assert np.abs(np.exp(found.values) - wanted).max() < tolerance


@pytest.mark.parametrize("y", [0.0, -0.5, -0.4])
@pytest.mark.parametrize("driven", [False, True])
def test_values_do_not_depend_on_companions(y, driven):
    model = make_model(0.15, 0.4, -0.7, 0.5, driven)
    u = np.concatenate([[0.0, 1.0], np.geomspace(0.1, 3000.0, 150)]) + 1j * y
    maturities = [0.1, 1.0]
    together = model.transform_sensitivities(u, maturities)
    for k in (0, 1, 40, 100, 151):
        alone = model.transform_sensitivities(u[k], maturities)
        assert np.array_equal(alone.values, together.values[:, k])
        for name, derivative in alone.derivatives.items():
            assert np.array_equal(derivative, together[name][..., k]), name
    for threads in (2, 7):
        again = model.transform_sensitivities(u, maturities, threads=threads)
        assert np.array_equal(again.values, together.values)
        for name, derivative in again.derivatives.items():
            assert np.array_equal(derivative, together[name]), name


def test_subset_is_the_same():
    model = make_model(0.15, 0.4, -0.7, 0.5, True)
    u, maturities = np.linspace(0.0, 50.0, 20) - 0.4j, [0.1, 1.0]
    everything = model.transform_sensitivities(u, maturities)
    for name in everything.derivatives:
        alone = model.transform_sensitivities(u, maturities, [name])
        assert list(alone.derivatives) == [name]
        assert np.array_equal(alone[name], everything[name]), name


def test_shapes_and_order_of_maturities():
    model = make_model(0.1, 0.4, -0.7, 0.5, True)
    mixed = model.transform_sensitivities([1.0, 2.0], [1.0, 0.5, 1.0])
    assert mixed.values.shape == (3, 2)
    assert mixed["hurst"].shape == (3, 2)
    assert mixed["forward_variance"].shape == (3, 3, 2)
    ascending = model.transform_sensitivities([1.0, 2.0], [0.5, 1.0])
    for name, derivative in mixed.derivatives.items():
        assert np.array_equal(derivative, ascending[name][..., [1, 0, 1], :])
    single = model.transform_sensitivities(1.0, 0.5)
    assert isinstance(single["hurst"], complex)
    assert single["forward_variance"].shape == (3,)
    assert model.transform_sensitivities([], [1.0]).values.shape == (1, 0)


@pytest.mark.parametrize("driven", [False, True])
def test_trivial_arguments(driven):
    """E[1] = E[exp X] = 1 whatever the parameters."""
    found = make_model(0.1, 0.4, -0.7, 0.5, driven).transform_sensitivities([0.0, -1j], [0.1, 2.0])
    for array in (found.values, *found.derivatives.values()):
        assert np.all(array == 0.0)


def test_a_missed_tolerance_is_told():
    """At correlation 1 the equation is nearly undamped: the finest mesh gives six digits."""
    model = pv.VolterraHeston(pv.FractionalKernel(0.2), 0.4, 1.0, pv.ForwardVariance.flat(0.04))
    with pytest.warns(pv.AccuracyWarning, match="not met at 1 u"):
        found = model.transform_sensitivities(500 - 0.4j, [30.0])
    assert np.isfinite(found["hurst"]).all()


def test_vol_of_vol_zero():
    """At vol_of_vol 0 its derivative comes from the correlation alone, and is not lost nearby."""
    u, maturity = 3 - 0.4j, 0.5
    zero = make_model(0.1, 0.0, -0.7, 0.5, False).transform_sensitivities(u, maturity)
    near = make_model(0.1, 1e-7, -0.7, 0.5, False).transform_sensitivities(u, maturity)
    assert abs(zero["vol_of_vol"] - near["vol_of_vol"]) < 1e-6 * abs(zero["vol_of_vol"])
    tiny = (0.1, 1e-3, 0.0, 0.5)
    found = make_model(*tiny, False).transform_sensitivities(u, maturity)["vol_of_vol"]
    wanted = exact(tiny, False, u, maturity, "vol_of_vol")
    assert abs(found - wanted) < 1e-7 * abs(wanted)


def test_extremes_are_finite():
    maturities = [1 / 8760, 0.1, 30.0]
    u = np.linspace(0.0, 1000.0, 9) - 0.4j
    for hurst in (0.001, 0.2, 0.4999):
        for correlation in (-1.0, 0.5):
            model = make_model(hurst, 0.4, correlation, 0.0, False)
            with warnings.catch_warnings():
                warnings.simplefilter("error")
                found = model.transform_sensitivities(u, maturities)
            for derivative in (found.values, *found.derivatives.values()):
                assert np.isfinite(derivative).all()


def test_bad_arguments():
    market, driven = (make_model(0.1, 0.4, -0.7, 0.5, d) for d in (False, True))
    with pytest.raises(ValueError, match=r"parameters must be among .* for a market curve"):
        market.transform_sensitivities(1.0, 1.0, ["initial_variance"])
    with pytest.raises(ValueError, match="parameters must be among"):
        driven.transform_sensitivities(1.0, 1.0, ["strike"])
    with pytest.raises(ValueError, match="parameters must not repeat"):
        driven.transform_sensitivities(1.0, 1.0, ["hurst", "hurst"])
    with pytest.raises(TypeError, match="parameters must be an iterable"):
        driven.transform_sensitivities(1.0, 1.0, "hurst")
    with pytest.raises(ValueError, match="maturities"):
        driven.transform_sensitivities(1.0, 0.0)
    with pytest.raises(ValueError, match="u must be a scalar or one-dimensional"):
        driven.transform_sensitivities([[1.0]], 1.0)
    with pytest.raises(ValueError, match="tolerance"):
        driven.transform_sensitivities(1.0, 1.0, tolerance=0.0)
    with pytest.raises(pv.MomentExplosionError, match="maturity 1"):
        make_model(0.1, 0.8, -0.7, 0.0, False).transform_sensitivities(3j + 1, [1.0])


SCRIPT = """
import numpy as np, pyvolterra as pv
kernel = pv.FractionalKernel(0.15)
curve = pv.ForwardVariance.driven(kernel, 0.03, [0.2, 1.0], [0.04, 0.03], 0.5)
model = pv.VolterraHeston(kernel, 0.4, -0.7, curve, 0.5)
found = model.transform_sensitivities(np.linspace(0, 200, 21) - 0.4j, [0.02, 0.5, 2.0])
np.concatenate([d.ravel() for d in (found.values, *found.derivatives.values())]).tofile({path!r})
"""


def test_instruction_sets_agree(tmp_path):
    results = []
    for name in _core.build_info()["instruction_sets_available"]:
        path = str(tmp_path / name)
        environment = {**os.environ, "PYVOLTERRA_INSTRUCTION_SET": name}
        subprocess.run(
            [sys.executable, "-c", SCRIPT.format(path=path)],
            env=environment,
            cwd=tmp_path,  # not the checkout: the installed package is meant
            check=True,
        )
        results.append(np.fromfile(path, complex))
    for other in results[1:]:
        assert np.abs(other - results[0]).max() < 1e-10 * np.abs(results[0]).max()
