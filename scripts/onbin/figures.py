"""The figures of the report. Each function takes plain numbers and returns a figure.

Colour never stands alone: markers, line styles or words say the same, and a table of the report or
of the results has the numbers.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from onbin.drawing import INK, MUTED, PALE, WIDTH_IN, new_figure, styled

ATTENDED, UNATTENDED = "flickers, attended", "flickers, not attended"
FLICKERS, STILL = "flickers", "does not flicker"
ROLES = {  # colour and marker of what a tag does in a condition
    ATTENDED: ("#b5411b", "o"),
    UNATTENDED: ("#1d6f8c", "s"),
    FLICKERS: ("#5a3d8a", "D"),
    STILL: ("#7d8590", "^"),
}
HEAT = "YlGnBu"
FEWEST_FOR_MAP = 4  # positions, to interpolate between
SHOWN_HZ = (2.0, 40.0)
MOST_COLUMNS = 4


@dataclass(frozen=True)
class Quality:
    """One person: windows kept and placed by condition, bad channels, components by class."""

    participant: str
    in_study: bool
    windows: Mapping[str, tuple[int, int]]
    bad_share: float
    removed: Mapping[str, int]


@dataclass(frozen=True)
class Neighbourhood:
    """Amplitude at a tag and its neighbouring bins in one condition, shape (n_people, 1 + n_bins).

    The first is the tag itself; `used` tells which bins the noise rests on.
    """

    tag: str
    condition: str
    role: str
    frequencies_hz: np.ndarray
    used: np.ndarray
    amplitude_uv: np.ndarray
    evoked: bool


@dataclass(frozen=True)
class Spectrum:
    """Mean power spectrum of one person in one condition, µV²/Hz."""

    participant: str
    in_study: bool
    condition: str
    frequencies_hz: np.ndarray
    psd_uv2_per_hz: np.ndarray


@dataclass(frozen=True)
class MapRow:
    """A row of maps: values by channel for each condition, each with a line to say what it is."""

    title: str
    unit: str
    values: Mapping[str, Mapping[str, float]]
    lines: Sequence[str]


def words(name: str) -> str:
    """A name from the settings as words."""
    return name.replace("_", " ")


@styled
def note(text: str) -> Any:
    """A figure that says why there is nothing to draw."""
    figure = new_figure(WIDTH_IN, 1.0)
    figure.text(0.5, 0.5, text, ha="center", va="center")
    return figure


@styled
def quality(people: Sequence[Quality], min_windows: Mapping[str, int], max_bad_share: float) -> Any:
    """Windows kept, bad channels and components removed, person by person.

    `min_windows` is by condition, and the conditions are shown in its order.
    """
    import seaborn

    conditions = list(min_windows)

    height_in = 1.7 + 0.24 * len(people)
    figure = new_figure(max(WIDTH_IN, 5.4 + 0.9 * len(conditions)), height_in)
    kept_axes, bad_axes, removed_axes = figure.subplots(
        1, 3, width_ratios=(max(1.0, 0.45 * len(conditions)), 1, 1.2)
    )
    rows = np.arange(len(people)) + 0.5
    labels = [p.participant if p.in_study else f"{p.participant} (set aside)" for p in people]
    shares = np.full((len(people), len(conditions)), np.nan)
    texts = np.full(shares.shape, "", dtype=object)
    for row, person in enumerate(people):
        for column, condition in enumerate(conditions):
            kept, placed = person.windows.get(condition, (0, 0))
            if placed:
                shares[row, column] = 100 * kept / placed
                texts[row, column] = f"{kept}/{placed}" + (
                    " !" if kept < min_windows[condition] else ""
                )
    seaborn.heatmap(
        shares, ax=kept_axes, annot=texts, fmt="", cmap=HEAT, vmin=0, vmax=130, linewidths=0.6,
        cbar=False, annot_kws={"size": 7.5}, xticklabels=[_two_lines(c) for c in conditions],
        yticklabels=labels,
    )  # fmt: skip
    for row, column in np.argwhere(np.isnan(shares)):
        kept_axes.text(column + 0.3, row + 0.65, "none", size=7.5, color=MUTED)
    kept_axes.tick_params(length=0, rotation=0)
    kept_axes.set_title("Windows kept / placed\n(darker: larger share)")

    bad = [100 * person.bad_share for person in people]
    bad_axes.barh(rows, bad, height=0.6, color=ROLES[UNATTENDED][0])
    bad_axes.axvline(100 * max_bad_share, color=INK, linestyle="--", linewidth=1)
    bad_axes.set_xlim(0, max([100 * max_bad_share, *bad]) * 1.15 or 1)
    bad_axes.set_title("Bad channels, %\n(dashed: most that is allowed)")

    classes = sorted({name for person in people for name in person.removed})
    shades = dict(zip(classes, seaborn.color_palette("mako", len(classes)), strict=True))
    left = np.zeros(len(people))
    for name, hatch in zip(classes, ["", "///", "...", "xxx", "\\\\\\", "++"] * 2, strict=False):
        counts = np.array([person.removed.get(name, 0) for person in people])
        removed_axes.barh(
            rows, counts, left=left, height=0.6, color=shades[name], hatch=hatch,
            edgecolor="white", linewidth=0, label=name,
        )  # fmt: skip
        left += counts
    removed_axes.set_xlim(0, max(left.max(initial=0), 1) * 1.05)
    removed_axes.xaxis.get_major_locator().set_params(integer=True)
    removed_axes.set_title("Components removed,\nby class")
    if classes:
        removed_axes.legend(loc="upper center", bbox_to_anchor=(0.5, -0.4 / height_in), ncols=2)
    for axes in (bad_axes, removed_axes):
        axes.set_ylim(len(people), 0)
        axes.set_yticks([])
    return figure


@styled
def bins(neighbourhoods: Sequence[Neighbourhood]) -> Any:
    """Mean amplitude at each tag and at its neighbouring bins, one panel a tag and condition."""
    tags = list(dict.fromkeys(n.tag for n in neighbourhoods))
    conditions = list(dict.fromkeys(n.condition for n in neighbourhoods))
    figure = new_figure(max(WIDTH_IN, 2.1 * len(conditions)), 0.7 + 2.0 * len(tags))
    grid = figure.subplots(len(tags), len(conditions), sharex="row", sharey="row", squeeze=False)
    for axes in grid.flat:
        axes.set_visible(False)
    for hood in neighbourhoods:
        row, column = tags.index(hood.tag), conditions.index(hood.condition)
        axes = grid[row, column]
        axes.set_visible(True)
        mean_uv = hood.amplitude_uv.mean(axis=0)
        colour = ROLES[hood.role][0]
        tag_hz, beside_hz = hood.frequencies_hz[0], hood.frequencies_hz[1:]
        used, beside_uv = hood.used[1:], mean_uv[1:]
        for person_uv in hood.amplitude_uv:
            axes.plot(tag_hz, person_uv[0], "_", color=MUTED, alpha=0.6)
        axes.vlines(beside_hz[used], 0, beside_uv[used], color=MUTED, linewidth=2)
        axes.plot(beside_hz[~used], beside_uv[~used], "x", color=MUTED, markersize=4)
        axes.vlines(tag_hz, 0, mean_uv[0], color=colour, linewidth=3)
        axes.plot(tag_hz, mean_uv[0], ROLES[hood.role][1], color=colour)
        kind = "" if hood.evoked else ", total"
        axes.set_title(f"{words(hood.condition)}\n{hood.role}{kind}")
        if column == 0:
            axes.set_ylabel(f"{words(hood.tag)}, {tag_hz:.4g} Hz\namplitude (µV)")
    for axes in grid[:, 0]:  # shared along the row
        axes.set_ylim(bottom=0)
    figure.supxlabel("frequency (Hz)", size=9)
    return figure


def placed(info: Any) -> list[str]:
    """Names of the channels that have a position."""
    return [
        name
        for name, channel in zip(info.ch_names, info["chs"], strict=True)
        if np.isfinite(channel["loc"][:3]).all() and np.any(channel["loc"][:3])
    ]


@styled
def topographies(rows: Sequence[MapRow], info: Any) -> Any:
    """Maps over the head, one row a tag or measure and one column a condition.

    `info` must have at least `FEWEST_FOR_MAP` channels that are `placed`.
    """
    import mne

    channels = placed(info)
    conditions = list(dict.fromkeys(name for row in rows for name in row.values))
    figure = new_figure(max(WIDTH_IN, 1.9 * len(conditions)), 0.3 + 2.2 * len(rows))
    grid = figure.subplots(len(rows), len(conditions), squeeze=False)
    for line, row in zip(grid, rows, strict=True):
        finite = [v for values in row.values.values() for v in values.values() if np.isfinite(v)]
        limits = (min(finite), max(finite)) if finite else (0, 1)
        drawn = None
        for axes, condition, told in zip(line, conditions, row.lines, strict=True):
            axes.set_title(f"{words(condition)}\n{told}".strip())
            values = row.values.get(condition, {})
            chosen = [name for name in channels if np.isfinite(values.get(name, np.nan))]
            if len(chosen) < FEWEST_FOR_MAP:
                axes.text(0.5, 0.5, "no map:\nnot measured", ha="center", va="center", color=MUTED)
                axes.axis("off")
                continue
            picked = mne.pick_info(info, [info.ch_names.index(name) for name in chosen])
            drawn, _ = mne.viz.plot_topomap(
                np.array([values[name] for name in chosen]), picked, axes=axes, show=False,
                vlim=limits, cmap=HEAT, sensors="k.", contours=4,
            )  # fmt: skip
        beside = {"transform": line[0].transAxes, "rotation": 90, "ha": "right", "va": "center"}
        line[0].text(-0.08, 0.5, row.title, **beside)
        if drawn is not None:
            figure.colorbar(drawn, ax=list(line), shrink=0.75, label=row.unit)
    return figure


@styled
def responses(rows: Sequence[Mapping[str, Any]]) -> Any:
    """Each person's amplitude with its 95 % interval, by condition, one panel a tag.

    Parameters
    ----------
    rows : sequence of mapping
        ``tag``, ``condition``, ``role``, ``participant``, ``in_study``, ``amplitude_uv``,
        ``amplitude_low_uv``, ``amplitude_high_uv`` (the last two NaN where there is none).
    """
    tags = list(dict.fromkeys(row["tag"] for row in rows))
    conditions = list(dict.fromkeys(row["condition"] for row in rows))
    people = sorted({row["participant"] for row in rows})
    figure = new_figure(max(WIDTH_IN, 1.8 * len(conditions)), 0.9 + 2.4 * len(tags))
    grid = figure.subplots(len(tags), 1, sharex=True, squeeze=False)[:, 0]
    spread = np.linspace(-0.36, 0.36, len(people) + 2)[1:-1]  # one alone is in the middle
    size = 5 if len(people) <= 20 else 3
    for tag, axes in zip(tags, grid, strict=True):
        for index, condition in enumerate(conditions):
            cell = [r for r in rows if r["tag"] == tag and r["condition"] == condition]
            for row in cell:
                colour, marker = ROLES[row["role"]]
                x = index + spread[people.index(row["participant"])]
                bounds = [row["amplitude_low_uv"], row["amplitude_high_uv"]]
                style = _person(colour, row["in_study"])
                axes.plot([x, x], bounds, color=style["color"], linewidth=1, alpha=0.55)
                axes.plot(x, row["amplitude_uv"], marker, markersize=size, **style)
            used = [row["amplitude_uv"] for row in cell if row["in_study"]]
            if used:
                axes.hlines(np.mean(used), index - 0.44, index + 0.44, color=INK, linewidth=1.6)
        axes.axhline(0, color=MUTED, linewidth=0.6)
        axes.set_title(words(tag), loc="left")
        axes.set_ylabel("amplitude (µV)")
    grid[-1].set_xticks(range(len(conditions)), [_two_lines(c) for c in conditions])
    grid[-1].set_xlim(-0.6, len(conditions) - 0.4)
    entries = {role: ROLES[role] for role in ROLES if any(row["role"] == role for row in rows)}
    if not all(row["in_study"] for row in rows):
        entries["set aside"] = (MUTED, "o")
    for label, (colour, marker) in entries.items():
        grid[-1].plot([], [], marker, label=label, **_person(colour, label != "set aside"))
    grid[-1].plot([], [], color=INK, linewidth=1.6, label="mean of those in the study")
    figure.legend(loc="outside lower center", ncols=len(entries) + 1)
    return figure


@styled
def alpha(
    spectra: Sequence[Spectrum],
    tags_hz: Mapping[str, Mapping[str, float]],
    band_hz: Sequence[float],
    frequencies: Sequence[Mapping[str, Any]],
) -> Any:
    """Spectra by condition, and everybody's individual alpha frequency below.

    Parameters
    ----------
    spectra : sequence of Spectrum
    tags_hz : mapping
        By condition, what flickers in it, by tag.
    band_hz : sequence of two float
        The fixed alpha band.
    frequencies : sequence of mapping
        ``participant``, ``in_study``, ``alpha_frequency_hz`` (NaN where none was found).
    """
    conditions = list(dict.fromkeys(spectrum.condition for spectrum in spectra))
    columns = min(len(conditions), MOST_COLUMNS)
    lines = -(-len(conditions) // columns)
    figure = new_figure(WIDTH_IN, 2.6 * lines + 1.7)
    above, below = figure.subfigures(2, 1, height_ratios=(2.6 * lines, 1.7))
    grid = above.subplots(lines, columns, sharex=True, sharey=True, squeeze=False)
    for axes in grid.flat[len(conditions) :]:
        axes.set_visible(False)
    for axes, condition in zip(grid.flat, conditions, strict=False):
        axes.axvspan(*band_hz, color=PALE, linewidth=0)
        of_study = []
        for spectrum in (s for s in spectra if s.condition == condition):
            hz = spectrum.frequencies_hz
            shown = (hz >= SHOWN_HZ[0]) & (hz <= SHOWN_HZ[1])
            level_db = 10 * np.log10(np.maximum(spectrum.psd_uv2_per_hz[shown], 1e-12))
            style = {"color": ROLES[UNATTENDED][0], "alpha": 0.45, "linewidth": 0.7}
            if not spectrum.in_study:
                style |= {"color": MUTED, "linestyle": ":", "alpha": 0.9}
            axes.plot(hz[shown], level_db, **style)
            if spectrum.in_study:
                of_study.append((hz[shown], level_db))
        if of_study:
            grid_hz = of_study[0][0]  # sampling rates may differ, and the spectra's grids with them
            mean_db = np.mean([np.interp(grid_hz, *one) for one in of_study], axis=0)
            axes.plot(grid_hz, mean_db, color=INK, linewidth=1.8)
        for tag, frequency_hz in tags_hz[condition].items():
            axes.axvline(frequency_hz, color=ROLES[ATTENDED][0], linestyle="--", linewidth=0.9)
            beside = {"transform": axes.get_xaxis_transform(), "rotation": 90, "va": "top"}
            axes.text(frequency_hz + 0.4, 0.97, words(tag), size=7, **beside)
        axes.set_title(words(condition))
    above.supxlabel("frequency (Hz)", size=9)
    above.supylabel("power (dB re 1 µV²/Hz)", size=9)

    axes = below.subplots()
    axes.axvspan(*band_hz, color=PALE, linewidth=0)
    found = [row for row in frequencies if np.isfinite(row["alpha_frequency_hz"])]
    found.sort(key=lambda row: row["alpha_frequency_hz"])
    for row, level in zip(found, np.resize([0, 1, -1, 2, -2], len(found)), strict=True):
        style = _person(ROLES[UNATTENDED][0], row["in_study"])
        axes.plot(row["alpha_frequency_hz"], level, "o", markersize=5.5, **style)
    axes.set_ylim(-3.5, 3.5)
    axes.set_yticks([])
    peaks_hz = [row["alpha_frequency_hz"] for row in found]
    axes.set_xlim(min([band_hz[0], *peaks_hz]) - 1, max([band_hz[1], *peaks_hz]) + 1)
    axes.set_xlabel("individual alpha frequency (Hz)")
    axes.set_title(f"{len(found)} of {len(frequencies)} people have a peak", loc="left")
    return figure


@styled
def relation(
    people: Sequence[Mapping[str, Any]],
    group: Sequence[Mapping[str, Any]],
    halves: Sequence[Mapping[str, Any]],
) -> Any:
    """Each person's correlation of alpha and response, and the response by half of alpha.

    Parameters
    ----------
    people : sequence of mapping
        ``participant``, ``in_study``, ``tag``, ``rho``.
    group : sequence of mapping
        ``tag``, ``rho_mean``, ``rho_low``, ``rho_high``.
    halves : sequence of mapping
        ``tag``, ``in_study``, ``little_uv``, ``much_uv``: mean response in the windows with little
        and with much alpha.
    """
    figure = new_figure(WIDTH_IN, 3.8)
    left, right = figure.subplots(1, 2)
    tags = list(dict.fromkeys(row["tag"] for row in people))
    colour = ROLES[UNATTENDED][0]
    for index, tag in enumerate(tags):
        rows = [row for row in people if row["tag"] == tag]
        for row, shift in zip(rows, np.linspace(-0.3, 0.0, len(rows)), strict=True):
            style = _person(colour, row["in_study"])
            left.plot(index + shift, row["rho"], "o", markersize=4.5, **style)
        for row in (row for row in group if row["tag"] == tag):
            x = index + 0.25
            left.plot([x, x], [row["rho_low"], row["rho_high"]], color=INK, linewidth=1.6)
            left.plot(x, row["rho_mean"], "D", color=INK, markersize=6)
    left.axhline(0, color=MUTED, linewidth=0.8)
    left.set_xlim(-0.6, len(tags) - 0.4)
    left.set_xticks(range(len(tags)), [_two_lines(tag) for tag in tags])
    left.set_ylabel("Spearman's rho, windows of a person")
    left.set_title("dots: people; diamond: mean, 95 % interval")

    own = list(dict.fromkeys(row["tag"] for row in halves))
    for row in halves:
        x = own.index(row["tag"]) + np.array([-0.2, 0.2])
        values, style = [row["little_uv"], row["much_uv"]], _person(colour, row["in_study"])
        right.plot(x, values, "o-", markersize=3.5, linewidth=0.8, alpha=0.75, **style)
    for index, tag in enumerate(own):
        used = [(r["little_uv"], r["much_uv"]) for r in halves if r["tag"] == tag and r["in_study"]]
        if used:
            x = index + np.array([-0.2, 0.2])
            right.plot(x, np.mean(used, axis=0), color=INK, linewidth=2.2)
        right.text(index, 1.01, words(tag), transform=right.get_xaxis_transform(), ha="center")
    right.axhline(0, color=MUTED, linewidth=0.6)
    places = [index + shift for index in range(len(own)) for shift in (-0.2, 0.2)]
    right.set_xticks(places, ["little\nalpha", "much\nalpha"] * len(own))
    right.set_ylabel("response in a window (µV)")
    return figure


def _person(colour: str, in_study: bool) -> dict[str, str]:
    """Style of a person's marker: open and grey where the person is set aside."""
    if in_study:
        return {"color": colour, "markerfacecolor": colour}
    return {"color": MUTED, "markerfacecolor": "white"}


def _two_lines(name: str) -> str:
    """Words on two lines where one would be long."""
    text = words(name)
    if len(text) <= 12 or " " not in text:
        return text
    spaces = [i for i, letter in enumerate(text) if letter == " "]
    middle = min(spaces, key=lambda i: abs(i - len(text) / 2))
    return f"{text[:middle]}\n{text[middle + 1 :]}"
