"""Tables: tab-separated, with n/a for what is not there, and a dictionary of their columns."""

import csv
import math
from collections.abc import Iterable, Mapping, Sequence
from numbers import Integral, Real
from pathlib import Path
from typing import Any

from onbin.columns import COLUMNS
from onbin.errors import DataError

MISSING = "n/a"
FORMULA_STARTS = ("=", "+", "-", "@", "＝", "＋", "－", "＠")  # the last four are full-width
ONE_LINE = str.maketrans("\t\n\r", "   ")  # a cell holds no tab and no line end


def write_table(
    path: str | Path, rows: Iterable[Mapping[str, Any]], columns: Sequence[str]
) -> None:
    """Write rows as tab-separated values.

    Parameters
    ----------
    path : path
    rows : iterable of mapping
        A value that is absent, None or NaN is written as n/a.
    columns : sequence of str
        Names that stand in the data dictionary, in the order to write them.
    """
    for name in columns:
        COLUMNS[name]  # a column without a description must not reach a user
    with open(path, "w", encoding="utf-8", newline="") as file:
        writer = csv.writer(file, delimiter="\t", lineterminator="\n")
        writer.writerow(columns)
        for row in rows:
            writer.writerow([_written(row.get(name)) for name in columns])


def read_table(path: str | Path) -> list[dict[str, Any]]:
    """Read a table of ours; each value has the type that the data dictionary gives its column."""
    with open(path, encoding="utf-8", newline="") as file:
        reader = csv.DictReader(file, delimiter="\t")
        return [{name: _read(name, text) for name, text in row.items()} for row in reader]


def read_foreign(path: str | Path) -> list[dict[str, str]]:
    """Read a table that is not ours as text, see `read_numbered`."""
    return [row for _, row in read_numbered(path)]


def read_numbered(path: str | Path) -> list[tuple[int, dict[str, str]]]:
    """Read a table that is not ours as text, each row with its line in the file.

    Any line ends, a byte-order mark and empty lines are taken; n/a stays as it stands.

    Raises
    ------
    DataError
        If a line has more or fewer cells than the header, or a column stands there twice.
    """
    try:
        text = Path(path).read_text(encoding="utf-8-sig")
    except UnicodeDecodeError:
        raise DataError(f"{path} is not text in UTF-8; save it as UTF-8.") from None
    except OSError as error:
        raise DataError(f"{path} cannot be read ({error.strerror}).") from None
    numbered = enumerate(text.split("\n"), start=1)
    lines = [(number, _foreign_cells(line)) for number, line in numbered if line.strip()]
    if not lines:
        return []
    (first, header), *others = lines
    for name in header:
        if header.count(name) > 1:
            raise DataError(
                f"{path}, line {first}: the column {name!r} stands {header.count(name)} times; "
                "keep one."
            )
    for number, cells in others:
        if len(cells) != len(header):
            raise DataError(
                f"{path}, line {number}: found {len(cells)} cells, expected {len(header)} as in "
                f"the header; cells are parted by tabs. Correct the line."
            )
    return [(number, dict(zip(header, cells, strict=True))) for number, cells in others]


def _foreign_cells(line: str) -> list[str]:
    """Cells without the spaces and quotation marks around them."""
    cells = [cell.strip() for cell in line.split("\t")]
    quoted = [len(cell) > 1 and cell[0] == cell[-1] == '"' for cell in cells]
    return [
        cell[1:-1].replace('""', '"').strip() if marked else cell
        for cell, marked in zip(cells, quoted, strict=True)
    ]


def dictionary(columns: Iterable[str]) -> dict[str, dict[str, str]]:
    """Data dictionary of a table, in the form of BIDS."""
    described = {}
    for name in columns:
        column = COLUMNS[name]
        entry = {"Description": column.description}
        if column.unit:
            entry["Units"] = column.unit
        if column.null:
            entry["WithoutResponse"] = column.null
        if column.source:
            entry["Source"] = column.source
        described[name] = entry
    return described


def _written(value: Any) -> str:
    if value is None:
        return MISSING
    if isinstance(value, str):
        value = value.translate(ONE_LINE)
        # a cell that a spreadsheet would take for a formula is left a text
        return f"'{value}" if _is_formula(value.lstrip("'")) else value or MISSING
    if isinstance(value, bool) or type(value).__name__ == "bool":
        return "true" if value else "false"
    if isinstance(value, Integral):
        return str(int(value))
    if isinstance(value, Real):
        number = float(value)
        return MISSING if math.isnan(number) else f"{number:.10g}"
    raise TypeError(f"a table cannot hold {value!r}")


def _read(name: str, text: str) -> Any:
    kind = COLUMNS[name].kind
    if text == MISSING:
        return math.nan if kind == "number" else None
    if kind == "number":
        return float(text)
    if kind == "integer":
        return int(text)
    if kind == "boolean":
        return text == "true"
    return text.removeprefix("'") if _is_formula(text.lstrip("'")) else text


def _is_formula(text: str) -> bool:
    return text.startswith(FORMULA_STARTS)


def header(path: str | Path) -> list[str]:
    """Names of a table's columns."""
    with open(path, encoding="utf-8", newline="") as file:
        return next(csv.reader(file, delimiter="\t"))
