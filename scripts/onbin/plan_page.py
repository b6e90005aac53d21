"""The flicker plan for people: what it costs, what to do, and one page of plain text."""

import math
import textwrap
from collections import Counter, defaultdict
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import replace
from fractions import Fraction

import numpy as np

from onbin import plan, tagging
from onbin.flicker import amplitude_loss_db
from onbin.plan import Finding, Planned, Recorded, Setup
from onbin.tagging import Term

LONGEST_ADVISED_S = 20  # a longer window than this is no advice
OFFSET_BINS = 0.05  # a display this far off costs less than 0.04 dB
LEAK = 0.01  # share of another tag's amplitude that may leak in before it is a caution
PROVOCATIVE_HZ = (3, 60)  # Harding et al. 2005 and the ranges that later reviews give
MOST_PROVOCATIVE_HZ = (15, 25)  # Harding & Jeavons; Fisher et al. 2005 (from memory)
SMALL_AREA_SR = 0.006  # WCAG 2.3.1; Harding et al. 2005, Epilepsia 46:1423
WIDTH = 96


# --- what a person should know --------------------------------------------------------------------


def findings(
    settings: Mapping, recorded: Sequence[Recorded], plans: Mapping[Setup, Sequence[Planned]]
) -> list[Finding]:
    """Find what the plan costs and what is as well to know, cautions first."""
    found = [*_display_findings(settings, recorded), *_tag_findings(settings)]
    rates: dict[Finding, list[str]] = defaultdict(list)
    for setup, planned in plans.items():
        for finding in (
            *_window_findings(settings, setup),
            *_term_findings(settings, setup, planned),
        ):
            rates[finding].append(f"{float(setup.working_rate):g}")
    for finding, where in rates.items():
        at = f"at {_listed(where)} Hz: " if len(where) < len(plans) else ""
        found.append(replace(finding, found=at + finding.found))
    return sorted(found, key=lambda finding: finding.level != "caution")


def _display_findings(settings: Mapping, recorded: Sequence[Recorded]) -> Iterator[Finding]:
    where, refresh = ("display", "refresh_hz"), plan.refresh_rate(settings)
    frames = {name: plan.frames_of(settings, name) for name in settings["tags"]}
    told = Counter(r.refresh_hz for r in recorded if r.refresh_hz)
    for said_hz, count in sorted(told.items()):
        said = f"the dataset gives a refresh rate of {said_hz:g} Hz for {count} of {len(recorded)}"
        if refresh is None and settings["tags"]:
            yield Finding(
                "note",
                where,
                f"{said} recordings, the settings none",
                f"if a display showed the tags, set it to {said_hz:g} and give frames_per_cycle",
            )
        elif refresh is not None and any(frames.values()):
            fewest = min(m for m in frames.values() if m)
            off_hz = abs(tagging.exact(said_hz) - refresh) / fewest
            off_bins = float(off_hz * tagging.exact(settings["windows"]["length_s"]))
            if off_hz:
                yield Finding(
                    "caution" if off_bins >= OFFSET_BINS else "note",
                    where,
                    f"{said} recordings, the settings {plan.hertz(refresh)}: if the dataset is "
                    f"right, the fastest tag lies {off_bins:.2g} bins beside where it is measured "
                    f"and loses {-amplitude_loss_db(off_bins):.2g} dB",
                    "find out which is right (a photodiode tells) and set that; adopt measured "
                    "frequencies where recordings differ (flicker.adopt)",
                )


def _tag_findings(settings: Mapping) -> Iterator[Finding]:
    refresh = plan.refresh_rate(settings)
    used = {name for tags in plan.flicker_sets(settings) for name in tags}
    for name, frequency in tagging.study_tags(settings["terms"]).items():
        tag, frames = settings["tags"][name], plan.frames_of(settings, name)
        if name not in used:
            yield Finding(
                "note",
                ("tags", name),
                f"{name} flickers in no condition",
                "name it under flickering where it does, or leave it out",
            )
        if frames and refresh and refresh / frames != frequency:
            length_s = tagging.exact(settings["windows"]["length_s"])
            off_bins = float(abs(refresh / frames - frequency) * length_s)
            yield Finding(
                "caution",
                ("tags", name, "frequency_hz"),
                f"{name} is set to {plan.hertz(frequency)}, and {frames} frames of "
                f"{plan.hertz(refresh)} show {plan.hertz(refresh / frames)}: {off_bins:.2g} bins "
                f"beside, a loss of {-amplitude_loss_db(off_bins):.2g} dB",
                f"give frames_per_cycle: {frames} in place of frequency_hz",
            )
        if frames and frames % 2 and tag["waveform"] == "square":
            yield Finding(
                "note",
                ("tags", name),
                f"{name} has {frames} frames a cycle, which have no even halves: on for "
                f"{frames // 2 + 1} and off for {frames // 2}, or the reverse, is not 50 % duty "
                "and drives even harmonics by itself",
                f"before recording choose {frames - 1} or {frames + 1} frames, or sine luminance "
                "(waveform: sine); after it, report the duty",
            )
        if tag["pattern_reversal"] and settings["terms"]["harmonics"] < 2:
            yield Finding(
                "caution",
                ("response", "harmonics"),
                f"{name} reverses a pattern: the response is at twice its frequency",
                "measure 2 harmonics or more",
            )


def _window_findings(settings: Mapping, setup: Setup) -> Iterator[Finding]:
    where, tags = ("windows", "length_s"), tagging.study_tags(settings["terms"])
    if not tags:
        return
    if setup.recorded_rate is None:
        yield Finding(
            "note",
            ("intake", "working_rate_hz"),
            f"{_recordings(setup.recordings)} without SamplingFrequency: the plan takes "
            f"{float(setup.working_rate):g} Hz",
            "add it to eeg.json",
        )
    rate, length_s = setup.working_rate, tagging.exact(settings["windows"]["length_s"])
    common_s = tagging.whole_cycle_samples(tags.values(), rate) / rate
    if common_s <= length_s:
        return
    fundamentals = [t for t in tagging.harmonics(tags, 1)]
    samples = tagging.window_samples(tags, fundamentals, rate, float(length_s))
    duration_s = {term.tag: n / rate for term, n in samples.items()}
    uneven = [n for n, s in duration_s.items() if (tags[n] * s).denominator != 1]
    if uneven:
        yield Finding(
            "note",
            where,
            f"{float(rate):g} samples a second hold no whole number of cycles of "
            f"{_listed(uneven)} within {plan.seconds(length_s)}; the window ends at the "
            "nearest sample",
            "nothing need be done: each term is measured at its exact frequency",
        )
    pairs = plan.pairs_together(settings)
    if not pairs:
        return
    leak, own, other = max(
        (abs(np.sinc(float((tags[o] - tags[n]) * duration_s[n]))), n, o)
        for pair in pairs
        for n, o in (pair, pair[::-1])
    )
    found = (
        f"no window of {plan.seconds(length_s)} or less holds whole cycles of all "
        f"{len(tags)} tags, so each has its own, and up to {leak:.1%} of {other} leaks into {own}"
    )
    if common_s <= LONGEST_ADVISED_S:
        all_tags = "both tags" if len(tags) == 2 else f"all {len(tags)} tags"
        advice = (
            f"if trials are long enough, lengthen windows.length_s to {plan.seconds(common_s)}, "
        )
        yield Finding("caution", where, found, f"{advice}and {all_tags} fall on bins")
    else:
        yield Finding(
            "caution" if leak >= 0.01 else "note",
            where,
            found,
            f"a common window would take {plan.seconds(common_s)}; before recording, choose frame "
            "counts with a small common multiple",
        )


def _term_findings(
    settings: Mapping, setup: Setup, planned: Sequence[Planned]
) -> Iterator[Finding]:
    kinds = {p.term: p.kind for p in planned}
    measured = [p for p in planned if p.measured]

    def meeting(*wanted: str) -> list[str]:
        pairs = {
            frozenset((p.term, other)): f"{_at(p.term)} and {_at(other)}"
            for p in measured
            for other in p.collides
            if kinds[other] in wanted
        }
        return list(pairs.values())

    if met := meeting("harmonic", "intermodulation"):
        yield Finding(
            "caution",
            ("tags",),
            f"in one bin: {_some(met)}",
            "what is measured there belongs to both and is left out of sums over harmonics; before "
            "recording, choose frequencies none of which is a multiple or sum of others",
        )
    if met := meeting("mains"):
        yield Finding(
            "caution",
            ("filter", "line_removal"),
            f"in one bin: {_some(met)}, and the hum stays in",
            "do not read these terms as responses",
        )
    if met := meeting("alias"):
        yield Finding(
            "caution",
            ("tags",),
            f"in one bin: {_some(met)}",
            "this matters if it was in the signal before sampling: look up the amplifier's "
            "low-pass (HardwareFilters in eeg.json) and the display's images",
        )
    if near := [_at(p.term) for p in planned if p.kind == "alias" and p.crowds]:
        yield Finding(
            "note",
            ("response", "neighbours"),
            f"above half the sampling rate, harmonics would fold back among neighbouring bins, "
            f"which are not left out: {_some(near)}",
            "nothing, if the amplifier filtered before sampling (HardwareFilters in eeg.json)",
        )
    count = 2 * settings["response"]["neighbours"]
    if few := [f"{_at(p.term)} {p.neighbours}" for p in measured if p.neighbours * 2 < count]:
        yield Finding(
            "caution",
            ("response", "neighbours"),
            f"fewer than half of the {count} neighbouring bins can be used: {_some(few)}",
            "lengthen windows.length_s, which brings bins closer to their term, or ask for fewer "
            "neighbours",
        )
    low_hz, high_hz = plan.alpha_band(settings)
    alpha = f"alpha ({low_hz:g}-{high_hz:g} Hz)"
    inside = [p for p in planned if plan.in_alpha(settings, p.term.frequency) and p.driven]
    if within := [_at(p.term) for p in inside if p.kind in ("harmonic", "intermodulation")]:
        yield Finding(
            "caution",
            ("alpha", "band_hz"),
            f"within {alpha}: {_some(within)}",
            "a measured term is subtracted from each window before alpha is measured, an "
            "unmeasured one is not (raise response.harmonics or intermodulation_order to reach it)",
        )
    halves = [p.term for p in measured if p.term.harmonic == 1 and p.driven]
    if within := [
        f"{t.tag} {plan.hertz(t.frequency / 2)}"
        for t in halves
        if plan.in_alpha(settings, t.frequency / 2)
    ]:
        yield Finding(
            "note",
            ("alpha", "band_hz"),
            f"half the frequency of a tag lies within {alpha}: {_some(within)}",
            "a brain that follows at half the rate adds to alpha there: compare with a condition "
            "where nothing flickers",
        )
    tags = tagging.study_tags(settings["terms"])
    asked = {t: None for t in tagging.harmonics(tags, settings["terms"]["harmonics"])}
    if lost := [_at(t) for t in asked if t not in kinds]:
        yield Finding(
            "note",
            ("response", "harmonics"),
            f"beyond the filters (from {plan.passband_hz(settings, setup):g} Hz on), so not "
            f"measured: {_some(lost)}",
            "raise filter.lowpass_hz if they matter",
        )


# --- people's safety ------------------------------------------------------------------------------


def visual_angle_deg(size_m: float, distance_m: float) -> float:
    """Visual angle of a length seen straight on, 2·atan(size / (2·distance)), in degrees."""
    return math.degrees(2 * math.atan(size_m / (2 * distance_m)))


def cone_sr(angle_deg: float) -> float:
    """Solid angle of a disc that takes up a visual angle, 2π(1 − cos(angle/2)), in steradian."""
    return 2 * math.pi * (1 - math.cos(math.radians(angle_deg) / 2))


def rectangle_sr(width_m: float, height_m: float, distance_m: float) -> float:
    """Solid angle of a rectangle seen straight on at its middle, in steradian."""
    a, b = width_m / (2 * distance_m), height_m / (2 * distance_m)
    return 4 * math.asin(a * b / math.sqrt((1 + a * a) * (1 + b * b)))


RISKS = {
    "most": "STRONG CAUTION: {}. From 15 to 25 a second flicker provokes seizures most easily.",
    "provocative": "CAUTION: {}. From 3 to 60 a second flicker can provoke seizures in "
    "photosensitive people, also in those who do not know that they are.",
    "outside": "{}: outside 3 to 60 a second, which by itself clears nothing.",
}


def risk(rate: Fraction) -> str:
    """``most`` from 15 to 25 a second, ``provocative`` from 3 to 60, else ``outside``."""
    for word, (low, high) in (("most", MOST_PROVOCATIVE_HZ), ("provocative", PROVOCATIVE_HZ)):
        if low <= rate <= high:
            return word
    return "outside"


def safety(settings: Mapping, recorded: Sequence[Recorded]) -> list[str]:
    """Paragraphs of caution for photosensitive people; a clearance never.

    The ranges are those of Harding et al. 2005 and later reviews, the area is that of WCAG 2.3.1.
    """
    told: dict[str, list[str]] = defaultdict(list)
    for name, frequency in tagging.study_tags(settings["terms"]).items():
        reversing = settings["tags"][name]["pattern_reversal"]
        rate = 2 * frequency if reversing else frequency
        unit = "reversals" if reversing else "flashes"
        told[risk(rate)].append(f"{name} ({float(rate):.4g} {unit} a second)")
    lines = [RISKS[word].format(_listed(told[word])) for word in RISKS if word in told]
    if not lines:
        return []
    display = settings["display"]
    views = dict.fromkeys((r.size_m, r.distance_m) for r in recorded) or {(None, None): None}
    seen = {(display["size_m"] or size, display["distance_m"] or far) for size, far in views}
    for size_m, distance_m in sorted(view for view in seen if all(view)):
        width_m, height_m = size_m
        half_angle = math.acos(1 - SMALL_AREA_SR / (2 * math.pi))
        disc_cm = 200 * distance_m * math.tan(half_angle)
        lines.append(
            f"At {distance_m:g} m a display of {width_m:g} × {height_m:g} m takes up "
            f"{rectangle_sr(width_m, height_m, distance_m):.2g} sr. Flicker over more than "
            f"{SMALL_AREA_SR} sr within any 10 degrees of view (there, a disc {disc_cm:.1f} cm "
            "across) is not a small area in the sense of WCAG 2.3.1 (Harding et al. 2005)."
        )
    if not any(all(view) for view in seen):
        lines.append(
            "Size and distance of the display are not known (display.size_m, display.distance_m), "
            f"so the flickering area cannot be compared with the {SMALL_AREA_SR} sr of WCAG 2.3.1 "
            "(Harding et al. 2005)."
        )
    lines.append(
        "Whether, with whom and how this may be shown is for your ethics board and for licensed "
        "practice to decide: screening, consent, and somebody at hand who can stop it. This plan "
        "is no clearance."
    )
    return lines


# --- the page -------------------------------------------------------------------------------------


def page(
    settings: Mapping, recorded: Sequence[Recorded], plans: Mapping[Setup, Sequence[Planned]]
) -> str:
    """Write the plan as one page of plain text."""
    title = f"Flicker plan: {settings['study']['title']}"
    lines = [title, "=" * len(title), ""]
    if not settings["tags"]:
        return "\n".join([*lines, "The settings name no tags: nothing flickers.", ""])
    found = findings(settings, recorded, plans)
    lines += [*_display_lines(settings, recorded), "", _verdict(found), "", "Tags"]
    lines += _table(["", "tag", "frequency", "frames", "shown as"], _tag_cells(settings))
    for setup, planned in plans.items():
        lines += ["", *_setup_lines(settings, setup, planned)]
    if found:
        lines += ["", "What to mind, and what to do"]
        for number, finding in enumerate(found, start=1):
            setting = ".".join(map(str, finding.where))
            text = f"{finding.level}: {finding.found}. What to do: {finding.advice}. [{setting}]"
            lines += _wrapped(text, f"  {number}. ")
    lines += ["", "For photosensitive people"]
    for text in safety(settings, recorded):
        lines += _wrapped(text, "  ")
    return "\n".join([*lines, ""])


def _display_lines(settings: Mapping, recorded: Sequence[Recorded]) -> list[str]:
    refresh = plan.refresh_rate(settings)
    ours = f"{plan.hertz(refresh)} by the settings" if refresh else "not in the settings"
    told = Counter(r.refresh_hz for r in recorded if r.refresh_hz)
    theirs = ", ".join(
        f"{hz:g} Hz for {count} of {_recordings(len(recorded))}"
        for hz, count in sorted(told.items())
    )
    return _wrapped(f"Display: {ours}; the dataset says {theirs or 'nothing of it'}.", "")


def _verdict(found: Sequence[Finding]) -> str:
    cautions = sum(finding.level == "caution" for finding in found)
    if not cautions:
        return "The plan can work as it stands."
    return (
        f"The plan can work; {cautions} thing{'s' * (cautions > 1)} below may cost you something."
    )


def _tag_cells(settings: Mapping) -> Iterator[list[str]]:
    tags = tagging.study_tags(settings["terms"])
    for number, (name, frequency) in enumerate(tags.items(), start=1):
        frames, waveform = plan.frames_of(settings, name), settings["tags"][name]["waveform"]
        shown = {"sine": "sine luminance", "square": "as set, by no display"}[waveform]
        if frames and waveform == "square":
            shown = f"{frames - frames // 2} on, {frames // 2} off"
        elif not frames and plan.refresh_rate(settings):
            shown = "sampled sine luminance"
        if settings["tags"][name]["pattern_reversal"]:
            shown += f"; {float(2 * frequency):.5g} reversals a second"
        yield [f"f{number}", name, plan.hertz(frequency), str(frames or "-"), shown]


def _setup_lines(settings: Mapping, setup: Setup, planned: Sequence[Planned]) -> list[str]:
    rate_hz = float(setup.working_rate)
    recorded = f"{float(setup.recorded_rate):g} Hz" if setup.recorded_rate else "an unknown rate"
    mains = f"{setup.line_hz:g} Hz" if setup.line_hz else "unknown"
    lines = _wrapped(
        f"Terms of {_recordings(setup.recordings)} at {recorded}, worked on at {rate_hz:g} Hz "
        f"(mains {mains}, filters pass up to {plan.passband_hz(settings, setup):g} Hz)",
        "",
    )
    measured = [p for p in planned if p.measured]
    windows = sorted({p.samples for p in measured})
    if len(windows) == 1:
        window_s = windows[0] / setup.working_rate
        lines.append(
            f"  One window for all: {windows[0]} samples, {float(window_s):.5g} s, bins "
            f"{float(1 / window_s):.4g} Hz apart."
        )
    names = ["term", "Hz", "window", "cycles", "neighbours", "gain", "on the other neighbours"]
    lines += _table(names, (_term_cells(settings, setup, p) for p in measured))
    quiet = [p for p in planned if not p.measured and p.kind != "alias" and p.driven]
    if quiet:
        lines += _wrapped(
            f"Not measured, but there: {', '.join(_at(p.term) for p in quiet)}.", "  "
        )
    return lines


def _term_cells(settings: Mapping, setup: Setup, planned: Planned) -> list[str]:
    window_s = planned.samples / setup.working_rate
    cycles = planned.term.frequency * window_s
    beside = [f"in one bin with {plan.label(other)}" for other in planned.collides]
    beside += [why for why, _ in planned.left_out]
    if not planned.driven:
        beside.append("driven in no condition")
    return [
        plan.label(planned.term),
        f"{float(planned.term.frequency):.6g}",
        f"{float(window_s):.5g} s",
        str(cycles) if cycles.denominator == 1 else f"{float(cycles):.3f}",
        f"{planned.neighbours} of {2 * settings['response']['neighbours']}",
        "" if planned.gain is None else f"{planned.gain:.3f}",
        "; ".join(beside),
    ]


def _table(names: list[str], rows: Iterable[list[str]]) -> list[str]:
    """Columns side by side; the last one is wrapped."""
    cells = [names, *rows]
    widths = [max(map(len, column)) for column in list(zip(*cells, strict=True))[:-1]]
    lines = []
    for *first, last in cells:
        start = "  " + "".join(f"{c:<{w + 2}}" for c, w in zip(first, widths, strict=True))
        lines += _wrapped(last, start) if last else [start.rstrip()]
    return lines


def _wrapped(text: str, start: str) -> list[str]:
    """Fill lines after a start, with what follows indented as far."""
    return textwrap.wrap(
        text,
        max(WIDTH, len(start) + 32),
        initial_indent=start,
        subsequent_indent=" " * len(start),
        break_long_words=False,
        break_on_hyphens=False,
    )


# --- words ----------------------------------------------------------------------------------------


def _at(term: Term) -> str:
    return f"{plan.label(term)} ({float(term.frequency):.5g} Hz)"


def _recordings(count: int) -> str:
    return "1 recording" if count == 1 else f"{count} recordings"


def _listed(items: Sequence[str]) -> str:
    *first, last = items
    return f"{', '.join(first)} and {last}" if first else last


def _some(items: Sequence[str], most: int = 6) -> str:
    more = f"; and {len(items) - most} more, see the table" if len(items) > most else ""
    return "; ".join(items[:most]) + more
