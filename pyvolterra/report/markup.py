"""Pieces of HTML, everything escaped, and the style of the page."""

import base64
import math
from collections.abc import Iterable, Sequence
from html import escape
from typing import Any

import numpy as np


def section(title: str, body: str) -> str:
    """A titled part of the page."""
    return f"<section><h2>{text(title)}</h2>{body}</section>"


def figure(png: bytes, alt: str, caption: str) -> str:
    """A picture inside the page, with its text for those who cannot see it."""
    below = f"<figcaption>{text(caption)}</figcaption>" if caption else ""
    return f"<figure><img src='{data(png)}' alt='{text(alt)}'>{below}</figure>"


def table(
    head_cells: Sequence[str],
    rows: Iterable[Sequence[str]],
    *,
    numeric: Iterable[int] = (),
    wrapped: Iterable[int] = (),
    head: bool = True,
) -> str:
    """A table; columns numbered in `numeric` are aligned right, those in `wrapped` may break.

    Where the screen is narrow, a table with wrapped columns becomes one block per row, each cell
    under its name; any other scrolls sideways under its first column.
    """
    wide = tuple(wrapped)
    kinds = dict.fromkeys(numeric, " class='n'") | dict.fromkeys(wide, " class='w'")
    names = [f" data-name='{text(name)}'" if wide and head else "" for name in head_cells]

    def cells(row: Sequence[str]) -> str:
        return "".join(
            f"<td{kinds.get(i, '')}{names[i]}>{text(cell)}</td>" for i, cell in enumerate(row)
        )

    titles = "".join(
        f"<th{kinds.get(i, '')}>{text(cell)}</th>" for i, cell in enumerate(head_cells)
    )
    top = f"<thead><tr>{titles}</tr></thead>" if head else ""
    body = "".join(f"<tr>{cells(row)}</tr>" for row in rows)
    kind = "rows" if wide else "columns"
    return (
        f"<div class='scroll' tabindex='0'><table class='{kind}'>{top}<tbody>{body}</tbody></table>"
        "</div>"
    )


def text(value: Any) -> str:
    """Anything as text that cannot be mistaken for markup."""
    return escape(str(value), quote=True)


def number(value: float, digits: int) -> str:
    """Significant digits, a dash where there is no number."""
    return signed(f"{value:.{digits}g}") if math.isfinite(value) else "–"


def signed(shown: str) -> str:
    """With a proper minus sign."""
    return shown.replace("-", "−")


def moment(instant: np.datetime64) -> str:
    """To the minute, UTC."""
    return str(instant.astype("datetime64[m]")).replace("T", " ") + " UTC"


def data(png: bytes) -> str:
    """A picture as a data address."""
    return "data:image/png;base64," + base64.b64encode(png).decode("ascii")


STYLE = """
:root { --ink: #1c2733; --soft: #5a6672; --line: #d9dfe4; --blue: #0f5394; --orange: #b03f08; }
* { box-sizing: border-box; }
body { margin: 0; background: #f4f6f7; color: var(--ink);
  font: 15.5px/1.5 system-ui, -apple-system, "Liberation Sans", Arial, sans-serif; }
main { max-width: 1280px; margin: 0 auto; padding: 28px 28px 60px; }
header { border-left: 5px solid var(--blue); padding-left: 18px; margin-bottom: 22px; }
header p { max-width: 62em; margin: 6px 0 0; }
.kind { color: var(--blue); font-weight: 600; letter-spacing: .02em; margin: 0; }
h1 { font-size: 27px; line-height: 1.2; margin: 2px 0 6px; overflow-wrap: anywhere; }
h2 { font-size: 19px; margin: 0 0 14px; }
section { background: #fff; border: 1px solid var(--line); border-radius: 6px;
  padding: 20px 22px; margin: 0 0 18px; }
.cards { display: grid; grid-template-columns: repeat(4, 1fr); gap: 12px; margin-bottom: 16px; }
.card { border-top: 3px solid var(--blue); background: #f4f7fa; padding: 10px 14px 12px; }
.card p { margin: 0; color: var(--soft); font-size: 13.5px; }
.card strong { display: block; font-size: 23px; line-height: 1.25; }
.card span { color: var(--soft); font-size: 13px; }
.card.bad { border-color: var(--orange); background: #fcf1ea; }
.card.bad strong { color: var(--orange); }
.flags { margin: 0 0 16px; padding: 10px 14px 10px 32px; border-left: 4px solid var(--orange);
  background: #fcf1ea; }
.scroll { overflow-x: auto; }
.below { margin-top: 26px; }
table { border-collapse: collapse; font-size: 14px; font-variant-numeric: tabular-nums; }
th { text-align: left; color: var(--soft); font-weight: 600; vertical-align: bottom; }
th, td { padding: 4px 18px 4px 0; border-bottom: 1px solid #ebeff2; }
td { vertical-align: top; white-space: nowrap; }
.n { text-align: right; }
td.w { white-space: normal; overflow-wrap: anywhere; min-width: 15em; }
.note, figcaption { color: var(--soft); font-size: 13.5px; max-width: 62em; }
.note { margin: 10px 0; }
details { margin-top: 14px; }
summary { cursor: pointer; color: var(--blue); font-weight: 600; }
figure { margin: 0; }
figure.wide { margin-bottom: 26px; min-width: min(100%, 460px); }
figcaption { margin-top: 4px; }
img { display: block; width: 100%; height: auto; }
.pictures { display: grid; gap: 28px 26px; margin-top: 14px;
  grid-template-columns: repeat(auto-fill, minmax(min(100%, 320px), 1fr)); }
dl { margin: 0; display: grid; grid-template-columns: 13em 1fr; gap: 8px 18px; }
dt { font-weight: 600; }
dd { margin: 0; max-width: 56em; }
@media (max-width: 860px) {
  main { padding: 16px 10px 40px; }
  section { padding: 16px 13px; }
  .cards { grid-template-columns: repeat(2, 1fr); }
  dl { grid-template-columns: 1fr; gap: 2px; }
  dd { margin-bottom: 10px; }
  table { font-size: 13px; }
  th, td { padding-right: 9px; }
  .card strong { font-size: 20px; }
}
@media (max-width: 600px) {
  /* the right edge is shaded as long as there is more to scroll to */
  .scroll {
    background: linear-gradient(to left, #fff 24px, #fff0) right / 40px 100% no-repeat local,
      linear-gradient(to left, #1c273340, #1c273300) right / 14px 100% no-repeat; }
  .columns th:first-child, .columns td:first-child { position: sticky; left: 0;
    background: #fff; padding-right: 12px; }
  .rows thead { display: none; }
  .rows, .rows tbody, .rows tr, .rows td { display: block; }
  .rows tr { padding: 7px 0; border-bottom: 1px solid var(--line); }
  .rows td { padding: 0; border: 0; text-align: left; white-space: normal; min-width: 0;
    overflow-wrap: anywhere; }
  .rows td:first-child { font-weight: 600; }
  .rows td[data-name]:not(:first-child)::before { content: attr(data-name) ": ";
    color: var(--soft); }
}
@media print {
  @page { margin: 14mm 12mm; }
  body { background: #fff; font-size: 10pt; }
  main { max-width: none; padding: 0; }
  section { border: 0; border-top: 1px solid var(--line); border-radius: 0; padding: 12px 0; }
  figure, tr, .card, dt, dd { break-inside: avoid; }
  h2 { break-after: avoid; }
  .cards { grid-template-columns: repeat(4, 1fr); }
  .pictures { grid-template-columns: repeat(3, minmax(0, 1fr)); gap: 14px; }
  .scroll { overflow: visible; }
  table { font-size: 8.5pt; }
  th, td { padding: 3px 9px 3px 0; }
  td.w { min-width: 0; }
  * { -webkit-print-color-adjust: exact; print-color-adjust: exact; }
}
"""
