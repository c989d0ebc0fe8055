"""The commands ``pyvolterra demo``, ``pyvolterra fit`` and ``pyvolterra info``.

Exit status: 0 done, 2 bad input (one line on stderr), 3 fitted but not converged, 130 interrupted.
"""

import argparse
import math
import platform
import shutil
import sys
import time
import warnings
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, NoReturn, TextIO

import numpy as np

from ._version import __version__
from .errors import QuoteError

if TYPE_CHECKING:
    from .fit import Fit

OK, BAD_INPUT, NOT_CONVERGED, INTERRUPTED = 0, 2, 3, 130
MUCH_SET_ASIDE = 0.10  # share of the quotes read
MOST_REASONS = 6
DEMO_FOLDER = "pyvolterra-demo"
DEMO_QUOTES = "demo-quotes.csv"


def main(arguments: Sequence[str] | None = None) -> int:
    """Run a command and return its exit status.

    Parameters
    ----------
    arguments : sequence of str, optional
        The words after ``pyvolterra``; by default those of this process.
    """
    try:
        options = _parser().parse_args(arguments)
        command: Callable[[argparse.Namespace], int] = options.command
        # Kept until the progress line is gone; one line each, without the path of a source file.
        with warnings.catch_warnings(record=True) as caught:
            status = command(options)
        for text in dict.fromkeys(_one_line(warning.message) for warning in caught):
            print(f"pyvolterra: warning: {text}", file=sys.stderr)
        return status
    except KeyboardInterrupt:
        print("pyvolterra: interrupted", file=sys.stderr)
        return INTERRUPTED
    except OSError as error:
        print(f"pyvolterra: error: {_one_line(_plain_words(error))}", file=sys.stderr)
        return BAD_INPUT
    except (ValueError, ImportError) as error:
        print(f"pyvolterra: error: {_one_line(error)}", file=sys.stderr)
        return BAD_INPUT


def _demo(options: argparse.Namespace) -> int:
    folder = Path(options.out)
    _check_before_work(folder)
    from .demo import write_demo_quotes

    folder.mkdir(exist_ok=True)
    quotes = write_demo_quotes(folder / DEMO_QUOTES)
    print(f"invented quotes  {quotes}", flush=True)
    return _fit_and_report(quotes, folder, strict=False, mean_reversion=0.0)


def _fit(options: argparse.Namespace) -> int:
    quotes, folder = Path(options.quotes), Path(options.out)
    if not quotes.exists():
        raise QuoteError(f"quote file {quotes} does not exist")
    if quotes.is_dir():
        raise QuoteError(f"quote file {quotes} is a folder")
    _check_before_work(folder)
    return _fit_and_report(
        quotes, folder, strict=options.strict, mean_reversion=options.mean_reversion
    )


def _info(options: argparse.Namespace) -> int:
    from . import _core
    from .threads import default_threads

    build = _core.build_info()
    rows = {
        "pyvolterra": __version__,
        "python": f"{platform.python_implementation()} {platform.python_version()}",
        "numpy": np.__version__,
        "platform": f"{platform.system()} {platform.machine()}",
    }
    for name, value in (build | {"threads": default_threads()}).items():
        shown = ", ".join(map(str, value)) if isinstance(value, (list, tuple)) else str(value)
        rows[name.replace("_", " ")] = shown
    for name, value in rows.items():
        print(f"{name:<28}{value}")
    return OK


def _check_before_work(folder: Path) -> None:
    from .report import check_folder, require_matplotlib

    require_matplotlib()
    check_folder(folder)


def _fit_and_report(
    quotes: Path, folder: Path, *, strict: bool, mean_reversion: float | None
) -> int:
    from .calibration import calibrate
    from .quotes import read_quotes
    from .report import write_report

    with _progress_line(sys.stderr) as say:
        say(f"reading {quotes.name}")
        data = read_quotes(quotes, strict=strict)
        fit = calibrate(data, mean_reversion=mean_reversion, strict=strict, progress=say)
        page = write_report(fit, folder, progress=say)
    print(summary(fit))
    print(f"\nreport  {page}")
    for text in doubts(fit):
        print(f"pyvolterra: warning: {_one_line(text)}", file=sys.stderr)
    return OK if fit.converged else NOT_CONVERGED


def doubts(fit: "Fit") -> list[str]:
    """What a user of this very fit has to know before the numbers, one sentence each."""
    found = []
    if not fit.converged:
        found.append(f"the fit did not converge ({fit.message}); the best point found was written")
    if fit.poor:
        found.append(
            f"the model does not fit these quotes ({100 * fit.share_inside_bid_ask:.1f} % inside "
            f"bid-ask, residuals of {fit.rms_half_widths:.1f} half-widths): do not use its numbers"
        )
    if len(fit.rejections) > MUCH_SET_ASIDE * fit.quotes_read:
        found.append(
            f"{100 * len(fit.rejections) / fit.quotes_read:.0f} % of the quotes were set aside: "
            "look at the reasons and at the source of the file first"
        )
    return found


def summary(fit: "Fit") -> str:
    """Parameters and quality of a fit as a small table of plain text."""
    lines = [
        *_used(fit),
        "",
        f"{'parameter':<20}{'estimate':>12}{'std. error':>12}",
    ]
    for name, value in fit.parameters.items():
        if name.startswith("drive_"):
            continue
        fitted = name in fit.covariance_names
        error = f"{fit.standard_errors[name]:.2g}" if fitted else "-"
        note = "" if fitted else "  at bound" if name in fit.at_bound else "  held fixed"
        lines.append(f"{name:<20}{value:>12.5g}{error:>12}{note}")
    levels = np.sqrt(np.maximum(fit.model.forward_variance(np.unique(fit.smiles.maturity)), 0.0))
    bounded = [name for name in fit.at_bound if name.startswith("drive_")]
    if bounded:
        lines.append(f"curve levels at a bound: {', '.join(bounded)}")
    found = len(fit.arbitrage.calendar) + len(fit.arbitrage.butterfly)
    lines += [
        "",
        f"forward volatility  {100 * levels[0]:.2f} % at the first expiry, "
        f"{100 * levels[-1]:.2f} % at the last",
        f"inside bid-ask      {100 * fit.share_inside_bid_ask:.1f} %",
        f"rms residual        {1e4 * fit.rms_residual:.1f} bp of volatility",
        f"static arbitrage    {'none found' if fit.arbitrage.free else f'{found} violations'}",
        f"converged           {'yes' if fit.converged else 'NO'}, "
        f"{fit.evaluations} evaluations, {fit.elapsed:.1f} s",
    ]
    return "\n".join(lines)


def _used(fit: "Fit") -> list[str]:
    """What became of the quotes: fitted, used for the forwards only, set aside and why."""
    from .cleaning import cleaning_table

    lines = [f"{fit.quotes_read} quotes read", f"{fit.residuals.size:>7} fitted"]
    rest = fit.quotes_read - fit.residuals.size - len(fit.rejections)
    if rest > 0:
        lines.append(
            f"{rest:>7} mostly in the money, not fitted: they served put-call parity, which gives "
            "the forwards"
        )
    lines.append(f"{len(fit.rejections):>7} set aside")
    table = sorted(cleaning_table(fit.rejections), key=lambda entry: -entry[2])
    shown = table[:MOST_REASONS] if len(table) > MOST_REASONS + 1 else table
    lines += [f"{count:>11} {reason} (rows {rows})" for _, reason, count, rows in shown]
    if len(shown) < len(table):
        other = sum(entry[2] for entry in table[len(shown) :])
        lines.append(f"{other:>11} for {len(table) - len(shown)} other reasons, see the report")
    return lines


class _Parser(argparse.ArgumentParser):
    """A parser whose errors are one line, like all others."""

    def error(self, message: str) -> NoReturn:
        print(f"pyvolterra: error: {_one_line(message)} (see {self.prog} --help)", file=sys.stderr)
        raise SystemExit(BAD_INPUT)


def _parser() -> argparse.ArgumentParser:
    parser = _Parser(
        prog="pyvolterra",
        description="Fit rough Heston models to option quotes.",
        epilog="Model prices can mislead; nothing here is investment advice. See the cautions in "
        "the report and the README.",
    )
    parser.add_argument("--version", action="version", version=f"pyvolterra {__version__}")
    commands = parser.add_subparsers(title="commands", required=True, metavar="COMMAND")

    demo = commands.add_parser("demo", help="write an invented quote file and fit it")
    demo.add_argument(
        "--out", metavar="DIR", type=_path, default=DEMO_FOLDER, help="default: %(default)s"
    )
    demo.set_defaults(command=_demo)

    fit = commands.add_parser("fit", help="fit a file of option quotes")
    fit.add_argument(
        "quotes",
        metavar="QUOTES",
        type=_path,
        help="CSV or Parquet: quote_time, expiry, strike, option_type, bid, ask",
    )
    fit.add_argument(
        "--out", metavar="DIR", type=_path, required=True, help="folder for the results"
    )
    fit.add_argument(
        "--strict", action="store_true", help="stop at the first bad row, set none aside"
    )
    fit.add_argument(
        "--mean-reversion",
        metavar="VALUE|fit",
        type=_mean_reversion,
        default=0.0,
        help="hold it at VALUE from 0 to 20 (default 0), or fit it",
    )
    fit.set_defaults(command=_fit)

    info = commands.add_parser("info", help="versions, compiler, instruction set, threads")
    info.set_defaults(command=_info)
    return parser


def _path(text: str) -> str:
    if not text.strip():
        raise argparse.ArgumentTypeError("is empty, must be a path")
    return text


def _mean_reversion(text: str) -> float | None:
    from .calibration import LOWER, UPPER

    low, high = LOWER["mean_reversion"], UPPER["mean_reversion"]
    if text.strip().lower() == "fit":
        return None
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not low <= value <= high:
        raise argparse.ArgumentTypeError(
            f"must be 'fit' or a number from {low:g} to {high:g}, got {text!r}"
        )
    return value


@contextmanager
def _progress_line(stream: TextIO) -> Iterator[Callable[[str], None]]:
    """A function that shows its text on one line of a terminal, and nothing elsewhere."""
    if not stream.isatty():
        yield lambda text: None
        return
    try:
        from rich.console import Console
        from rich.text import Text
    except ImportError:
        with _plain_line(stream) as say:
            yield say
        return
    with Console(file=stream).status("", spinner="line") as status:
        # Text, not markup: file names may hold brackets.
        yield lambda text: status.update(Text(_one_line(text)))


@contextmanager
def _plain_line(stream: TextIO) -> Iterator[Callable[[str], None]]:
    shown_at = -math.inf
    length = 0

    def say(text: str) -> None:
        nonlocal shown_at, length
        now = time.monotonic()
        if now - shown_at < 0.05:
            return
        width = shutil.get_terminal_size().columns - 1
        line = _one_line(text)[:width]
        stream.write("\r" + line.ljust(min(length, width)))
        stream.flush()
        shown_at, length = now, len(line)

    try:
        yield say
    finally:
        stream.write("\r" + " " * length + "\r")
        stream.flush()


def _plain_words(error: OSError) -> str:
    # The system's words without its number: "cannot use 'a/b.csv': permission denied".
    if error.strerror is None or error.errno is None:
        return str(error)
    words = error.strerror[:1].lower() + error.strerror[1:]
    if error.filename is None:
        return words
    name = str(error.filename)
    shown = name if len(name) <= 80 else f"{name[:40]}…{name[-39:]}"
    return f"cannot use {shown!r}: {words}"


def _one_line(message: object) -> str:
    # Also without control characters: the text may quote a cell of a file.
    text = " ".join(str(message).split())
    return "".join(c if c.isprintable() else "?" for c in text)
