"""Sites: the channels that all of a participant's recordings have, and the regions of them."""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from onbin.errors import DataError


@dataclass(frozen=True)
class Site:
    """A channel or a region.

    Attributes
    ----------
    name : str
    kind : str
        ``channel`` or ``region``.
    channels : tuple of str
    """

    name: str
    kind: str
    channels: tuple[str, ...]


def common_sites(
    recordings: Iterable[Sequence[str]], regions: Mapping[str, Sequence[str]]
) -> list[Site]:
    """Channels that every recording has, in the order of the first, then the regions.

    Raises
    ------
    DataError
        If a region has none of its channels.
    """
    first, *others = recordings
    shared = [name for name in first if all(name in names for names in others)]
    sites = [Site(name, "channel", (name,)) for name in shared]
    for name, wanted in regions.items():
        channels = tuple(channel for channel in wanted if channel in shared)
        if not channels:
            raise DataError(
                f"the region {name} has none of its channels ({', '.join(wanted)}). The recording "
                f"has {', '.join(shared)}. Change regions in the settings."
            )
        sites.append(Site(name, "region", channels))
    return sites


def averaging(sites: Sequence[Site], channels: Sequence[str]) -> np.ndarray:
    """Matrix that makes the sites' signals from the channels', shape (n_sites, n_channels)."""
    matrix = np.zeros((len(sites), len(channels)))
    for row, site in enumerate(sites):
        matrix[row, [channels.index(name) for name in site.channels]] = 1 / len(site.channels)
    return matrix
