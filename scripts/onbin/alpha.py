"""Alpha: its individual frequency, its power, and what of it stands above the aperiodic spectrum.

Power spectral densities are one-sided, in µV²/Hz, on an evenly spaced grid of frequencies in Hz,
with the tags' terms already taken out of the signal.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from onbin.errors import DataError

SEARCH_HZ = (7.0, 13.0)
FIT_HZ = (2.0, 40.0)
MIN_CHANNELS = 3
FRAME_HZ = 2.75  # 11 bins of 0.25 Hz
POLYNOMIAL_ORDER = 5
ABOVE_BACKGROUND_SD = 1.0
ABOVE_RIVALS = 1.2
WINDOW_MARGIN_HZ = 2.0  # the alpha window may reach this far outside the search range
EXCLUDED_HALF_WIDTH_HZ = 1.0
MIN_KEPT_SHARE = 0.5  # of the bins of an aperiodic fit; fewer, and it describes the interpolation
PEAK_WIDTHS_HZ = (1.0, 12.0)  # a narrower peak is a line or noise, not a rhythm
MAX_PEAKS = 8


@dataclass(frozen=True)
class AlphaFrequency:
    """Individual alpha frequency of one spectrum set.

    Attributes
    ----------
    peak_hz, centre_of_gravity_hz : float
        nan where none was found.
    low_hz, high_hz : float
        Bounds of the alpha peak, averaged over channels; nan where there is no peak.
    n_channels_peak, n_channels_centre : int
        Channels with a single peak, and with any: those that the two estimates rest on.
    reason : str
        Why an estimate is missing; empty where both were found.
    """

    peak_hz: float
    centre_of_gravity_hz: float
    low_hz: float
    high_hz: float
    n_channels_peak: int
    n_channels_centre: int
    reason: str


@dataclass(frozen=True)
class AperiodicFit:
    """The aperiodic part of a spectrum: log10 P = offset − exponent·log10 f, P in µV²/Hz."""

    offset: float
    exponent: float
    r_squared: float

    def psd_uv2_per_hz(self, frequencies_hz: np.ndarray) -> np.ndarray:
        """Evaluate the aperiodic power spectral density, in µV²/Hz; frequencies above 0 Hz."""
        return 10.0**self.offset * np.asarray(frequencies_hz, dtype=float) ** -self.exponent


@dataclass(frozen=True, eq=False)
class _ChannelPeak:
    """Alpha peak of one channel: `peak_hz` is nan where no candidate stands out from the others."""

    peak_hz: float
    bounds_hz: tuple[float, float]
    quality: float
    above_aperiodic: np.ndarray


def _within(frequencies_hz: np.ndarray, band_hz: tuple[float, float]) -> np.ndarray:
    """Mask of the bins in a band, its edges included."""
    return (frequencies_hz >= band_hz[0]) & (frequencies_hz <= band_hz[1])


def _crop(
    frequencies_hz: np.ndarray, psd_uv2_per_hz: np.ndarray, fit_hz: tuple[float, float]
) -> tuple[np.ndarray, np.ndarray]:
    """Take the range of a fit out of a spectrum, and check that logarithms can be taken of it."""
    frequencies_hz = np.asarray(frequencies_hz, dtype=float)
    in_range = _within(frequencies_hz, fit_hz)
    frequencies_hz = frequencies_hz[in_range]
    power = np.asarray(psd_uv2_per_hz, dtype=float)[..., in_range]
    steps = np.diff(frequencies_hz)
    if steps.size == 0 or steps[0] <= 0 or not np.allclose(steps, steps[0], rtol=1e-6):
        raise DataError(
            f"Spectrum from {fit_hz[0]:g} to {fit_hz[1]:g} Hz: the frequencies must rise in even "
            f"steps, and {frequencies_hz.size} were found that do not."
        )
    if not (np.isfinite(power) & (power > 0)).all():
        raise DataError(
            f"Spectrum from {fit_hz[0]:g} to {fit_hz[1]:g} Hz: power must be positive and finite "
            "in every bin. Is a channel flat?"
        )
    return frequencies_hz, power


def _apart_from(frequencies_hz: np.ndarray, exclude_hz: Sequence[float]) -> np.ndarray:
    """Mask of the bins further than 1 Hz from every excluded frequency."""
    excluded = np.asarray(exclude_hz, dtype=float)
    distance_hz = np.abs(frequencies_hz[:, None] - excluded)
    return (distance_hz > EXCLUDED_HALF_WIDTH_HZ).all(axis=1)


def fit_aperiodic(
    frequencies_hz: np.ndarray,
    psd_uv2_per_hz: np.ndarray,
    fit_hz: tuple[float, float] = FIT_HZ,
    exclude_hz: Sequence[float] = (),
) -> AperiodicFit:
    """Fit the aperiodic part of one spectrum, without a knee.

    Parameters
    ----------
    frequencies_hz : ndarray, shape (n_frequencies,)
    psd_uv2_per_hz : ndarray, shape (n_frequencies,)
    fit_hz : tuple of float
        Range of the fit.
    exclude_hz : sequence of float
        Line frequency, tags and their terms: bins within 1 Hz of them take no part. The model
        wants evenly spaced frequencies, so these bins are bridged by straight lines in log-log
        coordinates, where the aperiodic part itself is straight.

    Returns
    -------
    fit : AperiodicFit
        Of nan where the fit does not converge.

    Raises
    ------
    DataError
        Power that is not positive and finite in the range, or less than half of it left.

    Notes
    -----
    Donoghue et al. 2020, Nat Neurosci 23:1655, as implemented by specparam.
    """
    from specparam import SpectralModel

    frequencies_hz, power = _crop(frequencies_hz, psd_uv2_per_hz, fit_hz)
    keep = _apart_from(frequencies_hz, exclude_hz)
    if keep.sum() < MIN_KEPT_SHARE * keep.size:
        raise DataError(
            f"Aperiodic fit over {fit_hz[0]:g}-{fit_hz[1]:g} Hz: {keep.sum()} of {keep.size} bins "
            "are left beside the excluded frequencies, and half of them are needed. Widen the "
            "range of the fit."
        )
    # Excluded bins at an edge of the range have nothing beyond them to be bridged to.
    bridged = _within(frequencies_hz, tuple(frequencies_hz[keep][[0, -1]]))
    log_power = np.interp(
        np.log10(frequencies_hz[bridged]),
        np.log10(frequencies_hz[keep]),
        np.log10(power[keep]),
    )
    model = SpectralModel(peak_width_limits=PEAK_WIDTHS_HZ, max_n_peaks=MAX_PEAKS, verbose=False)
    model.fit(frequencies_hz[bridged], 10.0**log_power)
    offset, exponent = model.get_params("aperiodic")
    return AperiodicFit(
        offset=float(offset),
        exponent=float(exponent),
        r_squared=float(model.results.metrics.results["gof_rsquared"]),
    )


def centre_of_gravity(
    frequencies_hz: np.ndarray, power: np.ndarray, low_hz: float, high_hz: float
) -> float:
    """Mean frequency weighted by power: Σ f·P / Σ P over the bins from low to high.

    Notes
    -----
    Klimesch 1999, Brain Res Rev 29:169 (from memory). An aperiodic background within `power` pulls
    the result down: 0.15 Hz for a peak of 1 µV²/Hz at 10 Hz over 3/f µV²/Hz.

    Examples
    --------
    >>> float(centre_of_gravity(np.array([9.0, 10.0, 11.0]), np.array([1.0, 2.0, 1.0]), 9, 11))
    10.0
    """
    bins = _within(frequencies_hz, (low_hz, high_hz))
    return float(np.sum(frequencies_hz[bins] * power[bins]) / np.sum(power[bins]))


def individual_alpha_frequency(
    frequencies_hz: np.ndarray,
    psd_uv2_per_hz: np.ndarray,
    search_hz: tuple[float, float] = SEARCH_HZ,
    fit_hz: tuple[float, float] = FIT_HZ,
    exclude_hz: Sequence[float] = (),
    min_channels: int = MIN_CHANNELS,
) -> AlphaFrequency:
    """Peak and centre of gravity of alpha over channels, or the reason why there is none.

    Each channel's spectrum is smoothed (Savitzky-Golay, order 5, 11 bins of 0.25 Hz). A local
    maximum in the search range counts where it exceeds the aperiodic fit, and a straight line
    through log power over frequency by one standard deviation of that line's residuals. The
    largest is the channel's peak if it exceeds the others by 20 %; its frequency is that of the
    parabola through three bins of log power. Estimates are averaged over channels, weighted by the
    peak's mean power between its points of inflection, in units of the channel's mean power.

    The centre of gravity needs a maximum, but no single one. It is taken of the power above the
    aperiodic fit, since the background would pull it down, and between bounds averaged over the
    channels: the nearest minimum on each side, or where the peak sinks into the aperiodic part.

    Parameters
    ----------
    frequencies_hz : ndarray, shape (n_frequencies,)
        Grid of at most 0.39 Hz: 0.25 Hz is usual, by zero padding where windows are short.
    psd_uv2_per_hz : ndarray, shape (n_channels, n_frequencies)
    search_hz, fit_hz : tuple of float
        Range searched for a peak; range of the background fits.
    exclude_hz : sequence of float
        Frequencies that take no part in either fit of the background, with 1 Hz on both sides.
    min_channels : int
        Channels that an estimate needs; all of them where fewer are given.

    Raises
    ------
    DataError
        A grid that is uneven or too coarse, or power that is not positive and finite.

    Notes
    -----
    Corcoran et al. 2018, Psychophysiology 55:e13064; the form of the background line and of the
    weights from memory. There the fit starts at 1 Hz, where the high-pass filter of this workflow
    may still bend the spectrum, and the centre of gravity is taken of the whole power.
    """
    frequencies_hz, power = _crop(frequencies_hz, psd_uv2_per_hz, fit_hz)
    needed = min(min_channels, len(power))
    peaks = [
        _channel_peak(frequencies_hz, channel, search_hz, fit_hz, exclude_hz) for channel in power
    ]
    found = [peak for peak in peaks if peak is not None]
    if len(found) < needed:
        reason = f"{len(found)} of at least {needed} channels have a peak above the background"
        return AlphaFrequency(np.nan, np.nan, np.nan, np.nan, 0, 0, reason)

    weights = np.array([peak.quality for peak in found])
    low_hz, high_hz = np.mean([peak.bounds_hz for peak in found], axis=0).tolist()
    centres_hz = [
        centre_of_gravity(frequencies_hz, peak.above_aperiodic, low_hz, high_hz) for peak in found
    ]
    peaks_hz = np.array([peak.peak_hz for peak in found])
    single = np.isfinite(peaks_hz)
    if single.sum() >= needed:
        peak_hz, reason = float(np.average(peaks_hz[single], weights=weights[single])), ""
    else:
        peak_hz = np.nan
        reason = f"{single.sum()} of at least {needed} channels have one peak above its rivals"
    return AlphaFrequency(
        peak_hz=peak_hz,
        centre_of_gravity_hz=float(np.average(centres_hz, weights=weights)),
        low_hz=low_hz,
        high_hz=high_hz,
        n_channels_peak=int(single.sum()),
        n_channels_centre=len(found),
        reason=reason,
    )


def _channel_peak(
    frequencies_hz: np.ndarray,
    power: np.ndarray,
    search_hz: tuple[float, float],
    fit_hz: tuple[float, float],
    exclude_hz: Sequence[float],
) -> _ChannelPeak | None:
    """Alpha peak of one channel's spectrum, None where nothing stands above the background."""
    from scipy.signal import savgol_filter

    grid_hz = frequencies_hz[1] - frequencies_hz[0]
    frame = 2 * int(FRAME_HZ / grid_hz / 2) + 1
    if frame <= POLYNOMIAL_ORDER:
        raise DataError(
            f"Individual alpha frequency: the grid of {grid_hz:g} Hz is too coarse for smoothing; "
            "0.25 Hz is usual."
        )
    power = power / power.mean()
    smooth, curvature = (
        savgol_filter(power, frame, POLYNOMIAL_ORDER, deriv=order) for order in (0, 2)
    )
    background = fit_aperiodic(frequencies_hz, power, fit_hz, exclude_hz).psd_uv2_per_hz(
        frequencies_hz
    )
    limit = np.maximum(_background_limit(frequencies_hz, power, exclude_hz), background)
    inner = smooth[1:-1]
    maximum = np.r_[False, (inner > smooth[:-2]) & (inner >= smooth[2:]), False]
    candidates = np.flatnonzero(maximum & _within(frequencies_hz, search_hz) & (smooth > limit))
    if candidates.size == 0:
        return None

    largest = candidates[np.argmax(smooth[candidates])]
    rivals = smooth[candidates[candidates != largest]]
    alone = (smooth[largest] >= ABOVE_RIVALS * rivals).all()
    reach = _within(
        frequencies_hz, (search_hz[0] - WINDOW_MARGIN_HZ, search_hz[1] + WINDOW_MARGIN_HZ)
    )
    rises = np.diff(smooth) > 0
    stands_out = reach & (smooth > background)
    low = _walk(candidates[0], -1, stands_out & np.r_[False, rises])
    high = _walk(candidates[-1], 1, stands_out & np.r_[~rises, False])
    inflections = [_walk(largest, step, curvature < 0) for step in (-1, 1)]
    return _ChannelPeak(
        peak_hz=_vertex_hz(frequencies_hz, smooth, largest) if alone else np.nan,
        bounds_hz=(frequencies_hz[low], frequencies_hz[high]),
        quality=float(smooth[inflections[0] : inflections[1] + 1].mean()),
        above_aperiodic=power - background,
    )


def _background_limit(
    frequencies_hz: np.ndarray, power: np.ndarray, exclude_hz: Sequence[float]
) -> np.ndarray:
    """Power that exceeds a line through log power over frequency by one standard deviation."""
    keep = _apart_from(frequencies_hz, exclude_hz)
    log_power = np.log10(power[keep])
    line = np.polynomial.Polynomial.fit(frequencies_hz[keep], log_power, 1)
    scatter = np.sqrt(np.sum((log_power - line(frequencies_hz[keep])) ** 2) / (keep.sum() - 2))
    return 10.0 ** (line(frequencies_hz) + ABOVE_BACKGROUND_SD * scatter)


def _walk(start: int, step: int, go_on: np.ndarray) -> int:
    """Index reached from a start by steps of ±1 while the place stood on says to go on."""
    place = start
    while 0 <= place + step < go_on.size and go_on[place]:
        place += step
    return int(place)


def _vertex_hz(frequencies_hz: np.ndarray, power: np.ndarray, top: int) -> float:
    """Frequency at the vertex of the parabola through three bins of log power."""
    before, at, after = np.log(power[top - 1 : top + 2])
    grid_hz = frequencies_hz[1] - frequencies_hz[0]
    return float(frequencies_hz[top] + grid_hz / 2 * (before - after) / (before - 2 * at + after))


def band_power(
    frequencies_hz: np.ndarray, psd_uv2_per_hz: np.ndarray, low_hz: float, high_hz: float
) -> np.ndarray:
    """Power in a band: the integral of the density, with interpolated edges.

    Parameters
    ----------
    frequencies_hz : ndarray, shape (n_frequencies,)
    psd_uv2_per_hz : ndarray, shape (..., n_frequencies)
    low_hz, high_hz : float

    Returns
    -------
    power_uv2 : ndarray, shape (...)

    Raises
    ------
    DataError
        A band that the spectrum does not hold as a whole.

    Examples
    --------
    >>> float(band_power(np.arange(5.0), np.array([0.0, 1.0, 2.0, 3.0, 4.0]), 1.5, 2.5))
    2.0
    """
    if not frequencies_hz[0] <= low_hz < high_hz <= frequencies_hz[-1]:
        raise DataError(
            f"Band of {low_hz:g}-{high_hz:g} Hz: it must rise and lie within the spectrum, which "
            f"goes from {frequencies_hz[0]:g} to {frequencies_hz[-1]:g} Hz."
        )
    inside = (frequencies_hz > low_hz) & (frequencies_hz < high_hz)
    edges = [_at(frequencies_hz, psd_uv2_per_hz, edge_hz) for edge_hz in (low_hz, high_hz)]
    density = np.concatenate(
        [edges[0], np.asarray(psd_uv2_per_hz, dtype=float)[..., inside], edges[1]], axis=-1
    )
    return np.trapezoid(density, np.r_[low_hz, frequencies_hz[inside], high_hz], axis=-1)


def _at(frequencies_hz: np.ndarray, psd: np.ndarray, frequency_hz: float) -> np.ndarray:
    """Density at one frequency between bins, shape (..., 1)."""
    after = int(np.clip(np.searchsorted(frequencies_hz, frequency_hz), 1, len(frequencies_hz) - 1))
    low_hz, high_hz = frequencies_hz[after - 1 : after + 1]
    share = (frequency_hz - low_hz) / (high_hz - low_hz)
    return (1 - share) * psd[..., after - 1 : after] + share * psd[..., after : after + 1]


def periodic_power(
    frequencies_hz: np.ndarray,
    psd_uv2_per_hz: np.ndarray,
    fit: AperiodicFit,
    low_hz: float,
    high_hz: float,
) -> np.ndarray:
    """Power in a band above the aperiodic fit, in µV².

    Not cut off at zero, so that a spectrum without alpha gives zero on average: single values may
    be negative.
    """
    above_zero = frequencies_hz > 0
    frequencies_hz, psd = frequencies_hz[above_zero], psd_uv2_per_hz[..., above_zero]
    return band_power(frequencies_hz, psd - fit.psd_uv2_per_hz(frequencies_hz), low_hz, high_hz)


def relative_power(
    frequencies_hz: np.ndarray,
    psd_uv2_per_hz: np.ndarray,
    low_hz: float,
    high_hz: float,
    total_hz: tuple[float, float] = FIT_HZ,
) -> np.ndarray:
    """Share of a band in the power of the total range, from 0 to 1 where the range holds it."""
    return band_power(frequencies_hz, psd_uv2_per_hz, low_hz, high_hz) / band_power(
        frequencies_hz, psd_uv2_per_hz, *total_hz
    )


def lateralisation(right_uv2: np.ndarray, left_uv2: np.ndarray) -> np.ndarray:
    """Index (R − L) / (R + L): 1 is all on the right, −1 all on the left."""
    return (right_uv2 - left_uv2) / (right_uv2 + left_uv2)
