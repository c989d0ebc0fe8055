"""What all pictures share: colours, canvas, legend and axes.

Every picture is a matplotlib ``Figure`` on an Agg canvas: no pyplot, no global state, no display
needed. Colours are told apart with any common colour-vision deficiency and in grey.
"""

import io
import math
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from .slices import ExpirySlice

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

INK = "#1c2733"  # text
MUTED = "#66727e"  # secondary text, axes
RULE = "#e3e7ea"  # grid
QUOTE = "#8793a0"  # bid-ask bars
MODEL = "#0f5394"  # model line
ALERT = "#c2470a"  # model outside bid and ask
GUIDE = "#9a7400"  # guides
BAND = "#dbe7f2"  # uncertainty

DPI = 220
# Inches. The page shows single pictures 330 to 400 pixels wide, on a telephone and on a desk: text
# of 9 points is then 10 to 12 pixels high.
WIDTH = 4.2
TIME_TICKS = (
    (1 / 365, "1d"),
    (7 / 365, "1w"),
    (1 / 12, "1m"),
    (0.25, "3m"),
    (0.5, "6m"),
    (1.0, "1y"),
    (2.0, "2y"),
    (3.0, "3y"),
    (5.0, "5y"),
    (10.0, "10y"),
    (20.0, "20y"),
)


def new_figure(width: float, height: float) -> "Figure":
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(width, height), dpi=DPI, facecolor="white")
    FigureCanvasAgg(figure)
    return figure


def single() -> tuple["Figure", "Axes"]:
    figure = new_figure(WIDTH, 3.35)
    axes = figure.add_axes((0.165, 0.145, 0.81, 0.665))
    return figure, axes


def png(figure: "Figure") -> bytes:
    for axes in figure.axes:
        dress(axes)
    buffer = io.BytesIO()
    # No software tag or date: the same fit gives the same bytes.
    figure.savefig(buffer, format="png", dpi=DPI, metadata={"Software": None})
    return buffer.getvalue()


def dress(axes: "Axes") -> None:
    axes.set_axisbelow(True)
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)
    for side in ("left", "bottom"):
        axes.spines[side].set_color("#b5bdc5")
    axes.tick_params(which="both", color="#b5bdc5", labelcolor=INK)
    axes.xaxis.label.set_color(INK)
    axes.yaxis.label.set_color(INK)
    if axes.images or not axes.axison:
        return
    if axes.xaxis.get_ticklocs().size:
        axes.grid(True, axis="both", color=RULE, lw=0.7, zorder=0)


def bars(axes: "Axes", x: NDArray[np.float64], s: ExpirySlice, width: float, cap: float) -> None:
    low = 100.0 * np.nan_to_num(s.bid, nan=0.0)
    for mask, colour in ((s.inside, QUOTE), (~s.inside, ALERT)):
        axes.vlines(x[mask], low[mask], 100.0 * s.ask[mask], color=colour, lw=width, zorder=2)
        if cap > 0.0:
            for edge in (low, 100.0 * s.ask):
                axes.hlines(
                    edge[mask], x[mask] - cap, x[mask] + cap, color=colour, lw=width, zorder=2
                )


def volatility_range(slices: Sequence[ExpirySlice]) -> tuple[float, float]:
    # A bid below intrinsic value has no volatility: its bar runs off the foot of the picture.
    shown = np.concatenate([np.concatenate([s.bid, s.ask, s.curve]) for s in slices])
    low, high = padded(100.0 * shown[np.isfinite(shown)], 0.04)
    return max(low, 0.0), high


def cap_width(x: NDArray[np.float64]) -> float:
    span = float(np.ptp(x))
    return min(0.006 * span, 0.3 * span / max(x.size, 1))


def residual_axes(axes: "Axes") -> None:
    axes.axhspan(-1.0, 1.0, color="#eef1f3", lw=0, zorder=0)
    axes.axhline(0.0, color=MUTED, lw=0.8, zorder=1)
    axes.set_ylim(-3.0, 3.0)
    axes.set_yticks([-2, 0, 2], ["−2", "0", "+2"])


def smile_key(alert: bool) -> list[tuple[Any, str]]:
    from matplotlib.lines import Line2D

    def bar(colour: str) -> Line2D:
        return Line2D([], [], marker="|", ls="", color=colour, ms=10, mew=2.0)

    key: list[tuple[Any, str]] = [(bar(QUOTE), "bid–ask")]
    if alert:
        key.append((bar(ALERT), "bid–ask, model outside"))
    return [*key, (Line2D([], [], color=MODEL, lw=1.9), "model")]


def legend(figure: "Figure", key: list[tuple[Any, str]], x: float, y: float) -> None:
    """Legend in one line outside the axes, where it covers no data; x and y in inches."""
    width, height = figure.get_size_inches()
    figure.legend(
        [handle for handle, _ in key],
        [text for _, text in key],
        loc="center left",
        bbox_to_anchor=(x / width, y / height),
        ncols=len(key),
        borderaxespad=0.0,
        borderpad=0.0,
        columnspacing=1.1,
        handletextpad=0.4,
        handlelength=1.4,
        frameon=False,
        fontsize=9,
        labelcolor=INK,
    )


def heading(figure: "Figure", height: float, text: str) -> None:
    figure.text(0.02, 1.0 - 0.26 / height, text, fontsize=12, fontweight="bold", color=INK)


def right_text(figure: "Figure", y: float, *parts: str) -> None:
    figure.text(0.975, y, " · ".join(parts), ha="right", fontsize=10, color=INK)


def padded(values: NDArray[np.float64], share: float) -> tuple[float, float]:
    low, high = float(np.min(values)), float(np.max(values))
    pad = share * ((high - low) or abs(high) or 1.0)
    return low - pad, high + pad


def log_grid(
    maturities: NDArray[np.float64], points: int, first: float | None = None
) -> NDArray[np.float64]:
    low, high = float(maturities.min()), float(maturities.max())
    if first is not None:
        low = min(first, low)
    if high / low < 1.5:
        low, high = low / 1.5, high * 1.5
    return np.geomspace(low, high, points)


def time_axis(axes: "Axes", times: NDArray[np.float64], label: str) -> None:
    low, high = times[0] / 1.12, times[-1] * 1.12
    ticks = [(t, text) for t, text in TIME_TICKS if low <= t <= high]
    if len(ticks) < 3:
        days = (
            1,
            2,
            3,
            4,
            5,
            7,
            10,
            14,
            20,
            25,
            30,
            35,
            40,
            45,
            60,
            75,
            90,
            120,
            150,
            180,
            240,
            300,
            365,
        )
        ticks = [(d / 365.0, f"{d}d") for d in days if low <= d / 365.0 <= high]
    axes.set_xticks([t for t, _ in ticks], [text for _, text in ticks])
    axes.set_xticks([], minor=True)
    axes.set_xlim(low, high)
    axes.set_xlabel(label)


def plain_log_ticks(axes: "Axes", values: NDArray[np.float64]) -> None:
    if not values.size:
        axes.set_yticks([], minor=True)
        return
    high = float(values.max()) * 1.25
    low = max(float(values.min()) / 1.25, 1e-3 * high)
    decades = range(math.floor(math.log10(low)), math.ceil(math.log10(high)) + 1)
    ticks: list[float] = []
    for steps in ((1, 2, 5), (1, 1.5, 2, 3, 4, 5, 6, 7, 8, 9)):
        ticks = [m * 10.0**d for d in decades for m in steps if low <= m * 10.0**d <= high]
        if len(ticks) >= 3:
            break
    axes.set_yticks(ticks, [f"{t:g}" for t in ticks])
    axes.set_yticks([], minor=True)
    axes.set_ylim(low, high)
