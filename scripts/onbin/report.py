"""The report: one page for people, with its figures, from what the tables tell."""

import base64
import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np

from onbin import figures, inference, layout, provenance, report_tables
from onbin.figures import words
from onbin.filtering import FilterChain
from onbin.report_tables import Material
from onbin.settings import Settings

TEMPLATES = ("report.html", "macros.html", "methods.html", "report.css")
LEVEL = 0.05  # of the planned comparisons, two-sided
MEASURES = {
    "amplitude_uv": "evoked amplitude",
    "amplitude_corrected_uv": "evoked amplitude less the noise's share",
    "amplitude_sum_uv": "summed amplitude of the harmonics above the bins beside them",
    "snr_db": "signal-to-noise ratio",
    **dict.fromkeys(("alpha_power_db", "alpha_power_uv2"), "alpha power"),
    "alpha_lateralisation": "alpha lateralisation",
}
STUDY_FILES = {
    "plan_page": "the flicker plan",
    "study_participants": "who is in the study, who is set aside, and why",
    "study_flicker": "where the EEG shows each tag's flicker",
    "study_responses": "responses: person, condition, tag, term, channel or region",
    "study_alpha": "alpha: person, condition, channel or region",
    "study_relation": "alpha and response, person by person",
    "study_attention": "how well the attended tag can be told, person by person",
    "study_group": "alpha and response, over people",
    "study_comparisons": "the planned comparisons",
    "report_quality": "figure of the recordings",
    "report_bins": "figure of the tags and their neighbouring bins",
    "report_topographies": "maps of the head",
    "report_responses": "figure of everybody's responses",
    "report_alpha": "figure of alpha",
    "report_relation": "figure of alpha and response together",
    "manifest_files": "every file, with its SHA-256 and what it was made from",
}


@dataclass(frozen=True)
class Drawing:
    """A figure, and what it shows in words; one that is empty says why and stands in no page."""

    figure: Any
    alt: str
    empty: bool = False


# --- figures -------------------------------------------------------------------------------------


def draw(material: Material) -> dict[str, Drawing]:
    """Draw all figures of the report, by name."""
    return {
        "quality": _quality(material),
        "bins": _bins(material),
        "topographies": _topographies(material),
        "responses": _responses(material),
        "alpha": _alpha(material),
        "relation": _relation(material),
    }


def _nothing(why: str) -> Drawing:
    return Drawing(figures.note(why), why, empty=True)


def _quality(material: Material) -> Drawing:
    trust = material.settings["trust"]
    fewest = {
        name: trust["min_windows" if about["flickering"] else "min_rest_windows"]
        for name, about in material.conditions.items()
    }
    figure = figures.quality(
        report_tables.quality(material), fewest, material.settings["sensors"]["max_bad_share"]
    )
    return Drawing(
        figure,
        "For each person: windows kept of those placed in each condition, share of bad channels, "
        "and number of components removed by class. The table below has the numbers.",
    )


def _bins(material: Material) -> Drawing:
    shown = report_tables.neighbourhoods(material)
    if not shown:
        return _nothing(_why_no_response(material))
    told = []
    for hood in shown:
        mean_uv = hood.amplitude_uv.mean(axis=0)
        beside_uv = mean_uv[hood.used].mean() if hood.used.any() else math.nan
        told.append(
            f"{words(hood.tag)} in {words(hood.condition)} ({hood.role}): "
            f"{number(mean_uv[0])} µV, beside it {number(beside_uv)} µV"
        )
    return Drawing(figures.bins(shown), f"Mean amplitude at the tag. {'; '.join(told)}.")


def _topographies(material: Material) -> Drawing:
    if not material.in_study:
        return _nothing("Nobody is in the study, so there is no map over people.")
    positions = len(figures.placed(material.info))
    if positions < figures.FEWEST_FOR_MAP:
        return _nothing(
            f"No map: {positions} channels have a position, {figures.FEWEST_FOR_MAP} are needed."
        )
    rows = report_tables.map_rows(material)
    told = []
    for row in rows:
        for condition, values in row.values.items():
            if values:
                place = max(values, key=values.get)
                told.append(f"{row.title} in {words(condition)}: {place}, {number(values[place])}")
    alt = (
        f"Maps of the head from above, nose up. Channel with the largest value: {'; '.join(told)}."
    )
    return Drawing(figures.topographies(rows, material.info), alt)


def _responses(material: Material) -> Drawing:
    rows = report_tables.response_rows(material)
    if not rows:
        return _nothing(_why_no_response(material))
    told = []
    for tag, condition in dict.fromkeys((row["tag"], row["condition"]) for row in rows):
        values = [
            row["amplitude_uv"]
            for row in rows
            if (row["tag"], row["condition"]) == (tag, condition) and row["in_study"]
        ]
        if values:
            told.append(
                f"{words(tag)} in {words(condition)} mean {number(np.mean(values))} µV, "
                f"{number(min(values))} to {number(max(values))}"
            )
    return Drawing(
        figures.responses(rows), f"Everybody's amplitude by condition. {'; '.join(told)}."
    )


def _alpha(material: Material) -> Drawing:
    people = report_tables.alpha_people(material)
    if not people:
        return _nothing("There is no table of alpha to draw from.")
    found = [p["alpha_frequency_hz"] for p in people if np.isfinite(p["alpha_frequency_hz"])]
    between = f", {number(min(found))} to {number(max(found))} Hz" if found else ""
    figure = figures.alpha(
        material.spectra,
        {
            name: {tag: float(material.tags[tag]) for tag in about["flickering"]}
            for name, about in material.conditions.items()
        },
        material.settings["alpha"]["band_hz"],
        people,
    )
    return Drawing(
        figure,
        "Power spectra by condition, one thin line a person and the mean of those in the study; "
        f"below, individual alpha frequencies: {len(found)} of {len(people)} people{between}.",
    )


def _relation(material: Material) -> Drawing:
    rows = [row for row in material.relation if np.isfinite(row["rho"])]
    if not rows:
        return _nothing("No relation of alpha and response could be measured.")
    told = [
        f"{words(row['tag'])}: mean rho {number(row['rho_mean'])}, "
        f"{number(row['rho_low'])} to {number(row['rho_high'])}, n = {row['n']}"
        for row in material.group
    ]
    return Drawing(
        figures.relation(rows, material.group, report_tables.alpha_split(material)),
        f"Each person's correlation of alpha and response, and the mean. {'; '.join(told)}.",
    )


def _why_no_response(material: Material) -> str:
    if not material.tags:
        return "No tag is named in the settings, so there is no response to show."
    return "Nobody in the study has a response that could be measured."


# --- words ---------------------------------------------------------------------------------------


def number(value: float | Fraction | None, digits: int = 3) -> str:
    """Write a number with so many significant digits, without exponent.

    Examples
    --------
    >>> number(0.5), number(-12345.0), number(float("nan"))
    ('0.500', '−12345', 'n/a')
    """
    if value is None or not math.isfinite(value):
        return "n/a"
    value = float(value)
    if value == 0:
        return "0"
    rounded = abs(float(f"{value:.{digits - 1}e}"))
    decimals = max(0, digits - 1 - math.floor(math.log10(rounded)))
    text = f"{value:.{min(decimals, 9)}f}"
    return text.replace("-", "−")


def p_value(p: float | None) -> str:
    """Write a p with two digits, and a very small one as a bound.

    Examples
    --------
    >>> p_value(0.03125), p_value(1e-7)
    ('= 0.031', '< 0.0001')
    """
    if p is not None and p < 1e-4:
        return "< 0.0001"
    return f"= {number(p, 2)}"


def tenths(value: float | None) -> str:
    """Write a level in dB or a percentage, to one decimal."""
    if value is None or not math.isfinite(value):
        return "n/a"
    return f"{round(value, 1) + 0:.1f}".replace("-", "−")


def plain(value: float | Fraction) -> str:
    """Write a number that was set, as it was set: 14.4, 25."""
    return f"{float(value):.5g}"


def known(value: float) -> str:
    """Write a number as it was set; nothing where there is none."""
    return plain(value) if math.isfinite(value) else ""


def answers(material: Material) -> list[dict[str, Any]]:
    """Each planned comparison in words, with what to keep in mind."""
    return [
        row
        | {
            "sentence": _sentence(row, material.settings["comparisons"][row["comparison"]]),
            "missing": [who for who in material.in_study if who not in (row["who"] or "").split()],
            "floor": _floor(row, len(material.comparisons)),
            "detectable": (
                inference.smallest_detectable_dz(row["n"])
                if row["kind"] == "within people"
                else math.nan
            ),
        }
        for row in material.comparisons
    ]


def _sentence(row: Mapping[str, Any], comparison: Mapping[str, Any]) -> str:
    estimate = row["estimate"]
    if not math.isfinite(estimate):
        return f"This could not be computed from {_people(row['n'])}."
    plus, minus = (_cells(comparison[side]) for side in ("plus", "minus"))
    unit = "" if row["estimate_unit"] in ("none", "rho") else f" {row['estimate_unit']}"
    said = f"{MEASURES[row['measure']]} at {words(row['site'])}"
    less = f" less that for {minus}" if minus else ""
    if comparison["covariate"]:
        covariate = words(comparison["covariate"])
        said += f" for {plus}{less} and {covariate}: Spearman's rho is {number(estimate)}"
    elif comparison["groups"]:
        said += f" for {plus}{less}, {words(row['kind'])}: {number(estimate)}{unit}"
    elif minus:
        side = "higher" if estimate > 0 else "lower"
        said += f" is {number(abs(estimate))}{unit} {side} for {plus} than for {minus}"
    else:
        said += f" for {plus} is {number(estimate)}{unit}"
    if row["n"] < 2:
        return f"{said[0].upper()}{said[1:]} in one person: too few for an interval or a test."
    low, high = row["estimate_low"], row["estimate_high"]
    interval, zero = "too few people for an interval", ""
    if math.isfinite(low) and math.isfinite(high):
        interval = f"95 % interval {number(low)} to {number(high)}{unit}"
        zero = " Zero lies within the interval." if low <= 0 <= high else ""
    return (
        f"{said[0].upper()}{said[1:]} ({interval}; n = {row['n']}; p {p_value(row['p'])}, after "
        f"Holm's correction {p_value(row['p_holm']).removeprefix('= ')}).{zero}"
    )


def _cells(cells: Iterable[Mapping[str, Any]]) -> str:
    """Cells of a comparison in words: left panel in watch left and the like."""
    return " and ".join(
        words(f"{cell['tag']} in {cell['condition']}" if cell["tag"] else cell["condition"])
        for cell in cells
    )


def _people(n: int) -> str:
    return "1 person" if n == 1 else f"{n} people"


def _floor(row: Mapping[str, Any], comparisons: int) -> float | None:
    """Least p that flipping signs of so few people can give, where that is too much to tell."""
    floor = 2 / 2 ** row["n"]
    tested = row["kind"] == "within people" and row["n"] > 1
    return floor if tested and floor * comparisons > LEVEL else None


# --- the page ------------------------------------------------------------------------------------


def page(material: Material, drawings: Mapping[str, Drawing], images: Mapping[str, bytes]) -> str:
    """Write the page.

    Parameters
    ----------
    material : Material
    drawings : mapping
        From `draw`.
    images : mapping
        The same figures as PNG.

    Returns
    -------
    str
        HTML that needs no other file.
    """
    import jinja2

    folder = Path(__file__).parent / "templates"
    environment = jinja2.Environment(
        loader=jinja2.DictLoader(
            {name: (folder / name).read_text(encoding="utf-8") for name in TEMPLATES}
        ),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.filters |= {
        "number": number, "p_value": p_value, "words": words, "listed": listed, "people": _people,
        "plain": plain, "tenths": tenths, "known": known,
    }  # fmt: skip
    shown = {
        name: {
            "source": f"data:image/png;base64,{base64.b64encode(images[name]).decode()}",
            "alt": drawing.alt,
            "empty": drawing.empty,
            "file": layout.FILES[f"report_{name}"],
        }
        for name, drawing in drawings.items()
    }
    return environment.get_template("report.html").render(facts(material), figures=shown)


def listed(items: Iterable[Any]) -> str:
    """Write items one after another: a, b and c."""
    *first, end = [str(item) for item in items] or ["none"]
    return f"{', '.join(first)} and {end}" if first else end


def facts(material: Material) -> dict[str, Any]:
    """Everything that the templates tell, by name."""
    return {
        "settings": material.settings,
        "conditions": material.conditions,
        "tags": material.tags,
        "participants": material.participants,
        "in_study": material.in_study,
        "plans_by_person": material.plans,
        "left_out": [
            (name, why)
            for left_out in material.settings["left_out"].values()
            for name, why in left_out.items()
        ],
        "decisions": material.settings["decisions"],
        "filters": report_tables.filters(material),
        "set_aside": [row for row in material.participants if not row["in_study"]],
        "answers": answers(material),
        "cautions": report_tables.cautions(material.tags, material.settings["tags"]),
        "flicker": report_tables.flicker_findings(material),
        "plan_page": material.plan_page,
        "plans": report_tables.flicker_plans(material),
        "recordings": report_tables.recording_facts(material),
        "survival": report_tables.survival(material),
        "groups": report_tables.response_groups(material),
        "unmeasured": report_tables.unmeasured(material),
        "unlocked": [n for n, about in material.conditions.items() if not about["phase_locked"]],
        "attention": report_tables.attention_groups(material),
        "alpha": report_tables.alpha_people(material),
        "relation": material.group,
        "partial": report_tables.partial_means(material),
        "methods": methods(material),
        "versions": provenance.versions(),
        "yaml": settings_text(material),
        "files": {layout.FILES[name]: about for name, about in STUDY_FILES.items()},
    }


def methods(material: Material) -> dict[str, Any]:
    """Counts and ranges that a paper states, of the people in the study."""
    used = [
        fact
        for fact in report_tables.recording_facts(material)
        if fact["participant"] in material.in_study
    ]
    plan = next(iter(material.plans.values()))
    chosen = material.settings["filter"]
    chain = FilterChain.design(
        float(plan.rate),
        chosen["highpass_hz"],
        plan.passband_hz,
        plan.line_hz or None,
        chosen["line_removal"],
    )
    kept = {
        name: [
            sum(fact["windows"].get(name, (0, 0))[0] for fact in used if fact["participant"] == who)
            for who in material.in_study
        ]
        for name in material.conditions
    }
    return {
        "rates": sorted({plan.rate for plan in material.plans.values()}),
        "filters": chain.designs,
        "line_hz": chain.line_hz,
        "positions": sorted(
            {r["position"] for of in material.recordings.values() for r in of["channels"]} - {None}
        ),
        "bad": spread(fact["bad"] for fact in used),
        "removed": spread(fact["removed"].total() for fact in used),
        "kept": {name: spread(counts) for name, counts in kept.items()},
    }


def spread(counts: Iterable[int]) -> str:
    """Mean and range of counts in words.

    Examples
    --------
    >>> spread([1, 2, 6])
    'mean 3.00, range 1–6'
    """
    values = list(counts)
    if len(set(values)) < 2:
        return f"{values[0]} each" if values else "nobody"
    return f"mean {number(np.mean(values))}, range {min(values)}–{max(values)}"


def settings_text(material: Material) -> str:
    """Settings in full, as a file that this page can be made again from.

    Tags and comparisons stand in their own order; f1 and f2 are counted in it.
    """
    import yaml

    whole = {
        name: value for name, value in material.settings.items() if name in Settings.model_fields
    }
    planned = [row["comparison"] for row in material.comparisons]
    whole["tags"] = {name: whole["tags"][name] for name in material.tags}
    whole["comparisons"] = {name: whole["comparisons"][name] for name in planned}
    return yaml.safe_dump(whole, sort_keys=False, allow_unicode=True, default_flow_style=None)
