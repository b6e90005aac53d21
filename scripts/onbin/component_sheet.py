"""The evidence on independent components, for a person's eye: map, spectrum and trace of each."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from onbin.drawing import INK, MUTED, PALE, WIDTH_IN, new_figure, styled
from onbin.sensors import sphere_centre, spline_weights

ROW_IN, MARGIN_IN = 0.62, 1.1
SHEET_DPI = 100
SPECTRUM_HZ, SPECTRUM_WINDOW_S = (1.0, 45.0), 4.0
TRACE_S = 8.0
TRACE_RATE_HZ = 100.0  # enough for what is seen on paper
PIXELS = 41
FEWEST_FOR_MAP = 8
HALF_ROW = 0.42  # of a row, above and below its middle
DIVERGING = "PuOr"


@dataclass(frozen=True)
class Evidence:
    """What the sheet shows of one component.

    Attributes
    ----------
    title : str
        Number and peak channel, as decisions name it.
    about : str
        Class, probability, shares.
    map_uv : ndarray, shape (n_channels,)
    spectrum_db : ndarray, shape (n_frequencies,)
    trace : ndarray, shape (n_times,)
        The stretch where it is largest, in any unit.
    trace_from_s : float
        Where that stretch begins.
    """

    title: str
    about: str
    map_uv: np.ndarray
    spectrum_db: np.ndarray
    trace: np.ndarray
    trace_from_s: float


def spectrum(source: np.ndarray, rate_hz: float) -> tuple[np.ndarray, np.ndarray]:
    """Frequencies (Hz) and median spectrum (dB) of a source, both shape (n_frequencies,)."""
    from scipy.signal import welch

    n_window = min(round(SPECTRUM_WINDOW_S * rate_hz), source.size)
    frequencies_hz, density = welch(source, rate_hz, nperseg=n_window, average="median")
    shown = (frequencies_hz >= SPECTRUM_HZ[0]) & (frequencies_hz <= SPECTRUM_HZ[1])
    return frequencies_hz[shown], 10 * np.log10(np.maximum(density[shown], 1e-30))


def largest_stretch(source: np.ndarray, rate_hz: float) -> tuple[np.ndarray, float]:
    """Stretch about the largest excursion of a source, thinned for paper, and where it begins."""
    length = min(round(TRACE_S * rate_hz), source.size)
    middle = int(np.abs(source - np.median(source)).argmax())
    start = min(max(middle - length // 2, 0), source.size - length)
    step = max(int(rate_hz // TRACE_RATE_HZ), 1)
    return source[start : start + length : step], start / rate_hz


@styled
def sheet(
    evidence: Sequence[Evidence],
    frequencies_hz: np.ndarray,
    positions_m: np.ndarray,
    tags_hz: Mapping[str, float],
    title: str,
) -> Any:
    """Draw a row for each component.

    Parameters
    ----------
    evidence : sequence of Evidence
    frequencies_hz : ndarray, shape (n_frequencies,)
        Of the spectra.
    positions_m : ndarray, shape (n_channels, 3)
    tags_hz : mapping of str to float
        Marked in the spectra.
    title : str
    """
    n_rows = max(len(evidence), 1)
    figure = new_figure(WIDTH_IN, MARGIN_IN + ROW_IN * n_rows)
    figure.suptitle(title, x=0.01, ha="left", parse_math=False)
    words, maps, spectra, traces = figure.subplots(
        1, 4, sharey=True, gridspec_kw={"width_ratios": [2.2, 0.62, 2.2, 2.9]}
    )
    for axes in (words, maps, spectra, traces):
        axes.set_yticks([])
        axes.spines[["left", "bottom"]].set_visible(False)
        axes.set_xticks([])
    words.set_ylim(n_rows - 0.5, -0.5)
    grid = head_grid(positions_m)
    for row, item in enumerate(evidence):
        words.text(0, row - 0.16, item.title, weight="bold", va="center", parse_math=False)
        words.text(0, row + 0.2, item.about, size=7, va="center", color=MUTED, parse_math=False)
        if grid is not None:
            _map(maps, grid, item.map_uv, row)
        spectra.plot(frequencies_hz, _fitted(item.spectrum_db, row), color=INK, lw=0.8)
        times_s = np.linspace(0, TRACE_S, item.trace.size)
        traces.plot(times_s, _fitted(item.trace, row), color=INK, lw=0.6)
        traces.text(
            1.01 * TRACE_S, row, f"from {item.trace_from_s:.0f} s", size=6, color=MUTED, va="center"
        )
        for axes in (words, spectra, traces):
            axes.axhline(row + 0.5, color=PALE, lw=0.6)
    for name, frequency_hz in tags_hz.items():
        spectra.axvline(frequency_hz, color=MUTED, lw=0.6, ls="--")
        spectra.annotate(
            name.replace("_", " "), (frequency_hz, 0), xycoords=("data", "axes fraction"),
            xytext=(2, 2), textcoords="offset points", size=6, color=MUTED, rotation=90,
            parse_math=False,
        )  # fmt: skip
    words.set_title("component", loc="left")
    maps.set_title("nose up")
    spectra.set_title("spectrum (dB, each its own scale)")
    traces.set_title(f"{TRACE_S:g} s where it is largest (its own scale)")
    spectra.set_xticks(range(0, int(SPECTRUM_HZ[1]) + 1, 10))
    spectra.set_xlim(*SPECTRUM_HZ)
    spectra.set_xlabel("Hz")
    traces.set_xticks(range(0, int(TRACE_S) + 1, 2))
    traces.set_xlim(0, 1.12 * TRACE_S)
    traces.set_xlabel("s")
    words.set_xlim(0, 1)
    maps.set_xlim(-0.5, 0.5)
    return figure


def _fitted(values: np.ndarray, row: int) -> np.ndarray:
    """Values brought into the height of a row, larger ones above."""
    low, high = values.min(initial=np.inf), values.max(initial=-np.inf)
    return row + HALF_ROW - 2 * HALF_ROW * (values - low) / max(high - low, 1e-12)


def head_grid(positions_m: np.ndarray) -> tuple[np.ndarray, np.ndarray] | None:
    """What brings a map onto a disc of the head seen from above, nose up.

    Returns
    -------
    weights : ndarray, shape (n_inside, n_channels)
    inside : ndarray of bool, shape (PIXELS, PIXELS)
        Pixels on the head, the first row at the nose. None is returned where there are too few
        positions.
    """
    if len(positions_m) < FEWEST_FOR_MAP or not np.isfinite(positions_m).all():
        return None
    seen_m = positions_m - sphere_centre(positions_m)
    heights = seen_m[:, 2] / np.linalg.norm(seen_m, axis=1)
    lowest_rad = np.arccos(np.clip(heights, -1, 1)).max()
    side = np.linspace(-1, 1, PIXELS)
    x, y = np.meshgrid(side, -side)
    radius = np.hypot(x, y)
    inside = radius <= 1
    polar_rad, around_rad = radius[inside] * lowest_rad, np.arctan2(y, x)[inside]
    targets = np.column_stack(
        [
            np.sin(polar_rad) * np.cos(around_rad),
            np.sin(polar_rad) * np.sin(around_rad),
            np.cos(polar_rad),
        ]
    )
    return spline_weights(seen_m, targets), inside


def _map(axes: Any, grid: tuple[np.ndarray, np.ndarray], map_uv: np.ndarray, row: int) -> None:
    weights, inside = grid
    image = np.full(inside.shape, np.nan)
    image[inside] = weights @ map_uv
    size = np.nanmax(np.abs(image))
    axes.imshow(
        image, extent=(-HALF_ROW, HALF_ROW, row + HALF_ROW, row - HALF_ROW), cmap=DIVERGING,
        vmin=-size, vmax=size, aspect="auto", origin="upper",
    )  # fmt: skip
