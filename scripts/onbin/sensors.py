"""Sensors: which channels can be trusted and why, interpolation and reference."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from onbin.errors import DataError
from onbin.filtering import apply_fir, design_lowpass

GOOD, BAD = "good", "bad"

# Figures that compare a channel with the others need this many of them.
FEWEST_TO_COMPARE = 8
FEWEST_TO_PREDICT = 16
SLOW_BAND_HZ = 30.0


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
        Largest share of samples in stretches of 50 ms and more that stand still elsewhere.
    pops_per_min : float
        Most jumps a minute that no other channel shares.
    pop_uv : float
        Smallest step that is a jump.
    deviation_z : float
        Robust z of the logarithm of the amplitude across channels, either way.
    deviation_ratio : float
        What counts as deviating is at least this many times larger or smaller than the median.
    noise_z, noise_ratio : float
        The same for the ratio of power density above 30 Hz to that below, upwards only.
    noise_floor : float
        A ratio below this is never noise, whatever the other channels show.
    noise_ceiling : float
        With few channels, a ratio above this is noise: as good as white.
    correlation : float
        In a window of 1 s a channel should reach this with at least one other channel.
    uncorrelated_share : float
        Largest share of windows in which it does not.
    prediction : float
        Correlation with its prediction from other channels, in windows of 4 s.
    unpredicted_share : float
        Largest share of windows in which it is not reached.
    """

    flat_uv: float = 0.5
    saturated_share: float = 0.005
    dropout_share: float = 0.01
    pops_per_min: float = 2.0
    pop_uv: float = 75.0
    deviation_z: float = 5.0
    deviation_ratio: float = 3.0
    noise_z: float = 5.0
    noise_ratio: float = 4.0
    noise_floor: float = 0.05
    noise_ceiling: float = 0.5
    correlation: float = 0.4
    uncorrelated_share: float = 0.2
    prediction: float = 0.6
    unpredicted_share: float = 0.4


@dataclass(frozen=True)
class ChannelVerdict:
    """Verdict on one channel, ``good`` or ``bad``, its reasons, its figures and their limits.

    `figures` and `limits` have the same keys. A figure that could not be had (too few channels,
    no position) is None.
    """

    channel: str
    verdict: str
    reasons: tuple[str, ...]
    figures: dict[str, float | None]
    limits: dict[str, float]


@dataclass(frozen=True)
class Referenced:
    """An interpolated and referenced recording, and what became of its bad channels."""

    raw: object
    interpolated: tuple[str, ...]
    left_out: dict[str, str]


def judge_channels(
    data_uv: np.ndarray,
    names: Sequence[str],
    sfreq_hz: float,
    positions_m: np.ndarray,
    limits: SensorLimits,
    seed: int,
    recorded_uv: np.ndarray | None = None,
) -> list[ChannelVerdict]:
    pass


def _robust_amplitude(data_uv):
    low, high = np.percentile(data_uv, [25, 75], axis=1)
    return (high - low) / 1.349


def _robust_z(values, trusted):
    centre = np.median(values[trusted])
    deviation = 1.4826 * np.median(np.abs(values[trusted] - centre))
    return (values - centre) / max(deviation, 1e-12)


def _slow(data_uv: np.ndarray, sfreq_hz: float) -> tuple[np.ndarray, float]:
    """Low-pass at 30 Hz, at a rate just enough for it."""
    taps = design_lowpass(sfreq_hz, min(SLOW_BAND_HZ, 0.4 * sfreq_hz)).taps
    step = max(int(sfreq_hz // 80), 1)
    return np.stack([apply_fir(row, taps)[::step] for row in data_uv]), sfreq_hz / step


def _noise_ratio(data_uv: np.ndarray, sfreq_hz: float) -> np.ndarray:
    from scipy.signal import welch

    n_window = min(round(2 * sfreq_hz), data_uv.shape[1])
    ratios = []
    for row in data_uv:
        frequencies_hz, density = welch(row, sfreq_hz, nperseg=n_window, average="median")
        slow = (frequencies_hz >= 1) & (frequencies_hz <= 30)
        fast = (frequencies_hz > 30) & (frequencies_hz <= min(45, 0.45 * sfreq_hz))
        ratios.append(np.median(density[fast]) / max(np.median(density[slow]), 1e-30))
    return np.array(ratios)


def _max_correlation(slow_uv, rate_hz, others):
    n = round(rate_hz)
    k = slow_uv.shape[1] // n
    out = np.empty((slow_uv.shape[0], k))
    for w in range(k):
        x = slow_uv[:, w * n : (w + 1) * n]
        x = x - x.mean(axis=1, keepdims=True)
        x = x / np.maximum(np.linalg.norm(x, axis=1, keepdims=True), 1e-12)
        c = np.abs(x @ x[others].T)
        c[others, np.arange(len(others))] = 0
        out[:, w] = c.max(axis=1)
    return out


def spline_weights(from_m, to_m):
    """Perrin"""
    unit_from = from_m / np.linalg.norm(from_m, axis=1, keepdims=True)
    unit_to = to_m / np.linalg.norm(to_m, axis=1, keepdims=True)

    def g(cosine):
        n = np.arange(1, 51)
        factors = np.r_[0, (2 * n + 1) / (n * (n + 1.0)) ** 4 / (4 * np.pi)]
        return np.polynomial.legendre.legval(cosine, factors)

    n = len(from_m)
    system = np.ones((n + 1, n + 1))
    system[:n, :n] = g(unit_from @ unit_from.T) + 1e-5 * np.eye(n)
    system[n, n] = 0
    inverse = np.linalg.pinv(system)[:, :n]
    return np.hstack([g(unit_to @ unit_from.T), np.ones((len(to_m), 1))]) @ inverse


def _prediction(slow_uv, rate_hz, positions_m, others, rng, share=0.25, n_draws=50):
    n = round(4 * rate_hz)
    k = slow_uv.shape[1] // n
    n_ch = len(slow_uv)
    size = max(round(share * len(others)), 8)
    weights = np.full((n_draws, n_ch, n_ch), 0.0)
    used = np.zeros((n_draws, n_ch), bool)
    for d in range(n_draws):
        chosen = rng.choice(others, size, replace=False)
        weights[d][:, chosen] = spline_weights(positions_m[chosen], positions_m)
        used[d, chosen] = True
    out = np.empty((n_ch, k))
    for w in range(k):
        x = slow_uv[:, w * n : (w + 1) * n]
        p = weights @ x
        p[used] = np.nan
        p = np.nanmedian(p, axis=0)
        out[:, w] = [np.corrcoef(a, b)[0, 1] for a, b in zip(x, p)]
    return out
