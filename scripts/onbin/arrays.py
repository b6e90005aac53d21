"""Named arrays in one file: what the steps after windows hand on."""

from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np


def write(path: str | Path, **named: Any) -> None:
    """Write arrays under their names; the bytes depend on the arrays alone."""
    np.savez(path, **{name: np.asarray(array) for name, array in sorted(named.items())})


def read(path: str | Path) -> dict[str, np.ndarray]:
    """Read all arrays of a file; nothing in it is ever executed."""
    with np.load(path, allow_pickle=False) as file:
        return {name: file[name] for name in file.files}


def from_rows(rows: Iterable[Mapping[str, Any]], names: Sequence[str]) -> dict[str, np.ndarray]:
    """Columns of a table as arrays."""
    rows = list(rows)
    return {name: np.array([row[name] for row in rows]) for name in names}
