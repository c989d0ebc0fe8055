"""Pictures of a fit, as PNG bytes."""

import math
from typing import Any

import numpy as np

from ..fit import Fit
from .canvas import (
    ALERT,
    BAND,
    GUIDE,
    INK,
    MODEL,
    MUTED,
    QUOTE,
    WIDTH,
    bars,
    cap_width,
    heading,
    legend,
    log_grid,
    new_figure,
    padded,
    plain_log_ticks,
    png,
    residual_axes,
    right_text,
    single,
    smile_key,
    time_axis,
    volatility_range,
)
from .slices import ExpirySlice, curve_errors, market_skew, model_skew, price_decimals


def smile_picture(fit_slice: ExpirySlice) -> bytes:
    """Smile of one expiry: quotes as bid-ask bars, the model as a line, residuals below."""
    from matplotlib.ticker import MaxNLocator

    s = fit_slice
    height = 3.9
    figure = new_figure(WIDTH, height)
    grid = figure.add_gridspec(
        2, 1, height_ratios=(3.0, 1.0), hspace=0.08, left=0.155, right=0.975, top=0.79, bottom=0.125
    )
    top, below = figure.add_subplot(grid[0]), figure.add_subplot(grid[1])
    x = 100.0 * s.log_moneyness
    bars(top, x, s, width=1.6, cap=cap_width(x))
    top.plot(100.0 * s.curve_log_moneyness, 100.0 * s.curve, color=MODEL, lw=1.9, zorder=3)
    top.set_ylim(*volatility_range([s]))
    top.axvline(0.0, color=MUTED, lw=0.8, ls=(0, (2, 3)), zorder=1)
    top.set_ylabel("implied volatility (%)")
    top.yaxis.set_major_locator(MaxNLocator(6, steps=[1, 2, 5, 10]))
    top.xaxis.set_major_locator(MaxNLocator(7, steps=[1, 2, 5, 10]))
    top.tick_params(labelbottom=False)
    legend(figure, smile_key(not s.inside.all()), 0.12, height - 0.65)

    residual_axes(below)
    shown = np.clip(s.half_widths, -2.7, 2.7)
    colour = np.where(s.inside, MODEL, ALERT)
    below.vlines(x, 0.0, shown, color=colour, lw=1.3, zorder=2)
    # Arrowheads where the residual runs off the strip.
    for marker, at in (
        ("o", np.abs(s.half_widths) <= 2.7),
        ("^", s.half_widths > 2.7),
        ("v", s.half_widths < -2.7),
    ):
        below.scatter(x[at], shown[at], s=11.0, marker=marker, c=colour[at], lw=0, zorder=3)
    below.xaxis.set_major_locator(MaxNLocator(7, steps=[1, 2, 5, 10]))
    below.set_xlabel("log-moneyness ln(K/F) (%)")
    below.set_ylabel("model − mid\n(half-widths)", fontsize=8)
    for axes in (top, below):
        axes.set_xlim(padded(np.append(x, 0.0), 0.03))
    figure.align_ylabels([top, below])
    heading(figure, height, s.label)
    right_text(
        figure,
        1.0 - 0.26 / height,
        f"{s.days:.1f} days" if s.days < 2.0 else f"{s.days:,.0f} days",
        f"forward {s.forward:,.{price_decimals(s.forward)}f}",
    )
    figure.text(
        0.02,
        1.0 - 0.47 / height,
        f"{len(s)} quotes · rms {1e4 * s.rms:.0f} bp of volatility · "
        f"{100.0 * s.share_inside:.0f} % inside bid–ask",
        fontsize=9,
        color=MUTED,
    )
    return png(figure)


def smiles_picture(slices: tuple[ExpirySlice, ...], *, columns: int = 4) -> bytes:
    """All smiles as small multiples on common axes, in at-the-money standard deviations."""
    columns = min(columns, len(slices))
    rows = math.ceil(len(slices) / columns)
    width = 2.55 * columns + 0.6 if columns > 2 else WIDTH
    figure = new_figure(width, 1.95 * rows + 0.88)
    height = figure.get_figheight()
    grid = figure.add_gridspec(
        rows,
        columns,
        left=0.62 / width,
        right=1.0 - 0.12 / width,
        top=1.0 - 0.40 / height,
        bottom=0.55 / height,
        wspace=0.08,
        hspace=0.10,
    )
    z = [s.standardise(s.log_moneyness) for s in slices]
    x_limits = padded(np.concatenate(z), 0.04)
    low, high = volatility_range(slices)
    # The labels stand in the upper right quarter: room for them above the right wings.
    right = [low]
    for s, zs in zip(slices, z, strict=True):
        right.append(100.0 * s.ask[zs > 0.0].max(initial=0.0))
        right.append(100.0 * s.curve[s.curve_log_moneyness > 0.0].max(initial=0.0))
    y_limits = (low, max(high, low + (max(right) - low) / 0.70))
    for i, s in enumerate(slices):
        axes = figure.add_subplot(grid[i // columns, i % columns])
        bars(axes, z[i], s, width=1.1, cap=0.0)
        axes.plot(
            s.standardise(s.curve_log_moneyness), 100.0 * s.curve, color=MODEL, lw=1.2, zorder=3
        )
        axes.axvline(0.0, ymax=0.74, color=MUTED, lw=0.7, ls=(0, (2, 3)), zorder=1)
        axes.set_xlim(x_limits)
        axes.set_ylim(y_limits)
        axes.tick_params(
            labelleft=i % columns == 0, labelbottom=i + columns >= len(slices), labelsize=8.5
        )
        share = 100.0 * s.share_inside
        corner: dict[str, Any] = {"transform": axes.transAxes, "ha": "right", "va": "top"}
        axes.text(0.96, 0.93, s.label, fontsize=9, color=INK, **corner)
        colour = ALERT if share < 90.0 else MUTED
        axes.text(0.96, 0.81, f"{share:.0f} % inside", fontsize=8, color=colour, **corner)
    x_label = "standardised log-moneyness ln(K/F) / (σ√T)"
    text: dict[str, Any] = {"fontsize": 10, "color": INK}
    figure.text(0.5, 0.08 / height, x_label, ha="center", **text)
    figure.text(0.06 / width, 0.5, "implied volatility (%)", va="center", rotation=90, **text)
    legend(figure, smile_key(any(not s.inside.all() for s in slices)), 0.62, height - 0.17)
    return png(figure)


def bid_ask_picture(slices: tuple[ExpirySlice, ...]) -> bytes:
    """Where on the surface the model leaves bid and ask: residuals by expiry and moneyness."""
    from matplotlib.colors import LinearSegmentedColormap, Normalize
    from matplotlib.lines import Line2D

    count = len(slices)
    height = 1.75 + 0.21 * max(count, 3)
    figure = new_figure(WIDTH, height)
    grid = figure.add_gridspec(
        1,
        2,
        width_ratios=(4.0, 1.0),
        wspace=0.05,
        left=0.19,
        right=0.965,
        bottom=0.52 / height,
        top=1.0 - 1.10 / height,
    )
    axes, bars = figure.add_subplot(grid[0]), figure.add_subplot(grid[1])
    # Two hues of equal weight with a pale middle: cheap one way, rich the other.
    palette = LinearSegmentedColormap.from_list(
        "residual", ["#0b3c6f", "#4f8fc4", "#e9e7e1", "#d98a3d", "#8f3a05"]
    )
    scale = Normalize(-2.0, 2.0)
    for i, s in enumerate(slices):
        z = s.standardise(s.log_moneyness)
        outside = ~s.inside
        for mask, size, edge, line in ((~outside, 15.0, "#9aa4ae", 0.4), (outside, 26.0, INK, 1.1)):
            axes.scatter(
                z[mask],
                np.full(int(mask.sum()), i),
                s=size,
                c=s.half_widths[mask],
                cmap=palette,
                norm=scale,
                edgecolors=edge,
                linewidths=line,
                zorder=3,
            )
    axes.axvline(0.0, color=MUTED, lw=0.8, ls=(0, (2, 3)), zorder=1)
    axes.set_yticks(range(count), [s.label for s in slices], fontsize=8.5)
    axes.set_xlabel("standardised log-moneyness ln(K/F) / (σ√T)")
    share = [100.0 * s.share_inside for s in slices]
    bars.barh(range(count), share, height=0.62, color=BAND, zorder=2)
    for i, value in enumerate(share):
        colour = ALERT if value < 90.0 else INK
        bars.text(4.0, i, f"{value:.0f} %", va="center", fontsize=8.5, color=colour, zorder=3)
    bars.set_xlim(0.0, 100.0)
    bars.set_xticks([])
    bars.set_yticks([])
    bars.spines[:].set_visible(False)
    bars.set_title("inside bid–ask", fontsize=9, color=MUTED, pad=4)
    for panel in (axes, bars):
        panel.set_ylim(max(count, 3) - 0.5, -0.5)
    heading(figure, height, "Model against bid and ask")
    figure.text(0.02, 1.0 - 0.575 / height, "model at", va="center", fontsize=9, color=INK)
    strip = figure.add_axes((0.19, 1.0 - 0.63 / height, 0.26, 0.11 / height))
    strip.imshow(np.linspace(-2.0, 2.0, 256)[None, :], aspect="auto", cmap=palette)
    strip.set_yticks([])
    strip.set_xticks(np.array([0.25, 0.5, 0.75]) * 255, ["bid", "mid", "ask"])
    strip.tick_params(length=0, pad=1.5, labelsize=8.5)
    strip.spines[:].set_visible(False)
    ring = Line2D([], [], marker="o", ls="", mfc="white", mec=INK, mew=1.1, ms=5.8)
    legend(figure, [(ring, "model outside bid–ask")], 2.15, height - 0.575)
    return png(figure)


def skew_picture(fit: Fit, slices: tuple[ExpirySlice, ...]) -> bytes:
    """At-the-money skew against maturity on logarithmic axes."""
    market = market_skew(fit.model, slices)
    times = log_grid(np.array([s.maturity for s in slices]), 40)
    skew = model_skew(fit.model, times)
    signs = np.sign(np.concatenate([market.market, skew[np.isfinite(skew)]]))
    falling = bool(np.all(signs <= 0.0))
    # Without correlation the model has no skew: nothing to draw on a log axis but rounding.
    model = np.where(np.abs(skew) > 1e-5, np.abs(skew), np.nan)
    size = np.abs(market.market)
    figure, axes = single()
    axes.set_xscale("log")
    axes.set_yscale("log")
    key: list[tuple[Any, str]] = []
    if size.size:
        # Two standard errors, cut where the log axis ends for them.
        error = np.array([np.minimum(2.0 * market.error, 0.9 * size), 2.0 * market.error])
        dots = axes.errorbar(
            market.maturity,
            size,
            yerr=error,
            fmt="o",
            ms=4.5,
            color=INK,
            mfc="white",
            mew=1.3,
            elinewidth=1.2,
            ecolor=QUOTE,
            zorder=4,
        )
        key.append((dots, "market ± 2 s.e."))
    drawn = np.flatnonzero(np.isfinite(model))
    if drawn.size:
        key.append((axes.plot(times, model, color=MODEL, lw=1.9, zorder=3)[0], "model"))
    hurst = fit.model.kernel.hurst
    if drawn.size and hurst < 0.5:
        first = drawn[0]
        guide = model[first] * (times / times[first]) ** (hurst - 0.5)
        line = axes.plot(times, guide, color=GUIDE, lw=1.4, ls=(0, (5, 3)), zorder=2)[0]
        key.append((line, f"slope H − 1/2 = −{0.5 - hurst:.2f}"))
    time_axis(axes, times, "time to expiry")
    plain_log_ticks(axes, np.concatenate([model[drawn], size[size > 0.0]]))
    name = "−∂σ/∂ ln K" if falling else "|∂σ/∂ ln K|"
    axes.set_ylabel(f"{name} at the forward\n(volatility points per 1 % of ln K)", fontsize=9)
    heading(figure, figure.get_figheight(), "At-the-money skew")
    legend(figure, key, 0.12, figure.get_figheight() - 0.47)
    return png(figure)


def forward_volatility_picture(fit: Fit, slices: tuple[ExpirySlice, ...]) -> bytes:
    """Forward variance curve, drawn as volatility, and its average to each maturity."""
    maturities = np.array([s.maturity for s in slices])
    times = log_grid(maturities, 240, first=1.0 / 365.0)
    xi = fit.model.forward_variance(times)
    average = np.sqrt(fit.model.forward_variance.total_variance(times) / times)
    volatility = np.sqrt(np.maximum(xi, 0.0))
    error = curve_errors(fit, times)
    figure, axes = single()
    axes.set_xscale("log")
    low, high = (100.0 * np.sqrt(np.maximum(xi + k * error, 0.0)) for k in (-2.0, 2.0))
    band = axes.fill_between(times, low, high, color=BAND, lw=0, zorder=1)
    forward = axes.plot(times, 100.0 * volatility, color=MODEL, lw=1.9, zorder=3)[0]
    dashes: dict[str, Any] = {"color": GUIDE, "lw": 1.6, "ls": (0, (5, 3)), "zorder": 3}
    mean = axes.plot(times, 100.0 * average, **dashes)[0]
    foot: dict[str, Any] = {"transform": axes.get_xaxis_transform(), "clip_on": False}
    expiries = axes.plot(maturities, 0.0 * maturities, "|", color=INK, ms=7, **foot)[0]
    # The band may be wide where the curve is free: it does not set the scale.
    bottom, top = padded(100.0 * np.concatenate([volatility, average]), 0.25)
    axes.set_ylim(max(bottom, 0.0), top)
    time_axis(axes, times, "time t from now")
    axes.set_ylabel("annualised volatility (%)")
    heading(figure, figure.get_figheight(), "Forward variance ξ(t), as volatility")
    key: list[tuple[Any, str]] = [
        (forward, "forward √ξ(t)"),
        (band, "± 2 s.e."),
        (mean, "average to t"),
        (expiries, "expiries"),
    ]
    legend(figure, key, 0.12, figure.get_figheight() - 0.47)
    return png(figure)
