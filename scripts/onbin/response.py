"""How large a tagged response is, against what noise, and whether it is there at all.

Symbols: X_k is the complex coefficient of window k of K, X̄ their mean, B the number of neighbouring
bins used. Coefficients are in µV; every function works on the first axis as windows and leaves the
other axes (channels, regions) alone.
"""

from dataclasses import dataclass

import numpy as np

from onbin.circular import t2circ
from onbin.distributions import f_survival

CONFIDENCE = 0.95
CIRCULARITY_LEVEL = 0.05  # of the condition-index test that chooses between T²circ and Hotelling


@dataclass(frozen=True)
class Noise:
    """Noise of an averaged spectrum and of single windows, from the neighbouring bins."""

    evoked_uv2: np.ndarray
    total_uv2: np.ndarray
    mean_amplitude_uv: np.ndarray
    bins: int


def neighbour_noise(neighbours_uv: np.ndarray) -> Noise:
    """Mean power and mean amplitude over the neighbouring bins.

    Parameters
    ----------
    neighbours_uv : ndarray of complex, shape (n_windows, ..., n_bins)
        Coefficients at the bins that hold noise only; without any, the noise is not known (NaN).
    """
    bins = neighbours_uv.shape[-1]
    if bins == 0:
        nothing = np.full(neighbours_uv.shape[1:-1], np.nan)
        return Noise(nothing, nothing, nothing, 0)
    evoked = np.abs(neighbours_uv.mean(axis=0))
    return Noise(
        evoked_uv2=(evoked**2).mean(axis=-1),
        total_uv2=(np.abs(neighbours_uv) ** 2).mean(axis=(0, -1)),
        mean_amplitude_uv=evoked.mean(axis=-1),
        bins=bins,
    )


def snr_p(snr: np.ndarray, bins: int, windows: int = 1) -> np.ndarray:
    """Probability of an SNR at least this large where there is no response.

    The power ratio follows F(2, 2B) for an evoked spectrum (``windows=1``) and F(2K, 2KB) for total
    power over K windows. Its mean without a response is B/(B−1), not 1.

    Notes
    -----
    Meigen & Bach 2000, Doc Ophthalmol 98:207; Dobie & Wilson 1996, J Acoust Soc Am.
    """
    return f_survival(snr, 2 * windows, 2 * windows * bins)


def _covariance(coefficients_uv: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Variances of the real and imaginary parts and their covariance, with K − 1."""
    centred = coefficients_uv - coefficients_uv.mean(axis=0)
    x, y, df = centred.real, centred.imag, len(centred) - 1
    return (x * x).sum(axis=0) / df, (y * y).sum(axis=0) / df, (x * y).sum(axis=0) / df


def hotelling(coefficients_uv: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Hotelling's T² against zero, and its p: (K−2)/(2(K−1))·T² ~ F(2, K − 2)."""
    K = len(coefficients_uv)
    mean = coefficients_uv.mean(axis=0)
    a, b, c = _covariance(coefficients_uv)
    x, y = mean.real, mean.imag
    statistic = K * (b * x * x - 2 * c * x * y + a * y * y) / (a * b - c * c)
    return statistic, f_survival((K - 2) / (2 * (K - 1)) * statistic, 2, K - 2)


def condition_index(coefficients_uv: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Ratio of the axes of the scatter's ellipse, and p of circular scatter.

    Notes
    -----
    Under circularity the index x has the density (K−2)·2^(K−2)·(x²−1)·x^(K−3)/(x²+1)^(K−1)
    (Baker 2021, arXiv 2101.04408), whose upper tail is (2x/(x²+1))^(K−2).
    """
    K = len(coefficients_uv)
    a, b, c = _covariance(coefficients_uv)
    centre, spread = (a + b) / 2, np.hypot((a - b) / 2, c)
    index = np.sqrt((centre + spread) / np.maximum(centre - spread, np.finfo(float).tiny))
    return index, (2 * index / (index**2 + 1)) ** (K - 2)


def disc_radius(coefficients_uv: np.ndarray, confidence: float = CONFIDENCE) -> np.ndarray:
    """Radius in µV of the confidence disc about the mean coefficient (Victor & Mast 1991)."""
    from scipy.special import fdtri

    K = len(coefficients_uv)
    scatter = (np.abs(coefficients_uv - coefficients_uv.mean(axis=0)) ** 2).sum(axis=0)
    return np.sqrt(fdtri(2, 2 * K - 2, confidence) * scatter / (K * (K - 1)))


def amplitude_interval(
    coefficients_uv: np.ndarray, confidence: float = CONFIDENCE
) -> tuple[np.ndarray, np.ndarray]:
    """Confidence interval of the response amplitude |E X|, in µV.

    The evoked amplitude has a Rice distribution; the interval holds the amplitudes under which it
    is neither too small nor too large, and begins at 0 where no response need be there.

    Notes
    -----
    Scatter is estimated with 2K − 2 degrees of freedom, so the noncentral χ² quantiles are widened
    by the ratio of Student's t to the normal quantile; for a strong response the interval is then
    exactly the t interval along the mean's direction.
    """
    from scipy.special import chndtrinc, ndtri, stdtrit

    K = len(coefficients_uv)
    tail = (1 - confidence) / 2
    mean = coefficients_uv.mean(axis=0)
    scatter = (np.abs(coefficients_uv - mean) ** 2).sum(axis=0)
    widening = stdtrit(2 * K - 2, 1 - tail) / ndtri(1 - tail)
    scale = widening * np.sqrt(scatter / (2 * K * (K - 1)))
    standardised = (np.abs(mean) / scale) ** 2
    low, high = (np.sqrt(chndtrinc(standardised, 2, q)) * scale for q in (1 - tail, tail))
    compatible_with_zero = np.exp(-standardised / 2) >= tail
    return np.where(compatible_with_zero, 0, low), high


def phase_interval(
    coefficients_uv: np.ndarray, confidence: float = CONFIDENCE
) -> tuple[np.ndarray, np.ndarray]:
    """Phase of the mean and the half-width of its interval, both in rad.

    The half-width is that of the confidence disc seen from the origin: asin(r/|X̄|), and π where the
    disc holds the origin, since then no phase is excluded.
    """
    mean = coefficients_uv.mean(axis=0)
    radius, amplitude = disc_radius(coefficients_uv, confidence), np.abs(mean)
    inside = radius >= amplitude
    half = np.arcsin(np.where(inside, 0, radius) / np.where(inside, 1, amplitude))
    return np.angle(mean), np.where(inside, np.pi, half)


def apparent_latency(
    phase_rad: np.ndarray, half_width_rad: np.ndarray, frequencies_hz: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Delay that the slope of phase over harmonics speaks of, and the half-width of its interval.

    τ = −dφ/(2π df) by weighted least squares, each phase taken to lag the one of the next lower
    harmonic by less than a turn: the delay is known up to multiples of the tag's cycle.

    Parameters
    ----------
    phase_rad, half_width_rad : ndarray, shape (n_harmonics, ...)
        From `phase_interval`.
    frequencies_hz : ndarray, shape (n_harmonics,)
        Rising.

    Returns
    -------
    latency_s, half_width_s : ndarray, shape (...)
        NaN where fewer than two phases are known to a quarter turn.

    Notes
    -----
    Regan 1966, Electroencephalogr Clin Neurophysiol 20:238 (from memory). It takes the harmonics
    to be made alike, which they need not be.
    """
    known = half_width_rad < np.pi / 2
    weight = np.where(known, 1 / np.maximum(half_width_rad, np.finfo(float).eps) ** 2, 0)
    turned = np.zeros_like(phase_rad)
    turned[0] = phase_rad[0]
    for index in range(1, len(phase_rad)):
        lag = np.mod(phase_rad[index - 1] - phase_rad[index], 2 * np.pi)
        turned[index] = turned[index - 1] - lag
    frequency = np.asarray(frequencies_hz, dtype=float).reshape(-1, *(1,) * (phase_rad.ndim - 1))
    with np.errstate(invalid="ignore", divide="ignore"):
        total = weight.sum(axis=0)
        apart = frequency - (weight * frequency).sum(axis=0) / total
        spread = (weight * apart**2).sum(axis=0)
        slope = (weight * apart * turned).sum(axis=0) / spread
        enough = known.sum(axis=0) >= 2
        latency_s = np.where(enough, -slope / (2 * np.pi), np.nan)
        half_s = np.where(enough, 1 / np.sqrt(spread) / (2 * np.pi), np.nan)
    return latency_s, half_s


@dataclass(frozen=True)
class PhaseLocking:
    """How alike the phases of windows are: resultant length, its unbiased square, Rayleigh test."""

    itpc: np.ndarray
    ppc: np.ndarray
    rayleigh_z: np.ndarray
    rayleigh_p: np.ndarray


def phase_locking(coefficients_uv: np.ndarray) -> PhaseLocking:
    """Inter-trial phase coherence, pairwise phase consistency and Rayleigh's test.

    Notes
    -----
    ITPC is biased (E[ITPC²] = 1/K without locking); PPC = (K·ITPC² − 1)/(K − 1) is not (Vinck et
    al. 2010, from memory). p is Zar's approximation (Zar 2010), good to 0.002 in z at 5 % for
    K ≥ 8.
    """
    K = len(coefficients_uv)
    itpc = np.abs(np.exp(1j * np.angle(coefficients_uv)).mean(axis=0))
    z = K * itpc**2
    p = np.exp(np.sqrt(1 + 4 * K + 4 * K * (K - z)) - (1 + 2 * K))
    return PhaseLocking(itpc, (z - 1) / (K - 1), z, np.minimum(p, 1))


def projected_amplitude(coefficients_uv: np.ndarray) -> np.ndarray:
    """Each window's amplitude along the mean phase of the other windows, in µV.

    Unlike |X_k| it is unbiased by noise: where there is no response its mean is 0.

    Parameters
    ----------
    coefficients_uv : ndarray of complex, shape (n_windows, ...)
        Of one condition.
    """
    others = coefficients_uv.sum(axis=0) - coefficients_uv
    size = np.abs(others)
    direction = np.divide(others, size, out=np.ones_like(others), where=size > 0)
    return (coefficients_uv * direction.conj()).real


def noise_corrected(amplitude_uv: np.ndarray, noise_uv2: np.ndarray) -> np.ndarray:
    """Amplitude without the noise's share: sqrt(max(|X̄|² − noise, 0)), in µV."""
    return np.sqrt(np.maximum(amplitude_uv**2 - noise_uv2, 0))


def decibel(power_ratio: np.ndarray) -> np.ndarray:
    """Power ratio in dB."""
    with np.errstate(divide="ignore"):
        return 10 * np.log10(power_ratio)


def measures(coefficients_uv: np.ndarray, neighbours_uv: np.ndarray, phase_locked: bool) -> dict:
    """Everything that is reported of one term in one condition.

    Parameters
    ----------
    coefficients_uv : ndarray of complex, shape (n_windows, n_sites)
        Referred to the onset of the flicker; at least three windows.
    neighbours_uv : ndarray of complex, shape (n_windows, n_sites, n_bins)
        At the neighbouring bins that hold noise only.
    phase_locked : bool
        Whether the flicker starts at a fixed phase; if not, what rests on phase is left out (NaN)
        and the SNR is that of total power.

    Returns
    -------
    dict of str to ndarray, shape (n_sites,)
        By column name.
    """
    K = len(coefficients_uv)
    noise = neighbour_noise(neighbours_uv)
    total_uv2 = (np.abs(coefficients_uv) ** 2).mean(axis=0)
    result = {
        "windows": K,
        "neighbours": noise.bins,
        "total_power_uv2": total_uv2,
        "total_noise_uv2": noise.total_uv2,
        "window_amplitude_uv": np.abs(coefficients_uv).mean(axis=0),
    }
    total_snr = total_uv2 / noise.total_uv2
    if not phase_locked:
        p = snr_p(total_snr, noise.bins, K)
        return result | {
            "snr": total_snr,
            "snr_db": decibel(total_snr),
            "snr_p": p,
            "detection_test": "total_snr",
            "detection_p": p,
        }

    amplitude = np.abs(coefficients_uv.mean(axis=0))
    low, high = amplitude_interval(coefficients_uv)
    snr = amplitude**2 / noise.evoked_uv2
    circular, circular_p = t2circ(coefficients_uv)
    elliptic, elliptic_p = hotelling(coefficients_uv)
    index, index_p = condition_index(coefficients_uv)
    is_circular = index_p >= CIRCULARITY_LEVEL
    phase, half_width = phase_interval(coefficients_uv)
    locking = phase_locking(coefficients_uv)
    return result | {
        "amplitude_uv": amplitude,
        "amplitude_low_uv": low,
        "amplitude_high_uv": high,
        "noise_uv2": noise.evoked_uv2,
        "amplitude_corrected_uv": noise_corrected(amplitude, noise.evoked_uv2),
        "amplitude_baseline_uv": amplitude - noise.mean_amplitude_uv,
        "projected_amplitude_uv": projected_amplitude(coefficients_uv).mean(axis=0),
        "snr": snr,
        "snr_db": decibel(snr),
        "snr_p": snr_p(snr, noise.bins),
        "amplitude_ratio": amplitude / noise.mean_amplitude_uv,
        "t2circ": circular,
        "t2circ_p": circular_p,
        "hotelling_t2": elliptic,
        "hotelling_p": elliptic_p,
        "condition_index": index,
        "condition_index_p": index_p,
        "detection_test": np.where(is_circular, "t2circ", "hotelling"),
        "detection_p": np.where(is_circular, circular_p, elliptic_p),
        "disc_radius_uv": disc_radius(coefficients_uv),
        "phase_rad": phase,
        "phase_half_width_rad": half_width,
        "itpc": locking.itpc,
        "ppc": locking.ppc,
        "rayleigh_z": locking.rayleigh_z,
        "rayleigh_p": locking.rayleigh_p,
    }
