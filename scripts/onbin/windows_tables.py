"""From verdicts on windows to rows, and how long the windows of each condition are."""

from collections.abc import Callable, Iterator, Mapping, Sequence
from fractions import Fraction
from typing import Any

import numpy as np

from onbin import spectra, tagging
from onbin.circular import t2circ
from onbin.tagging import Term
from onbin.windows import LEFT_OUT, Unplaced, Window, WindowVerdict, chain_gain

# A response is there hardly by chance, at the best of all channels or in its region; and the most
# that the removal of components may change it by.
PRESENT_P, MOST_CHANGE = 1e-3, 0.05
# The noise beside these harmonics is judged, in so many bins on each side past those skipped: not
# those of the response, so that other neighbours for it do not clean anew.
JUDGED_HARMONICS, JUDGED_BINS = (1, 2), (10, 1)
LIMIT_COLUMNS = {
    "peak_to_peak_uv": "peak_to_peak_limit_uv",
    "gradient_uv_per_ms": "gradient_limit_uv_per_ms",
    "muscle_uv": "muscle_limit_uv",
}


def samples_by_condition(
    flickering: Mapping[str, Sequence[str]],
    term_samples: Mapping[Term, int],
    rate: Fraction,
    length_s: float,
    rest_length_s: float,
) -> dict[str, int]:
    """Samples of a window in each condition.

    A window of a flicker condition is as long as the longest that a term needs; where nothing
    flickers it has the length set for rest, but never less, so that every term can be measured
    there too.

    Parameters
    ----------
    flickering : mapping
        Tags that flicker, by condition.
    term_samples : mapping of Term to int
        From `tagging.window_samples`.
    rate : Fraction
        Sampling rate in Hz.
    length_s, rest_length_s : float
        As set.
    """
    longest = max(term_samples.values(), default=int(tagging.exact(length_s) * rate))
    rest = max(int(tagging.exact(rest_length_s) * rate), longest)
    return {name: longest if tags else rest for name, tags in flickering.items()}


def verdict_rows(
    verdicts: Sequence[WindowVerdict], unplaced: Sequence[Unplaced], trials: Sequence[Mapping]
) -> Iterator[dict[str, Any]]:
    """Rows of the table of windows, those without samples last."""
    for number, verdict in enumerate(verdicts, start=1):
        window = verdict.window
        yield {
            "window": number,
            "trial": trials[window.trial]["trial"],
            "condition": window.condition,
            "index_in_trial": window.index_in_trial + 1,
            "start_sample": window.start_sample,
            "n_samples": window.n_samples,
            "offset_s": window.offset_s,
            "verdict": verdict.verdict,
            "reason": ", ".join(verdict.reasons) or None,
            **verdict.figures,
            **{column: verdict.limits[name] for name, column in LIMIT_COLUMNS.items()},
        }
    for number, missing in enumerate(unplaced, start=len(verdicts) + 1):
        index = missing.index_in_trial
        yield {
            "window": number,
            "trial": trials[missing.trial]["trial"],
            "condition": missing.condition,
            "index_in_trial": None if index is None else index + 1,
            "verdict": LEFT_OUT,
            "reason": missing.reason,
        }


def noise_beside(
    region_uv: np.ndarray,
    placed: Sequence[Window],
    terms: Sequence[Term],
    samples: Mapping[Term, int],
    rate_hz: float,
    flickering: Mapping[str, Sequence[str]],
) -> np.ndarray:
    """Noise beside the tags in each window, over that of the median window of its condition.

    It rests on the neighbouring bins of the tags' first two harmonics.

    Parameters
    ----------
    region_uv : ndarray, shape (n_times,)
        Mean of the region of the response, cleaned.
    placed : sequence of Window
    terms : sequence of Term
    samples : mapping of Term to int
    rate_hz : float
    flickering : mapping
        Tags that flicker, by condition.

    Returns
    -------
    ndarray, shape (n_windows,)
        NaN where nothing flickers.
    """
    ratios = np.full(len(placed), np.nan)
    for condition, tags in flickering.items():
        chosen = [i for i, window in enumerate(placed) if window.condition == condition]
        driven = [term for term in terms if term.driven_by(tags)]
        judged = [term for term in driven if term.harmonic in JUDGED_HARMONICS]
        if not chosen or not judged:
            continue
        beside_uv = spectra.bin_coefficients(
            region_uv[None],
            np.array([placed[i].start_sample for i in chosen]),
            np.array([placed[i].offset_s for i in chosen]),
            rate_hz,
            np.array([float(term.frequency) for term in judged]),
            np.array([samples[term] for term in judged]),
            np.array(tagging.neighbour_offsets(*JUDGED_BINS)),
            [float(term.frequency) for term in driven],
        )[:, 0]
        noise_uv2 = (np.abs(beside_uv) ** 2).mean(axis=-1)
        ratios[chosen] = (noise_uv2 / np.median(noise_uv2, axis=0)).mean(axis=-1)
    return ratios


def survival_rows(
    signal_uv: np.ndarray,
    names: Sequence[str],
    removal: Callable[[np.ndarray], np.ndarray],
    filter_gains: Mapping[tuple[str, str], float],
    gates: np.ndarray,
    kept: Sequence[Window],
    terms: Sequence[Term],
    samples: Mapping[Term, int],
    rate_hz: float,
    flickering: Mapping[str, Sequence[str]],
    region: Sequence[int],
) -> Iterator[dict[str, Any]]:
    """What the whole cleaning does to each term, by passing its own topography through.

    The topography is that of the interpolated and referenced channels, which these two steps leave
    as it is: a spline through the good channels gives their own values back, and a mean of zero is
    taken out without a trace. What is left to tell is what filters and components do.

    Parameters
    ----------
    signal_uv : ndarray, shape (n_channels, n_times)
        Before the removal of components.
    names : sequence of str
    removal : callable
        From the share of time in which each removed component is taken out to the matrix of it.
    filter_gains : mapping of (str, str) to float
        Gain of the filters by tag and term.
    gates : ndarray, shape (n_removed, n_times)
        Where it is taken out.
    kept : sequence of Window
    terms : sequence of Term
    samples : mapping of Term to int
    rate_hz : float
    flickering : mapping
        Tags that flicker, by condition.
    region : sequence of int
        Channels of the region of the response.
    """
    for term in terms:
        chosen = [window for window in kept if term.driven_by(flickering[window.condition])]
        if not chosen:
            continue
        frequency_hz = float(term.frequency)
        shown = {tag for window in chosen for tag in flickering[window.condition]}
        coefficients = spectra.bin_coefficients(
            signal_uv,
            np.array([window.start_sample for window in chosen]),
            np.array([window.offset_s for window in chosen]),
            rate_hz,
            np.array([frequency_hz]),
            np.array([samples[term]]),
            np.array([0]),
            [float(other.frequency) for other in terms if other.driven_by(shown)],
        )
        topography = coefficients[:, :, 0, 0].mean(axis=0)
        open_share = np.mean(
            [
                gates[:, w.start_sample : w.start_sample + samples[term]].mean(axis=1)
                for w in chosen
            ],
            axis=0,
        )
        filter_gain = filter_gains[term.tag, term.term]
        cleaning = removal(open_share)
        (survival,) = chain_gain(cleaning, np.eye(len(names)), topography)
        region_before, region_after = (
            abs(values[list(region)].mean()) for values in (topography, cleaning @ topography)
        )
        yield {
            "tag": term.tag,
            "term": term.term,
            "frequency_hz": frequency_hz,
            "site": names[survival.peak_channel],
            "filter_gain": filter_gain,
            "gain": filter_gain * survival.gain,
            "peak_gain": filter_gain * survival.peak_gain,
            "topography_correlation": survival.correlation,
            "t2circ_p": _presence(coefficients[:, survival.peak_channel, 0, 0]),
            "region_gain": filter_gain * region_after / region_before if region_before else None,
            "region_t2circ_p": _presence(coefficients[:, list(region), 0, 0].mean(axis=1)),
        }


def _presence(coefficients_uv: np.ndarray) -> float | None:
    """P of T²circ against zero; None for a single window."""
    return float(t2circ(coefficients_uv)[1]) if len(coefficients_uv) > 1 else None


def harmed_tags(rows: Sequence[Mapping[str, Any]]) -> list[str]:
    """Tags of whose response the removal of components changes too much, the worst first.

    Parameters
    ----------
    rows : rows
        From `survival_rows`. Terms without a response do not count: their topography is noise.
    """
    changes = [
        (abs(row[gain] / row["filter_gain"] - 1), row["tag"])
        for row in rows
        for gain, p in (("peak_gain", "t2circ_p"), ("region_gain", "region_t2circ_p"))
        if row[p] is not None and row[p] < PRESENT_P
    ]
    return [tag for change, tag in sorted(changes, reverse=True) if change > MOST_CHANGE]
