"""From power spectra to rows: alpha in every condition at every site, and window by window."""

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from onbin import alpha, sites
from onbin.sites import Site


@dataclass(frozen=True)
class Band:
    """The individual alpha band of a person, or the fixed one where no frequency was found."""

    frequency: alpha.AlphaFrequency
    low_hz: float
    high_hz: float

    @property
    def columns(self) -> dict[str, Any]:
        """The columns that are the same for all of a person's rows."""
        return {
            "alpha_frequency_hz": self.frequency.peak_hz,
            "alpha_centre_hz": self.frequency.centre_of_gravity_hz,
            "alpha_found": self.frequency.reason or "yes",
            "band_low_hz": self.low_hz,
            "band_high_hz": self.high_hz,
        }


@dataclass(frozen=True)
class Spectra:
    """Power spectra of a person's windows.

    Attributes
    ----------
    frequencies_hz : ndarray, shape (n_frequencies,)
    psd_uv2_per_hz : ndarray, shape (n_windows, n_channels, n_frequencies)
    subtracted_uv2 : ndarray, shape (n_windows, n_channels)
        Power of the terms that were subtracted.
    condition, recording, window : ndarray, shape (n_windows,)
    channels : list of str
    """

    frequencies_hz: np.ndarray
    psd_uv2_per_hz: np.ndarray
    subtracted_uv2: np.ndarray
    condition: np.ndarray
    recording: np.ndarray
    window: np.ndarray
    channels: list[str]

    @classmethod
    def of(cls, stored: Mapping[str, np.ndarray]) -> "Spectra":
        """Take up stored arrays."""
        names = ("frequencies_hz", "subtracted_uv2", "condition", "recording", "window")
        return cls(
            psd_uv2_per_hz=stored["psd_uv2_per_hz"].astype(float),
            channels=[str(name) for name in stored["channel"]],
            **{name: stored[name] for name in names},
        )


def find_band(
    spectra: Spectra,
    region: Sequence[str],
    conditions: Sequence[str],
    search_hz: Sequence[float],
    half_width_hz: float,
    fixed_hz: Sequence[float],
    exclude_hz: Sequence[float],
) -> Band:
    """Individual alpha band, from the mean spectrum of a region's channels over some conditions.

    Parameters
    ----------
    spectra : Spectra
    region, conditions : sequence of str
        Channels and conditions that show the frequency; no conditions means all.
    search_hz, fixed_hz : sequence of two float
    half_width_hz : float
    exclude_hz : sequence of float
        Mains and terms, which the background is fitted without.
    """
    chosen = np.isin(spectra.condition, conditions) if len(conditions) else slice(None)
    channels = [spectra.channels.index(name) for name in region if name in spectra.channels]
    psd = spectra.psd_uv2_per_hz[chosen][:, channels]
    if len(psd) == 0:
        nothing = (np.nan,) * 4
        frequency = alpha.AlphaFrequency(*nothing, 0, 0, "no window shows it")
    else:
        frequency = alpha.individual_alpha_frequency(
            spectra.frequencies_hz,
            psd.mean(axis=0),
            search_hz=tuple(search_hz),
            exclude_hz=exclude_hz,
        )
    centre_hz = frequency.peak_hz
    if np.isnan(centre_hz):
        centre_hz = frequency.centre_of_gravity_hz
    if np.isnan(centre_hz):
        return Band(frequency, *fixed_hz)
    return Band(frequency, centre_hz - half_width_hz, centre_hz + half_width_hz)


def alpha_rows(
    spectra: Spectra,
    places: Sequence[Site],
    conditions: Mapping[str, Sequence[float]],
    band: Band,
    fixed_hz: Sequence[float],
    right: str | None,
    left: str | None,
) -> Iterator[dict[str, Any]]:
    """Rows of the table of alpha; a region's spectrum is the mean of its channels' spectra.

    Parameters
    ----------
    spectra : Spectra
    places : sequence of Site
    conditions : mapping
        By name: the frequencies in Hz that its aperiodic fit is made without.
    band : Band
    fixed_hz : sequence of two float
    right, left : str, optional
        Regions of the lateralisation.
    """
    matrix = sites.averaging(places, spectra.channels)
    frequencies_hz = spectra.frequencies_hz
    for condition, exclude_hz in conditions.items():
        chosen = spectra.condition == condition
        if not chosen.any():
            continue
        psd = matrix @ spectra.psd_uv2_per_hz[chosen].mean(axis=0)
        subtracted_uv2 = matrix @ spectra.subtracted_uv2[chosen].mean(axis=0)
        power_uv2 = alpha.band_power(frequencies_hz, psd, band.low_hz, band.high_hz)
        by_name = dict(zip((site.name for site in places), power_uv2, strict=True))
        sides = [by_name[right], by_name[left]] if right and left else None
        for index, site in enumerate(places):
            fit = alpha.fit_aperiodic(frequencies_hz, psd[index], exclude_hz=exclude_hz)
            bounds = (frequencies_hz, psd[index])
            yield {
                "condition": condition,
                "site": site.name,
                "site_kind": site.kind,
                "channels": " ".join(site.channels),
                "windows": int(chosen.sum()),
                **band.columns,
                "alpha_power_uv2": power_uv2[index],
                "alpha_power_db": 10 * np.log10(power_uv2[index]),
                "alpha_fixed_uv2": alpha.band_power(*bounds, *fixed_hz),
                "alpha_periodic_uv2": alpha.periodic_power(*bounds, fit, band.low_hz, band.high_hz),
                "alpha_relative": alpha.relative_power(*bounds, band.low_hz, band.high_hz),
                "alpha_lateralisation": (
                    alpha.lateralisation(*sides) if sides and site.name == right else np.nan
                ),
                "aperiodic_offset": fit.offset,
                "aperiodic_exponent": fit.exponent,
                "aperiodic_r2": fit.r_squared,
                "subtracted_uv2": subtracted_uv2[index],
            }


def window_rows(spectra: Spectra, places: Sequence[Site], band: Band) -> Iterator[dict[str, Any]]:
    """Alpha power of each region in each window."""
    regions = [site for site in places if site.kind == "region"]
    matrix = sites.averaging(regions, spectra.channels)
    psd = matrix @ spectra.psd_uv2_per_hz
    power_uv2 = alpha.band_power(spectra.frequencies_hz, psd, band.low_hz, band.high_hz)
    for number, powers in enumerate(power_uv2):
        for site, value in zip(regions, powers, strict=True):
            yield {
                "recording": str(spectra.recording[number]),
                "window": int(spectra.window[number]),
                "window_number": number + 1,
                "condition": str(spectra.condition[number]),
                "site": site.name,
                "alpha_power_uv2": value,
                "log_alpha": np.log10(value),
            }
