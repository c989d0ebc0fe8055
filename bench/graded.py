# ruff: noqa: B023 - every lambda is called before its loop goes on
"""High-order transform against NumPy's classical closed form and against the Adams scheme.

    python bench/graded.py [--json FILE] [--picture FILE.png]

One run, one thread unless said otherwise; every instruction set of the machine runs in a
process of its own. The yardstick is the closed form of the classical model (hurst 1/2) in
vectorised NumPy on the same grid: 20 maturities from a week to three years, 256 arguments u in
[0, 300] - i/2. Every timed call of the rough transform has a hurst index that was never seen
before, so its weights are part of the time, as are the mesh, the checks of the arguments and
Python's own overhead. Times are minima of many calls; only ratios within a run mean anything.
Results are compared with a solution at tolerance 1e-13 before they are timed.
"""

import argparse
import itertools
import json
import os
import platform
import resource
import subprocess
import sys
import time
import warnings
from pathlib import Path

for variable in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ[variable] = "1"  # before NumPy is imported

import numpy as np

import pyvolterra as pv
from pyvolterra import _core
from pyvolterra.reference.adams import log_transform_adams

NU, RHO, XI = 0.4, -0.7, 0.04
HURSTS = (0.1, 0.2, 0.4)
U = np.linspace(0.0, 300.0, 256) - 0.5j
MATURITIES = np.geomspace(7 / 365, 3.0, 20)
# ratio to the closed form at 1e-8; twice that at hurst 0.4, and twice again with the estimate
GOAL = {"baseline": 0.6, "avx2": 0.25, "avx512": 0.15}


def model(hurst: float) -> pv.VolterraHeston:
    return pv.VolterraHeston(
        pv.FractionalKernel(hurst),
        vol_of_vol=NU,
        correlation=RHO,
        forward_variance=pv.ForwardVariance.flat(XI),
    )


def fastest(call, budget: float = 0.6) -> float:
    call()
    best, spent, count = float("inf"), 0.0, 0
    while count < 20 or (spent < budget and count < 2000):
        start = time.perf_counter()
        call()
        taken = time.perf_counter() - start
        best, spent, count = min(best, taken), spent + taken, count + 1
    return best


def closed_form(u, maturities):
    """Classical model with mean reversion 0.3 towards its initial variance."""
    reversion, t, iu = 0.3, maturities[:, None], 1j * u[None, :]
    b = reversion - RHO * NU * iu
    d = np.sqrt(b * b + NU * NU * (u * u + iu))
    g, e = (b - d) / (b + d), np.exp(-d * t)
    drift = reversion * XI / NU**2 * ((b - d) * t - 2 * np.log((1 - g * e) / (1 - g)))
    return np.exp(drift + XI * (b - d) / NU**2 * (1 - e) / (1 - g * e))


def new_models(hurst: float):
    """Models that differ in the last digits of hurst, each made before it is asked for."""
    return itertools.cycle([model(hurst + 1e-9 * (k + 1)) for k in range(3000)])


def one_set() -> dict:
    """All figures of the instruction set this process runs with."""
    out: dict = {"closed form": fastest(lambda: closed_form(U, MATURITIES)), "hurst": {}}
    for hurst in HURSTS:
        m, exact = model(hurst), None
        exact = m.characteristic_function(U, MATURITIES, tolerance=1e-13, scheme="graded")
        figures = out["hurst"][hurst] = {}
        for name, u, scheme, tolerance, full in (
            ("1e-8", U, "auto", 1e-8, False),
            ("1e-8 with estimate", U, "auto", 1e-8, True),
            ("1e-10", U, "auto", 1e-10, False),
            ("1e-8, each u solved", U, "graded", 1e-8, False),
            ("1e-8, each u solved, with estimate", U, "graded", 1e-8, True),
        ):
            value = m.characteristic_function(u, MATURITIES, tolerance=tolerance, scheme=scheme)
            error = float(abs(value - exact).max())
            assert error <= tolerance, (hurst, name, error)
            models = new_models(hurst)
            seconds = fastest(
                lambda: next(models).log_characteristic_function(
                    u,
                    MATURITIES,
                    tolerance=tolerance,
                    scheme=scheme,
                    full_output=full,
                )
            )
            figures[name] = {"seconds": seconds, "error": error}
    m = model(0.1)
    run = m.log_characteristic_function
    last = MATURITIES[-1:]
    for scheme in ("auto", "graded"):
        key = "default" if scheme == "auto" else "each u solved"
        many = {
            n: fastest(lambda: run(np.linspace(0, 300, n) - 0.5j, MATURITIES, scheme=scheme))
            for n in (256, 4096, 100_000)
        }
        out[key] = {
            "20 maturities : 1": fastest(lambda: run(U, MATURITIES, scheme=scheme))
            / fastest(lambda: run(U, last, scheme=scheme)),
            "seconds per u": {n: t / n for n, t in many.items()},
            "two threads : one, 4096 u": many[4096]
            / fastest(
                lambda: run(
                    np.linspace(0, 300, 4096) - 0.5j,
                    MATURITIES,
                    scheme=scheme,
                    threads=2,
                )
            ),
        }
    plain = fastest(lambda: run(U, MATURITIES, scheme="graded"))
    out["sensitivities : values, each u solved"] = (
        fastest(lambda: m.transform_sensitivities(U, MATURITIES)) / plain
    )
    return out


def against_adams() -> dict:
    """NumPy's Adams scheme and this one, one maturity, at the accuracy the former reaches."""
    u, maturity, out = np.linspace(0.0, 100.0, 256) - 0.5j, np.array([1.0]), {}
    for hurst in HURSTS:
        m = model(hurst)
        exact = m.characteristic_function(u, 1.0, tolerance=1e-12, scheme="graded")
        rows = []
        for steps in (250, 500, 1000, 2000, 4000):
            start = time.perf_counter()
            log_phi = log_transform_adams(
                u,
                1.0,
                steps,
                hurst=hurst,
                vol_of_vol=NU,
                correlation=RHO,
                mean_reversion=0.0,
                variance_times=[1.0],
                variance_levels=[XI],
            )
            seconds = time.perf_counter() - start
            value = np.exp(log_phi)
            rows.append((steps, seconds, float(abs(value - exact).max())))
        # the last two meshes give the rate; from it, what 1e-5 and 1e-8 would take
        (_, t0, e0), (_, t1, e1) = rows[-2:]
        work, order = np.log(t1 / t0) / np.log(2.0), np.log(e0 / e1) / np.log(2.0)
        entry = {"rows": rows, "order": order}
        for tolerance in (1e-5, 1e-8):
            seconds = t1 * (e1 / tolerance) ** (work / order)
            models = new_models(hurst)
            ours = fastest(
                lambda: next(models).log_characteristic_function(u, maturity, tolerance=tolerance)
            )
            entry[f"{tolerance:.0e}"] = {
                "ratio": seconds / ours,
                "extrapolated": e1 > tolerance,
            }
        out[hurst] = entry
    return out


def memory(count: int) -> float:
    """MiB that a transform of ``count`` arguments adds to a process, its result left out."""
    code = (
        "import resource, numpy as np, pyvolterra as pv\n"
        f"m = pv.VolterraHeston(pv.FractionalKernel(0.1), vol_of_vol={NU}, correlation={RHO},"
        f" forward_variance=pv.ForwardVariance.flat({XI}))\n"
        "run = lambda n: m.log_characteristic_function(np.linspace(0, 300, n) - 0.4j,"
        " np.geomspace(7/365, 3, 20))\n"
        "peak = lambda: resource.getrusage(resource.RUSAGE_SELF).ru_maxrss\n"
        "run(256); before = peak()\n"
        f"out = run({count}); print((peak() - before) / 1024 - out.nbytes / 2**20)\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    return float(done.stdout)


def error_against_work() -> list[dict]:
    """Largest error and seconds of both schemes over hurst, one maturity of a year, 64 u to 100."""
    u, rows = np.linspace(0.0, 100.0, 64) - 0.5j, []
    for hurst in (0.01, 0.05, 0.1, 0.2, 0.3, 0.4, 0.5 - 1e-3):
        m = model(hurst)
        exact = m.characteristic_function(u, 1.0, tolerance=1e-13, scheme="graded")
        choices = [("graded", {"tolerance": 10.0**-k}) for k in range(3, 13)]
        choices += [("adams", {"steps": n}) for n in (64, 128, 256, 512, 1024, 2048)]
        for scheme, options in choices:
            value = m.characteristic_function(u, 1.0, scheme=scheme, **options)
            seconds = fastest(
                lambda: m.log_characteristic_function(u, 1.0, scheme=scheme, **options),
                budget=0.1,
            )
            error = float(abs(value - exact).max())
            rows.append({"hurst": hurst, "scheme": scheme, "seconds": seconds, "error": error})
    return rows


def draw(rows: list[dict], path: Path) -> None:
    import matplotlib

    matplotlib.use("Agg")
    from matplotlib import pyplot as plt

    hursts = sorted({row["hurst"] for row in rows})
    figure, axes = plt.subplots(1, 2, figsize=(9.5, 4.2), sharex=True, sharey=True)
    shades = plt.get_cmap("viridis")(np.linspace(0.0, 0.9, len(hursts)))
    for axis, scheme in zip(axes, ("graded", "adams"), strict=True):
        for hurst, shade in zip(hursts, shades, strict=True):
            some = [r for r in rows if r["hurst"] == hurst and r["scheme"] == scheme]
            axis.loglog(
                [1e6 * r["seconds"] / 64 for r in some],
                [max(r["error"], 1e-16) for r in some],
                "o-",
                color=shade,
                markersize=3,
                label=f"hurst {hurst:.3g}",
            )
        axis.set_title(f'scheme="{scheme}"')
        axis.set_xlabel("microseconds per u")
        axis.grid(True, which="major", alpha=0.3)
    axes[0].set_ylabel("largest error of the characteristic function")
    axes[1].legend(fontsize=8)
    figure.suptitle("Error against work: one maturity (a year), 64 u to 100", fontsize=11)
    figure.tight_layout()
    figure.savefig(path, dpi=140)


def report(sets: dict, adams: dict, mebibytes: float) -> None:
    for name, figures in sets.items():
        base = figures["closed form"]
        print(f"\n{name}: closed form {1e6 * base:.0f} us = 1.000")
        for hurst, rows in figures["hurst"].items():
            goal = GOAL.get(name, 0.6) * (2.0 if float(hurst) > 0.2 else 1.0)
            print(f"  hurst {hurst} (goal {goal:.2f}, with estimate {2 * goal:.2f})")
            for what, row in rows.items():
                ratio = row["seconds"] / base
                print(f"    {what:36s} {ratio:6.3f}   largest error {row['error']:.1e}")
        for key in ("default", "each u solved"):
            row = figures[key]
            per = ", ".join(f"{n}: {1e9 * t:.0f} ns" for n, t in row["seconds per u"].items())
            print(
                f"  {key}: 20 maturities cost {row['20 maturities : 1']:.2f} x one; per u at {per};"
                f" two threads {row['two threads : one, 4096 u']:.2f} x one at 4096 u"
            )
        print(
            "  values with all sensitivities: "
            f"{figures['sensitivities : values, each u solved']:.2f} x each u solved"
        )
    print("\nAgainst the Adams scheme in NumPy, one maturity of a year, 256 u to 100:")
    for hurst, row in adams.items():
        parts = [
            f"at {t} {row[t]['ratio']:,.0f} x{' (extrapolated)' if row[t]['extrapolated'] else ''}"
            for t in ("1e-05", "1e-08")
        ]
        print(f"  hurst {hurst}: {', '.join(parts)}; order {row['order']:.2f}")
    print(f"\nMemory at 100,000 u x 20 maturities beyond the result: {mebibytes:.0f} MiB")


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--json", type=Path, help="write all figures here")
    parser.add_argument("--picture", type=Path, help="draw error against work here")
    parser.add_argument("--one-set", action="store_true", help=argparse.SUPPRESS)
    options = parser.parse_args()
    warnings.simplefilter("error", pv.AccuracyWarning)
    if options.one_set:
        json.dump(one_set(), sys.stdout)
        return
    sets = {}
    for name in _core.build_info()["instruction_sets_available"]:
        done = subprocess.run(
            [sys.executable, __file__, "--one-set"],
            env={**os.environ, "PYVOLTERRA_INSTRUCTION_SET": name},
            stdout=subprocess.PIPE,
            text=True,
            check=True,
        )
        sets[name] = json.loads(done.stdout)
    adams, mebibytes = against_adams(), memory(100_000)
    report(sets, adams, mebibytes)
    rows = error_against_work() if options.picture or options.json else []
    if options.picture:
        warnings.simplefilter("ignore")
        draw(rows, options.picture)
    if options.json:
        content = {
            "machine": platform.processor() or platform.machine(),
            "python": platform.python_version(),
            "peak_kib": resource.getrusage(resource.RUSAGE_SELF).ru_maxrss,
            "instruction_sets": sets,
            "adams": adams,
            "memory_mib": mebibytes,
            "error_against_work": rows,
        }
        options.json.write_text(json.dumps(content, indent=1) + "\n")


if __name__ == "__main__":
    main()
