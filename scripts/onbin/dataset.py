"""The edge to a BIDS dataset: recordings into mne's Raw, events into trials of the study."""

import logging
import math
import warnings
from collections.abc import Iterable, Mapping, Sequence
from fractions import Fraction
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np

from onbin import layout, tagging
from onbin.errors import DataError
from onbin.sidecars import Channel, nearest
from onbin.tables import MISSING, read_numbered

log = logging.getLogger("onbin")

TEMPLATE_MONTAGE = "colin27_1005"
AUXILIARY_TYPES = ("eog", "ecg")
BLOCK_SAMPLES = 50_000
EEG_SCALE_UV = (0.01, 100_000.0)  # what a channel's spread can be, whatever the amplifier
LARGEST_UV = 1e30  # what single precision holds with room to spare


def read_recording(
    folder: str | Path,
    name: str,
    extension: str,
    channels: Mapping[str, Channel],
    line_hz: float | None,
):
    """Open a recording as mne's Raw, without reading its samples.

    Positions come from electrodes.tsv.

    Parameters
    ----------
    folder : path
        Root of the dataset.
    name : str
        As in `layout.Recording`.
    extension : str
    channels : mapping
        Types and bad channels, as `sidecars.read_channels`.
    line_hz : float, optional
        Frequency of the mains.

    Raises
    ------
    DataError
        If the files cannot be read.
    """
    import mne_bids

    labels = layout.entities(name)
    try:
        path = mne_bids.BIDSPath(
            root=folder,
            subject=labels["sub"],
            session=labels.get("ses"),
            task=labels.get("task"),
            acquisition=labels.get("acq"),
            run=labels.get("run"),
            suffix="eeg",
            datatype="eeg",
            extension=extension,
        )
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            raw = mne_bids.read_raw_bids(path, on_ch_mismatch="warn", verbose="error")
    except Exception as error:  # readers raise whatever a damaged file leads them to
        raise _refused_by_reader(
            f"{folder}/{name}_eeg{extension} cannot be read, though its length is what its header "
            "says",
            error,
        ) from error
    raw.set_meas_date(None)  # none is kept, and dates are often shifted to what mne cannot write
    kinds = {name: channel.kind for name, channel in channels.items()}
    raw.set_channel_types(kinds, on_unit_change="ignore", verbose="error")
    raw.info["bads"] = [name for name, channel in channels.items() if channel.bad]
    raw.info["line_freq"] = line_hz
    return raw


def read_samples_uv(raw, start: int, stop: int) -> np.ndarray:
    """Samples of a recording from start to before stop, shape (n_channels, n_times).

    Raises
    ------
    DataError
        If the file does not hold what its header says.
    """
    try:
        return raw.get_data(start=start, stop=stop) * 1e6
    except Exception as error:  # as above
        found = f"samples {start} to {stop} of {raw.n_times} cannot be read"
        raise _refused_by_reader(found, error) from error


def _refused_by_reader(found: str, error: Exception) -> DataError:
    log.error("the reader says: %s: %s", type(error).__name__, error)
    return DataError(
        f"{found}; the log tells what the reader says. Export the recording anew, or leave it out."
    )


def check_events(events: str | Path | None) -> None:
    """See that events.tsv has what BIDS requires, before anybody reads it in earnest.

    Raises
    ------
    DataError
        If a column is missing or a time is no number.
    """
    for number, row in read_numbered(events) if events else []:
        for column in ("onset", "duration"):
            if row.get(column) != MISSING:
                _seconds(events, number, column, row)


def choose_channels(raw, photodiode: str | None = None) -> list[dict[str, Any]]:
    """Keep EEG, what records eyes, heart and the light; see that EEG has positions.

    Changes ``raw``. Where the dataset gives no positions they are those of the template by the
    10-05 names.

    Returns
    -------
    list of dict
        Rows of the table of channels.
    """
    import mne

    kinds = dict(zip(raw.ch_names, raw.get_channel_types(), strict=True))
    if "eeg" not in kinds.values():
        raise DataError(
            f"no channel is EEG; the types are {', '.join(sorted(set(kinds.values())))}. Set type "
            "EEG in channels.tsv."
        )
    wanted = ("eeg", *AUXILIARY_TYPES)
    raw.pick([name for name, kind in kinds.items() if kind in wanted or name == photodiode])
    eeg = [name for name in raw.ch_names if kinds[name] == "eeg"]
    given = _positions(raw)
    source = "dataset"
    if not given:
        source = "template"
        montage = mne.channels.make_standard_montage(TEMPLATE_MONTAGE)
        known = {name.lower() for name in montage.ch_names}
        # where few names are known they mean others: A1 of an A-to-D cap is no ear lobe
        if 2 * sum(name.lower() in known for name in eeg) >= len(eeg):
            raw.set_montage(montage, match_case=False, on_missing="ignore", verbose="error")
        given = _positions(raw)
    without = [name for name in eeg if name not in given]
    if without:
        log.warning("no position for %s: they cannot be interpolated", ", ".join(without))
    return [
        {
            "name": name,
            "type": kinds[name].upper(),
            "units": "V",
            "status": "bad" if name in raw.info["bads"] else "good",
            "position": source if name in given else "none",
        }
        for name in raw.ch_names
    ]


def _positions(raw) -> set[str]:
    """Names of EEG channels with a usable position."""
    return {
        channel["ch_name"]
        for channel in raw.info["chs"]
        if np.all(np.isfinite(channel["loc"][:3])) and np.any(channel["loc"][:3])
    }


def require_photodiode(raw, photodiode: str | None) -> None:
    """See that a recording has the channel of the light that the settings name, if they do.

    Raises
    ------
    DataError
        If it is not there.
    """
    if photodiode and photodiode not in raw.ch_names:
        raise DataError(
            f"flicker.photodiode: the recording has no channel {photodiode}; it has "
            f"{', '.join(raw.ch_names)}. Change it in the settings, or leave the recording out."
        )


def read_trials(
    events: str | Path | None,
    conditions: Mapping[str, Mapping[str, Any]],
    entities: Mapping[str, str],
    recording_s: float,
    rate_hz: float,
) -> list[dict[str, Any]]:
    """Find the trials of a recording.

    Parameters
    ----------
    events : path, optional
        Its events.tsv.
    conditions : mapping
        By name: ``events`` (column or entity, and value) and ``duration_s`` (or None).
    entities : mapping
        BIDS entities of the recording.
    recording_s : float
        Length of the recording.
    rate_hz : float
        Its sampling rate: trials may reach out of it, or into each other, by one sample.

    Returns
    -------
    list of dict
        ``trial``, ``condition``, ``onset_s``, ``duration_s``, in the order of onsets.

    Raises
    ------
    DataError
        If no event belongs to a condition, or one cannot be understood, lies outside the
        recording or overlaps with another.
    """
    rows = read_numbered(events) if events else []
    trials = []
    for name, condition in conditions.items():
        wanted = condition["events"]
        columns = {key: value for key, value in wanted.items() if key not in layout.ENTITIES}
        labels = {key: value for key, value in wanted.items() if key in layout.ENTITIES}
        if not all(_same(entities.get(key), value) for key, value in labels.items()):
            continue
        if not columns:
            trials.append((f"conditions.{name}", name, 0.0, recording_s))
        for number, row in rows:
            if columns and all(_same(row.get(key), value) for key, value in columns.items()):
                onset_s = _seconds(events, number, "onset", row)
                duration_s = _seconds(events, number, "duration", row) or condition["duration_s"]
                if not duration_s:
                    raise DataError(
                        f"{events}, line {number}: no duration; give conditions.{name}.duration_s."
                    )
                trials.append((f"line {number}", name, onset_s, duration_s))
    if not trials:
        raise DataError(_nothing_found(events, [row for _, row in rows], conditions, entities))
    trials.sort(key=lambda trial: trial[2])
    _check_places(events, trials, recording_s, 1 / rate_hz)
    return [
        {"trial": number, "condition": name, "onset_s": onset_s, "duration_s": duration_s}
        for number, (_, name, onset_s, duration_s) in enumerate(trials, start=1)
    ]


def _check_places(
    events: str | Path | None,
    trials: Sequence[tuple[str, str, float, float]],
    recording_s: float,
    tolerance_s: float,
) -> None:
    """See that trials (place in the file, condition, onset, duration) lie apart and within."""
    tolerance_s *= 1.001  # times in tables are rounded
    for place, name, onset_s, duration_s in trials:
        if onset_s < -tolerance_s or onset_s + duration_s > recording_s + tolerance_s:
            raise DataError(
                f"{events}, {place}: {name} lasts from {onset_s:g} to {onset_s + duration_s:g} s, "
                f"the recording from 0 to {recording_s:g} s. Correct the event, or copy the "
                "recording anew if its end is missing."
            )
    for (place, name, onset_s, duration_s), (next_place, next_name, next_onset_s, _) in pairwise(
        trials
    ):
        if onset_s + duration_s <= next_onset_s + tolerance_s:
            continue
        if place == next_place:
            raise DataError(
                f"{events}, {place}: the event belongs to two conditions, {name} and {next_name}. "
                "Give each condition events of its own in the settings."
            )
        if (name, onset_s) == (next_name, next_onset_s):
            raise DataError(
                f"{events}, {place} and {next_place}: {name} at {onset_s:g} s stands twice; keep "
                "one."
            )
        raise DataError(
            f"{events}, {place} and {next_place}: {name} lasts from {onset_s:g} to "
            f"{onset_s + duration_s:g} s, but {next_name} begins at {next_onset_s:g} s. A window "
            "would belong to both: correct their times, or take one away."
        )


def _same(found: str | None, wanted: str | int | float) -> bool:
    if found is None or found == MISSING:
        return False
    if found == str(wanted):
        return True
    try:
        return float(found) == float(wanted)
    except ValueError:
        return False


def _seconds(events: str | Path | None, number: int, column: str, row: Mapping[str, str]) -> float:
    text = row.get(column)
    if text is None:
        raise DataError(f"{events} has no column {column}, which BIDS requires; add it.")
    if text == MISSING and column == "duration":
        return 0.0
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not math.isfinite(value) or (column == "duration" and value < 0):
        raise DataError(
            f"{events}, line {number}: {column} is {text!r}, expected a number of seconds; correct "
            "it."
        )
    return value


def _nothing_found(
    events: str | Path | None,
    rows: Sequence[Mapping[str, str]],
    conditions: Mapping[str, Mapping],
    entities: Mapping[str, str],
) -> str:
    if not events:
        return (
            "the recording has no events.tsv, and no condition takes whole recordings of "
            f"{', '.join(f'{key}-{label}' for key, label in entities.items()) or 'this kind'}. Add "
            "events.tsv, or compare with conditions in the settings."
        )
    columns = sorted({key for c in conditions.values() for key in c["events"]})
    there = []
    for column in columns:
        values = sorted({row[column] for row in rows if column in row})
        if values:
            there.append(f"{column}: {', '.join(values[:12])}{' ...' if len(values) > 12 else ''}")
    found = "; ".join(there) or (f"columns {', '.join(rows[0])}" if rows else "no rows")
    return (
        f"{events} has no event of any condition. It has {found}. Compare with conditions in the "
        "settings."
    )


def events_file(files: Iterable[str]) -> str | None:
    """Choose the events.tsv that is nearest to the recording."""
    return next(iter(nearest(files, "events.tsv")), None)


def open_signal(path: str | Path):
    """Open a signal of ours as mne's Raw; its samples stay in the file."""
    import mne

    return mne.io.read_raw_fif(path, preload=False, verbose="error")


def read_signal(path: str | Path):
    """Read a signal of ours as mne's Raw, in memory."""
    return open_signal(path).load_data(verbose="error")


def write_signal(raw, path: str | Path) -> None:
    """Write a signal in single precision."""
    raw.save(path, fmt="single", overwrite=True, verbose="error")


def put_eeg(raw, eeg_uv: np.ndarray) -> None:
    """Give a Raw in memory another EEG, in µV."""
    for name, row in zip(eeg_names(raw), eeg_uv, strict=True):
        raw._data[raw.ch_names.index(name)] = row * 1e-6


def eeg_uv(raw) -> np.ndarray:
    """EEG of a Raw in µV, shape (n_channels, n_times).

    In single precision, as signals are stored, and block by block: an hour of 64 channels takes a
    quarter of a gigabyte.
    """
    names = eeg_names(raw)
    data_uv = np.empty((len(names), raw.n_times), dtype=np.float32)
    for start in range(0, raw.n_times, BLOCK_SAMPLES):
        stop = min(start + BLOCK_SAMPLES, raw.n_times)
        data_uv[:, start:stop] = raw.get_data(names, start, stop) * 1e6
    return data_uv


def positions_m(raw) -> np.ndarray:
    """Positions of the EEG channels, shape (n_channels, 3); NaN where there is none."""
    placed = _positions(raw)
    return np.array(
        [
            channel["loc"][:3] if channel["ch_name"] in placed else (np.nan,) * 3
            for channel in raw.info["chs"]
            if channel["ch_name"] in eeg_names(raw)
        ]
    )


def bad_spans(raw) -> list[tuple[float, float, str]]:
    """Stretches that the dataset marks as bad: onset and duration in s, and description."""
    return [(a["onset"], a["duration"], a["description"]) for a in raw.annotations]


def channel_uv(raw, name: str) -> np.ndarray:
    """One channel in µV (a photodiode's in millionths of its own unit), shape (n_times,)."""
    if name not in raw.ch_names:
        raise DataError(
            f"flicker.photodiode: the recording has no channel {name!r}; it has "
            f"{', '.join(raw.ch_names)}."
        )
    return raw.get_data(picks=[name])[0] * 1e6


def eeg_names(raw) -> list[str]:
    """Names of the EEG channels, bad ones too."""
    kinds = zip(raw.ch_names, raw.get_channel_types(), strict=True)
    return [name for name, kind in kinds if kind == "eeg"]


def with_data(raw, data_uv: np.ndarray, rate_hz: float):
    """Put decimated samples in the place of a recording's own; all else is kept.

    Parameters
    ----------
    raw : mne.io.Raw
    data_uv : ndarray, shape (n_channels, n_times)
        It is taken over, and holds volts afterwards: a copy may be half of the memory.
    rate_hz : float
    """
    import mne

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # of a low-pass above the new Nyquist: it has been applied
        info = raw.info.copy()
        with info._unlock():
            info["sfreq"] = rate_hz
            for channel in info["chs"]:
                channel["cal"] = channel["range"] = 1.0  # of the file that was read
            info["lowpass"] = min(info["lowpass"] or rate_hz / 2, rate_hz / 2)
        data_uv *= 1e-6
        working = mne.io.RawArray(data_uv, info, verbose="error")
        working.set_annotations(_relative(raw.annotations), verbose="error")
    return working


def _relative(annotations):
    """Annotations that speak of bad stretches, without a date, so that results carry none."""
    import mne

    bad = [a for a in annotations if a["description"].lower().startswith("bad")]
    return mne.Annotations(
        [a["onset"] for a in bad], [a["duration"] for a in bad], [a["description"] for a in bad]
    )


def check_scale(data_uv: np.ndarray, raw) -> None:
    """See that the samples are numbers and of the size of EEG.

    Raises
    ------
    DataError
        If samples are not finite, or the units must be wrong by orders of magnitude.
    """
    names = [
        name
        for name, row in zip(raw.ch_names, data_uv, strict=True)
        if not (np.abs(row) < LARGEST_UV).all()
    ]
    if names:
        raise DataError(
            f"{', '.join(names)}: some samples are not finite numbers. Export the recording anew, "
            "or leave it out."
        )
    low, high = EEG_SCALE_UV
    kinds = raw.get_channel_types()
    spreads = [np.std(row) for row, kind in zip(data_uv, kinds, strict=True) if kind == "eeg"]
    spread = float(np.median(spreads))
    if not low <= spread <= high:
        raise DataError(
            f"the median channel varies by {spread:.3g} µV (standard deviation), expected {low} to "
            f"{high:g}. Check the unit in the data file: volts may be given as microvolts, or the "
            "reverse; and whether anything was recorded."
        )


def common_rate(raws: Sequence[Any], recordings: Sequence[str]) -> Fraction:
    """Sampling rate that a participant's recordings share, exact.

    Raises
    ------
    DataError
        If they differ.
    """
    rates = [tagging.exact_rate(raw.info["sfreq"]) for raw in raws]
    return tagging.common_rate(dict(zip(recordings, rates, strict=True)))
