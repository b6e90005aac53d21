"""The flicker plan: what becomes of every tag as the settings stand, before any data is touched.

All of it is arithmetic on exact fractions. The job graph is built with it, so it imports nothing
heavy. `blocking` tells what cannot work, `planned_terms` what lies where, `findings` what to do.
"""

import math
from bisect import bisect_left, bisect_right
from collections import Counter, defaultdict
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from itertools import combinations
from typing import Any, Literal

from onbin import tagging
from onbin.tagging import Term

# The settings that the plan rests on.
SETTINGS = (
    "study.title",
    "display",
    "tags",
    "terms",
    "conditions.*.flickering",
    "windows.length_s",
    "filter",
    "least_rate_hz",
    "response.neighbours",
    "response.skip",
    "alpha.band_hz",
    "alpha.search_hz",
)
FREQUENCY_HZ = (0.1, 10_000)  # of flicker and displays; beyond it numbers are slips
FRAME_TOLERANCE = Fraction(1, 1000)  # how far a nominal frequency may be from whole frames
OUTSIDE = "outside the filters"
DRIVEN_BELOW_HZ = 200  # responses to flicker are lost in the noise well below (common practice)

Level = Literal["stop", "caution", "note"]
Kind = Literal["harmonic", "intermodulation", "mains", "alias"]


@dataclass(frozen=True)
class Finding:
    """Something about the plan that a person should know.

    Attributes
    ----------
    level : {"stop", "caution", "note"}
        Whether nothing can run like that, whether it costs something, or whether it is as well to
        know.
    where : tuple
        Keys of the setting to change.
    found : str
        What was found, and what it means.
    advice : str
        What to do.
    """

    level: Level
    where: tuple
    found: str
    advice: str


@dataclass(frozen=True)
class Recorded:
    """What the metadata of a recording tell; None for what they do not.

    Attributes
    ----------
    rate_hz, line_hz : float or None
        ``SamplingFrequency`` and ``PowerLineFrequency``.
    refresh_hz, distance_m : float or None
        ``ScreenRefreshRate`` and ``ScreenDistance`` of ``StimulusPresentation``.
    size_m : tuple of float or None
        ``ScreenSize``: width and height.
    """

    rate_hz: float | None = None
    line_hz: float | None = None
    refresh_hz: float | None = None
    distance_m: float | None = None
    size_m: tuple[float, float] | None = None


@dataclass(frozen=True)
class Setup:
    """How a part of the recordings is measured.

    Attributes
    ----------
    working_rate : Fraction
        Sampling rate after intake, in Hz.
    line_hz : float or None
        Frequency of the mains.
    recorded_rate : Fraction or None
        Sampling rate of the recordings; None where nothing tells it.
    recordings : int
        How many they are.
    """

    working_rate: Fraction
    line_hz: float | None
    recorded_rate: Fraction | None = None
    recordings: int = 0

    @property
    def factor(self) -> int:
        """By how much intake decimates."""
        return int(self.recorded_rate / self.working_rate) if self.recorded_rate else 1


@dataclass(frozen=True)
class Planned:
    """A term and what lies near it.

    Attributes
    ----------
    kind : {"harmonic", "intermodulation", "mains", "alias"}
    term : Term
        Mains and aliases too: a mains multiple is driven by no tag, an alias by its own.
    driven : bool
        Whether it is driven in any condition.
    samples : int or None
        Of its window; None where it is not measured.
    neighbours : int or None
        Neighbouring bins that can be used, the fewest over the conditions that drive it.
    left_out : tuple of (str, tuple of int)
        What lies on the others, and which they are, in bins from the term.
    collides : tuple of Term
        Terms closer than one bin.
    crowds : tuple of Term
        Measured terms among whose neighbouring bins it falls.
    gain : float or None
        What filters and decimation leave of it.
    """

    kind: Kind
    term: Term
    driven: bool
    samples: int | None = None
    neighbours: int | None = None
    left_out: tuple[tuple[str, tuple[int, ...]], ...] = ()
    collides: tuple[Term, ...] = ()
    crowds: tuple[Term, ...] = ()
    gain: float | None = None

    @property
    def measured(self) -> bool:
        """Whether the study measures it."""
        return self.samples is not None


# --- how things are measured ----------------------------------------------------------------------


def working_rate(recorded: Fraction, least: Fraction) -> Fraction:
    """Sampling rate after intake: decimated by the largest whole factor that keeps ``least``."""
    return recorded / tagging.decimation_factor(recorded, least)


def assumed_setup(settings: Mapping) -> Setup:
    """What the settings alone tell: the least working rate that intake keeps."""
    least = tagging.exact(settings["least_rate_hz"])
    return Setup(least, settings["filter"]["line_hz"])


def setups(settings: Mapping, recorded: Iterable[Recorded]) -> list[Setup]:
    """Recordings by sampling rate and mains: each such part has a plan of its own."""
    assumed = assumed_setup(settings)
    counts = Counter((r.rate_hz, assumed.line_hz or r.line_hz) for r in recorded)
    found = []
    for (rate_hz, line_hz), count in sorted(counts.items(), key=lambda c: [x or 0 for x in c[0]]):
        rate = tagging.exact_rate(rate_hz) if rate_hz else None
        working = working_rate(rate, assumed.working_rate) if rate else assumed.working_rate
        found.append(Setup(working, line_hz, rate, count))
    return found


def passband_hz(settings: Mapping, setup: Setup) -> float:
    """What the filters let pass."""
    return tagging.passband_end(
        settings["filter"]["lowpass_hz"], float(setup.working_rate), settings["terms"]
    )


def measured_terms(settings: Mapping, setup: Setup) -> list[Term]:
    """Terms that the study measures."""
    return tagging.study_terms(settings["terms"], passband_hz(settings, setup))


def flicker_sets(settings: Mapping) -> list[tuple[str, ...]]:
    """Tags that flicker together, each set once, in the order of the conditions."""
    sets = [tuple(about["flickering"]) for about in settings["conditions"].values()]
    return [tags for tags in dict.fromkeys(sets) if tags]


def pairs_together(settings: Mapping) -> list[tuple[str, str]]:
    """Pairs of tags that flicker together."""
    return list(dict.fromkeys(p for tags in flicker_sets(settings) for p in combinations(tags, 2)))


# --- the display ----------------------------------------------------------------------------------


def whole_frames(refresh: Fraction, frequency: Fraction) -> int | None:
    """Frames of a cycle, where whole frames come within 0.1 % of the frequency.

    Examples
    --------
    >>> whole_frames(Fraction(60), Fraction("6.666"))
    9
    """
    frames = max(round(refresh / frequency), 2)
    near = abs(refresh / frames - frequency) <= FRAME_TOLERANCE * frequency
    return frames if near else None


def nearest_frames(refresh: Fraction, frequency: Fraction) -> list[int]:
    """Frame counts whose frequencies lie next to the one wanted, the higher frequency first.

    Examples
    --------
    >>> nearest_frames(Fraction(60), Fraction(13))
    [4, 5]
    """
    fewer = max(int(refresh / frequency), 2)
    return [fewer, fewer + 1]


def refresh_rate(settings: Mapping) -> Fraction | None:
    """Refresh rate of the display as set, in Hz."""
    stated = settings["display"]["refresh_hz"]
    return None if stated is None else tagging.exact(stated)


def frames_of(settings: Mapping, name: str) -> int | None:
    """Frames in a cycle of a tag, where it has a whole number of them."""
    tag, refresh = settings["tags"][name], refresh_rate(settings)
    if tag["frames_per_cycle"] is not None or refresh is None:
        return tag["frames_per_cycle"]
    return whole_frames(refresh, tagging.exact(tag["frequency_hz"]))


# --- what cannot work -----------------------------------------------------------------------------


def blocking(settings: Mapping, setup: Setup | None = None) -> Iterator[Finding]:
    """Find what cannot be measured.

    Parameters
    ----------
    settings : mapping
        The parts named in `SETTINGS`, as plain values.
    setup : Setup, optional
        As the dataset tells; without it, as the settings alone do.
    """
    setup = setup or assumed_setup(settings)
    for name, frequency in tagging.study_tags(settings["terms"]).items():
        yield from _beyond_window(settings, name, frequency)
        yield from _beyond_filters(settings, setup, name, frequency)
        yield from _beyond_display(settings, name, frequency)
    yield from _on_mains(settings, setup)
    yield from _in_one_bin(settings)


def _stop(where: tuple, found: str, advice: str) -> Finding:
    return Finding("stop", where, found, advice)


def lacking_channels(settings: Mapping, eeg: Mapping[str, Sequence[str]]) -> Iterator[Finding]:
    """Find channels of regions and of the reference that recordings lack.

    Parameters
    ----------
    settings : mapping
        ``regions`` and ``sensors.reference``.
    eeg : mapping
        Names of the EEG channels by recording.
    """
    wanted = {("regions", region): names for region, names in settings["regions"].items()}
    reference = settings["sensors"]["reference"]
    if not isinstance(reference, str):
        wanted["sensors", "reference"] = reference
    for where, names in wanted.items():
        alike: dict[tuple, list[str]] = defaultdict(list)
        for recording, present in eeg.items():
            alike[tuple(present)].append(recording)
        for present, recordings in alike.items():
            missing = [name for name in names if name not in present]
            if missing:
                yield _stop(
                    where,
                    f"no EEG channel {', '.join(missing)} in {', '.join(recordings)}, only "
                    f"{', '.join(present) or 'none at all'}",
                    "change it in the settings, or leave those recordings out",
                )


def _beyond_window(settings: Mapping, name: str, frequency: Fraction) -> Iterator[Finding]:
    length_s = settings["windows"]["length_s"]
    if frequency * tagging.exact(length_s) < 1:
        yield _stop(
            ("windows", "length_s"),
            f"{length_s} s is shorter than one cycle of {name} ({hertz(frequency)})",
            f"at least {seconds(1 / frequency)} is needed",
        )


def _beyond_filters(
    settings: Mapping, setup: Setup, name: str, frequency: Fraction
) -> Iterator[Finding]:
    highpass_hz = settings["filter"]["highpass_hz"]
    tag = f"{name} ({hertz(frequency)})"
    if frequency <= tagging.exact(highpass_hz):
        yield _stop(
            ("filter", "highpass_hz"), f"{highpass_hz} Hz takes out {tag}", "lower it below the tag"
        )
    end_hz, rate_hz = passband_hz(settings, setup), float(setup.working_rate)
    if frequency < end_hz:
        return
    needed_hz = math.ceil(frequency / Fraction("0.45"))
    if end_hz < 0.45 * rate_hz:
        yield _stop(
            ("filter", "lowpass_hz"),
            f"the low-pass ends at {end_hz:g} Hz and takes out {tag}",
            "set it above the tag and the harmonics that you want",
        )
    elif setup.recorded_rate is None or setup.recorded_rate >= needed_hz:
        yield _stop(
            ("intake", "working_rate_hz"),
            f"at {rate_hz:g} Hz nothing from {end_hz:g} Hz on is measured, so {tag} is lost",
            f"raise it to {needed_hz} Hz",
        )
    else:
        yield _stop(
            ("tags", name),
            f"recordings at {float(setup.recorded_rate):g} Hz cannot show {tag}",
            "leave the tag out, or give the task or participants with faster recordings",
        )


def _beyond_display(settings: Mapping, name: str, frequency: Fraction) -> Iterator[Finding]:
    tag, refresh = settings["tags"][name], refresh_rate(settings)
    if refresh is None:
        return
    sine = tag["waveform"] == "sine"
    if sine and refresh / frequency < 3:
        yield _stop(
            ("tags", name, "waveform"),
            f"a sine needs 3 frames a cycle or more; {name} has {float(refresh / frequency):.3g}",
            "2 frames show on and off only: set waveform: square, or choose a lower frequency",
        )
    if not sine and frames_of(settings, name) is None:
        nearest = " or ".join(
            f"{hertz(refresh / frames)} (frames_per_cycle: {frames})"
            for frames in nearest_frames(refresh, frequency)
        )
        yield _stop(
            ("tags", name, "frequency_hz"),
            f"a display at {hertz(refresh)} cannot show {hertz(frequency)} in whole frames",
            f"the nearest are {nearest}; set waveform: sine if luminance followed a sampled sine, "
            "or leave out display.refresh_hz if no display showed it",
        )


def _on_mains(settings: Mapping, setup: Setup) -> Iterator[Finding]:
    """Terms that the removal of the mains would take out; the step filter refuses them."""
    removal = settings["filter"]["line_removal"]
    if not setup.line_hz or removal == "none":
        return
    line = tagging.exact(setup.line_hz)
    for term in measured_terms(settings, setup):
        multiple = max(round(term.frequency / line), 1) * line
        apart = abs(term.frequency - multiple)
        if apart > tagging.LINE_REACH_HZ[removal]:
            continue
        other = tagging.other_removal(removal, apart)
        keep = f"set filter.line_removal: {other}"
        if other == "none":
            keep += " and read the term with the hum in it"
        found = f"{label(term)} ({hertz(term.frequency)}) would be taken out with the mains"
        found += f" at {hertz(multiple)}"
        if term.harmonic == 1:
            where, advice = ("tags", term.tag), f"tag with another frequency, or {keep}"
        elif term.harmonic:
            fewer = f"measure {term.harmonic - 1} or fewer"
            where, advice = ("response", "harmonics"), f"{fewer}, or {keep}"
        else:
            order = sum(abs(n) for _, n in term.orders)
            fewer = f"measure to order {order - 1} or lower"
            where, advice = ("response", "intermodulation_order"), f"{fewer}, or {keep}"
        yield _stop(where, found, advice)


def _in_one_bin(settings: Mapping) -> Iterator[Finding]:
    tags = tagging.study_tags(settings["terms"])
    length_s = tagging.exact(settings["windows"]["length_s"])
    for first, second in pairs_together(settings):
        apart = abs(tags[first] - tags[second])
        told = f"{first} ({hertz(tags[first])}) and {second} ({hertz(tags[second])})"
        if not apart:
            yield _stop(
                ("tags", second),
                f"{told} flicker together at one frequency and cannot be told apart",
                "give one of them another frequency",
            )
        elif apart * length_s < 1:
            yield _stop(
                ("windows", "length_s"),
                f"{told} flicker together and fall in one bin, {seconds(length_s)} being too short"
                " to tell them apart",
                f"at least {seconds(1 / apart)} is needed",
            )


def changed_by_filters(settings: Mapping, gains: Mapping[Term, float]) -> Iterator[Finding]:
    """Terms whose gain through decimation and filters is too far from 1."""
    tolerance = settings["filter"]["gain_tolerance"]
    for term, gain in gains.items():
        if abs(gain - 1) > tolerance:
            yield _stop(
                ("filter",),
                f"decimation and filters leave {gain:.4f} of {label(term)} "
                f"({hertz(term.frequency)}), expected 1 within {tolerance:g}",
                "raise intake.working_rate_hz or filter.lowpass_hz, lower filter.highpass_hz, or "
                "measure fewer harmonics",
            )


# --- what lies where ------------------------------------------------------------------------------


def planned_terms(
    settings: Mapping, setup: Setup, gains: Mapping[Term, float] | None = None
) -> list[Planned]:
    """Place every term: those measured, and what else is driven, hums or folds back beside them.

    Two terms collide when closer than one bin of the window in which either is measured. A term
    crowds another when it comes closer than one bin to one of its neighbouring bins.

    Parameters
    ----------
    settings : mapping
    setup : Setup
    gains : mapping of Term to float, optional
        Of the terms that are measured.
    """
    tags = tagging.study_tags(settings["terms"])
    measured = measured_terms(settings, setup)
    length_s = settings["windows"]["length_s"]
    samples = tagging.window_samples(tags, measured, setup.working_rate, length_s) if tags else {}
    kinds = _every_term(settings, setup)
    in_order = sorted(kinds, key=lambda term: term.frequency)
    places = [term.frequency for term in in_order]
    end_hz = passband_hz(settings, setup)
    count, skip = settings["response"]["neighbours"], settings["response"]["skip"]
    collides: dict[Term, list[Term]] = defaultdict(list)
    crowds: dict[Term, list[Term]] = defaultdict(list)
    beside = {}
    sets = flicker_sets(settings)
    for term in measured:
        duration_s = samples[term] / setup.working_rate
        together = [tags for tags in sets if term.driven_by(tags)] or sets or [()]
        bins = {j: term.frequency + j / duration_s for j in tagging.neighbour_offsets(count, skip)}
        reach = (skip + count + 1) / duration_s
        first = bisect_left(places, term.frequency - reach)
        last = bisect_right(places, term.frequency + reach)
        near = [other for other in in_order[first:last] if other != term]
        for other in near:
            if any(other.driven_by(tags) for tags in together):
                apart_bins = abs(other.frequency - term.frequency) * duration_s
                if apart_bins < 1:
                    collides[term].append(other)
                    collides[other].append(term)
                elif skip < apart_bins < skip + count + 1:
                    crowds[other].append(term)
        noisy = [o for o in near if kinds[o] != "alias" and o.frequency != term.frequency]
        beside[term] = min(
            (_beside(term, bins, duration_s, noisy, tags, end_hz) for tags in together),
            key=lambda found: found[0],
        )
    return [
        Planned(
            kind,
            term,
            any(term.driven_by(tags) for tags in sets),
            samples.get(term),
            *beside.get(term, (None, ())),
            tuple(dict.fromkeys(collides[term])),
            tuple(crowds[term]),
            (gains or {}).get(term),
        )
        for term, kind in kinds.items()
    ]


def _every_term(settings: Mapping, setup: Setup) -> dict[Term, Kind]:
    """Terms by kind, those measured first."""
    tags = tagging.study_tags(settings["terms"])
    if not tags:
        return {}
    end_hz = passband_hz(settings, setup)
    highest = max((int(end_hz / frequency) for frequency in tags.values()), default=0)
    order = max(settings["terms"]["intermodulation_order"], 2)
    terms = measured_terms(settings, setup)
    terms += tagging.harmonics(tags, highest) + tagging.intermodulations(tags, order)
    kinds: dict[Term, Kind] = {
        term: "harmonic" if term.harmonic else "intermodulation"
        for term in terms
        if term.frequency < end_hz
    }
    mains = _mains_multiples(setup.line_hz)
    kinds |= {term: "mains" for term in mains if term.frequency < end_hz}
    above = [
        *mains,
        *(
            Term(name, f"{h}f", ((name, h),), h * frequency)
            for name, frequency in tags.items()
            for h in range(1, int(DRIVEN_BELOW_HZ / frequency) + 1)
        ),
    ]
    aliases = [*_folded(above, setup.recorded_rate), *_sampled_sines(settings, tags)]
    own = {(term.tag, term.frequency) for term in kinds}
    return kinds | {
        term: "alias"
        for term in aliases
        if 0 < term.frequency < end_hz and (term.tag, term.frequency) not in own
    }


def _mains_multiples(line_hz: float | None) -> list[Term]:
    if not line_hz:
        return []
    line = tagging.exact(line_hz)
    return [Term("mains", f"{n}f", (), n * line) for n in range(1, int(DRIVEN_BELOW_HZ / line) + 1)]


def _folded(terms: Iterable[Term], rate: Fraction | None) -> Iterator[Term]:
    """Where terms above half the recording's sampling rate would fold back to."""
    for term in terms:
        if rate and term.frequency > rate / 2:
            folded = abs(term.frequency - rate * round(term.frequency / rate))
            yield Term(term.tag, f"alias of {term.term}", term.orders, folded)


def _sampled_sines(settings: Mapping, tags: Mapping[str, Fraction]) -> Iterator[Term]:
    """First image about the refresh rate of each tag that does not have whole frames.

    With whole frames all images are harmonics of the tag itself.
    """
    refresh = refresh_rate(settings)
    for name, frequency in tags.items():
        if refresh and frames_of(settings, name) is None:
            for h in range(1, settings["terms"]["harmonics"] + 1):
                image = abs(refresh - h * frequency)
                yield Term(name, f"refresh less {h}f", ((name, h),), image)


def _in_the_way(
    place: Fraction, duration_s: Fraction, others: Sequence[Term], end_hz: float
) -> str | None:
    """Why a bin holds more than noise; None where it does not."""
    if not 1 / duration_s < place <= end_hz:
        return OUTSIDE
    nearest = min(others, key=lambda o: abs(o.frequency - place), default=None)
    if nearest and abs(nearest.frequency - place) * duration_s < 1:
        return label(nearest)
    return None


def _beside(
    term: Term,
    bins: Mapping[int, Fraction],
    duration_s: Fraction,
    noisy: Sequence[Term],
    tags: Sequence[str],
    end_hz: float,
) -> tuple[int, tuple[tuple[str, tuple[int, ...]], ...]]:
    """How many neighbouring bins can be used where some tags flicker, and why not the others."""
    others = [o for o in noisy if o.driven_by(tags)]
    usable = tagging.usable_neighbours(
        term.frequency, bins, duration_s, [o.frequency for o in others], end_hz
    )
    reasons: dict[str, list[int]] = defaultdict(list)
    for (offset, place), is_usable in zip(bins.items(), usable, strict=True):
        if not is_usable:
            near = _in_the_way(place, duration_s, others, end_hz)
            why = near or _in_the_way(bins[-offset], duration_s, others, end_hz)
            reasons[why if near else f"mirror of {why}"].append(offset)
    return sum(usable), tuple((why, tuple(found)) for why, found in reasons.items())


def term_row(settings: Mapping, setup: Setup, planned: Planned) -> dict[str, Any]:
    """One line of the table of the plan."""
    term = planned.term
    duration_s = planned.samples / setup.working_rate if planned.measured else None
    return {
        "working_rate_hz": float(setup.working_rate),
        "recordings": setup.recordings,
        "term_kind": planned.kind,
        "tag": term.tag,
        "term": term.term,
        "frequency_hz": float(term.frequency),
        "frequency_exact": str(term.frequency),
        "frames_per_cycle": frames_of(settings, term.tag) if term.harmonic == 1 else None,
        "planned_driven": planned.driven,
        "measured": planned.measured,
        "n_samples": planned.samples,
        "window_s": float(duration_s) if duration_s else None,
        "cycles": float(term.frequency * duration_s) if duration_s else None,
        "planned_neighbours": planned.neighbours,
        "neighbours_left_out": "; ".join(
            f"{why}: {' '.join(f'{j:+d}' for j in bins)}" for why, bins in planned.left_out
        ),
        "collides_with": "; ".join(map(label, planned.collides)),
        "crowds": "; ".join(map(label, planned.crowds)),
        "in_alpha": in_alpha(settings, term.frequency),
        "half_in_alpha": in_alpha(settings, term.frequency / 2) if term.harmonic == 1 else None,
        "planned_gain": planned.gain,
    }


def in_alpha(settings: Mapping, frequency: Fraction) -> bool:
    """Tell whether a frequency lies where alpha is looked for or measured."""
    low_hz, high_hz = alpha_band(settings)
    return low_hz <= frequency <= high_hz


def alpha_band(settings: Mapping) -> tuple[float, float]:
    """Range in Hz over which alpha is looked for or measured."""
    edges = [*settings["alpha"]["band_hz"], *settings["alpha"]["search_hz"]]
    return min(edges), max(edges)


# --- words ----------------------------------------------------------------------------------------


def label(term: Term) -> str:
    """Name of a term: ``left_panel 2f``, or ``f1+f2``, where the numbers say the tags."""
    return term.term if len(term.orders) > 1 else f"{term.tag} {term.term}"


def hertz(frequency: Fraction) -> str:
    """Write a frequency, with its ratio where decimals do not say it all.

    Examples
    --------
    >>> hertz(Fraction(120, 7))
    '120/7 = 17.142857 Hz'
    """
    rounded = f"{float(frequency):.8g}"
    exact = "" if tagging.exact(rounded) == frequency else f"{frequency} = "
    return f"{exact}{rounded} Hz"


def seconds(time_s: Fraction) -> str:
    """Write a time; rounded up, since a little less than what is needed is too little."""
    rounded = math.ceil(time_s * 1000) / 1000
    return f"{rounded:g} s"
