"""Where a flicker is, from the EEG alone: true frequency, drift, lost frames.

A response lost to a wrong nominal frequency is the worst silent error of frequency tagging. The
estimate is that of maximum likelihood for a sinusoid in white noise whose amplitude and phase are
unknown in each stretch: the frequency of the largest summed power. Units: µV, Hz, s.
"""

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from onbin.distributions import chi2_survival, f_survival
from onbin.spectra import project

AS_SET, OFFSET, CANNOT_TELL = "as set", "offset", "cannot tell"

SEARCH_SHARE = 0.02  # how far from the nominal frequency is looked, as a share of it
OVERSAMPLING = 8  # candidates for each 1/T
MAXIMA_PER_CELL = 2  # independent chances for noise to peak within 1/T, about
NEIGHBOURS = 10  # bins on each side of the searched range that the noise is taken from
RHYTHM_HZ = 0.3  # a rhythm of the brain is at least this wide to each side, a flicker is not
FEWEST_NEAR = 2  # bins on each side of the response that tell it from a rhythm, at least
PRESENCE_LEVEL = 0.01  # chance that noise alone passes for a response somewhere in the range
OFFSET_LEVEL = 0.01  # chance that noise elsewhere than at the response leads the estimate away
INTERVAL_SD = 2.575829  # 99 % interval of a normal estimate
STEP_LEVEL = 0.001  # chance that a lost frame is found in a recording without any
FEWEST_PIECES = 4  # pieces of a stretch that a step or a drift can be seen in
PIECE_CYCLES = 8  # cycles in a piece, at least


@dataclass(frozen=True)
class Stretches:
    """Continuous pieces of one signal during which the flicker went on.

    Attributes
    ----------
    signals_uv : tuple of ndarray, shape (n_samples,)
    starts_s : tuple of float
        Where each begins in the recording.
    rate_hz : float
    """

    signals_uv: tuple[np.ndarray, ...]
    starts_s: tuple[float, ...]
    rate_hz: float

    @property
    def longest_s(self) -> float:
        """Length of the longest stretch, which bounds the resolution."""
        return max(signal.size for signal in self.signals_uv) / self.rate_hz


@dataclass(frozen=True)
class Location:
    """Where a tag's response was found.

    Attributes
    ----------
    verdict : str
        ``as set``, ``offset`` or ``cannot tell``.
    frequency_hz, low_hz, high_hz : float
        Estimate and its 99 % interval; NaN where it cannot be told.
    snr_db : float
        Power of the response over that of noise in the bin of one stretch, mean over stretches.
    presence_p : float
        Chance of so much power somewhere in the searched range without a response.
    drift_hz_per_min, drift_low, drift_high : float
        Change of the frequency over the recording and its 99 % interval.
    steps : tuple of (float, float)
        Jumps of the phase: time in the recording in s, and size in rad.
    """

    verdict: str
    frequency_hz: float
    low_hz: float
    high_hz: float
    snr_db: float
    presence_p: float
    drift_hz_per_min: float
    drift_low: float
    drift_high: float
    steps: tuple[tuple[float, float], ...]


def amplitude_loss_db(offset_bins: float) -> float:
    """Amplitude that a coefficient loses when its frequency is off by so many bins, in dB.

    20·log10|sin(πd)/(πd)| for a window without taper; −∞ a whole number of bins off.

    Examples
    --------
    >>> round(amplitude_loss_db(0.15), 3)
    -0.324
    """
    with np.errstate(divide="ignore"):
        return float(20 * np.log10(abs(np.sinc(offset_bins))))


def cramer_rao_sd_hz(
    amplitude_uv: float, noise_sd_uv: float, lengths: Sequence[int], rate_hz: float
) -> float:
    """Smallest standard deviation of an unbiased frequency estimate, in Hz.

    For a real sinusoid of unknown amplitude and phase in each of several stretches of white noise:
    var(f) ≥ 1/Σ (2π)²·η·T²·N/12, η = A²/(2σ²) (Kay 1993, from memory).

    Parameters
    ----------
    amplitude_uv, noise_sd_uv : float
        A, and σ for each sample.
    lengths : sequence of int
        Samples of each stretch.
    rate_hz : float
    """
    n = np.asarray(lengths, dtype=float)
    eta = amplitude_uv**2 / (2 * noise_sd_uv**2)
    return float(1 / np.sqrt(np.sum((2 * np.pi) ** 2 * eta * (n / rate_hz) ** 2 * n / 12)))


def locate(stretches: Stretches, nominal_hz: float, avoid_hz: Sequence[float] = ()) -> Location:
    """Find the frequency of a response near its nominal place.

    Parameters
    ----------
    stretches : Stretches
    nominal_hz : float
    avoid_hz : sequence of float
        Frequencies of other terms and of the mains: no noise is taken within two bins of them, and
        the search stays nearer to the nominal frequency than to any of them.

    Returns
    -------
    Location
        With the verdict ``cannot tell`` where power in the range could well be noise, or that of
        another term within a bin.
    """
    bin_hz = 1 / stretches.longest_s
    nearest_hz = min((abs(f - nominal_hz) for f in avoid_hz), default=np.inf)
    if nearest_hz < bin_hz:
        return _cannot_tell()
    reach_hz = min(SEARCH_SHARE * nominal_hz, nearest_hz / 2)
    count = int(np.ceil(reach_hz / bin_hz * OVERSAMPLING))
    grid_hz = nominal_hz + np.linspace(-reach_hz, reach_hz, 2 * count + 1)
    powers = summed_power(stretches, grid_hz, 1.0)
    estimate_hz, power = _climb(
        lambda f: summed_power(stretches, np.array([f]), 1.0)[0],
        grid_hz[int(np.argmax(powers))],
        reach_hz / count,
    )

    present_hz = [estimate_hz, *avoid_hz]
    far_uv2 = _noise_beside(
        stretches,
        nominal_hz,
        lambda width_hz: reach_hz + width_hz * (2 + np.arange(NEIGHBOURS)),
        present_hz,
    )
    near_uv2 = _noise_beside(
        stretches,
        estimate_hz,
        lambda width_hz: width_hz * (1 + np.arange(max(int(RHYTHM_HZ / width_hz), FEWEST_NEAR))),
        present_hz,
    )
    if not (far_uv2.size and near_uv2.size):
        return _cannot_tell()
    freedom = 2 * len(stretches.signals_uv)
    cells = max(2 * reach_hz / bin_hz, 1.0) * MAXIMA_PER_CELL
    chance = max(
        f_survival(power / beside.mean() / freedom, freedom, 2 * beside.size)
        for beside in (far_uv2, near_uv2)
    )
    presence_p = min(cells * float(chance), 1.0)
    if presence_p > PRESENCE_LEVEL:
        return _cannot_tell(presence_p)

    # the median of exponentially distributed powers is ln 2 of their mean; a phase step's side
    # lines, in one stretch of many, do not move it
    noise_uv2 = float(np.median(far_uv2) / np.log(2))
    larger_uv2 = max(noise_uv2, float(near_uv2.mean()))
    half_hz = INTERVAL_SD / np.sqrt(_information(stretches, estimate_hz, larger_uv2).sum())
    low_hz, high_hz = _interval(
        estimate_hz, half_hz, power / larger_uv2, grid_hz, powers / larger_uv2
    )
    excess = max(power / noise_uv2 / freedom - 1, np.finfo(float).tiny)
    return Location(
        AS_SET if low_hz <= nominal_hz <= high_hz else OFFSET,
        estimate_hz,
        low_hz,
        high_hz,
        float(10 * np.log10(excess)),
        presence_p,
        *_drift(stretches, estimate_hz, noise_uv2, reach_hz),
        tuple(_steps(stretches, estimate_hz, noise_uv2)),
    )


def _cannot_tell(presence_p: float = np.nan) -> Location:
    return Location(CANNOT_TELL, *(np.nan,) * 4, presence_p, *(np.nan,) * 3, ())


def summed_power(stretches: Stretches, frequencies_hz: np.ndarray, noise_uv2: float) -> np.ndarray:
    """Power at each frequency over that of noise, summed over stretches: χ² with 2 each.

    Parameters
    ----------
    stretches : Stretches
    frequencies_hz : ndarray, shape (n_frequencies,)
    noise_uv2 : float
        Variance of the noise in each sample.
    """
    total = np.zeros(len(frequencies_hz))
    for signals in _by_length(stretches):
        coefficients = _coefficients(signals, stretches.rate_hz, frequencies_hz)
        noise_power = 4 * noise_uv2 / signals.shape[-1]
        total += (np.abs(coefficients) ** 2).sum(axis=0) / (noise_power / 2)
    return total


def _coefficients(signals_uv: np.ndarray, rate_hz: float, frequencies_hz: np.ndarray) -> np.ndarray:
    """Project at a few frequencies at a time: an operator over a long stretch takes memory."""
    parts = np.array_split(frequencies_hz, -(-len(frequencies_hz) // 32))
    return np.concatenate([project(signals_uv, rate_hz, part) for part in parts], axis=-1)


def _by_length(stretches: Stretches) -> list[np.ndarray]:
    lengths = sorted({signal.size for signal in stretches.signals_uv})
    return [np.stack([s for s in stretches.signals_uv if s.size == n]) for n in lengths]


def _noise_beside(
    stretches: Stretches,
    centre_hz: float,
    offsets_hz: Callable[[float], np.ndarray],
    present_hz: Sequence[float],
) -> np.ndarray:
    """Variances per sample, in µV², of white noise as dense as in each bin beside a frequency.

    ``offsets_hz`` makes the distances out of the width of a bin. What is present, the response
    first, is fitted along and so does not leak in; no bin is taken within two of the others.
    """
    known_hz = np.array([f for f in present_hz if f < stretches.rate_hz / 2])
    found = []
    for signals in _by_length(stretches):
        width_hz = stretches.rate_hz / signals.shape[-1]
        offsets = offsets_hz(width_hz)
        beside_hz = np.concatenate([centre_hz - offsets, centre_hz + offsets])
        free = (np.abs(beside_hz[:, None] - known_hz[1:]) > 2 * width_hz).all(axis=1)
        free &= (beside_hz > 2 * width_hz) & (beside_hz < stretches.rate_hz / 2)
        coefficients = project(signals, stretches.rate_hz, beside_hz[free], known_hz)
        found.append((np.abs(coefficients) ** 2 * signals.shape[-1] / 4).ravel())
    return np.concatenate(found)


def _climb(power, start: float, step: float) -> tuple[float, float]:
    """Place and height of a peak that lies within a step of where it was seen."""
    from scipy.optimize import minimize_scalar

    found = minimize_scalar(
        lambda x: -power(x),
        bounds=(start - step, start + step),
        method="bounded",
        options={"xatol": step * 1e-6},
    )
    return float(found.x), -float(found.fun)


def _interval(
    estimate: float, half: float, power: float, candidates: np.ndarray, powers: np.ndarray
) -> tuple[float, float]:
    """99 % interval: the normal one, widened to whatever else explains the signal about as well.

    At a low SNR a peak of noise may outdo a weak response: the ratio of likelihoods must stand out
    from all candidates, which stand `OVERSAMPLING` to a cell.
    """
    chances = max(len(candidates) / OVERSAMPLING, 1.0) * MAXIMA_PER_CELL
    rivals = candidates[chances * chi2_survival(power - powers, 1) > OFFSET_LEVEL]
    return (
        float(min(estimate - half, rivals.min(initial=estimate))),
        float(max(estimate + half, rivals.max(initial=estimate))),
    )


def _information(stretches: Stretches, frequency_hz: float, noise_uv2: float) -> np.ndarray:
    """Fisher's information on the frequency in each stretch, by its own amplitude, in 1/Hz²."""
    found = []
    for signal in stretches.signals_uv:
        amplitude2 = abs(project(signal, stretches.rate_hz, [frequency_hz])[0]) ** 2
        amplitude2 -= 4 * noise_uv2 / signal.size  # noise's own share
        duration_s = signal.size / stretches.rate_hz
        found.append((2 * np.pi * duration_s) ** 2 * signal.size * amplitude2 / (24 * noise_uv2))
    found = np.array(found)
    return np.maximum(found, found.mean() * 1e-3)


def _drift(
    stretches: Stretches, frequency_hz: float, noise_uv2: float, reach_hz: float
) -> tuple[float, float, float]:
    """Slope of the frequency over the recording in Hz a minute, and its 99 % interval."""
    parts = stretches if len(stretches.signals_uv) >= FEWEST_PIECES else _quartered(stretches)
    middles_s = np.array(parts.starts_s) + [s.size / 2 / parts.rate_hz for s in parts.signals_uv]
    information = _information(parts, frequency_hz, noise_uv2)
    centre_s = np.average(middles_s, weights=information)
    leverage = np.sum(information * (middles_s - centre_s) ** 2)
    span_s = np.ptp(middles_s)

    def power(slopes: np.ndarray) -> np.ndarray:
        total = np.zeros(len(slopes))
        for signal, middle_s in zip(parts.signals_uv, middles_s, strict=True):
            at_hz = frequency_hz + slopes * (middle_s - centre_s)
            total += np.abs(_coefficients(signal, parts.rate_hz, at_hz)) ** 2 * signal.size
        return total / (2 * noise_uv2)

    steepest = reach_hz / span_s
    count = max(int(np.ceil(reach_hz * parts.longest_s * OVERSAMPLING / 2)), 1)
    slopes = np.linspace(-steepest, steepest, 2 * count + 1)
    powers = power(slopes)
    slope, height = _climb(
        lambda x: power(np.array([x]))[0], slopes[int(np.argmax(powers))], steepest / count
    )
    half = INTERVAL_SD / np.sqrt(leverage)
    low, high = _interval(slope, half, height, slopes, powers)
    return slope * 60, low * 60, high * 60


def _quartered(stretches: Stretches) -> Stretches:
    """Each stretch in four, where there are too few to see a change over them."""
    signals, starts_s = [], []
    for signal, start_s in zip(stretches.signals_uv, stretches.starts_s, strict=True):
        quarter = signal.size // FEWEST_PIECES
        for index in range(FEWEST_PIECES):
            signals.append(signal[index * quarter : (index + 1) * quarter])
            starts_s.append(start_s + index * quarter / stretches.rate_hz)
    return Stretches(tuple(signals), tuple(starts_s), stretches.rate_hz)


def _steps(
    stretches: Stretches, frequency_hz: float, noise_uv2: float
) -> Iterator[tuple[float, float]]:
    """Jumps of the phase within stretches, as lost frames make them."""
    length = int(np.ceil(PIECE_CYCLES / frequency_hz * stretches.rate_hz))
    pieces = [signal.size // length for signal in stretches.signals_uv]
    places = sum(max(count - 2, 0) for count in pieces)
    for signal, start_s, count in zip(
        stretches.signals_uv, stretches.starts_s, pieces, strict=True
    ):
        if count >= FEWEST_PIECES:
            cut = signal[: count * length].reshape(count, length)
            times_s = np.arange(count) * length / stretches.rate_hz
            turned = project(cut, stretches.rate_hz, [frequency_hz])[:, 0]
            turned = turned * np.exp(-2j * np.pi * frequency_hz * times_s)
            found = _split(turned, times_s, 4 * noise_uv2 / length, STEP_LEVEL / places)
            yield from ((start_s + time_s, size_rad) for time_s, size_rad in found)


def _split(
    z: np.ndarray, times_s: np.ndarray, noise_power: float, level: float
) -> list[tuple[float, float]]:
    """Steps of the phase in a series of coefficients, by likelihood ratio, the largest first.

    Both without and with a step the frequency may be a little off, so that a step is not taken
    for an offset nor an offset for a step. The piece in which the step lies belongs to neither
    side, since its coefficient is a mixture of both.
    """
    count = len(z)
    if count < FEWEST_PIECES:
        return []
    span_s = times_s[-1] - times_s[0]
    slips_hz = np.linspace(-1.5, 1.5, 61) / span_s
    series = z * np.exp(-2j * np.pi * np.outer(slips_hz, times_s - times_s[0]))
    running = np.cumsum(series, axis=1)
    before, after = running[:, :-2], running[:, -1:] - running[:, 1:-1]
    straight = (np.abs(before + after) ** 2).max(axis=0)
    broken = (np.abs(before) + np.abs(after)) ** 2
    gain = broken.max(axis=0) - straight
    place = int(np.argmax(gain))
    if chi2_survival(2 * gain[place] / (noise_power * (count - 1)), 1) > level:
        return []
    slip = int(np.argmax(broken[:, place]))
    size_rad = float(np.angle(after[slip, place] / before[slip, place]))
    inside = place + 1
    return sorted(
        [
            (float(times_s[inside : inside + 2].mean()), size_rad),
            *_split(z[:inside], times_s[:inside], noise_power, level),
            *_split(z[inside + 1 :], times_s[inside + 1 :], noise_power, level),
        ]
    )
