"""Zero-phase FIR filters, decimation in blocks, line noise, and what a chain does to a sinusoid.

Filters are windowed-sinc designs with an odd, symmetric kernel whose delay is taken out, so that
no phase is changed. A recording's ends are continued by odd reflection.
"""

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from onbin.errors import DataError, SettingsError
from onbin.tagging import ANTIALIAS_PASSBAND, LINE_REACH_HZ, other_removal

# Transition width times kernel length over sampling rate (Widmann, Schröger & Maess 2015).
WIDTH_FACTORS = {"hamming": 3.3, "blackman": 5.5}


@dataclass(frozen=True)
class FilterDesign:
    """A windowed-sinc, zero-phase FIR filter, described by its figures.

    Attributes
    ----------
    kind : str
        ``high-pass``, ``low-pass``, ``anti-alias`` or ``band-stop``.
    sfreq_hz : float
        Sampling rate that the filter is made for.
    edges_hz : tuple of float
        Ends of the pass bands.
    transition_hz : float
        Width of each transition band, from pass band to stop band.
    half_amplitude_hz : tuple of float
        The -6 dB points, in the middle of each transition.
    n_taps : int
        Length of the kernel, an odd number.
    window : str
        Window of the sinc.
    """

    kind: str
    sfreq_hz: float
    edges_hz: tuple[float, ...]
    transition_hz: float
    half_amplitude_hz: tuple[float, ...]
    n_taps: int
    window: str = "hamming"

    @cached_property
    def taps(self) -> np.ndarray:
        """The kernel, shape (n_taps,).

        High-pass and band-stop kernels are a unit impulse minus low-pass ones, so that a constant
        is taken out exactly.
        """
        from scipy.signal import firwin

        low_passes = [
            firwin(self.n_taps, cutoff_hz, window=self.window, fs=self.sfreq_hz)
            for cutoff_hz in self.half_amplitude_hz
        ]
        impulse = np.zeros(self.n_taps)
        impulse[self.n_taps // 2] = 1.0
        if self.kind == "high-pass":
            return impulse - low_passes[0]
        if self.kind == "band-stop":
            return low_passes[0] + impulse - low_passes[1]
        return low_passes[0]

    def gain(self, frequencies_hz: Iterable[float]) -> np.ndarray:
        """Real gain of the zero-phase kernel at any frequencies, shape (n_frequencies,)."""
        lags = np.arange(self.n_taps) - self.n_taps // 2
        angles = 2 * np.pi * np.outer(np.asarray(list(frequencies_hz)), lags) / self.sfreq_hz
        return np.cos(angles) @ self.taps


def _kernel_length(window: str, sfreq_hz: float, transition_hz: float) -> int:
    # Rounded first, so that 3.3 * 500 is 1650 whatever the last bit says.
    n_taps = int(np.ceil(round(WIDTH_FACTORS[window] * sfreq_hz / transition_hz, 6)))
    return n_taps + 1 - n_taps % 2


def design_highpass(sfreq_hz: float, edge_hz: float) -> FilterDesign:
    """Design a high-pass whose pass band begins at `edge_hz`.

    The transition is a quarter of the edge, at least 2 Hz and at most the edge itself, and lies
    below the edge (common practice).
    """
    if not 0 < edge_hz < sfreq_hz / 2:
        raise ValueError(f"a high-pass at {edge_hz} Hz needs an edge within 0-{sfreq_hz / 2} Hz")
    transition_hz = min(max(0.25 * edge_hz, 2.0), edge_hz)
    return FilterDesign(
        kind="high-pass",
        sfreq_hz=sfreq_hz,
        edges_hz=(edge_hz,),
        transition_hz=transition_hz,
        half_amplitude_hz=(edge_hz - transition_hz / 2,),
        n_taps=_kernel_length("hamming", sfreq_hz, transition_hz),
    )


def design_lowpass(sfreq_hz: float, edge_hz: float) -> FilterDesign:
    """Design a low-pass whose pass band ends at `edge_hz`.

    The transition is a quarter of the edge, at least 2 Hz and at most what is left below half the
    sampling rate, and lies above the edge (common practice).
    """
    if not 0 < edge_hz < sfreq_hz / 2:
        raise ValueError(f"a low-pass at {edge_hz} Hz needs an edge within 0-{sfreq_hz / 2} Hz")
    transition_hz = min(max(0.25 * edge_hz, 2.0), sfreq_hz / 2 - edge_hz)
    return FilterDesign(
        kind="low-pass",
        sfreq_hz=sfreq_hz,
        edges_hz=(edge_hz,),
        transition_hz=transition_hz,
        half_amplitude_hz=(edge_hz + transition_hz / 2,),
        n_taps=_kernel_length("hamming", sfreq_hz, transition_hz),
    )


def design_antialias(sfreq_hz: float, factor: int) -> FilterDesign:
    """Design the low-pass that comes before keeping one sample in `factor`.

    Its pass band ends at `tagging.ANTIALIAS_PASSBAND` of the new rate and its stop band begins at
    half the new rate, so that nothing folds back; a Blackman window holds the stop band near
    -74 dB.
    """
    rate_hz = sfreq_hz / factor
    return FilterDesign(
        kind="anti-alias",
        sfreq_hz=sfreq_hz,
        edges_hz=(ANTIALIAS_PASSBAND * rate_hz,),
        transition_hz=0.1 * rate_hz,
        half_amplitude_hz=(0.45 * rate_hz,),
        n_taps=_kernel_length("blackman", sfreq_hz, 0.1 * rate_hz),
        window="blackman",
    )


def design_notch(
    sfreq_hz: float, centre_hz: float, stop_width_hz: float = 1.0, transition_hz: float = 1.0
) -> FilterDesign:
    """Design a narrow band-stop about `centre_hz`.

    `stop_width_hz` is the whole width of the stop band; a transition lies on either side of it.
    """
    half_hz = (stop_width_hz + transition_hz) / 2
    edge_hz = half_hz + transition_hz / 2
    return FilterDesign(
        kind="band-stop",
        sfreq_hz=sfreq_hz,
        edges_hz=(centre_hz - edge_hz, centre_hz + edge_hz),
        transition_hz=transition_hz,
        half_amplitude_hz=(centre_hz - half_hz, centre_hz + half_hz),
        n_taps=_kernel_length("hamming", sfreq_hz, transition_hz),
    )


def antialias(recorded_rate_hz: float, factor: int) -> list[FilterDesign]:
    """Filter that came before decimation by `factor`: none where nothing was decimated."""
    return [design_antialias(recorded_rate_hz, factor)] if factor > 1 else []


def design_row(design: FilterDesign) -> dict:
    """Row of the table of filters: ends of pass bands, -6 dB points, transition, length."""
    low, high = design.kind in ("high-pass", "band-stop"), design.kind != "high-pass"
    return {
        "filter_kind": design.kind,
        "filter_rate_hz": design.sfreq_hz,
        "edge_low_hz": design.edges_hz[0] if low else None,
        "edge_high_hz": design.edges_hz[-1] if high else None,
        "half_low_hz": design.half_amplitude_hz[0] if low else None,
        "half_high_hz": design.half_amplitude_hz[-1] if high else None,
        "transition_hz": design.transition_hz,
        "filter_window": design.window,
        "n_taps": design.n_taps,
        "kernel_s": design.n_taps / design.sfreq_hz,
    }


def _continued(signal: np.ndarray, before: int, after: int) -> np.ndarray:
    pad = [(0, 0)] * (signal.ndim - 1) + [(before, after)]
    return np.pad(signal, pad, mode="reflect", reflect_type="odd")


def apply_fir(data_uv: np.ndarray, taps: np.ndarray) -> np.ndarray:
    """Filter each channel with an odd, symmetric kernel, without delay.

    Parameters
    ----------
    data_uv : ndarray, shape (n_times,) or (n_channels, n_times)
        Signal. Channels are filtered one by one, so that little more than the result is in memory.
    taps : ndarray, shape (n_taps,)
        Kernel of odd length.

    Returns
    -------
    ndarray
        The filtered signal, of the same shape.

    Raises
    ------
    DataError
        When the signal is not longer than half the kernel.
    """
    from scipy.signal import oaconvolve

    half = taps.size // 2
    if data_uv.shape[-1] <= half:
        raise DataError(
            f"The recording has {data_uv.shape[-1]} samples, and the filter reaches {half} samples "
            "to either side: use a higher high-pass edge, or leave the recording out."
        )
    rows = np.atleast_2d(data_uv)
    filtered = np.empty(rows.shape)
    for channel, row in enumerate(rows):
        filtered[channel] = oaconvolve(_continued(row, half, half), taps, mode="valid")
    return filtered.reshape(data_uv.shape)


def decimate(
    read_block: Callable[[int, int], np.ndarray],
    n_times: int,
    sfreq_hz: float,
    factor: int,
    block_s: float = 60.0,
) -> np.ndarray:
    """Anti-alias filter a recording and keep one sample in `factor`, block by block.

    Parameters
    ----------
    read_block : callable
        ``read_block(start, stop)`` gives the samples ``start <= n < stop``, (n_channels, n), µV.
    n_times : int
        Samples in the whole recording.
    sfreq_hz : float
        Sampling rate of the recording.
    factor : int
        Old rate over new rate; 1 changes nothing.
    block_s : float
        Length of a block. It bounds the memory and has no bearing on the result.

    Returns
    -------
    ndarray, shape (n_channels, ceil(n_times / factor))
        The signal at ``sfreq_hz / factor``; its first sample is the recording's first sample.
    """
    from scipy.signal import oaconvolve

    taps = design_antialias(sfreq_hz, factor).taps if factor > 1 else np.ones(1)
    half = taps.size // 2
    if n_times <= half:
        raise DataError(
            f"The recording has {n_times} samples, too few to bring its rate of {sfreq_hz:g} Hz "
            f"down by {factor}: leave it out."
        )
    n_kept = -(-n_times // factor)
    block = max(1, int(block_s * sfreq_hz / factor))
    decimated = None
    for first in range(0, n_kept, block):
        last = min(first + block, n_kept)
        start, stop = first * factor - half, (last - 1) * factor + half + 1
        signal = np.asarray(read_block(max(start, 0), min(stop, n_times)), dtype=float)
        signal = _continued(signal, max(-start, 0), max(stop - n_times, 0))
        if decimated is None:
            decimated = np.empty((signal.shape[0], n_kept))
        for channel, row in enumerate(signal):
            decimated[channel, first:last] = oaconvolve(row, taps, mode="valid")[::factor]
    return decimated


def subtract_line(
    data_uv: np.ndarray,
    sfreq_hz: float,
    line_hz: float,
    n_harmonics: int,
    window_s: float = 4.0,
) -> np.ndarray:
    """Fit and subtract sinusoids at the line frequency and its multiples, adaptively in time.

    In half-overlapping windows the sinusoids are fitted by Hann-weighted least squares; the fits
    are joined with Hann weights. What lies more than ``2 / window_s`` from them is left alone,
    and since only sinusoids are taken out, nothing rings elsewhere.

    Parameters
    ----------
    data_uv : ndarray, shape (n_times,) or (n_channels, n_times)
        Signal.
    sfreq_hz, line_hz : float
        Sampling rate and line frequency.
    n_harmonics : int
        How many multiples to take out, the line frequency itself being the first; those within
        ``2 / window_s`` of half the sampling rate or above it are passed over.
    window_s : float
        Length of a window: shorter follows changes faster and touches a wider band.

    Returns
    -------
    ndarray
        The signal without the line, of the same shape.
    """
    n_times = data_uv.shape[-1]
    n_window = min(round(window_s * sfreq_hz), n_times)
    multiples_hz = line_hz * np.arange(1, n_harmonics + 1)
    multiples_hz = multiples_hz[multiples_hz < sfreq_hz / 2 - 2 / window_s]
    if multiples_hz.size == 0:
        return data_uv.copy()
    # A Hann window taken between its zeros: the weight is positive at a recording's very ends.
    weight = np.sin(np.pi * (np.arange(n_window) + 0.5) / n_window) ** 2
    angles = 2 * np.pi * np.outer(np.arange(n_window), multiples_hz) / sfreq_hz
    basis = np.hstack([np.cos(angles), np.sin(angles)])
    root = np.sqrt(weight)[:, None]
    fit = np.linalg.pinv(root * basis) * root.T
    weighted_basis = weight[:, None] * basis
    starts = np.arange(0, n_times - n_window, max(n_window // 2, 1)).tolist()
    starts.append(n_times - n_window)
    total_weight = np.zeros(n_times)
    for start in starts:
        total_weight[start : start + n_window] += weight
    rows = np.atleast_2d(data_uv)
    cleaned = np.empty(rows.shape)
    for channel, row in enumerate(rows):
        line = np.zeros(n_times)
        for start in starts:
            window = slice(start, start + n_window)
            line[window] += weighted_basis @ (fit @ row[window])
        cleaned[channel] = row - line / total_weight
    return cleaned.reshape(data_uv.shape)


def check_line(
    terms_hz: Iterable[float], line_hz: float, resolution_hz: float
) -> list[tuple[float, float]]:
    """Find the terms that lie within a bin of the line frequency or of one of its multiples.

    Returns
    -------
    list of tuple
        Pairs (term, multiple of the line frequency), Hz.
    """
    pairs = []
    for term_hz in terms_hz:
        multiple_hz = max(round(term_hz / line_hz), 1) * line_hz
        if abs(term_hz - multiple_hz) <= resolution_hz * (1 + 1e-9):
            pairs.append((float(term_hz), float(multiple_hz)))
    return pairs


def measured_gain(
    process: Callable[[np.ndarray], np.ndarray],
    frequencies_hz: Iterable[float],
    sfreq_hz: float,
    duration_s: float,
) -> np.ndarray:
    """Measure what a chain does to a sinusoid, by passing sinusoids through it.

    Parameters
    ----------
    process : callable
        The chain, from data to data, (n_channels, n_times); it must treat channels one by one.
    frequencies_hz : iterable of float
        Frequencies of the unit sinusoids.
    sfreq_hz : float
        Sampling rate.
    duration_s : float
        Length of the sinusoids. The middle half is measured: let it be at least twice as long as
        the longest kernel, so that the ends have no part in it.

    Returns
    -------
    ndarray of complex, shape (n_frequencies,)
        Gain: its angle is 0 for a chain without delay.
    """
    frequencies_hz = np.asarray(list(frequencies_hz), dtype=float)
    n_times = round(duration_s * sfreq_hz)
    angles = 2 * np.pi * np.outer(frequencies_hz, np.arange(n_times)) / sfreq_hz
    passed = process(np.cos(angles))
    middle = slice(n_times // 4, n_times - n_times // 4)
    gains = np.empty(frequencies_hz.size, dtype=complex)
    for row, (angle, output) in enumerate(zip(angles[:, middle], passed[:, middle], strict=True)):
        basis = np.column_stack([np.cos(angle), -np.sin(angle), np.ones(angle.size)])
        real, imaginary, _ = np.linalg.lstsq(basis, output, rcond=None)[0]
        gains[row] = real + 1j * imaginary
    return gains


LINE_WINDOW_S = float(2 / LINE_REACH_HZ["fit"])


@dataclass(frozen=True)
class FilterChain:
    """High-pass, low-pass and line removal as one function of data.

    Attributes
    ----------
    sfreq_hz : float
        Sampling rate.
    designs : tuple of FilterDesign
        Applied in this order.
    line_hz : float or None
        Line frequency; None where nothing is known of it or nothing is done about it.
    fit_line : bool
        Whether the line is fitted and subtracted after the filters.
    """

    sfreq_hz: float
    designs: tuple[FilterDesign, ...]
    line_hz: float | None
    fit_line: bool

    @classmethod
    def design(
        cls,
        sfreq_hz: float,
        highpass_hz: float,
        lowpass_hz: float,
        line_hz: float | None,
        line_removal: str,
    ) -> "FilterChain":
        """Design the chain; `line_removal` is ``fit``, ``notch`` or ``none``."""
        if line_removal == "none":
            line_hz = None
        designs = [design_highpass(sfreq_hz, highpass_hz), design_lowpass(sfreq_hz, lowpass_hz)]
        if line_hz and line_removal == "notch":
            multiples = np.arange(line_hz, sfreq_hz / 2 - 2, line_hz)
            designs += [design_notch(sfreq_hz, float(centre_hz)) for centre_hz in multiples]
        return cls(sfreq_hz, tuple(designs), line_hz, bool(line_hz) and line_removal == "fit")

    @property
    def line_removal(self) -> str:
        """How the line is taken out, in the words of the settings."""
        return "fit" if self.fit_line else "notch" if self.line_hz else "none"

    def require_free_of_line(self, terms_hz: Iterable[float]) -> None:
        """See that no term is so near to the line that its removal would take the response out.

        Raises
        ------
        SettingsError
            With what other way there is.
        """
        if self.line_hz is None:
            return
        reach_hz = float(LINE_REACH_HZ[self.line_removal])
        pairs = check_line(terms_hz, self.line_hz, reach_hz)
        if pairs:
            near = "; ".join(f"{term:.4g} Hz and {multiple:g} Hz" for term, multiple in pairs)
            nearest_hz = min(abs(term - multiple) for term, multiple in pairs)
            raise SettingsError(
                f"the mains lies on what is to be measured ({near}): line_removal: "
                f"{self.line_removal} reaches {reach_hz:g} Hz. Set filter.line_removal: "
                f"{other_removal(self.line_removal, nearest_hz)}, or measure fewer harmonics."
            )

    def line_rows(self) -> list[dict]:
        """Rows of the table of filters for a line that is fitted and subtracted."""
        if not self.fit_line:
            return []
        reach_hz = float(LINE_REACH_HZ["fit"])
        return [
            {
                "filter_kind": f"fit and subtraction at {multiple_hz:g} Hz",
                "filter_rate_hz": self.sfreq_hz,
                "edge_low_hz": multiple_hz - reach_hz,
                "edge_high_hz": multiple_hz + reach_hz,
                "filter_window": "hann",
                "kernel_s": LINE_WINDOW_S,
            }
            for multiple_hz in np.arange(self.line_hz, self.sfreq_hz / 2 - reach_hz, self.line_hz)
        ]

    def __call__(self, data: np.ndarray) -> np.ndarray:
        """Filter each channel, shape (n_channels, n_times)."""
        for design in self.designs:
            data = apply_fir(data, design.taps)
        if self.fit_line:
            multiples = int(self.sfreq_hz / 2 / self.line_hz)
            data = subtract_line(data, self.sfreq_hz, self.line_hz, multiples, LINE_WINDOW_S)
        return data

    def gains(self, frequencies_hz: Iterable[float]) -> np.ndarray:
        """Measured complex gain at frequencies, see `measured_gain`."""
        longest_s = max(design.n_taps for design in self.designs) / self.sfreq_hz
        return measured_gain(self, frequencies_hz, self.sfreq_hz, max(4 * longest_s, 20.0))


def require_gains(labels: Iterable[str], gains: np.ndarray, tolerance: float) -> None:
    """See that every term passes the filters.

    Parameters
    ----------
    labels : iterable of str
        Names of the terms.
    gains : ndarray of complex, shape (n_terms,)
    tolerance : float
        How far a gain may be from 1.

    Raises
    ------
    SettingsError
        If one does not.
    """
    refused = [
        f"{label}: gain {abs(gain):.4f}"
        for label, gain in zip(labels, gains, strict=True)
        if abs(gain - 1) > tolerance
    ]
    if refused:
        raise SettingsError(
            f"the filters change what is to be measured by more than {tolerance:.0%} "
            f"({'; '.join(refused)}). Lower filter.highpass_hz, raise filter.lowpass_hz, or "
            "measure fewer harmonics."
        )
