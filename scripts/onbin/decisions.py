"""What a person decides about recordings, channels and components, each with a reason.

Decisions stand in a table beside the settings and are inputs: no output is ever edited by hand.
Job graphs are built from this module, so it imports nothing heavy.
"""

import difflib
import re
from collections.abc import Collection, Iterable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from onbin import tables
from onbin.errors import DataError, SettingsError
from onbin.layout import Recording

LEAVE_OUT, KEEP = "leave out", "keep"
BAD, GOOD = "bad", "good"
REMOVE = "remove"
# What can be decided of what.
VERDICTS = {
    "recording": (LEAVE_OUT, KEEP),
    "channel": (BAD, GOOD),
    "component": (REMOVE, KEEP),
}
HEADER = ("recording", "kind", "item", "verdict", "reason", "by", "date")
DATE = re.compile(r"\d{4}-\d{2}-\d{2}")


@dataclass(frozen=True)
class Decision:
    """One line of the table.

    Attributes
    ----------
    line : int
        In the file, from 1.
    recording : str
        File name without _eeg and extension, such as ``sub-01_task-panels``.
    kind : {"recording", "channel", "component"}
    item : str
        Name of the channel; number and peak channel of the component, such as ``3 Fp1``, so that
        it cannot pass to another one when components are fitted anew; ``n/a`` for a recording.
    verdict : str
        See `VERDICTS`.
    reason, by, date : str
    """

    line: int
    recording: str
    kind: str
    item: str
    verdict: str
    reason: str
    by: str
    date: str

    @property
    def told(self) -> str:
        """Why, and who says so."""
        return f"{self.reason} (decided by {self.by})"


def read(path: str | Path, recordings: Collection[str]) -> list[Decision]:
    """Read the decisions, if there are any.

    Parameters
    ----------
    path : path
        Need not exist.
    recordings : collection of str
        File names of the study's recordings, without _eeg and extension.

    Raises
    ------
    SettingsError
        With every line that cannot be understood, or speaks of a recording that does not exist.
    """
    path = Path(path)
    if not path.is_file():
        return []
    numbered = tables.read_numbered(path)
    missing = [name for name in HEADER if numbered and name not in numbered[0][1]]
    if missing:
        raise SettingsError(
            f"{path} has no column {', '.join(missing)}; expected {', '.join(HEADER)}, parted by "
            "tabs."
        )
    decisions = [Decision(line, *(row[name] for name in HEADER)) for line, row in numbered]
    problems = [
        f"  line {decision.line}: {problem}"
        for decision in decisions
        for problem in _problems(decision, recordings)
    ]
    seen: dict[tuple[str, str, str], int] = {}
    for decision in decisions:
        about = (decision.recording, decision.kind, decision.item)
        if about in seen:
            problems.append(f"  line {decision.line}: decides what line {seen[about]} decides too")
        seen.setdefault(about, decision.line)
    if problems:
        raise SettingsError(f"{path}: nothing was run.\n" + "\n".join(problems))
    return decisions


def _problems(decision: Decision, recordings: Collection[str]) -> Iterable[str]:
    if decision.recording not in recordings:
        yield (
            f"there is no recording {decision.recording!r}; "
            f"{nearest(decision.recording, recordings)}"
        )
    if decision.kind not in VERDICTS:
        yield f"kind is {decision.kind!r}, expected {', '.join(VERDICTS)}"
        return
    verdicts = VERDICTS[decision.kind]
    if decision.verdict not in verdicts:
        yield f"verdict is {decision.verdict!r}, expected {' or '.join(verdicts)}"
    if (decision.item == tables.MISSING) != (decision.kind == "recording"):
        expected = tables.MISSING if decision.kind == "recording" else f"the {decision.kind}"
        yield f"item is {decision.item!r}, expected {expected}"
    if decision.reason in ("", tables.MISSING):
        yield "a reason is missing; say why"
    if decision.date != tables.MISSING and not DATE.fullmatch(decision.date):
        yield f"date is {decision.date!r}, expected one such as 2026-03-31"


def nearest(name: str, names: Collection[str]) -> str:
    """Words for the name that was probably meant."""
    close = difflib.get_close_matches(name, names, n=1, cutoff=0.6)
    if close:
        return f"did you mean {close[0]}?"
    shown = sorted(names)
    return f"there are {', '.join(shown[:12])}{' ...' if len(shown) > 12 else ''}"


def left_out(decisions: Iterable[Decision]) -> dict[str, str]:
    """Recordings that are left out, and why."""
    return {d.recording: d.told for d in decisions if d.verdict == LEAVE_OUT}


def trusted(decisions: Iterable[Decision], recordings: Iterable[Recording]) -> dict[str, str]:
    """Recordings, by name, that are kept whatever the limits for trust say, and why."""
    kept = {d.recording: d.told for d in decisions if (d.kind, d.verdict) == ("recording", KEEP)}
    return {r.name: kept[r.stem] for r in recordings if r.stem in kept}


def remaining(recordings: Sequence[Recording], left_out: Collection[str]) -> list[Recording]:
    """Recordings that are not left out.

    Raises
    ------
    SettingsError
        If there are none.
    """
    kept = [recording for recording in recordings if recording.stem not in left_out]
    if not kept:
        raise SettingsError(
            f"all {len(recordings)} recordings are left out; take a line out of the decisions."
        )
    return kept


def about(decisions: Iterable[Decision], recording: str, kind: str) -> list[dict[str, str]]:
    """Decisions on one recording's channels or components, as plain values for a rule."""
    return [
        {"item": d.item, "told": d.told, "verdict": d.verdict}
        for d in decisions
        if (d.recording, d.kind) == (recording, kind)
    ]


def by_item(
    chosen: Sequence[Mapping[str, str]],
    items: Collection[str],
    path: str | None,
    recording: str,
) -> dict[str, Mapping[str, str]]:
    """Decisions by the item that they are about.

    Parameters
    ----------
    chosen : sequence of mapping
        From `about`.
    items : collection of str
        Those that exist.
    path : str or None
        The table, to name the line of one that does not; None where nothing is decided.
    recording : str
        As the table names it.

    Raises
    ------
    DataError
        If a decision is about an item that does not exist.
    """
    for decision in chosen:
        item = decision["item"]
        if item not in items:
            lines = [
                line
                for line, row in tables.read_numbered(path)
                if (row["recording"], row["item"]) == (recording, item)
            ]
            raise DataError(
                f"{path}, line {lines[0] if lines else '?'}: {recording} has no {item!r}; "
                f"{nearest(item, items)}"
            )
    return {decision["item"]: decision for decision in chosen}


def suggest(recording: str, kind: str, item: str, verdict: str, reason: str) -> dict[str, str]:
    """Line of the table that the tool suggests; whoever takes it over puts their name and date."""
    told = " ".join(reason.split())
    values = (recording, kind, item, verdict, told, "onbin", tables.MISSING)
    return dict(zip(HEADER, values, strict=True))


def of_participants(rows: Iterable[Mapping[str, Any]], recordings: Sequence[str]) -> list[dict]:
    """Suggest to leave out the recordings of those whom the study sets aside.

    Parameters
    ----------
    rows : rows
        The study's table of participants.
    recordings : sequence of str
        File names of the recordings, without _eeg and extension.
    """
    return [
        suggest(recording, "recording", tables.MISSING, LEAVE_OUT, row["reason"])
        for row in rows
        if not row["in_study"]
        for recording in recordings
        if recording.startswith(f"{row['participant']}_")
    ]


def of_channels(recording: str, rows: Iterable[Mapping[str, Any]]) -> list[dict]:
    """Suggest what the step sensors found of the channels."""
    return [
        suggest(recording, "channel", row["name"], BAD, row["reason"])
        for row in rows
        if row["verdict"] == BAD
    ]


def of_components(recording: str, rows: Iterable[Mapping[str, Any]]) -> list[dict]:
    """Suggest what the step windows found of the components; a flagged one is kept."""
    return [
        suggest(
            recording,
            "component",
            f"{row['component']} {row['peak_channel']}",
            KEEP if row["flagged"] else REMOVE,
            row["reason"],
        )
        for row in rows
        if row["flagged"] or row["verdict"] == "removed"
    ]


def row(decision: Decision) -> dict[str, Any]:
    """Line of the table as it stands."""
    return {name: getattr(decision, name) for name in HEADER}
