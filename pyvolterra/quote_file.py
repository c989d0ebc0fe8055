"""From the bytes of a CSV or Parquet file of quotes to rows of cells."""

import csv
import difflib
import io
from collections.abc import Iterator, Sequence
from contextlib import suppress
from pathlib import Path
from typing import Any

from .errors import MissingDependencyError, QuoteError

COLUMNS = ("quote_time", "expiry", "strike", "option_type", "bid", "ask")
OPTIONAL_COLUMNS = ("last_update",)
PARQUET_MAGIC = b"PAR1"

# The cells of one row by column name; "" holds what is wrong with the row as a whole.
Cells = dict[str, Any]


def read_rows(file: Path) -> Iterator[tuple[int, Cells]]:
    """The rows of a file with their numbers; QuoteError if it has not the columns of quotes."""
    if file.is_dir():
        raise IsADirectoryError(f"{file} is a directory; a CSV or Parquet file of quotes is needed")
    if not file.exists():
        raise FileNotFoundError(f"{file} does not exist; a CSV or Parquet file of quotes is needed")
    content = file.read_bytes()
    if not content.strip():
        raise QuoteError(f"{file.name}: the file is empty")
    if content.startswith(PARQUET_MAGIC):
        return parquet_rows(content, file.name)
    if file.suffix.lower() in {".parquet", ".pq"}:
        raise QuoteError(f"{file.name}: not a Parquet file, it does not begin with PAR1")
    return csv_rows(content, file.name)


def _columns(found: Sequence[str], source: str, hint: str = "") -> dict[str, int]:
    # Place of each column in the file; a missing or doubled one is fatal.
    for name in (*COLUMNS, *OPTIONAL_COLUMNS):
        if found.count(name) > 1:
            raise QuoteError(f"{source}: column {name} appears {found.count(name)} times")
    missing = [name for name in COLUMNS if name not in found]
    if missing:
        others = {name.lower(): name for name in found if name not in COLUMNS}
        words = []
        for name in missing:
            close = difflib.get_close_matches(name, others, n=1, cutoff=0.6)
            words.append(f"{name} (is it {clipped(others[close[0]])!r}?)" if close else name)
        raise QuoteError(
            f"{source}: missing column{'s' if len(missing) > 1 else ''} {', '.join(words)}; "
            f"found: {_listed(found)}{hint}"
        )
    return {n: found.index(n) for n in (*COLUMNS, *OPTIONAL_COLUMNS) if n in found}


def clipped(text: str, length: int = 40) -> str:
    """At most ``length`` characters of a text that goes into a message."""
    return text if len(text) <= length else text[: length - 1] + "…"


def _listed(names: Sequence[str], most: int = 10) -> str:
    more = f", … ({len(names) - most} more)" if len(names) > most else ""
    return ", ".join(map(clipped, names[:most])) + more


def csv_rows(content: bytes, source: str) -> Iterator[tuple[int, Cells]]:
    """Rows of a CSV file: one line is one row, so that a stray quotation mark spoils no other."""
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        row = content.count(b"\n", 0, error.start) + 1
        raise QuoteError(
            f"{source}, row {row}: not UTF-8 text; a CSV or Parquet file of quotes is needed"
        ) from None
    if not text.strip():
        raise QuoteError(f"{source}: the file is empty")
    lines = io.StringIO(text, newline=None)
    try:
        header = [name.strip() for name in _cells_of(next(lines))]
    except csv.Error as error:
        raise QuoteError(f"{source}, row 1: the header is not CSV ({error})") from None
    separators = [mark for mark in ";\t|" if len(header) == 1 and mark in header[0]]
    hint = f" (cells must be separated by commas, not by {separators[0]!r})" if separators else ""
    columns = _columns(header, source, hint)

    def rows() -> Iterator[tuple[int, Cells]]:
        for number, line in enumerate(lines, start=2):
            if not line.strip():
                continue
            try:
                cells = _cells_of(line)
            except csv.Error as error:
                yield number, {"": f"the line is not CSV ({error})"}
                continue
            if not any(cells):  # a spreadsheet's blank row
                continue
            if len(cells) < len(header) or any(cells[len(header) :]):
                yield number, {"": f"{len(cells)} cells, must be {len(header)} as in the header"}
            else:
                yield number, {name: cells[place] for name, place in columns.items()}

    return rows()


def _cells_of(line: str) -> list[str]:
    line = line.rstrip("\n")
    return next(csv.reader((line,), strict=True)) if '"' in line else line.split(",")


def parquet_rows(content: bytes, source: str) -> Iterator[tuple[int, Cells]]:
    """Rows of a Parquet file, numbered as if it had a header in row 1."""
    try:
        import pyarrow as arrow
        import pyarrow.parquet as parquet
    except ImportError:
        raise MissingDependencyError(
            f"reading the Parquet file {source} needs pyarrow, which is not installed: "
            'pip install "pyvolterra[desk]"'
        ) from None
    try:
        file = parquet.ParquetFile(io.BytesIO(content))
        names = _columns([str(name) for name in file.schema_arrow.names], source)
        table = file.read(columns=list(names))
    except (arrow.ArrowException, OSError) as error:
        raise QuoteError(f"{source}: not a readable Parquet file ({error})") from None
    lists = {name: _python_values(table.column(name), arrow) for name in names}
    return (
        (number, dict(zip(lists, values, strict=True)))
        for number, values in enumerate(zip(*lists.values(), strict=True), start=2)
    )


def _python_values(column: Any, arrow: Any) -> list[Any]:
    # A value that Python cannot hold, such as a time in the year 32,000, becomes its text, so that
    # it costs its own row only.
    if arrow.types.is_timestamp(column.type):
        # To UTC, then to microseconds as Python has: nanoseconds are cut, seconds may overflow.
        unit = column.type.unit
        column = column.cast(arrow.timestamp(unit))
        with suppress(arrow.ArrowInvalid):
            column = column.cast(arrow.timestamp("us"), safe=unit != "ns")
    try:
        values: list[Any] = column.to_pylist()
    except (OverflowError, ValueError):
        values = [_python_value(cell) for cell in column]
    return values


def _python_value(cell: Any) -> Any:
    try:
        return cell.as_py()
    except (OverflowError, ValueError) as error:
        return f"{getattr(cell, 'value', '?')} of type {cell.type} ({error})"
