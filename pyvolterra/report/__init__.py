"""What a fit is handed over as: pictures, an HTML page, fit.json and residuals.csv."""

from collections.abc import Callable
from pathlib import Path

import numpy as np

from ..errors import MissingDependencyError
from ..fit import Fit
from .files import check_folder, fit_json, residuals_csv, smile_names, write_files

__all__ = ["check_folder", "render_report", "require_matplotlib", "write_report"]


def require_matplotlib() -> None:
    """Raise :class:`MissingDependencyError` unless pictures can be drawn."""
    try:
        import matplotlib  # noqa: F401
    except ImportError:
        raise MissingDependencyError(
            'matplotlib is missing, the report\'s pictures need it: pip install "pyvolterra[desk]"'
        ) from None


def render_report(fit: Fit, *, progress: Callable[[str], None] | None = None) -> dict[str, bytes]:
    """Everything a fit is reported in, as file names and contents; nothing is written.

    Parameters
    ----------
    fit : Fit
    progress : callable, optional
        Called with a short text before every picture.

    Returns
    -------
    dict of str to bytes
        ``overview-*.png``, ``smiles/smile-<expiry>.png``, ``residuals.csv``, ``fit.json`` and
        ``report.html``, which holds all pictures and needs no other file.

    Raises
    ------
    MissingDependencyError
        Without matplotlib.

    Notes
    -----
    Thread-safe; no global state of matplotlib is touched. Cost: about a tenth of a second for
    each expiry.
    """
    require_matplotlib()
    from . import figures
    from .page import report_page
    from .slices import expiry_slices

    say = progress or (lambda text: None)
    say("drawing the surface")
    slices = expiry_slices(fit)
    pictures = {
        "smiles": figures.smiles_picture(slices),
        "smiles_narrow": figures.smiles_picture(slices, columns=2),
        "bid_ask": figures.bid_ask_picture(slices),
        "skew": figures.skew_picture(fit, slices),
        "forward_volatility": figures.forward_volatility_picture(fit, slices),
    }
    names = smile_names(np.array([s.expiry for s in slices]))
    smiles: list[bytes] = []
    for s in slices:
        say(f"drawing smile {len(smiles) + 1} of {len(slices)}")
        smiles.append(figures.smile_picture(s))
    say("writing the report")
    contents = dict(zip(names, smiles, strict=True))
    contents |= {
        f"overview-{name.replace('_', '-')}.png": png
        for name, png in pictures.items()
        if name != "smiles_narrow"
    }
    contents["residuals.csv"] = residuals_csv(fit)
    contents["fit.json"] = fit_json(fit)
    contents["report.html"] = report_page(fit, slices, pictures, smiles)
    return contents


def write_report(fit: Fit, folder: Path, *, progress: Callable[[str], None] | None = None) -> Path:
    """Write :func:`render_report` into ``folder`` and return the path of ``report.html``.

    ``folder`` is created if missing. Files appear whole or not at all; smile pictures that an
    earlier fit left there for expiries of its own are removed.

    Raises
    ------
    MissingDependencyError
        Without matplotlib.
    OSError
        If the folder cannot be written to; half-written files are removed.
    """
    contents = render_report(fit, progress=progress)
    write_files(folder, contents)
    for old in folder.glob("smiles/smile-*.png"):
        if old.relative_to(folder).as_posix() not in contents:
            old.unlink()
    return folder / "report.html"
