"""Windows: where they lie, which are kept, and whether the cleaning let the response through."""

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np

KEPT, LEFT_OUT = "kept", "left out"


@dataclass(frozen=True)
class Window:
    """One window of a trial.

    Attributes
    ----------
    trial : int
        Row of the table of trials, from 0.
    condition : str
        Condition of the trial.
    index_in_trial : int
        Place of the window in its trial, from 0.
    start_sample, n_samples : int
        First sample and length.
    offset_s : float
        Exact time from the onset of the trial to the first sample.
    """

    trial: int
    condition: str
    index_in_trial: int
    start_sample: int
    n_samples: int
    offset_s: float


@dataclass(frozen=True)
class Unplaced:
    """A trial, or a window of it (`index_in_trial`), that has no samples, and why."""

    trial: int
    condition: str
    index_in_trial: int | None
    reason: str


@dataclass(frozen=True)
class WindowLimits:
    """What a window may show at most.

    A condition's own limit is ``median + mad_factor * 1.4826 * MAD`` of the figure over its
    windows, since strong alpha with closed eyes is no artifact. It is held within the absolute
    bounds given here (lowest limit, highest limit). The factor and the bounds are common practice.

    Attributes
    ----------
    mad_factor : float
        Robust standard deviations above the median.
    peak_to_peak_uv : tuple of float
        Bounds of the limit for the largest peak-to-peak amplitude of any channel.
    gradient_uv_per_ms : tuple of float
        Bounds for the steepest step between two samples of any channel.
    muscle_uv : tuple of float
        Bounds for the largest root mean square above `muscle_from_hz` of any channel.
    muscle_from_hz : float
        Where the muscle band begins.
    noise_beside : float
        Most noise beside the tags, over that of the median window of the condition.
    flat_uv : float
        A channel whose peak-to-peak amplitude is smaller is flat.
    """

    # A window that is left out takes a part of the average with it. That pays only where an
    # artifact is larger at what is measured than the brain is: so the bounds are wide, and what
    # lies beside the tags is judged by itself (measured in tests/test_cleaning_truth.py).
    mad_factor: float = 10.0
    peak_to_peak_uv: tuple[float, float] = (300.0, 600.0)
    gradient_uv_per_ms: tuple[float, float] = (50.0, 100.0)
    muscle_uv: tuple[float, float] = (30.0, 60.0)
    noise_beside: float = 8.0
    muscle_from_hz: float = 30.0
    flat_uv: float = 0.5


@dataclass(frozen=True)
class WindowVerdict:
    """Verdict on one window: ``kept`` or ``left out``, its reasons, its figures and their limits.

    `figures` and `limits` have the same keys, the names of `WindowLimits`' limits; `flat_uv` is
    the smallest peak-to-peak amplitude of any channel and is limited from below.
    """

    window: Window
    verdict: str
    reasons: tuple[str, ...]
    figures: dict[str, float]
    limits: dict[str, float]


@dataclass(frozen=True)
class ResponseSurvival:
    """What a cleaning chain did to one topography.

    Attributes
    ----------
    gain : float
        Least-squares factor from the topography before to the one after, over all channels.
    peak_channel : int
        Channel with the largest amplitude before.
    peak_gain : float
        Amplitude after over before at that channel.
    correlation : float
        Cosine between the two complex topographies, -1 to 1.
    """

    gain: float
    peak_channel: int
    peak_gain: float
    correlation: float


def place_windows(
    trials: Iterable[Mapping],
    sfreq_hz: float,
    n_times: int,
    n_samples: Mapping[str, int],
    start_s: float = 0.0,
) -> tuple[list[Window], list[Unplaced]]:
    """Tile each trial with whole windows.

    Parameters
    ----------
    trials : iterable of mapping
        Rows with ``condition``, ``onset_s`` and ``duration_s``.
    sfreq_hz : float
        Sampling rate.
    n_times : int
        Samples in the recording.
    n_samples : mapping of str to int
        Length of a window by condition.
    start_s : float
        Time from the onset of a trial to its first window, which begins at the nearest sample.

    Returns
    -------
    windows : list of Window
        In the order of the trials.
    unplaced : list of Unplaced
        Trials without any whole window, and windows that reach outside the recording.
    """
    windows, unplaced = [], []
    for number, trial in enumerate(trials):
        condition, onset_s = str(trial["condition"]), float(trial["onset_s"])
        if condition not in n_samples:
            reason = "no window length is given for this condition"
            unplaced.append(Unplaced(number, condition, None, reason))
            continue
        length = n_samples[condition]
        first = round((onset_s + start_s) * sfreq_hz)
        stop = round((onset_s + float(trial["duration_s"])) * sfreq_hz)
        n_whole = max((stop - first) // length, 0)
        if n_whole == 0:
            reason = (
                f"{max(stop - first, 0) / sfreq_hz:.3f} s of the trial can be used, "
                f"a window takes {length / sfreq_hz:.3f} s"
            )
            unplaced.append(Unplaced(number, condition, None, reason))
        for index in range(n_whole):
            start = first + index * length
            if start < 0 or start + length > n_times:
                reason = "begins before" if start < 0 else "ends after"
                unplaced.append(Unplaced(number, condition, index, f"{reason} the recording"))
            else:
                offset_s = start / sfreq_hz - onset_s
                windows.append(Window(number, condition, index, start, length, offset_s))
    return windows, unplaced


def judge_windows(
    data_uv: np.ndarray,
    windows: Sequence[Window],
    sfreq_hz: float,
    limits: WindowLimits,
    bad_spans: Iterable[tuple[float, float, str]] = (),
    terms_hz: Sequence[float] = (),
    noise_beside: Sequence[float] | None = None,
) -> list[WindowVerdict]:
    """Judge each window by amplitude, gradient, flatness, muscle, and noise beside the tags.

    Parameters
    ----------
    data_uv : ndarray, shape (n_channels, n_times)
        Cleaned signal, without a channel that is zero by construction (the reference).
    windows : sequence of Window
        From `place_windows`.
    sfreq_hz : float
        Sampling rate.
    limits : WindowLimits
        Absolute bounds and the robust factor.
    bad_spans : iterable of (onset_s, duration_s, description)
        Annotated stretches: a window that one touches is left out.
    terms_hz : sequence of float
        Terms of the flicker and the line: within 1.5 bins of them nothing counts as muscle, so
        that a strong response does not speak against its window.
    noise_beside : sequence of float, optional
        Noise beside the tags in each window, over that of the median window of its condition; NaN
        where nothing flickers.

    Returns
    -------
    list of WindowVerdict
        One for each window, in order.
    """
    if not windows:
        return []
    figures = [_figures(data_uv, window, sfreq_hz, limits, terms_hz) for window in windows]
    used = {
        condition: _limits_of(
            [f for f, w in zip(figures, windows, strict=True) if w.condition == condition], limits
        )
        for condition in {window.condition for window in windows}
    }
    words = {
        "peak_to_peak_uv": "peak to peak",
        "gradient_uv_per_ms": "gradient",
        "muscle_uv": "muscle",
    }
    spans = list(bad_spans)
    verdicts = []
    beside = [math.nan] * len(windows) if noise_beside is None else noise_beside
    for window, figure, noise in zip(windows, figures, beside, strict=True):
        limit = used[window.condition]
        reasons = [word for name, word in words.items() if not figure[name] <= limit[name]]
        if not figure["flat_uv"] >= limits.flat_uv:
            reasons.append("flat")
        figure["noise_beside"] = float(noise)
        limit = limit | {"noise_beside": limits.noise_beside}
        if noise > limits.noise_beside:
            reasons.append("noise beside the tags")
        begin_s = window.start_sample / sfreq_hz
        end_s = (window.start_sample + window.n_samples) / sfreq_hz
        reasons += [
            f"annotated {description}"
            for onset_s, duration_s, description in spans
            if onset_s < end_s and onset_s + duration_s > begin_s
        ]
        verdict = LEFT_OUT if reasons else KEPT
        verdicts.append(WindowVerdict(window, verdict, tuple(reasons), figure, limit))
    return verdicts


def _limits_of(figures: Sequence[Mapping[str, float]], limits: WindowLimits) -> dict[str, float]:
    """Limits from the figures of one condition's windows, within the absolute bounds."""
    used = {"flat_uv": limits.flat_uv}
    for name in ("peak_to_peak_uv", "gradient_uv_per_ms", "muscle_uv"):
        values = np.array([figure[name] for figure in figures])
        median = np.median(values)
        deviation = 1.4826 * np.median(np.abs(values - median))
        used[name] = float(np.clip(median + limits.mad_factor * deviation, *getattr(limits, name)))
    return used


def _figures(
    data_uv: np.ndarray,
    window: Window,
    sfreq_hz: float,
    limits: WindowLimits,
    terms_hz: Sequence[float],
) -> dict[str, float]:
    segment = data_uv[:, window.start_sample : window.start_sample + window.n_samples]
    spans_uv = np.ptp(segment, axis=1)
    steps_uv = np.abs(np.diff(segment, axis=1))
    # Hann taper, periodic; 8/3 gives back the power that it takes.
    taper = 0.5 - 0.5 * np.cos(2 * np.pi * np.arange(window.n_samples) / window.n_samples)
    spectrum = np.fft.rfft((segment - segment.mean(axis=1, keepdims=True)) * taper, axis=1)
    power_uv2 = 2 * np.abs(spectrum / window.n_samples) ** 2 * (8 / 3)
    frequencies_hz = np.fft.rfftfreq(window.n_samples, 1 / sfreq_hz)
    muscle = frequencies_hz >= limits.muscle_from_hz
    for term_hz in terms_hz:
        muscle &= np.abs(frequencies_hz - term_hz) > 1.5 * sfreq_hz / window.n_samples
    return {
        "peak_to_peak_uv": float(spans_uv.max()),
        "gradient_uv_per_ms": float(steps_uv.max() * sfreq_hz / 1000),
        "muscle_uv": float(np.sqrt(power_uv2[:, muscle].sum(axis=1).max())),
        "flat_uv": float(spans_uv.min()),
    }


def chain_gain(
    cleaning: np.ndarray, baseline: np.ndarray, topographies: np.ndarray
) -> list[ResponseSurvival]:
    """Pass topographies through a cleaning chain and compare what comes out.

    Parameters
    ----------
    cleaning : ndarray, shape (n_after, n_before)
        The whole chain.
    baseline : ndarray, shape (n_after, n_before)
        The chain to compare with: the same reference, without what is to be judged.
    topographies : ndarray, shape (n_topographies, n_before)
        Complex coefficients of each tag and term by channel, µV, before both chains.

    Returns
    -------
    list of ResponseSurvival
        One for each topography. A topography that is zero everywhere gives NaN.
    """
    survivals = []
    for topography in np.atleast_2d(topographies):
        before, after = baseline @ topography, cleaning @ topography
        product = np.vdot(before, after).real
        size_before, size_after = np.linalg.norm(before), np.linalg.norm(after)
        peak = int(np.argmax(np.abs(before)))
        silent, gone = size_before == 0, size_after == 0
        survivals.append(
            ResponseSurvival(
                gain=float("nan") if silent else float(product / size_before**2),
                peak_channel=peak,
                peak_gain=float("nan") if silent else float(abs(after[peak]) / abs(before[peak])),
                correlation=(
                    float("nan") if silent or gone else float(product / (size_before * size_after))
                ),
            )
        )
    return survivals
