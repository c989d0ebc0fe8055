"""The report: one HTML file that needs no network, no script and no other file."""

import math
from collections.abc import Sequence

import numpy as np

from ..cleaning import cleaning_table
from ..fit import Fit
from .files import versions
from .markup import STYLE, data, figure, moment, number, section, signed, table, text
from .slices import ExpirySlice, expiry_labels, price_decimals

# Quotes set aside that are listed one by one; the table of reasons counts all of them.
MOST_LISTED = 200

_PARAMETERS = {
    "hurst": ("Hurst index H", "roughness of the variance path; 1/2 is the classical model"),
    "vol_of_vol": ("vol-of-vol ν", "size of the moves of variance, per √variance"),
    "correlation": ("correlation ρ", "between the underlying and its variance"),
    "mean_reversion": ("mean reversion λ", "pull of the variance, on the time scale of its kernel"),
    "initial_variance": ("initial variance V₀", "per year"),
}

_CAUTIONS = (
    (
        "Model risk",
        "A good fit is no proof of a good model. Other models fit the same quotes and price exotic "
        "or forward-starting risk differently; a standard error says nothing about that.",
    ),
    (
        "Stale, thin or wrong quotes",
        "Cleaning catches what it can recognise. A quote that is old but plausible still pulls the "
        "fit, and an expiry with few quotes is known only as well as those.",
    ),
    (
        "Outside the fit",
        "Strikes beyond the quoted ones and times before the first or after the last expiry are "
        "extrapolated by the model.",
    ),
    (
        "Standard errors",
        "They take the scatter of these quotes as it is. Parameters at a bound have none, and make "
        "those of the others too small.",
    ),
    ("Not investment advice", "Nothing here recommends a trade, a price or a position."),
    (
        "What comes first",
        "Independent price verification, your firm's model-risk policy, local regulation and "
        "licensed practice come before any number on this page.",
    ),
)


def report_page(
    fit: Fit, slices: Sequence[ExpirySlice], pictures: dict[str, bytes], smiles: Sequence[bytes]
) -> bytes:
    """The page as UTF-8 bytes.

    Parameters
    ----------
    fit : Fit
    slices : sequence of ExpirySlice
    pictures : dict of str to bytes
        PNG of ``smiles``, ``smiles_narrow``, ``bid_ask``, ``skew`` and ``forward_volatility``.
    smiles : sequence of bytes
        PNG for each slice.
    """
    name = fit.source or "quotes"
    parts = [
        f"<header><p class='kind'>pyvolterra fit report</p><h1>{text(name)}</h1>",
        f"<p>{_fitted(fit, slices)}</p></header>",
        section("Result", _headline(fit) + _flags(fit, slices) + _parameters(fit)),
        section("The surface", _overview(pictures, slices)),
        section("Smile by smile", _smiles(slices, smiles)),
        section("Forwards and discount factors", _forwards(fit)),
        section("Quotes set aside", _set_aside(fit)),
        section("Cautions", _cautions()),
        section("How this was made", _origin(fit)),
    ]
    html = (
        "<!doctype html>\n<html lang='en'><head><meta charset='utf-8'>"
        "<meta name='viewport' content='width=device-width, initial-scale=1'>"
        "<meta http-equiv='Content-Security-Policy' "
        "content=\"default-src 'none'; img-src data:; style-src 'unsafe-inline'\">"
        f"<title>{text(name)} · pyvolterra fit</title><style>{STYLE}</style></head>\n<body><main>"
        + "\n".join(parts)
        + "</main></body></html>\n"
    )
    return html.encode("utf-8", errors="replace")


def _fitted(fit: Fit, slices: Sequence[ExpirySlice]) -> str:
    rest = fit.quotes_read - len(fit.rejections) - fit.residuals.size
    other = (
        f"; {rest} more, mostly in the money, served only to infer the forwards" if rest > 0 else ""
    )
    first, last = text(slices[0].label), text(slices[-1].label)
    expiries = (
        f"<b>{len(slices)}</b> expiries from {first} to {last}"
        if len(slices) > 1
        else f"one expiry, {first}"
    )
    return (
        f"Quotes of <b>{moment(fit.quote_time)}</b>. <b>{fit.quotes_read:,}</b> quotes read, "
        f"<b>{fit.residuals.size:,}</b> fitted on {expiries}, "
        f"<b>{len(fit.rejections):,}</b> set aside{other}. "
        f"Model: {_model(fit)}."
    )


def _model(fit: Fit) -> str:
    if fit.model.kernel.hurst == 0.5:
        return "classical Heston (constant kernel)"
    return f"rough Heston (fractional kernel, H = {fit.model.kernel.hurst:.3f})"


def _headline(fit: Fit) -> str:
    found = len(fit.arbitrage.calendar) + len(fit.arbitrage.butterfly)
    cards = [
        ("inside bid–ask", f"{100.0 * fit.share_inside_bid_ask:.1f} %", "of the fitted quotes", ""),
        ("residual", f"{1e4 * fit.rms_residual:.0f} bp", "of volatility, root mean square", ""),
        (
            "static arbitrage",
            "none found" if fit.arbitrage.free else f"{found} found",
            f"{len(fit.arbitrage.calendar)} calendar, {len(fit.arbitrage.butterfly)} butterfly",
            "" if fit.arbitrage.free else "bad",
        ),
        (
            "optimiser",
            "converged" if fit.converged else "NOT converged",
            f"{fit.evaluations:,} evaluations in {fit.elapsed:.1f} s",
            "" if fit.converged else "bad",
        ),
    ]
    return (
        "<div class='cards'>"
        + "".join(
            f"<div class='card {kind}'><p>{text(label)}</p><strong>{text(value)}</strong>"
            f"<span>{text(note)}</span></div>"
            for label, value, note, kind in cards
        )
        + "</div>"
    )


def _flags(fit: Fit, slices: Sequence[ExpirySlice]) -> str:
    """What a reader of this very fit should know before using it."""
    flags = []
    if not fit.converged:
        flags.append(
            f"The optimiser stopped before converging ({text(fit.message)}): these are the best "
            "values it saw, their standard errors mean little."
        )
    if fit.poor:
        flags.append(
            f"The model does not fit these quotes: {100.0 * fit.share_inside_bid_ask:.1f} % inside "
            f"bid–ask, residuals of {fit.rms_half_widths:.1f} half-widths. Do not use its numbers."
        )
    if fit.at_bound:
        flags.append(
            f"At a bound: {text(', '.join(fit.at_bound))}. The quotes ask for more than the model "
            "allows, or do not determine it."
        )
    flags += [text(f"Calendar arbitrage: {found}.") for found in fit.arbitrage.calendar[:3]]
    flags += [text(f"Butterfly arbitrage: {found}.") for found in fit.arbitrage.butterfly[:3]]
    few = [s.label for s in slices if len(s) < 8]
    if few:
        flags.append(f"Fewer than eight quotes: {text(', '.join(few))}.")
    missed = [s.label for s in slices if s.share_inside < 0.75]
    if missed:
        flags.append(f"More than a quarter outside bid–ask: {text(', '.join(missed))}.")
    if fit.quotes_read and len(fit.rejections) > 0.25 * fit.quotes_read:
        flags.append("More than a quarter of the file was set aside: look at the source first.")
    if not flags:
        return ""
    return "<ul class='flags'>" + "".join(f"<li>{flag}</li>" for flag in flags) + "</ul>"


def _parameters(fit: Fit) -> str:
    rows = []
    for key, (label, meaning) in _PARAMETERS.items():
        if key == "initial_variance":
            meaning += f": a volatility of {100.0 * math.sqrt(fit.parameters[key]):.2f} % now"
        rows.append((label, *_estimate(fit, key), _status(fit, key), meaning))
    main = table(
        ("parameter", "estimate", "± standard error", "status", "what it is"),
        rows,
        numeric=(1, 2),
        wrapped=(4,),
    )
    ends = [0.0, *fit.curve_times.tolist()]
    drives = []
    for k in range(fit.curve_times.size):
        last = k + 1 == fit.curve_times.size
        key = f"drive_{k + 1}"
        span = f"{ends[k]:.4f} – {'∞' if last else f'{ends[k + 1]:.4f}'}"
        drives.append((span, *_estimate(fit, key), _status(fit, key)))
    curve = table(("years", "level θ", "± standard error", "status"), drives, numeric=(0, 1, 2))
    return (
        f"{main}<details><summary>Drive of the forward-variance curve, {len(drives)} levels"
        "</summary><p class='note'>g₀(t) = V₀ + ∫ K(t − s) θ(s) ds with θ constant on each span; "
        "the last level continues. A level may be negative down to the admissible floor −V₀ L(t), "
        f"L the resolvent of the first kind.</p>{curve}</details>"
    )


def _estimate(fit: Fit, key: str) -> tuple[str, str]:
    """Estimate and error, the estimate to the second digit of its error."""
    value, error = fit.parameters[key], fit.standard_errors.get(key, 0.0)
    if not (key in fit.covariance_names and math.isfinite(error) and error > 0.0):
        return number(value, 4), "–"
    places = min(max(1 - math.floor(math.log10(error)), 0), 10)
    return signed(f"{value:.{places}f}"), f"{error:.{places}f}"


def _status(fit: Fit, key: str) -> str:
    if key in fit.at_bound:
        return "at bound"
    return "fitted" if key in fit.covariance_names else "held fixed"


def _overview(pictures: dict[str, bytes], slices: Sequence[ExpirySlice]) -> str:
    wide, narrow = data(pictures["smiles"]), data(pictures["smiles_narrow"])
    all_smiles = (
        f"<figure class='wide' style='max-width: {290 * min(len(slices), 4)}px'><picture>"
        f"<source media='(max-width: 700px)' srcset='{narrow}'>"
        f"<img src='{wide}' alt='All smiles: quoted bid-ask ranges and the model curve'></picture>"
        "<figcaption>Every expiry on the same axes. Bars: quoted bid to ask; line: model. "
        "σ is the model's at-the-money volatility.</figcaption></figure>"
    )
    rest = (
        (
            "skew",
            "At-the-money skew by maturity, market and model, logarithmic axes",
            "Market: the model's skew plus the local slope of mid less model. The guide is the "
            "short-dated power law T^(H − 1/2), drawn from the first expiry.",
        ),
        (
            "forward_volatility",
            "Forward variance curve as volatility",
            "√ξ(t), ξ(t) the expected variance at t, and the square root of its average from now "
            "to t. Between expiries the quotes fix the average only; the shape is the model's.",
        ),
    )
    return (
        all_smiles
        + "<div class='pictures'>"
        + "".join(figure(pictures[key], alt, caption) for key, alt, caption in rest)
        + figure(
            pictures["bid_ask"],
            "Fit against bid and ask: one dot per quote",
            "One dot per quote, coloured by where the model lies between bid and ask; ringed where "
            "it lies outside. Runs of one colour are a misfit that noise does not explain.",
        )
        + f"</div><div class='below'>{_quality(slices)}</div>"
    )


def _quality(slices: Sequence[ExpirySlice]) -> str:
    rows = [
        (
            s.label,
            f"{s.days:,.1f}" if s.days < 2.0 else f"{s.days:,.0f}",
            f"{len(s)}",
            f"{100.0 * s.level:.2f}",
            f"{1e4 * s.rms:.0f}",
            f"{100.0 * s.share_inside:.0f}",
            signed(f"{s.half_widths[np.argmax(np.abs(s.half_widths))]:+.1f}"),
        )
        for s in slices
    ]
    head = ("expiry", "days", "quotes", "ATM %", "rms bp", "inside %", "worst")
    return table(head, rows, numeric=range(1, 7)) + (
        "<p class='note'>ATM: volatility of the model at the forward. Worst: the largest residual "
        "in half-widths, beyond ±1 outside bid–ask.</p>"
    )


def _smiles(slices: Sequence[ExpirySlice], smiles: Sequence[bytes]) -> str:
    figures = "".join(
        figure(png, f"Smile of {s.label}", "") for s, png in zip(slices, smiles, strict=True)
    )
    return (
        "<p class='note'>Bars run from bid to ask, orange where the model lies outside. "
        "Below: model less mid in half-widths, 1 being the bid or the ask. Quotes that were set "
        f"aside are not drawn.</p><div class='pictures'>{figures}</div>"
    )


def _forwards(fit: Fit) -> str:
    points = fit.forwards.points
    labels = expiry_labels(np.array([p.expiry for p in points], dtype="datetime64[s]"))
    rows = []
    for label, p in zip(labels, points, strict=True):
        rate = -math.log(p.discount) / p.maturity if p.discount > 0.0 and p.maturity > 0.0 else 0.0
        places = price_decimals(p.forward)
        rows.append(
            (
                label,
                f"{365.0 * p.maturity:,.1f}",
                f"{p.forward:,.{places}f}",
                f"{p.forward_error:,.{places}f}" if math.isfinite(p.forward_error) else "–",
                f"{p.discount:.6f}",
                signed(f"{100.0 * rate:.2f}"),
                f"{p.pairs}",
                p.method,
            )
        )
    return table(
        (
            "expiry",
            "days",
            "forward",
            "± standard error",
            "discount factor",
            "rate %",
            "pairs",
            "method",
        ),
        rows,
        numeric=range(1, 7),
    ) + (
        "<p class='note'>From put–call parity of the quotes themselves; rate: continuously "
        "compounded, ACT/365F.</p>"
    )


def _set_aside(fit: Fit) -> str:
    if not fit.rejections:
        return "<p>None: every quote that was read passed.</p>"
    first = {(r.stage, r.reason): r.detail for r in reversed(fit.rejections)}
    rows = [
        (reason, _STAGES.get(stage, stage), f"{count:,}", examples, first.get((stage, reason), ""))
        for stage, reason, count, examples in cleaning_table(fit.rejections)
    ]
    summary = table(
        ("reason", "found when", "quotes", "file rows", "for example"),
        rows,
        numeric=(2,),
        wrapped=(3, 4),
    )
    listed = fit.rejections[:MOST_LISTED]
    more = len(fit.rejections) - len(listed)
    note = f"<p class='note'>The first {len(listed)}; {more:,} more.</p>" if more else ""
    single = table(
        ("row", "expiry", "strike", "side", "reason", "detail"),
        [
            (f"{r.row}", r.expiry, number(r.strike, 8), r.side, r.reason, r.detail)
            for r in sorted(listed, key=lambda r: r.row)
        ],
        numeric=(0, 2),
        wrapped=(5,),
    )
    return f"{summary}<details><summary>One by one</summary>{note}{single}</details>"


_STAGES = {"parse": "reading", "clean": "cleaning"}


def _cautions() -> str:
    return "<dl>" + "".join(f"<dt>{text(a)}</dt><dd>{text(b)}</dd>" for a, b in _CAUTIONS) + "</dl>"


def _origin(fit: Fit) -> str:
    rows = [
        ("quotes fitted, SHA-256", fit.fingerprint),
        ("optimiser", fit.message),
        ("arbitrage checked on", fit.arbitrage.grid),
        ("worst calendar spread", signed(f"{fit.arbitrage.worst_calendar:.1e} of the forward")),
        ("worst butterfly spread", signed(f"{fit.arbitrage.worst_butterfly:.1e} of the forward")),
        *((name.replace("_", " "), version) for name, version in versions().items()),
    ]
    return table(("", ""), rows, wrapped=(1,), head=False)
