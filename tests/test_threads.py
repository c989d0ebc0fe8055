"""Threads change nothing but the time; instruction sets agree; forks and pools are safe."""

import concurrent.futures
import multiprocessing
import os
import subprocess
import sys

import numpy as np
import pytest

import pyvolterra as pv
from pyvolterra import _core

MODEL = pv.VolterraHeston(pv.FractionalKernel(0.1), 0.4, -0.7, pv.ForwardVariance.flat(0.04), 0.2)
U = np.linspace(0.0, 300.0, 501) - 0.5j
MATURITIES = np.array([3.0, 0.02, 0.5])


@pytest.mark.parametrize("scheme", ["graded", "adams"])
@pytest.mark.parametrize("threads", [2, 4, 7])
def test_same_bits_for_any_number_of_threads(scheme, threads):
    options = {"scheme": scheme, "tolerance": 1e-3 if scheme == "adams" else 1e-8}
    one, first = MODEL.log_characteristic_function(
        U, MATURITIES, threads=1, full_output=True, **options
    )
    many, then = MODEL.log_characteristic_function(
        U, MATURITIES, threads=threads, full_output=True, **options
    )
    np.testing.assert_array_equal(one, many)
    np.testing.assert_array_equal(first.error_estimate, then.error_estimate)


def test_a_shared_model_in_many_threads():
    expected = MODEL.log_characteristic_function(U, MATURITIES)
    with concurrent.futures.ThreadPoolExecutor(8) as pool:
        jobs = [
            pool.submit(MODEL.log_characteristic_function, U, MATURITIES, threads=1 + i % 3)
            for i in range(48)
        ]
        for job in jobs:
            np.testing.assert_array_equal(job.result(), expected)


def _in_child(queue):
    queue.put(MODEL.log_characteristic_function(U, MATURITIES, threads=2))


@pytest.mark.filterwarnings("ignore:.*fork.*:DeprecationWarning")
@pytest.mark.parametrize("method", multiprocessing.get_all_start_methods())
def test_in_child_processes(method):
    expected = MODEL.log_characteristic_function(U, MATURITIES, threads=2)
    context = multiprocessing.get_context(method)
    queue = context.Queue()
    child = context.Process(target=_in_child, args=(queue,))
    child.start()
    np.testing.assert_array_equal(queue.get(timeout=60), expected)
    child.join(60)
    assert child.exitcode == 0


def test_an_error_in_a_worker_reaches_the_caller():
    u = np.where(np.arange(400) == 399, 1.0 + 40j, U[:400])
    with pytest.raises(pv.MomentExplosionError):
        MODEL.characteristic_function(u, 1.0, threads=4)


def test_default_number_of_threads():
    assert pv.default_threads() == 1
    pv.set_default_threads(3)
    try:
        assert pv.default_threads() == 3
        MODEL.characteristic_function(U, 1.0)
    finally:
        pv.set_default_threads(1)
    with pytest.raises(ValueError, match="count must be at least 1, got 0"):
        pv.set_default_threads(0)
    with pytest.raises(TypeError, match="threads must be an integer"):
        MODEL.characteristic_function(1.0, 1.0, threads=1.5)
    with pytest.raises(ValueError, match="threads must be at least 1"):
        MODEL.characteristic_function(1.0, 1.0, threads=0)


def _in_process_with(instruction_set):
    code = (
        "import sys, numpy as np, pyvolterra as pv\n"
        "m = pv.VolterraHeston(pv.FractionalKernel(0.1), 0.4, -0.7,"
        " pv.ForwardVariance.flat(0.04), 0.2)\n"
        "u = np.linspace(0.0, 300.0, 101) - 0.5j\n"
        "np.save(sys.stdout.buffer, m.characteristic_function(u, [0.02, 3.0]))\n"
    )
    environment = os.environ | {"PYVOLTERRA_INSTRUCTION_SET": instruction_set}
    return subprocess.run([sys.executable, "-P", "-c", code], env=environment, capture_output=True)


def test_every_instruction_set_agrees():
    import io

    names = _core.build_info()["instruction_sets_available"]
    values = [np.load(io.BytesIO(_in_process_with(name).stdout)) for name in names]
    for value in values[1:]:
        np.testing.assert_allclose(value, values[0], rtol=0, atol=1e-13)


def test_an_instruction_set_that_is_not_there_is_named():
    result = _in_process_with("abacus")
    assert result.returncode == 1
    assert b"PYVOLTERRA_INSTRUCTION_SET=abacus: this machine and build offer" in result.stderr
