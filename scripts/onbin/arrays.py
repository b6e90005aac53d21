"""Named arrays in one file: what the steps after windows hand on."""

from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from onbin.errors import DataError


def write(path: str | Path, **named: Any) -> None:
    """Write arrays under their names; the bytes depend on the arrays alone."""
    np.savez(path, **{name: np.asarray(array) for name, array in sorted(named.items())})


def read(path: str | Path) -> dict[str, np.ndarray]:
    """Read all arrays of a file; nothing in it is ever executed.

    Raises
    ------
    DataError
        If the file is damaged, or holds objects in place of numbers and text.
    """
    try:
        with open(path, "rb") as file:
            stored = np.load(file, allow_pickle=False)
            return {name: stored[name] for name in stored.files}
    except Exception as error:  # zip files and arrays can be damaged in many ways
        raise DataError(f"{path} cannot be read ({error}). Delete it and run again.") from error


def from_rows(rows: Iterable[Mapping[str, Any]], names: Sequence[str]) -> dict[str, np.ndarray]:
    """Columns of a table as arrays."""
    rows = list(rows)
    return {name: np.array([row[name] for row in rows]) for name in names}
