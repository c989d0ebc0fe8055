"""Uniform Adams scheme: C++ for each instruction set against the NumPy reference.

    python bench/adams.py [--json FILE]

One run, one thread. Both sides solve the same equation by the same scheme at the same steps for 256
values of u, and their results are compared before they are timed. The reference is plain
vectorised NumPy; its matrix products run in the linear-algebra library NumPy was built with, which
is held to one thread. Times are medians; only ratios within a run mean anything.
"""

import argparse
import json
import os
import platform
import resource
import statistics
import subprocess
import sys
import time
from pathlib import Path

for variable in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ[variable] = "1"  # before NumPy is imported

import numpy as np

from pyvolterra import _core
from pyvolterra.reference.adams import riccati_adams

HURST, NU, RHO, REVERSION = 0.12, 0.331, -0.681, 0.1
STEPS = (100, 200, 500, 1000)
COUNT = 256
MODEL = (HURST, NU, RHO, REVERSION)
CURVE = (True, 0.04, np.array([1.0]), np.array([0.02]))
GOAL = {"baseline": 3.0, "avx2": 8.0, "avx512": 8.0}


def median_seconds(call, budget: float = 1.5) -> float:
    call()
    times: list[float] = []
    while len(times) < 5 or (sum(times) < budget and len(times) < 200):
        start = time.perf_counter()
        call()
        times.append(time.perf_counter() - start)
    return statistics.median(times)


def reference(u, steps):
    c0, c1 = -0.5 * (u * u + 1j * u), 1j * u * RHO * NU - REVERSION
    return riccati_adams(HURST, c0, c1, 0.5 * NU * NU, 1.0, steps)


def peak_memory(count: int, steps: int) -> float:
    """MiB that a transform of ``count`` arguments adds to a fresh process."""
    code = (
        "import resource, numpy as np\n"
        "from pyvolterra import _core\n"
        f"u = np.linspace(0.0, 100.0, {count}) + 0j\n"
        "curve = (True, 0.04, np.array([1.0]), np.array([0.02]))\n"
        f"run = lambda v, n: _core.basis_transform({MODEL!r}, curve, v, 1.0, n)\n"
        "run(u[:1], 10)\n"
        "before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss\n"
        f"run(u, {steps})\n"
        "print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before)\n"
    )
    out = subprocess.run(
        [sys.executable, "-P", "-c", code], check=True, capture_output=True, text=True
    )
    return int(out.stdout) / 1024.0


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--json", type=Path, help="write the figures to this file as well")
    arguments = parser.parse_args()
    info = _core.build_info()
    u = np.linspace(0.0, 100.0, COUNT) - 0.5j
    rows = []
    print(
        f"{COUNT} values of u, hurst {HURST}, one thread, {info['compiler']}, "
        f"NumPy {np.__version__}, {platform.machine()}"
    )
    print(
        f"{'steps':>6} {'scheme':>10} {'us per u':>10} {'NumPy us per u':>15} {'ratio':>7} "
        f"{'goal':>5} {'difference':>11}"
    )
    for steps in STEPS:
        psi = reference(u, steps)[1]
        slow = median_seconds(lambda steps=steps: reference(u, steps))
        for name in info["instruction_sets_available"]:
            result = _core.adams_solution(MODEL, u, 1.0, steps, name)
            difference = float(np.max(np.abs(result - psi)))
            fast = median_seconds(
                lambda steps=steps, name=name: _core.basis_transform(
                    MODEL, CURVE, u, 1.0, steps, name
                )
            )
            ratio = slow / fast
            rows.append(
                {
                    "steps": steps,
                    "instruction_set": name,
                    "us_per_u": 1e6 * fast / COUNT,
                    "numpy_us_per_u": 1e6 * slow / COUNT,
                    "ratio": ratio,
                    "goal": GOAL.get(name),
                    "difference": difference,
                }
            )
            print(
                f"{steps:>6} {name:>10} {1e6 * fast / COUNT:>10.3f} "
                f"{1e6 * slow / COUNT:>15.3f} {ratio:>7.1f} {GOAL.get(name, 0):>5.0f} "
                f"{difference:>11.1e}"
            )
    print("\nmemory that a transform adds to a fresh process, against a history kept for every u:")
    memory = []
    for steps, count in ((500, COUNT), (500, 256 * COUNT), (1000, 256 * COUNT)):
        added, all_u = peak_memory(count, steps), 16.0 * count * (steps + 1) / 2**20
        memory.append({"steps": steps, "u": count, "added_mib": added, "all_u_mib": all_u})
        print(f"{steps:>6} steps, {count:>6} u: {added:>6.1f} MiB against {all_u:>7.1f}")
    if arguments.json:
        arguments.json.parent.mkdir(parents=True, exist_ok=True)
        report = {
            "build": info,
            "numpy": np.__version__,
            "speed": rows,
            "memory": memory,
            "peak_rss_mib": resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024.0,
        }
        arguments.json.write_text(json.dumps(report, indent=1) + "\n")


if __name__ == "__main__":
    main()
