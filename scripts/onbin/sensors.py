"""Sensors: which channels can be trusted and why, interpolation and reference."""

from collections.abc import Collection, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from onbin.errors import DataError
from onbin.filtering import apply_fir, design_lowpass

GOOD, BAD = "good", "bad"
IN_THE_DATASET = "bad in the dataset"
# The figure that speaks for each reason.
FIGURE_OF = {
    "flat": "flat_uv",
    "saturated": "saturated_share",
    "drop-outs": "dropout_share",
    "jumps": "pops_per_min",
    "high-frequency noise": "noise_ratio",
    "deviating amplitude": "deviation_ratio",
    "uncorrelated": "uncorrelated_share",
    "unpredicted": "unpredicted_share",
}

# A robust z across channels, a common median and correlations need this many channels; below it
# only ratios to the median channel are judged, with limits so much wider, and from 3 channels on.
FEWEST_TO_COMPARE, FEW_CHANNELS_FACTOR, FEWEST_FOR_MEDIAN = 8, 1.5, 3
N_NEAREST = 5
# Prediction from others: channels that it needs, random draws, and the share of channels in each.
FEWEST_TO_PREDICT, N_DRAWS, DRAWN_SHARE, FEWEST_DRAWN = 12, 50, 0.25, 8
# Correlations are taken from at most so many windows, spread evenly: bounded time and memory.
MOST_WINDOWS = 600
SLOW_BAND_HZ, NOISE_BAND_HZ = (1.0, 30.0), (30.0, 45.0)


@dataclass(frozen=True)
class SensorLimits:
    """When a channel is bad. A share is a part of the recording's time, from 0 to 1.

    Attributes
    ----------
    flat_uv : float
        Robust amplitude (interquartile range / 1.349) below which a channel is flat.
    saturated_share : float
        Largest share of samples that stand still at the channel's extreme.
    dropout_share : float
        Largest share of samples that stand still elsewhere, for 50 ms or longer.
    pops_per_min : float
        Most lasting jumps a minute that hardly another channel shares.
    pop_uv : float
        Smallest step that is a jump.
    deviation_z, deviation_ratio : float
        Deviating means both: this far from the others in robust z of log amplitude, and so many
        times larger or smaller than the median channel.
    noise_z, noise_ratio, noise_whiteness : float
        High-frequency noise means all three: robust z of log amplitude within 30-45 Hz, its ratio
        to the median channel, and median power density of 30-45 Hz over that of 1-30 Hz.
    correlation, uncorrelated_share : float
        Correlation with the channel's best partner, in windows of 1 s, and the largest share of
        windows that may stay below it.
    prediction, unpredicted_share : float
        The same for the correlation with the channel's prediction from others, windows of 4 s.
    """

    flat_uv: float = 0.5
    saturated_share: float = 0.005
    dropout_share: float = 0.01
    pops_per_min: float = 2.0
    pop_uv: float = 75.0
    deviation_z: float = 5.0
    deviation_ratio: float = 3.0
    noise_z: float = 5.0
    noise_ratio: float = 6.0
    noise_whiteness: float = 0.4
    correlation: float = 0.3
    uncorrelated_share: float = 0.5
    prediction: float = 0.4
    unpredicted_share: float = 0.6


@dataclass(frozen=True)
class ChannelVerdict:
    """Verdict on one channel, ``good`` or ``bad``, its reasons, its figures and their limits.

    `figures` and `limits` have the same keys, fields of `SensorLimits`. A figure that could not be
    had (too few channels, no position) is None.
    """

    channel: str
    verdict: str
    reasons: tuple[str, ...]
    figures: dict[str, float | None]
    limits: dict[str, float]


@dataclass(frozen=True)
class Referenced:
    """The interpolated and referenced recording, and what became of its bad channels.

    `rank` counts what is left to unmix: each interpolated channel and a reference take one away.
    """

    raw: "mne.io.BaseRaw"  # noqa: F821
    interpolated: tuple[str, ...]
    left_out: dict[str, str]
    rank: int


def judge_channels(
    data_uv: np.ndarray,
    names: Sequence[str],
    sfreq_hz: float,
    positions_m: np.ndarray,
    limits: SensorLimits,
    seed: int,
    recorded_uv: np.ndarray | None = None,
) -> list[ChannelVerdict]:
    """Judge each channel by itself, then against the channels that are trusted so far.

    Parameters
    ----------
    data_uv : ndarray, shape (n_channels, n_times)
        High-passed signal.
    names : sequence of str
        Channels.
    sfreq_hz : float
        Sampling rate.
    positions_m : ndarray, shape (n_channels, 3)
        Positions, NaN where there is none.
    limits : SensorLimits
        When a channel is bad.
    seed : int
        Of the random draws of channels that predict the others.
    recorded_uv : ndarray, shape (n_channels, n_times), optional
        The signal before the high-pass, for standing still, extremes and jumps: a filter bends
        them. `data_uv` when left out.

    Returns
    -------
    list of ChannelVerdict
        One for each channel, in order.

    Notes
    -----
    The criteria are those of Bigdely-Shamlo et al. 2015 in kind (from memory), with medians over
    time throughout, so that blinks and bursts of muscle or alpha do not count against a channel.
    """
    if recorded_uv is None:
        recorded_uv = data_uv
    figures: dict[str, np.ndarray] = {}
    reasons: dict[str, np.ndarray] = {}

    def trusted() -> np.ndarray:
        return np.flatnonzero(~np.any(list(reasons.values()), axis=0))

    figures["flat_uv"] = _robust_amplitude(data_uv)
    figures["saturated_share"], figures["dropout_share"] = _still_shares(recorded_uv, sfreq_hz)
    figures["pops_per_min"] = _pops_per_min(recorded_uv, sfreq_hz, limits.pop_uv)
    flat = figures["flat_uv"] < limits.flat_uv
    reasons["flat"] = flat
    reasons["saturated"] = figures["saturated_share"] > limits.saturated_share
    reasons["drop-outs"] = figures["dropout_share"] > limits.dropout_share
    reasons["jumps"] = figures["pops_per_min"] > limits.pops_per_min

    many = trusted().size >= FEWEST_TO_COMPARE
    widened = 1.0 if many else FEW_CHANNELS_FACTOR
    # The median channel is a common reference that no single channel can spoil.
    common_uv = _median_channel(data_uv, trusted()) if many else np.zeros(data_uv.shape[1])
    if trusted().size >= FEWEST_FOR_MEDIAN:
        slow_level, noise_level = _levels(data_uv, common_uv, sfreq_hz)
        deviation_z, ratio = _against_others(slow_level, trusted(), positions_m)
        noise_z, noise_ratio = _against_others(noise_level, trusted(), positions_m)
        figures["deviation_ratio"], figures["noise_ratio"] = (
            np.maximum(ratio, 1 / ratio),
            noise_ratio,
        )
        figures["noise_whiteness"] = (noise_level / np.maximum(slow_level, 1e-12)) ** 2
        deviating = figures["deviation_ratio"] > limits.deviation_ratio * widened
        noisy = noise_ratio > limits.noise_ratio * widened
        noisy &= figures["noise_whiteness"] > limits.noise_whiteness
        if many:
            figures["deviation_z"], figures["noise_z"] = deviation_z, noise_z
            deviating &= np.abs(deviation_z) > limits.deviation_z
            noisy &= noise_z > limits.noise_z
        reasons["high-frequency noise"] = noisy
        reasons["deviating amplitude"] = deviating & ~noisy
    if trusted().size >= FEWEST_TO_COMPARE:
        slow_uv, rate_hz = _slow_signal(data_uv, common_uv, sfreq_hz)
        apart = _partner_correlation(slow_uv, rate_hz, trusted()) < limits.correlation
        figures["uncorrelated_share"] = _share_of_telling(apart, trusted())
        reasons["uncorrelated"] = figures["uncorrelated_share"] > limits.uncorrelated_share
        placed = np.isfinite(positions_m).all(axis=1)
        predictors = trusted()[placed[trusted()]]
        if predictors.size >= FEWEST_TO_PREDICT:
            share = np.full(len(names), np.nan)
            correlations = _prediction_correlation(
                slow_uv, rate_hz, positions_m, placed, predictors, seed
            )
            apart = np.zeros((len(correlations), len(names)), dtype=bool)
            apart[:, placed] = correlations < limits.prediction
            share[placed] = _share_of_telling(apart, predictors)[placed]
            figures["unpredicted_share"] = share
            reasons["unpredicted"] = share > limits.unpredicted_share

    limited = {
        name: getattr(limits, name) * (widened if name.endswith("_ratio") else 1.0)
        for name in SensorLimits.__dataclass_fields__
        if name not in ("pop_uv", "correlation", "prediction")
    }
    not_had = np.full(len(names), np.nan)
    verdicts = []
    for index, name in enumerate(names):
        values = {key: float(figures.get(key, not_had)[index]) for key in limited}
        # A flat channel is that and nothing else.
        why = [reason for reason, holds in reasons.items() if holds[index]]
        why = ["flat"] if flat[index] else why
        verdicts.append(
            ChannelVerdict(
                channel=name,
                verdict=BAD if why else GOOD,
                reasons=tuple(why),
                figures={
                    key: value if np.isfinite(value) else None for key, value in values.items()
                },
                limits=limited,
            )
        )
    return verdicts


def verdict_row(
    verdict: ChannelVerdict, marked: Collection[str], decided: Mapping[str, str] | None
) -> dict[str, Any]:
    """Row of the table of channels.

    Parameters
    ----------
    verdict : ChannelVerdict
        Of the tool.
    marked : collection of str
        Channels that the dataset calls bad: they are, whatever the tool finds.
    decided : mapping or None
        A person's decision, which goes before both; see `decisions.about`.
    """
    is_marked = verdict.channel in marked
    reasons = [IN_THE_DATASET] * is_marked + [_told(verdict, reason) for reason in verdict.reasons]
    word = BAD if reasons else GOOD
    if decided:
        word = decided["verdict"]
        reasons.insert(0, decided["told"])
    return {
        "name": verdict.channel,
        "verdict": word,
        "reason": "; ".join(reasons) or None,
        "status": BAD if is_marked else GOOD,
        **verdict.figures,
    }


def _told(verdict: ChannelVerdict, reason: str) -> str:
    """Reason with its figure and limit."""
    name = FIGURE_OF[reason]
    figure, limit = verdict.figures[name], verdict.limits[name]
    bound = "at least" if name == "flat_uv" else "at most"
    return f"{reason}, {figure:.3g} ({bound} {limit:g})"


def _share_of_telling(apart: np.ndarray, trusted: np.ndarray) -> np.ndarray:
    """Share of windows in which each channel is apart from the others, shape (n_channels,).

    A window in which most channels are is one of movement: it tells nothing of any channel.
    """
    telling = apart[:, trusted].mean(axis=1) <= 0.5
    return apart[telling].mean(axis=0) if telling.any() else np.zeros(apart.shape[1])


def _robust_amplitude(data_uv: np.ndarray) -> np.ndarray:
    return np.array([np.subtract(*np.percentile(row, [75, 25])) / 1.349 for row in data_uv])


def _against_others(
    amplitude_uv: np.ndarray, trusted: np.ndarray, positions_m: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Robust z of the log amplitude, and ratio, against the nearest trusted channels.

    Neighbours share alpha, blinks and the nearness of the reference, so that what is left is the
    channel's own. A channel without a position is held against all trusted ones.
    """
    logs = np.log(np.maximum(amplitude_uv, 1e-12))
    away = np.empty(logs.size)
    for channel in range(logs.size):
        others = trusted[trusted != channel]
        distance_m = np.linalg.norm(positions_m[others] - positions_m[channel], axis=1)
        nearest = others[np.argsort(distance_m, kind="stable")[:N_NEAREST]]
        is_placed = np.isfinite(distance_m).sum() >= N_NEAREST
        away[channel] = logs[channel] - np.median(logs[nearest if is_placed else others])
    deviation = 1.4826 * np.median(np.abs(away[trusted]))
    return away / max(deviation, 1e-12), np.exp(away)


def _runs(mask: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """First samples and lengths of the stretches where `mask` holds."""
    edges = np.diff(np.concatenate([[0], mask.astype(np.int8), [0]]))
    starts = np.flatnonzero(edges == 1)
    return starts, np.flatnonzero(edges == -1) - starts


def _still_shares(data_uv: np.ndarray, sfreq_hz: float) -> tuple[np.ndarray, np.ndarray]:
    """Shares of samples that stand still: at the channel's extreme, and elsewhere.

    A stretch in which most channels stand still is a gap in the recording, no channel's fault.
    """
    typical_uv = np.median([np.median(np.abs(np.diff(row))) for row in data_uv])
    still = np.array([np.abs(np.diff(row)) <= 0.02 * typical_uv for row in data_uv])
    still &= still.sum(axis=0) <= max(len(data_uv) / 2, 1)
    shares = np.zeros((2, len(data_uv)))
    for channel, row in enumerate(data_uv):
        starts, lengths = _runs(still[channel])
        low, high = row.min(), row.max()
        margin = 0.01 * (high - low)
        extreme = (row[starts] <= low + margin) | (row[starts] >= high - margin)
        shares[0, channel] = lengths[extreme & (lengths >= 2)].sum()
        shares[1, channel] = lengths[~extreme & (lengths >= 0.05 * sfreq_hz)].sum()
    return tuple(shares / data_uv.shape[1])


def _pops_per_min(data_uv: np.ndarray, sfreq_hz: float, pop_uv: float) -> np.ndarray:
    """Rate of jumps within 20 ms that last 100 ms and that hardly another channel shares.

    A channel shares a jump that is half as large in it: gaze and a loose reference are no
    channel's fault.
    """
    lag, around = max(round(0.02 * sfreq_hz), 1), max(round(0.1 * sfreq_hz), 1)
    fewest_sharing = 2 if len(data_uv) >= FEWEST_TO_COMPARE else 1
    pops = np.zeros(len(data_uv))
    for channel, row in enumerate(data_uv):
        steps_uv = np.abs(row[lag:] - row[:-lag])
        limit_uv = max(pop_uv, 10 * np.median(steps_uv) / 0.6745)
        candidates = np.flatnonzero(steps_uv > limit_uv)
        groups = np.split(candidates, np.flatnonzero(np.diff(candidates) > around) + 1)
        for group in groups if candidates.size else []:
            first, last = group[0], group[-1] + lag
            before = np.median(data_uv[:, max(first - around, 0) : first + 1], axis=1)
            after = np.median(data_uv[:, last : last + around], axis=1)
            shifts_uv = np.abs(after - before)
            sharing = np.sum(shifts_uv > pop_uv / 2) - 1
            pops[channel] += shifts_uv[channel] > pop_uv and sharing < fewest_sharing
    return pops / (data_uv.shape[1] / sfreq_hz / 60)


def _median_channel(data_uv: np.ndarray, channels: np.ndarray) -> np.ndarray:
    """Median over channels, sample by sample, in blocks."""
    blocks = range(0, data_uv.shape[1], 100_000)
    return np.concatenate(
        [np.median(data_uv[channels, start : start + 100_000], axis=0) for start in blocks]
    )


def _slow_signal(
    data_uv: np.ndarray, common_uv: np.ndarray, sfreq_hz: float
) -> tuple[np.ndarray, float]:
    """The signal low-passed at the end of the slow band, at a rate just enough, and that rate."""
    taps = design_lowpass(sfreq_hz, min(SLOW_BAND_HZ[1], 0.4 * sfreq_hz)).taps
    step = max(int(sfreq_hz // 80), 1)
    slow_uv = np.stack([apply_fir(row - common_uv, taps)[::step] for row in data_uv])
    return slow_uv, sfreq_hz / step


def _levels(
    data_uv: np.ndarray, common_uv: np.ndarray, sfreq_hz: float
) -> tuple[np.ndarray, np.ndarray]:
    """Typical amplitude density in the slow and in the noise band, µV/√Hz.

    Medians over time and over the band's bins: neither a burst nor a blink, neither alpha nor a
    tag or the line decides.
    """
    from scipy.signal import welch

    n_window = min(round(2 * sfreq_hz), data_uv.shape[1])
    levels = np.zeros((2, len(data_uv)))
    for channel, row in enumerate(data_uv):
        frequency_hz, density = welch(row - common_uv, sfreq_hz, nperseg=n_window, average="median")
        for level, (low_hz, high_hz) in zip(levels, (SLOW_BAND_HZ, NOISE_BAND_HZ), strict=True):
            band = (frequency_hz >= low_hz) & (frequency_hz <= high_hz)
            level[channel] = np.sqrt(np.median(density[band])) if band.any() else 0.0
    return levels[0], levels[1]


def _windows(signal: np.ndarray, n_window: int, most: int) -> Iterator[np.ndarray]:
    n_whole = signal.shape[1] // n_window
    for index in np.unique(np.linspace(0, n_whole - 1, min(n_whole, most)).astype(int)):
        yield signal[:, index * n_window : (index + 1) * n_window]


def _partner_correlation(slow_uv: np.ndarray, rate_hz: float, trusted: np.ndarray) -> np.ndarray:
    """Correlation with the best partner, counted in its usual sign, shape (n_windows, n_channels).

    The partner is the trusted channel whose median correlation is largest: the largest correlation
    within each window would be large by chance among many channels.
    """
    correlations = []
    for window in _windows(slow_uv, round(rate_hz), MOST_WINDOWS):
        centred = window - window.mean(axis=1, keepdims=True)
        centred /= np.maximum(np.linalg.norm(centred, axis=1, keepdims=True), 1e-12)
        correlations.append(centred @ centred[trusted].T)
    correlations = np.array(correlations)
    typical = np.median(correlations, axis=0)
    typical[trusted, np.arange(trusted.size)] = 0  # not with itself
    partner = np.abs(typical).argmax(axis=1)
    every = np.arange(len(slow_uv))
    return correlations[:, every, partner] * np.sign(typical[every, partner])


def _prediction_correlation(
    slow_uv: np.ndarray,
    rate_hz: float,
    positions_m: np.ndarray,
    placed: np.ndarray,
    predictors: np.ndarray,
    seed: int,
) -> np.ndarray:
    """Correlation of the placed channels with the median of their predictions by random draws.

    Shape (n_windows, n_placed).
    """
    rng = np.random.default_rng(seed)
    n_drawn = max(round(DRAWN_SHARE * predictors.size), FEWEST_DRAWN)
    centred_m = positions_m - sphere_centre(positions_m[placed])
    draws, weights = [], []
    for _ in range(N_DRAWS):
        drawn = np.sort(rng.choice(predictors, n_drawn, replace=False))
        draws.append(drawn)
        weights.append(spline_weights(centred_m[drawn], centred_m[placed]))
    # Which draws a channel may be predicted from: those without itself.
    allowed = [
        [draw for draw, drawn in enumerate(draws) if channel not in drawn]
        for channel in np.flatnonzero(placed)
    ]
    correlations = []
    for window in _windows(slow_uv, round(4 * rate_hz), MOST_WINDOWS // 4):
        predicted = np.array(
            [weight @ window[drawn] for weight, drawn in zip(weights, draws, strict=True)]
        )
        row = []
        for channel, signal in enumerate(window[placed]):
            middle = np.median(predicted[allowed[channel], channel], axis=0)
            product = np.mean((signal - signal.mean()) * (middle - middle.mean()))
            row.append(product / max(np.std(signal) * np.std(middle), 1e-12))
        correlations.append(row)
    return np.array(correlations)


def sphere_centre(positions_m: np.ndarray) -> np.ndarray:
    """Centre of the sphere that fits the positions by least squares, shape (3,).

    Where they do not fix a head-sized sphere it is 4 cm above the ears, (0, 0, 0.04) in head
    coordinates (common practice).
    """
    usual_m = np.array([0.0, 0.0, 0.04])
    if len(positions_m) < FEWEST_TO_COMPARE:
        return usual_m
    system = np.column_stack([2 * positions_m, np.ones(len(positions_m))])
    solution, _, rank, _ = np.linalg.lstsq(system, (positions_m**2).sum(axis=1), rcond=None)
    radius_m = np.sqrt(max(solution[3] + solution[:3] @ solution[:3], 0.0))
    return solution[:3] if rank == 4 and 0.05 < radius_m < 0.15 else usual_m


def spline_weights(from_m: np.ndarray, to_m: np.ndarray) -> np.ndarray:
    """Weights that predict potentials at `to_m` from those at `from_m` by spherical splines.

    Splines of order 4 with a constant (Perrin et al. 1989).

    Parameters
    ----------
    from_m, to_m : ndarray, shape (n_from, 3) and (n_to, 3)
        Positions, seen from the centre of the sphere.

    Returns
    -------
    ndarray, shape (n_to, n_from)
    """
    degree = np.arange(1, 51)
    series = np.r_[0.0, (2 * degree + 1) / (degree * (degree + 1.0)) ** 4 / (4 * np.pi)]
    from_unit, to_unit = (
        positions_m / np.linalg.norm(positions_m, axis=1, keepdims=True)
        for positions_m in (from_m, to_m)
    )
    n_from = len(from_m)
    system = np.ones((n_from + 1, n_from + 1))
    system[:-1, :-1] = np.polynomial.legendre.legval(from_unit @ from_unit.T, series)
    system[np.arange(n_from), np.arange(n_from)] += 1e-5
    system[-1, -1] = 0.0
    at_target = np.polynomial.legendre.legval(to_unit @ from_unit.T, series)
    return np.hstack([at_target, np.ones((len(to_m), 1))]) @ np.linalg.pinv(system)[:, :-1]


def interpolate_and_reference(
    raw, bad: Sequence[str], reference: str | Sequence[str] | None
) -> Referenced:
    """Interpolate the bad channels by spherical splines, then reference.

    Parameters
    ----------
    raw : mne.io.Raw
        It is changed, since a copy of a long one may not fit. Channels that are not EEG are left
        as they are.
    bad : sequence of str
        Channels to interpolate. One without a position is left out instead.
    reference : "average", sequence of str or None
        Average of all channels, mean of the named channels, or as recorded.

    Returns
    -------
    Referenced

    Raises
    ------
    DataError
        When no channel is left to interpolate from, or the reference cannot be used.
    """
    kinds = raw.get_channel_types()
    locations_m = {
        channel["ch_name"]: channel["loc"][:3]
        for channel, kind in zip(raw.info["chs"], kinds, strict=True)
        if kind == "eeg"
    }
    placed = {
        name: location_m
        for name, location_m in locations_m.items()
        if np.isfinite(location_m).all() and location_m.any()
    }
    bad = [name for name in locations_m if name in set(bad)]
    interpolated = tuple(name for name in bad if name in placed)
    left_out = {name: "bad, and without a position" for name in bad if name not in placed}
    n_sources = len(set(placed) - set(bad))
    if len(bad) == len(locations_m) or (interpolated and n_sources < FEWEST_FOR_MEDIAN):
        raise DataError(
            f"{len(bad)} of {len(locations_m)} channels are bad ({', '.join(bad)}), and "
            f"{n_sources} good ones with positions are left to interpolate from; at least "
            f"{FEWEST_FOR_MEDIAN} are needed: look at the limits for channels, or leave the "
            "recording out."
        )
    if reference == "average" and len(locations_m) - len(left_out) == 1:
        (alone,) = locations_m.keys() - left_out.keys()
        raise DataError(
            f"sensors.reference: against the average of one channel, {alone} alone, nothing is "
            "left. Set it to as_recorded."
        )
    raw.drop_channels(list(left_out))
    raw.info["bads"] = list(interpolated)
    if interpolated:
        origin_m = tuple(sphere_centre(np.array(list(placed.values()))))
        raw.interpolate_bads(origin=origin_m, method={"eeg": "spline"}, verbose="error")
    if reference is not None and reference != "average":
        reference = list(reference)
        good = [name for name in locations_m if name not in bad]
        unusable = [name for name in reference if name not in good]
        if unusable:
            raise DataError(
                f"The reference {', '.join(unusable)} is not among the good channels "
                f"({', '.join(good)}): choose another reference, or leave the recording out."
            )
    if reference is not None:
        raw.set_eeg_reference(reference, verbose="error")
    rank = len(locations_m) - len(bad) - (reference is not None)
    return Referenced(raw, interpolated, left_out, rank)
