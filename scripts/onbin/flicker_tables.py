"""From a recording and its windows to rows: where each tag's flicker is, and what is used."""

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import numpy as np

from onbin import flicker, layout, tagging
from onbin.flicker import CANNOT_TELL, Stretches

DECIMALS = 6  # of an adopted frequency, far below what can be told from EEG
AS_SET, MEASURED = "as set", "measured"


def stretches_of(
    signal_uv: np.ndarray,
    windows: Sequence[Mapping[str, Any]],
    conditions: Sequence[str],
    rate_hz: float,
) -> Stretches | None:
    """Join neighbouring kept windows of a trial into stretches; None where there are none.

    Parameters
    ----------
    signal_uv : ndarray, shape (n_times,)
    windows : sequence of mapping
        Rows of the table of windows that were kept, in order.
    conditions : sequence of str
        In which the tag flickers.
    rate_hz : float
    """
    spans: list[list] = []
    for row in windows:
        if row["condition"] not in conditions:
            continue
        start, stop = row["start_sample"], row["start_sample"] + row["n_samples"]
        if spans and spans[-1][0] == row["trial"] and spans[-1][2] == start:
            spans[-1][2] = stop
        else:
            spans.append([row["trial"], start, stop])
    if not spans:
        return None
    return Stretches(
        tuple(signal_uv[start:stop] for _, start, stop in spans),
        tuple(start / rate_hz for _, start, _ in spans),
        rate_hz,
    )


def frequency_rows(
    signals_uv: Mapping[str, np.ndarray],
    windows: Sequence[Mapping[str, Any]],
    conditions: Mapping[str, Mapping[str, Any]],
    tags: Mapping[str, Fraction],
    line_hz: float | None,
    rate_hz: float,
    window_s: float,
) -> Iterator[dict[str, Any]]:
    """Rows of the table of frequencies: each tag in each signal.

    Parameters
    ----------
    signals_uv : mapping
        By name: the region's signal, and the photodiode's where there is one.
    windows : sequence of mapping
        Kept windows.
    conditions : mapping
        By name: ``flickering``.
    tags : mapping of str to Fraction
    line_hz : float or None
    rate_hz, window_s : float
        Sampling rate, and length of a window, whose inverse is a bin.
    """
    for tag, set_hz in tags.items():
        showing = [name for name, about in conditions.items() if tag in about["flickering"]]
        beside = {t for name in showing for t in conditions[name]["flickering"]} - {tag}
        avoid_hz = [float(tags[t] * n) for t in beside for n in (1, 2, 3)]
        avoid_hz += [line_hz] if line_hz else []
        for name, signal_uv in signals_uv.items():
            row = {"tag": tag, "signal": name, "set_hz": float(set_hz)}
            stretches = stretches_of(signal_uv, windows, showing, rate_hz)
            if stretches is None:
                yield row | {"flicker_verdict": CANNOT_TELL}
                continue
            found = flicker.locate(stretches, float(set_hz), avoid_hz)
            offset_hz = found.frequency_hz - float(set_hz)
            yield row | {
                "flicker_verdict": found.verdict,
                "found_hz": found.frequency_hz,
                "found_low_hz": found.low_hz,
                "found_high_hz": found.high_hz,
                "offset_hz": offset_hz,
                "offset_bins": offset_hz * window_s,
                "lost_db": flicker.amplitude_loss_db(offset_hz * window_s),
                "stretch_snr_db": found.snr_db,
                "presence_p": found.presence_p,
                "drift_hz_per_min": found.drift_hz_per_min,
                "drift_low_hz_per_min": found.drift_low,
                "drift_high_hz_per_min": found.drift_high,
                "phase_steps": len(found.steps),
                "phase_steps_at": "; ".join(
                    f"{time_s:.2f} s {np.degrees(size):+.0f}°" for time_s, size in found.steps
                )
                or None,
            }


def used_rows(
    rows: Sequence[Mapping[str, Any]], adopt: Sequence[Mapping[str, Any]], recording: str
) -> Iterator[dict[str, Any]]:
    """Say which frequency the measures of a recording rest on.

    A photodiode's finding goes before the EEG's, since it sees the flicker itself.

    Parameters
    ----------
    rows : sequence of mapping
        From `frequency_rows`; of a tag the last row with a finding counts.
    adopt : sequence of mapping
        From the settings: ``tag`` and ``recordings``.
    recording : str
    """
    own = layout.entities(recording)
    adopted = {
        item["tag"]
        for item in adopt
        if not item["recordings"]
        or any(layout.entities(name).items() <= own.items() for name in item["recordings"])
    }
    found = {row["tag"]: row for row in rows if row["flicker_verdict"] != CANNOT_TELL}
    for row in rows:
        measured = row["tag"] in adopted and row["tag"] in found
        used_hz = found[row["tag"]]["found_hz"] if measured else row["set_hz"]
        yield row | {
            "used_hz": round(used_hz, DECIMALS),
            "frequency_source": MEASURED if measured else AS_SET,
        }


@dataclass(frozen=True)
class Used:
    """Frequencies that a participant's measures rest on.

    Attributes
    ----------
    of_recordings : list of dict of str to Fraction
        Each recording's own.
    tags : dict of str to Fraction
        Their mean over recordings, for windows and bins.
    measured : list of str
        Tags whose measured frequency was adopted in some recording.
    """

    of_recordings: list[dict[str, Fraction]]
    tags: dict[str, Fraction]
    measured: list[str]

    @classmethod
    def of(cls, tables: Sequence[Sequence[Mapping]], tags: Mapping[str, Fraction]) -> "Used":
        """Take them from the recordings' tables of frequencies."""
        adopted = [
            {row["tag"]: row["used_hz"] for row in rows if row["frequency_source"] == MEASURED}
            for rows in tables
        ]
        of_recordings = [
            {
                tag: tagging.exact(own[tag]) if tag in own else frequency
                for tag, frequency in tags.items()
            }
            for own in adopted
        ]
        means = {tag: sum(own[tag] for own in of_recordings) / len(of_recordings) for tag in tags}
        return cls(of_recordings, means, sorted({tag for own in adopted for tag in own}))
