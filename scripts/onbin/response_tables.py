"""From coefficients to rows: every term in every condition at every site."""

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import numpy as np

from onbin import inference, response, tagging
from onbin.tagging import Term

FEWEST_WINDOWS = 3  # a scatter and its shape need that many
SUM = "sum"


@dataclass(frozen=True)
class Coefficients:
    """What the step spectra leaves of one participant.

    Attributes
    ----------
    values_uv : ndarray of complex, shape (n_windows, n_sites, n_terms, n_bins)
        Bin 0 is the term, the others lie beside it.
    terms : list of Term
        At the frequencies used.
    tags : dict of str to Fraction
        Frequencies used of the tags.
    measured : set of str
        Tags whose frequency was measured and adopted.
    bins : ndarray of int, shape (n_bins,)
    durations_s : list of Fraction, one for each term
        Length of its window; the inverse is the width of a bin.
    passband_hz : float
        What the filters pass.
    condition, recording, trial, window : ndarray, shape (n_windows,)
    site, site_kind, site_channels : ndarray of str, shape (n_sites,)
    """

    values_uv: np.ndarray
    terms: list[Term]
    tags: dict[str, Fraction]
    measured: set[str]
    bins: np.ndarray
    durations_s: list[Fraction]
    passband_hz: float
    condition: np.ndarray
    recording: np.ndarray
    trial: np.ndarray
    window: np.ndarray
    site: np.ndarray
    site_kind: np.ndarray
    site_channels: np.ndarray

    @classmethod
    def of(cls, stored: Mapping[str, np.ndarray], terms: Mapping[str, Any]) -> "Coefficients":
        """Take up stored arrays; ``terms`` are the settings that make up the terms."""
        rate = Fraction(str(stored["rate"]))
        names = ("condition", "recording", "trial", "window", "site", "site_kind", "site_channels")
        passband_hz = float(stored["passband_hz"])
        names_of_tags = tagging.study_tags(terms)
        tags = dict(zip(names_of_tags, map(Fraction, stored["used"]), strict=True))
        return cls(
            values_uv=stored["coefficients_uv"].astype(complex),
            terms=tagging.retuned(tagging.study_terms(terms, passband_hz), tags),
            tags=tags,
            measured=set(stored["measured"].tolist()),
            passband_hz=passband_hz,
            bins=stored["bins"],
            durations_s=[int(n) / rate for n in stored["samples"]],
            **{name: stored[name] for name in names},
        )

    def at(self, condition: str, term: int) -> np.ndarray:
        """Coefficients of a condition at a term, shape (n_windows, n_sites, n_bins)."""
        return self.values_uv[self.condition == condition][:, :, term]

    def source(self, term: Term) -> str:
        """Where the frequency of a term comes from."""
        measured = any(name in self.measured for name, _ in term.orders)
        return "measured" if measured else "as set"

    def site_columns(self, index: int) -> dict[str, str]:
        """The columns that say where."""
        return {
            "site": str(self.site[index]),
            "site_kind": str(self.site_kind[index]),
            "channels": str(self.site_channels[index]),
        }


def occupied(
    tags: Mapping[str, Fraction],
    flickering: Sequence[str],
    order: int,
    below_hz: float,
    line_hz: float | None,
) -> list[Fraction]:
    """Frequencies that hold more than noise: all harmonics and sums of what flickers, the mains.

    One that several of them have stands there as often.
    """
    driven = {name: tags[name] for name in flickering}
    count = max((int(below_hz / f) for f in driven.values()), default=0)
    terms = tagging.harmonics(driven, count) + tagging.intermodulations(driven, max(order, 2))
    line = tagging.exact(line_hz) if line_hz else None
    mains = [line * n for n in range(1, int(below_hz / line_hz) + 1)] if line else []
    return sorted([term.frequency for term in terms if term.frequency < below_hz] + mains)


def response_rows(
    coefficients: Coefficients,
    conditions: Mapping[str, Mapping[str, Any]],
    occupied_in: Mapping[str, Sequence[Fraction]],
    level: float,
    correction: str,
) -> Iterator[dict[str, Any]]:
    """Rows of the table of responses.

    Parameters
    ----------
    coefficients : Coefficients
    conditions : mapping
        By name: ``flickering`` and ``phase_locked``.
    occupied_in : mapping
        By condition, from `occupied`.
    level : float
        Of detection.
    correction : str
        Over channels: ``benjamini_hochberg`` or ``holm``.
    """
    for condition, about in conditions.items():
        n_windows = int((coefficients.condition == condition).sum())
        if n_windows < FEWEST_WINDOWS:
            continue
        of_tag: dict[str, list[tuple[Term, dict, bool]]] = {}
        for index, term in enumerate(coefficients.terms):
            values_uv = coefficients.at(condition, index)
            usable = tagging.usable_neighbours(
                term.frequency,
                coefficients.bins[1:].tolist(),
                coefficients.durations_s[index],
                occupied_in[condition],
                coefficients.passband_hz,
            )
            measured = response.measures(
                values_uv[:, :, 0], values_uv[:, :, 1:][:, :, usable], about["phase_locked"]
            )
            measured |= _detection(measured, coefficients.site_kind, level, correction)
            driven = term.driven_by(about["flickering"])
            common = {
                "condition": condition,
                "tag": term.tag,
                "term": term.term,
                "frequency_hz": float(term.frequency),
                "frequency_source": coefficients.source(term),
                "driven": driven,
            }
            yield from _rows(coefficients, common, measured)
            if driven and term.harmonic and about["phase_locked"]:
                width = 1 / coefficients.durations_s[index]
                within = [f for f in occupied_in[condition] if abs(f - term.frequency) < width]
                shared = len(within) > 1  # itself is one
                of_tag.setdefault(term.tag, []).append((term, measured, shared))
        for tag, harmonics in of_tag.items():
            own = [(term, measured) for term, measured, shared in harmonics if not shared]
            if own:
                total = sum(measured["amplitude_baseline_uv"] for _, measured in own)
                common = {
                    "condition": condition,
                    "tag": tag,
                    "term": SUM,
                    "driven": True,
                    "windows": n_windows,
                    "harmonics": " ".join(term.term for term, _ in own),
                }
                latency_s, half_s = response.apparent_latency(
                    np.stack([measured["phase_rad"] for _, measured in own]),
                    np.stack([measured["phase_half_width_rad"] for _, measured in own]),
                    np.array([float(term.frequency) for term, _ in own]),
                )
                values = {
                    "amplitude_sum_uv": total,
                    "latency_ms": latency_s * 1e3,
                    "latency_low_ms": (latency_s - half_s) * 1e3,
                    "latency_high_ms": (latency_s + half_s) * 1e3,
                }
                yield from _rows(coefficients, common, values)


def _detection(
    measured: Mapping[str, Any], site_kind: np.ndarray, level: float, correction: str
) -> dict[str, np.ndarray]:
    p = measured["detection_p"]
    corrected = p.copy()
    channels = site_kind == "channel"
    adjust = inference.holm if correction == "holm" else inference.benjamini_hochberg
    corrected[channels] = adjust(p[channels])
    return {"detection_p_corrected": corrected, "present": corrected <= level}


def _rows(
    coefficients: Coefficients, common: Mapping[str, Any], measured: Mapping[str, Any]
) -> Iterator[dict[str, Any]]:
    for index in range(len(coefficients.site)):
        values = {k: v[index] if np.ndim(v) else v for k, v in measured.items()}
        yield {**common, **coefficients.site_columns(index), **values}


def window_rows(
    coefficients: Coefficients, conditions: Mapping[str, Mapping[str, Any]]
) -> Iterator[dict[str, Any]]:
    """Single-window projected amplitude of each region at the fundamentals that are driven."""
    regions = np.flatnonzero(coefficients.site_kind == "region")
    for condition, about in conditions.items():
        chosen = np.flatnonzero(coefficients.condition == condition)
        if chosen.size < FEWEST_WINDOWS or not about["phase_locked"]:
            continue
        for index, term in enumerate(coefficients.terms):
            if term.harmonic != 1 or not term.driven_by(about["flickering"]):
                continue
            projected_uv = response.projected_amplitude(coefficients.at(condition, index)[:, :, 0])
            for row, window in enumerate(chosen):
                for site in regions:
                    yield {
                        "recording": str(coefficients.recording[window]),
                        "window": int(coefficients.window[window]),
                        "window_number": int(window) + 1,
                        "trial": int(coefficients.trial[window]),
                        "condition": condition,
                        "tag": term.tag,
                        "term": term.term,
                        "frequency_source": coefficients.source(term),
                        "site": str(coefficients.site[site]),
                        "projected_amplitude_uv": projected_uv[row, site],
                    }
