"""What a dataset says beside a recording's data file: eeg.json and channels.tsv, checked."""

import json
import logging
import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from onbin import layout
from onbin.errors import DataError
from onbin.headers import Header, read_header, require_files
from onbin.tables import MISSING, read_numbered

log = logging.getLogger("onbin")

# Types of channels.tsv in BIDS 1.10, and what mne calls those that are kept.
KEPT_TYPES = {
    "EEG": "eeg", "EOG": "eog", "HEOG": "eog", "VEOG": "eog", "ECG": "ecg",
}  # fmt: skip
OTHER_TYPES = (
    "ACCEL", "ADC", "ANGACC", "AUDIO", "DAC", "DBS", "ECOG", "EMG", "EYEGAZE", "FITERR", "GSR",
    "GYRO", "HLU", "JNTANG", "LATENCY", "MAGN", "MEGGRADAXIAL", "MEGGRADPLANAR", "MEGMAG",
    "MEGOTHER", "MEGREFGRADAXIAL", "MEGREFGRADPLANAR", "MEGREFMAG", "MISC", "NIRSCWAMPLITUDE",
    "NIRSCWFLUORESCENSEAMPLITUDE", "NIRSCWHBO", "NIRSCWHBR", "NIRSCWMUA", "NIRSCWOPTICALDENSITY",
    "ORNT", "OTHER", "POS", "PPG", "PUPIL", "REF", "RESP", "SEEG", "SYSCLOCK", "TEMP", "TRIG",
    "VEL",
)  # fmt: skip
UNITS = ("m", "cm", "mm", MISSING)  # of EEGCoordinateUnits
STATUSES = ("good", "bad", MISSING, "")
TRIGGERS = "Status"  # BDF's own channel of triggers, which lists of channels often leave out
LARGEST = 1e300  # JSON may hold larger numbers, which no float does
MAINS_HZ = (10, 1000)  # railways have 16.7, aircraft 400
DURATION_TOLERANCE_S = 1.0  # durations in sidecars are often rounded to seconds
RATE_TOLERANCE = 1e-3  # BrainVision rounds the sampling interval, to whole µs in many programs


@dataclass(frozen=True)
class Channel:
    """A row of channels.tsv: its type as mne calls it, and whether it is marked as bad."""

    kind: str
    bad: bool


def nearest(files: Iterable[str], suffix: str) -> list[str]:
    """Files of a kind that apply to a recording, the most specific first (BIDS inheritance)."""
    of_kind = [p for p in files if Path(p).name == suffix or p.endswith(f"_{suffix}")]
    return sorted(of_kind, key=lambda p: (p.count("/"), p.count("_"), p), reverse=True)


def merged(files: Iterable[str], suffix: str) -> dict[str, Any]:
    """Read the JSON files of a kind that apply; each key from the most specific that has it.

    Raises
    ------
    DataError
        If one is not JSON.
    """
    told: dict[str, Any] = {}
    for path in reversed(nearest(files, suffix)):
        told |= read_json(path)
    return told


def read_eeg_json(files: Iterable[str], recording: str) -> dict[str, Any]:
    """Read what applies to a recording of eeg.json.

    Raises
    ------
    DataError
        If there is no such file, or one is not JSON.
    """
    if not nearest(files, "eeg.json"):
        raise DataError(
            f"no eeg.json applies to {recording}; BIDS requires one. Write {recording}_eeg.json "
            "with at least TaskName, EEGReference, SamplingFrequency, PowerLineFrequency and "
            "SoftwareFilters."
        )
    return merged(files, "eeg.json")


def read_json(path: str | Path) -> dict[str, Any]:
    """Read a JSON object.

    Raises
    ------
    DataError
        If the file holds anything else.
    """
    try:
        text = Path(path).read_text(encoding="utf-8")
    except UnicodeDecodeError:
        raise DataError(f"{path} is not text in UTF-8; save it as UTF-8.") from None
    if text.startswith("\ufeff"):  # RFC 8259, section 8.1; readers that come later stumble over it
        raise DataError(
            f"{path} begins with a byte-order mark, which JSON must not have; save it as UTF-8 "
            "without one."
        )
    try:
        found = json.loads(text)
    except json.JSONDecodeError as error:
        raise DataError(
            f"{path}, line {error.lineno}, column {error.colno}: is not valid JSON ({error.msg}); "
            "correct it."
        ) from None
    except ValueError as error:  # a number of thousands of digits
        raise DataError(f"{path} is not valid JSON ({error}); correct it.") from None
    except RecursionError:
        raise DataError(f"{path} is nested too deeply; correct it.") from None
    if not isinstance(found, dict):
        kind = "a list" if isinstance(found, list) else repr(found)[:40]
        raise DataError(f'{path} holds {kind}, expected {{"key": value, ...}}; correct it.')
    return found


def check_eeg_json(told: Mapping[str, Any], header: Header, line_hz: float | None) -> float | None:
    """See that eeg.json has what is needed of it and agrees with the data file.

    Parameters
    ----------
    told : mapping
        As `read_eeg_json`.
    header : Header
    line_hz : float, optional
        Frequency of the mains from the settings, which goes before PowerLineFrequency.

    Returns
    -------
    float or None
        PowerLineFrequency.

    Raises
    ------
    DataError
    """
    rate_hz = _positive(told, "SamplingFrequency", header)
    if rate_hz is None:
        raise DataError(_lacks("SamplingFrequency", header, f"add it ({header.rate_hz:g})"))
    if abs(rate_hz / header.rate_hz - 1) > RATE_TOLERANCE:
        raise DataError(
            f"{header.path}: the data file has {header.rate_hz:g} samples a second, "
            f"SamplingFrequency in eeg.json is {rate_hz:g}. Correct whichever is wrong."
        )
    told_line_hz = _positive(told, "PowerLineFrequency", header)
    low_hz, high_hz = MAINS_HZ
    if told_line_hz and not low_hz <= told_line_hz <= high_hz:
        raise DataError(
            f"{header.path}: PowerLineFrequency in its eeg.json is {told_line_hz:g}, expected "
            f"{low_hz} to {high_hz}, or n/a; correct it."
        )
    if told.get("RecordingType") == "epoched":
        raise DataError(
            f"{header.path}: RecordingType in its eeg.json is epoched, expected continuous; take "
            "the continuous recording, or leave it out."
        )
    if line_hz is None and told_line_hz is None:
        if "PowerLineFrequency" not in told:
            raise DataError(
                _lacks("PowerLineFrequency", header, "add it, or give filter.line_hz in settings")
            )
        log.warning("PowerLineFrequency is n/a: no mains hum is taken out")
    _check_duration(_positive(told, "RecordingDuration", header), header)
    return told_line_hz


def _check_duration(duration_s: float | None, header: Header) -> None:
    if duration_s is None:
        return
    missing_s = duration_s - header.duration_s
    tolerance_s = max(DURATION_TOLERANCE_S, header.record_s)
    if missing_s > tolerance_s:
        raise DataError(
            f"{header.path}: the data file has {header.duration_s:g} s, RecordingDuration in "
            f"eeg.json is {duration_s:g} s: the end is missing. Copy the recording anew, or "
            "correct RecordingDuration if nothing is missing."
        )
    if -missing_s > tolerance_s:
        log.warning(
            "the data file has %g s, RecordingDuration is %g s", header.duration_s, duration_s
        )


def _lacks(key: str, header: Header, advice: str) -> str:
    return f"{header.path}: its eeg.json has no {key}, which BIDS requires; {advice}."


def _positive(told: Mapping[str, Any], key: str, header: Header) -> float | None:
    value = told.get(key)
    if value is None or value == MISSING:
        return None
    is_number = isinstance(value, int | float) and not isinstance(value, bool)
    if not is_number or not 0 < value < LARGEST:
        raise DataError(
            f"{header.path}: {key} in its eeg.json is {value!r}, expected a number above 0; "
            "correct it."
        )
    return float(value)


def read_channels(files: Iterable[str], header: Header) -> dict[str, Channel]:
    """Read the channels.tsv that applies to a recording; nothing where there is none.

    Raises
    ------
    DataError
        If it cannot be understood, or tells of other channels than the data file has.
    """
    for name in header.channels:
        if header.channels.count(name) > 1:
            raise DataError(
                f"{header.path} has {header.channels.count(name)} channels that are called "
                f"{name}. Export it anew with a name for each."
            )
    path = next(iter(nearest(files, "channels.tsv")), None)
    if path is None:
        log.warning("no channels.tsv: types are those of the data file, and no channel is bad")
        return {}
    channels = _listed(path)
    absent = [name for name in channels if name not in header.channels]
    unlisted = [n for n in header.channels if n not in channels and n != TRIGGERS]
    if absent or unlisted:
        raise DataError(
            f"{path} and {header.path.name} have different channels: "
            f"{', '.join(absent) or 'none'} in the table alone, {', '.join(unlisted) or 'none'} "
            "in the data file alone. Give the table one row a channel, named as in the data file."
        )
    return channels


def eeg_names(files: Sequence[str]) -> list[str]:
    """Names of a recording's EEG channels; where no channels.tsv tells types, of all channels.

    Parameters
    ----------
    files : sequence of str
        As in `layout.Recording`.

    Raises
    ------
    DataError
        If the file that tells them cannot be understood.
    """
    path = next(iter(nearest(files, "channels.tsv")), None)
    require_files([path or files[0]])
    if path is None:
        return list(read_header(files[0]).channels)
    return [name for name, channel in _listed(path).items() if channel.kind == "eeg"]


def _listed(path: str) -> dict[str, Channel]:
    """Channels of a channels.tsv by name."""
    rows = read_numbered(path)
    _require_columns(path, rows, ("name", "type"))
    lines: dict[str, int] = {}
    channels: dict[str, Channel] = {}
    for number, row in rows:
        name, kind, status = row["name"], row["type"].upper(), row.get("status", "").lower()
        if name in lines:
            raise DataError(
                f"{path}: the channel {name} stands on line {lines[name]} and line {number}; keep "
                "one, or give each its own name."
            )
        if kind not in KEPT_TYPES and kind not in OTHER_TYPES:
            raise DataError(
                f"{path}, line {number}: type is {row['type']!r}, expected one of BIDS, such as "
                f"{', '.join(KEPT_TYPES)}, TRIG or MISC; correct it."
            )
        if status not in STATUSES:
            raise DataError(
                f"{path}, line {number}: status is {row['status']!r}, expected good, bad or n/a; "
                "correct it."
            )
        lines[name] = number
        channels[name] = Channel(KEPT_TYPES.get(kind, "misc"), status == "bad")
    return channels


def _require_columns(
    path: str | Path, rows: Sequence[tuple[int, dict[str, str]]], columns: Iterable[str]
) -> None:
    for column in columns:
        if rows and column not in rows[0][1]:
            raise DataError(
                f"{path} has no column {column}, which BIDS requires; it has "
                f"{', '.join(rows[0][1])}. Add it."
            )


def check_positions(files: Iterable[str]) -> None:
    """See that electrodes.tsv and coordsystem.json can be read by those who place electrodes.

    Raises
    ------
    DataError
    """
    files = list(files)
    systems = nearest(files, "coordsystem.json")
    for path in systems:
        told = read_json(path)
        for key in ("EEGCoordinateSystem", "EEGCoordinateUnits"):
            if key not in told:
                raise DataError(f"{path} has no {key}, which BIDS requires; add it.")
        if told["EEGCoordinateUnits"] not in UNITS:
            raise DataError(
                f"{path}: EEGCoordinateUnits is {told['EEGCoordinateUnits']!r}, expected one of "
                f"{', '.join(UNITS)}; correct it."
            )
    for path in nearest(files, "electrodes.tsv"):
        if not systems:
            raise DataError(
                f"{path}: no coordsystem.json says what its coordinates mean; BIDS requires it. "
                "Add it, or take electrodes.tsv away to use the template's positions."
            )
        rows = read_numbered(path)
        _require_columns(path, rows, ("name", "x", "y", "z"))
        for number, row in rows:
            for column in ("name", "x", "y", "z"):
                if column != "name" and row[column] != MISSING and not _is_number(row[column]):
                    raise DataError(
                        f"{path}, line {number}: {column} is {row[column]!r}, expected a number "
                        "or n/a; correct it."
                    )


def _is_number(text: str) -> bool:
    try:
        return math.isfinite(float(text))
    except ValueError:
        return False


def check_people(folder: str | Path, recording: str) -> None:
    """See that participants.tsv and scans.tsv can be read; others read them unasked.

    Raises
    ------
    DataError
    """
    labels = layout.entities(recording)
    own = Path(folder, f"sub-{labels['sub']}", f"ses-{labels['ses']}" if "ses" in labels else "")
    stem = "_".join(f"{key}-{labels[key]}" for key in ("sub", "ses") if key in labels)
    for path, key in (
        (Path(folder) / "participants.tsv", "participant_id"),
        (own / f"{stem}_scans.tsv", "filename"),
    ):
        if path.is_file():
            rows = read_numbered(path)
            if not rows:
                raise DataError(f"{path} has no rows; add them, or take the file away.")
            _require_columns(path, rows, [key])
