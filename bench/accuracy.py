"""True error of the transform on random models, against tolerance and against its own estimate.

    python bench/accuracy.py [--cases N] [--seed S] [--tolerance T] [--json FILE]

Each case draws a model, a forward-variance curve, a maturity and a Fourier argument at random. The
truth is the certified fractional power series (pyvolterra.reference.oracle), which shares nothing
with time stepping; where that does not certify itself, the finest mesh of the same scheme, which
has to agree with the uniform Adams scheme within the error that one admits. The worst cases are
printed with all their parameters.
"""

import argparse
import json
import time
import warnings
from pathlib import Path

import numpy as np

import pyvolterra as pv
from pyvolterra.reference import oracle

TERMS = 160  # of the power series: about a second at the most


def draw(generator: np.random.Generator) -> dict[str, float]:
    """Hurst .005-.5, vol-of-vol .1-1, correlation -.99-.5, mean reversion 0-3, 1 day-10 years."""
    log_uniform = lambda low, high: float(np.exp(generator.uniform(np.log(low), np.log(high))))  # noqa: E731
    return {
        "hurst": float(generator.uniform(0.005, 0.5)),
        "vol_of_vol": log_uniform(0.1, 1.0),
        "correlation": float(generator.uniform(-0.99, 0.5)),
        "mean_reversion": float(generator.choice([0.0, generator.uniform(0.0, 3.0)])),
        "maturity": log_uniform(1.0 / 365.0, 10.0),
        "u": log_uniform(0.1, 1000.0),
        "imaginary": float(generator.choice([0.0, -0.5])),
        "initial_variance": log_uniform(0.005, 0.2),
        "long_run_variance": log_uniform(0.005, 0.2),
    }


def model_of(case: dict[str, float]) -> pv.VolterraHeston:
    names = ("vol_of_vol", "correlation", "mean_reversion", "initial_variance", "long_run_variance")
    return pv.VolterraHeston.from_spot_variance(
        pv.FractionalKernel(case["hurst"]), **{name: case[name] for name in names}
    )


def truth(
    case: dict[str, float], model: pv.VolterraHeston, u: complex
) -> tuple[complex, float, str]:
    """Value, bound on its error, and where they come from."""
    names = (
        "hurst",
        "vol_of_vol",
        "correlation",
        "mean_reversion",
        "initial_variance",
        "long_run_variance",
    )
    try:
        certified = oracle.log_transform_spot(
            u, case["maturity"], **{name: case[name] for name in names}, digits=14, terms=TERMS
        )
        value = np.exp(complex(certified.value))
        return value, float(abs(value) * certified.error), "series"
    except oracle.UncertifiedError:
        value, info = model.characteristic_function(
            u, case["maturity"], scheme="graded", tolerance=1e-13, full_output=True
        )
        other, rough = model.characteristic_function(
            u, case["maturity"], scheme="adams", steps=4000, full_output=True
        )
        if not abs(value - other) <= rough.error_estimate + info.error_estimate:
            raise RuntimeError(f"the schemes disagree: {case}") from None
        return value, float(info.error_estimate), "finest mesh"


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--cases", type=int, default=2000)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--tolerance", type=float, default=1e-8)
    parser.add_argument("--json", type=Path)
    arguments = parser.parse_args()
    generator = np.random.default_rng(arguments.seed)
    rows = []
    start = time.perf_counter()
    for _ in range(arguments.cases):
        case = draw(generator)
        model, u = model_of(case), complex(case["u"], case["imaginary"])
        with warnings.catch_warnings(record=True) as caught:
            warnings.simplefilter("always")
            value, info = model.characteristic_function(
                u, case["maturity"], tolerance=arguments.tolerance, full_output=True
            )
        exact, uncertainty, source = truth(case, model, u)
        rows.append(
            case
            | {
                "error": abs(value - exact),
                "uncertainty": uncertainty,
                "estimate": float(info.error_estimate),
                "warned": bool(caught),
                "source": source,
            }
        )
    report(rows, arguments.tolerance, time.perf_counter() - start)
    if arguments.json:
        arguments.json.parent.mkdir(parents=True, exist_ok=True)
        arguments.json.write_text(json.dumps(rows, indent=1) + "\n")


def report(rows: list[dict], tolerance: float, seconds: float) -> None:
    print(f"{len(rows)} cases at tolerance {tolerance:.0e} in {seconds:.0f} s")
    for source in ("series", "finest mesh"):
        here = [row for row in rows if row["source"] == source]
        if not here:
            continue
        error = np.array([row["error"] for row in here])
        slack = np.array([row["uncertainty"] for row in here])
        estimate = np.array([row["estimate"] for row in here])
        beyond = error > tolerance + slack
        under = error > estimate + slack
        ratio = estimate / np.maximum(error, 1e-300)
        # below 1e-12 rounding takes over, and the estimate promises no more
        seen = error > np.maximum(10.0 * slack, 1e-12)
        silent = beyond & ~np.array([row["warned"] for row in here])
        median = np.median(ratio[seen]) if seen.any() else float("nan")
        print(
            f"  against {source}: {len(here)} cases, largest error {error.max():.1e} (truth known "
            f"to {slack.max():.1e}); beyond tolerance {beyond.sum()}, of them silent "
            f"{silent.sum()}; estimate below error {under.sum()}; median estimate/error "
            f"{median:.1f}"
        )
    rows.sort(key=lambda row: row["error"] - row["uncertainty"], reverse=True)
    for row in rows[:5]:
        print("  worst:", {k: f"{v:.6g}" if isinstance(v, float) else v for k, v in row.items()})


if __name__ == "__main__":
    main()
