"""Fourier coefficients at exact frequencies, and power spectral density.

Units: signals in µV, frequencies in Hz, coefficients in µV (amplitude, not root mean square).
"""

from collections.abc import Sequence

import numpy as np

TREND_TERMS = 2  # mean and linear trend, fitted together with each sinusoid


def projector(
    n_samples: int, rate_hz: float, frequencies_hz: np.ndarray, present_hz: Sequence[float] = ()
) -> np.ndarray:
    """Operator whose product with a window is the coefficient at each frequency.

    Each coefficient is the least-squares fit of one sinusoid together with a mean, a linear trend
    and the other sinusoids that are known to be present: X = (2/N) Σ x[n]·exp(−i2πfn/fs) where the
    window holds whole cycles of all and no trend, and without bias at any frequency or length. For
    A·cos(2πft + φ), |X| = A and arg X = φ. With white noise of variance σ², E|X|² = 4σ²/N.

    Parameters
    ----------
    n_samples : int
    rate_hz : float
    frequencies_hz : ndarray, shape (n_frequencies,)
    present_hz : sequence of float
        Other sinusoids, fitted along so that they do not leak in; those nearer than half a bin to
        the frequency itself cannot be told from it and are left out.

    Returns
    -------
    operator : ndarray of complex, shape (n_frequencies, n_samples)

    Notes
    -----
    Each sinusoid's regressors are made orthogonal to all else first (Frisch & Waugh 1933, from
    memory), so one 2 × 2 system is left for each frequency.
    """
    n = np.arange(n_samples)
    trend = np.vander(n - n.mean(), TREND_TERMS, increasing=True).astype(float)
    present_hz = np.asarray(present_hz, dtype=float)
    operator = np.empty((len(frequencies_hz), n_samples), dtype=complex)
    bases: dict[bytes, np.ndarray] = {}
    for row, frequency_hz in enumerate(frequencies_hz):
        others = np.abs(present_hz - frequency_hz) * n_samples / rate_hz > 0.5
        if others.tobytes() not in bases:
            phase = 2 * np.pi * np.outer(n, present_hz[others]) / rate_hz
            bases[others.tobytes()], _ = np.linalg.qr(
                np.hstack([trend, np.cos(phase), np.sin(phase)])
            )
        known = bases[others.tobytes()]
        phase = 2 * np.pi * frequency_hz * n / rate_hz
        regressors = np.stack([np.cos(phase), -np.sin(phase)])
        regressors -= (regressors @ known) @ known.T
        fitted = np.linalg.solve(regressors @ regressors.T, regressors)
        operator[row] = fitted[0] + 1j * fitted[1]
    return operator


def project(
    windows_uv: np.ndarray,
    rate_hz: float,
    frequencies_hz: np.ndarray,
    present_hz: Sequence[float] = (),
) -> np.ndarray:
    """Complex coefficient of each window at each frequency, exactly.

    Parameters
    ----------
    windows_uv : ndarray, shape (..., n_samples)
    rate_hz : float
    frequencies_hz : array_like, shape (n_frequencies,)
    present_hz : sequence of float
        Other sinusoids that are present, see `projector`.

    Returns
    -------
    coefficients_uv : ndarray of complex, shape (..., n_frequencies)
        0 rad is a cosine peak at the window's first sample.

    Examples
    --------
    >>> t = np.arange(1000) / 500
    >>> np.abs(project(3 * np.cos(2 * np.pi * 12 * t), 500, [12.0])).round(6)
    array([3.])
    """
    windows_uv = np.asarray(windows_uv, dtype=float)
    operator = projector(windows_uv.shape[-1], rate_hz, np.atleast_1d(frequencies_hz), present_hz)
    return windows_uv @ operator.real.T + 1j * (windows_uv @ operator.imag.T)


def to_onset(
    coefficients_uv: np.ndarray, frequencies_hz: np.ndarray, offsets_s: np.ndarray
) -> np.ndarray:
    """Refer phases to the onset of the flicker in place of the window's first sample.

    Parameters
    ----------
    coefficients_uv : ndarray, shape (n_windows, ..., n_frequencies)
    frequencies_hz : ndarray, shape (n_frequencies,)
    offsets_s : ndarray, shape (n_windows,)
        Time from onset to the window's first sample.
    """
    turn = np.exp(-2j * np.pi * np.outer(offsets_s, frequencies_hz))
    between = (1,) * (coefficients_uv.ndim - 2)
    return coefficients_uv * turn.reshape(turn.shape[0], *between, turn.shape[1])


def remove_sinusoids(
    windows_uv: np.ndarray, rate_hz: float, frequencies_hz: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Fit sinusoids by least squares in each window, all together, and subtract them.

    Parameters
    ----------
    windows_uv : ndarray, shape (..., n_samples)
    rate_hz : float
    frequencies_hz : array_like, shape (n_frequencies,)

    Returns
    -------
    remaining_uv : ndarray, shape (..., n_samples)
    removed_uv2 : ndarray, shape (..., n_frequencies)
        Power A²/2 of each subtracted sinusoid.
    """
    windows_uv = np.asarray(windows_uv, dtype=float)
    frequencies_hz = np.asarray(frequencies_hz, dtype=float)
    if frequencies_hz.size == 0:
        return windows_uv.copy(), np.zeros((*windows_uv.shape[:-1], 0))
    n = np.arange(windows_uv.shape[-1])
    phase = 2 * np.pi * np.outer(n, frequencies_hz) / rate_hz
    sinusoids = np.hstack([np.cos(phase), np.sin(phase)])
    trend = np.vander(n - n.mean(), TREND_TERMS, increasing=True)
    fit = np.linalg.pinv(np.hstack([sinusoids, trend]))[: sinusoids.shape[1]]
    weights = windows_uv @ fit.T
    count = frequencies_hz.size
    removed_uv2 = (weights[..., :count] ** 2 + weights[..., count:] ** 2) / 2
    return windows_uv - weights @ sinusoids.T, removed_uv2


def power_spectral_density(
    windows_uv: np.ndarray, rate_hz: float, segment_s: float, grid_hz: float
) -> tuple[np.ndarray, np.ndarray]:
    """One-sided power spectral density by Welch's method: Hann segments, half overlapped.

    Parameters
    ----------
    windows_uv : ndarray, shape (..., n_samples)
    rate_hz : float
    segment_s : float
        Length of a segment; a shorter window is one segment.
    grid_hz : float
        Spacing of the frequencies; segments are zero-padded to it, which interpolates and does not
        resolve more.

    Returns
    -------
    frequencies_hz : ndarray, shape (n_frequencies,)
    psd_uv2_per_hz : ndarray, shape (..., n_frequencies)

    Notes
    -----
    White noise of variance σ² has the density 2σ²/fs (Welch 1967).
    """
    from scipy.signal import welch

    n_segment = min(round(segment_s * rate_hz), np.shape(windows_uv)[-1])
    return welch(
        windows_uv,
        fs=rate_hz,
        window="hann",
        nperseg=n_segment,
        noverlap=n_segment // 2,
        nfft=max(round(rate_hz / grid_hz), n_segment),
        detrend="linear",
        scaling="density",
    )


def cut(signal_uv: np.ndarray, starts: np.ndarray, n_samples: int) -> np.ndarray:
    """Cut windows of one length from a continuous signal, shape (n_windows, n_sites, n_samples)."""
    return np.stack([signal_uv[:, start : start + n_samples] for start in starts])


def bin_coefficients(
    signal_uv: np.ndarray,
    starts: np.ndarray,
    offsets_s: np.ndarray,
    rate_hz: float,
    frequencies_hz: np.ndarray,
    samples: np.ndarray,
    bins: np.ndarray,
    present_hz: Sequence[float] = (),
) -> np.ndarray:
    """Coefficients at each term and at bins beside it, referred to the onset of the flicker.

    Parameters
    ----------
    signal_uv : ndarray, shape (n_sites, n_times)
    starts : ndarray of int, shape (n_windows,)
        First sample of each window.
    offsets_s : ndarray, shape (n_windows,)
        Time from onset to that sample.
    rate_hz : float
    frequencies_hz : ndarray, shape (n_terms,)
    samples : ndarray of int, shape (n_terms,)
        Length of the window of each term; a bin is rate_hz / samples wide.
    bins : ndarray of int, shape (n_bins,)
        Offsets from the term, in bins; 0 is the term.
    present_hz : sequence of float
        The terms that flicker in these windows, fitted together.

    Returns
    -------
    coefficients_uv : ndarray of complex, shape (n_windows, n_sites, n_terms, n_bins)
        NaN at bins less than one bin above zero or below half the sampling rate.
    """
    shape = (len(starts), len(signal_uv), len(frequencies_hz), len(bins))
    coefficients_uv = np.full(shape, np.nan, dtype=complex)
    if len(starts) == 0:
        return coefficients_uv
    for n_samples in np.unique(samples):
        width_hz = rate_hz / n_samples
        windows_uv = cut(signal_uv, starts, n_samples)
        for term in np.flatnonzero(samples == n_samples):
            bins_hz = frequencies_hz[term] + bins * width_hz
            there = (bins_hz > 0.99 * width_hz) & (bins_hz < rate_hz / 2 - 0.99 * width_hz)
            projected = project(windows_uv, rate_hz, bins_hz[there], present_hz)
            coefficients_uv[:, :, term, there] = to_onset(projected, bins_hz[there], offsets_s)
    return coefficients_uv
