"""What a fit leaves on disk: fit.json, residuals.csv, and how files are written."""

import csv
import io
import json
import math
import os
import platform
import secrets
from collections import Counter
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from .. import _core
from .._version import __version__
from ..fit import Fit
from .slices import curve_errors, expiry_labels, half_widths, inside

FORMAT = "pyvolterra fit"
FORMAT_VERSION = 1


def fit_json(fit: Fit) -> bytes:
    """The fit as strict JSON (UTF-8): a number that is not finite is written as null.

    Volatilities, residuals and rates are decimals, variances per year, times in years (ACT/365F).
    """
    document = {
        "format": FORMAT,
        "format_version": FORMAT_VERSION,
        "source": fit.source,
        "quote_time": _iso(fit.quote_time),
        "quote_fingerprint_sha256": fit.fingerprint,
        "converged": fit.converged,
        "message": fit.message,
        "evaluations": fit.evaluations,
        "seconds": fit.elapsed,
        "kernel": {"name": type(fit.model.kernel).__name__, "hurst": fit.model.kernel.hurst},
        "parameters": fit.parameters,
        "standard_errors": {n: fit.standard_errors.get(n) for n in fit.parameters},
        "at_bound": list(fit.at_bound),
        "covariance": {"names": list(fit.covariance_names), "matrix": fit.covariance.tolist()},
        "forward_variance": _curve(fit),
        "forwards": [
            {
                "expiry": _iso(p.expiry),
                "maturity": p.maturity,
                "forward": p.forward,
                "forward_standard_error": p.forward_error,
                "discount": p.discount,
                "pairs": p.pairs,
                "method": p.method,
            }
            for p in fit.forwards.points
        ],
        "quality": {
            "quotes_read": fit.quotes_read,
            "quotes_set_aside": len(fit.rejections),
            "quotes_fitted": int(fit.residuals.size),
            "share_inside_bid_ask": fit.share_inside_bid_ask,
            "rms_volatility_residual": fit.rms_residual,
            "by_expiry": _quality_by_expiry(fit),
        },
        "arbitrage": {
            "free": fit.arbitrage.free,
            "calendar": list(fit.arbitrage.calendar),
            "butterfly": list(fit.arbitrage.butterfly),
            "worst_calendar": fit.arbitrage.worst_calendar,
            "worst_butterfly": fit.arbitrage.worst_butterfly,
            "grid": fit.arbitrage.grid,
        },
        "set_aside": [
            {"stage": stage, "reason": reason, "count": count}
            for (stage, reason), count in Counter(
                (r.stage, r.reason) for r in fit.rejections
            ).items()
        ],
        "versions": versions(),
    }
    text = json.dumps(_strict(document), allow_nan=False, ensure_ascii=False, indent=1)
    return (text + "\n").encode("utf-8", errors="replace")


def versions() -> dict[str, str]:
    """Versions a result depends on."""
    import scipy

    return {
        "pyvolterra": __version__,
        "python": platform.python_version(),
        "numpy": np.__version__,
        "scipy": scipy.__version__,
        "instruction_set": str(_core.build_info().get("instruction_set", "")),
    }


def residuals_csv(fit: Fit) -> bytes:
    """One row per fitted quote; volatilities as decimals, residual = model - mid.

    ``residual_half_widths`` counts from mid to the bid or ask on the side of the model: the model
    is inside bid and ask exactly when its absolute value is at most 1.
    """
    smiles = fit.smiles
    buffer = io.StringIO(newline="")
    writer = csv.writer(buffer, lineterminator="\n")
    writer.writerow(
        [
            "row",
            "expiry",
            "strike",
            "side",
            "bid_volatility",
            "mid_volatility",
            "ask_volatility",
            "model_volatility",
            "residual_bp",
            "residual_half_widths",
            "inside_bid_ask",
        ]
    )
    scaled, within = half_widths(fit), inside(fit)
    for i in range(smiles.mid.size):
        writer.writerow(
            [
                int(smiles.row[i]),
                _iso(smiles.expiry[i]),
                _number(smiles.strike[i], 12),
                "call" if smiles.is_call[i] else "put",
                _number(smiles.bid_volatility[i], 8),
                _number(smiles.mid_volatility[i], 8),
                _number(smiles.ask_volatility[i], 8),
                _number(fit.model_volatility[i], 8),
                _number(1e4 * fit.residuals[i], 5),
                _number(scaled[i], 5),
                "yes" if within[i] else "no",
            ]
        )
    return buffer.getvalue().encode("utf-8")


def check_folder(folder: Path) -> None:
    """Raise OSError, in words, unless ``folder``, existing or not, can take files."""
    if folder.exists() or folder.is_symlink():
        if not folder.is_dir():
            raise NotADirectoryError(f"output folder {folder} exists and is not a folder")
        if not os.access(folder, os.W_OK | os.X_OK):
            raise PermissionError(f"output folder {folder} is not writable")
        return
    parent = folder.absolute().parent
    if not parent.exists():
        raise FileNotFoundError(f"output folder {folder}: its parent {parent} does not exist")
    if not parent.is_dir():
        raise NotADirectoryError(f"output folder {folder}: its parent {parent} is not a folder")
    if not os.access(parent, os.W_OK | os.X_OK):
        raise PermissionError(f"output folder {folder}: its parent {parent} is not writable")


def write_files(folder: Path, contents: Mapping[str, bytes]) -> None:
    """Write files into ``folder`` (created if missing), each whole or not at all.

    All are written beside their names and flushed to the disk before the first is renamed into
    place, so that a full disk or a crash leaves no half-written file and, short of a failing
    rename, no mixture of an old and a new fit. Names may have one folder, as in ``smiles/a.png``.
    """
    made: list[Path] = []
    beside: dict[Path, Path] = {}
    try:
        for name, content in contents.items():
            target = folder / name
            for level in (folder, target.parent):
                if not level.is_dir():
                    level.mkdir()
                    made.append(level)
            if target.is_dir():
                raise IsADirectoryError(f"{target} is a folder, a file is to be written there")
            part = target.with_name(f".{target.name}.{secrets.token_hex(4)}.part")
            beside[part] = target
            with open(part, "xb") as file:
                file.write(content)
                file.flush()
                os.fsync(file.fileno())
        for part, target in beside.items():
            os.replace(part, target)
        made.clear()
    finally:
        for part in beside:
            part.unlink(missing_ok=True)
        for level in reversed(made):
            if not any(level.iterdir()):
                level.rmdir()
    for level in {folder, *(target.parent for target in beside.values())}:
        _flush_folder(level)


def _flush_folder(folder: Path) -> None:
    # Makes the renames themselves durable; Windows cannot open a folder and needs no such step.
    if os.name != "posix":
        return
    handle = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def _curve(fit: Fit) -> dict[str, Any]:
    curve = fit.model.forward_variance
    maturities = np.unique(fit.smiles.maturity)
    return {
        "form": "driven",
        "initial_variance": fit.parameters["initial_variance"],
        "times": fit.curve_times.tolist(),
        "levels": fit.curve_levels.tolist(),
        "at_expiries": {
            "maturity": maturities.tolist(),
            "forward_variance": np.asarray(curve(maturities)).tolist(),
            "standard_error": curve_errors(fit, maturities).tolist(),
            "average_variance": (
                np.asarray(curve.total_variance(maturities)) / maturities
            ).tolist(),
        },
    }


def _quality_by_expiry(fit: Fit) -> list[dict[str, Any]]:
    smiles, within = fit.smiles, inside(fit)
    rows = []
    for maturity in np.unique(smiles.maturity):
        at = smiles.maturity == maturity
        rows.append(
            {
                "expiry": _iso(smiles.expiry[at][0]),
                "maturity": float(maturity),
                "quotes": int(at.sum()),
                "share_inside_bid_ask": float(within[at].mean()),
                "rms_volatility_residual": float(np.sqrt(np.mean(fit.residuals[at] ** 2))),
            }
        )
    return rows


def smile_names(expiries: Any) -> list[str]:
    """File names of the smile pictures, in the order of the expiries."""
    labels = expiry_labels(expiries)
    return [f"smiles/smile-{label.replace(' ', 'T').replace(':', '')}.png" for label in labels]


def _iso(moment: np.datetime64) -> str:
    return str(moment.astype("datetime64[s]")) + "Z"


def _number(value: float, digits: int) -> str:
    return f"{value:.{digits}g}" if math.isfinite(value) else ""


def _strict(value: Any) -> Any:
    if isinstance(value, dict):
        return {key: _strict(item) for key, item in value.items()}
    if isinstance(value, (list, tuple)):
        return [_strict(item) for item in value]
    if isinstance(value, np.generic):
        value = value.item()
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value
