"""From the study's tables to what the report tells, section by section."""

from collections import Counter
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import numpy as np

from onbin import arrays, figures, flicker, inference, layout, response_tables, tables, tagging
from onbin.flicker_tables import AS_SET
from onbin.plan_page import risk
from onbin.response_tables import SUM

Rows = Sequence[Mapping[str, Any]]

KINDS = ("channels", "designs", "gains", "sensors", "components", "windows", "cleaning")
FUNDAMENTAL = "1f"
ATTENTION_LEVEL = 0.05  # of telling the attended tag of one person


@dataclass(frozen=True)
class Plan:
    """How a person's windows measure the terms.

    Attributes
    ----------
    rate : Fraction
        Sampling rate in Hz.
    tags : tuple of (str, Fraction)
        Frequencies used of the tags.
    terms : tuple of Term
    samples : tuple of int
        Length of the window of each term.
    passband_hz, line_hz : float
        What the filters let pass, and the mains (0 where nothing is known).
    """

    rate: Fraction
    tags: tuple[tuple[str, Fraction], ...]
    terms: tuple[tagging.Term, ...]
    samples: tuple[int, ...]
    passband_hz: float
    line_hz: float

    @classmethod
    def of(cls, stored: Mapping[str, np.ndarray], settings: Mapping[str, Any]) -> "Plan":
        """Take it from what the step spectra leaves."""
        coefficients = response_tables.Coefficients.of(stored, settings["terms"])
        return cls(
            rate=Fraction(str(stored["rate"])),
            tags=tuple(coefficients.tags.items()),
            terms=tuple(coefficients.terms),
            samples=tuple(stored["samples"].tolist()),
            passband_hz=coefficients.passband_hz,
            line_hz=settings["filter"]["line_hz"] or float(stored["line_hz"]),
        )

    def neighbours(
        self, settings: Mapping[str, Any], index: int, flickering: Sequence[str]
    ) -> tuple[list[Fraction], list[bool]]:
        """Frequencies of a term's neighbouring bins, and which of them hold noise only."""
        response = settings["response"]
        offsets = tagging.neighbour_offsets(response["neighbours"], response["skip"])
        frequency = self.terms[index].frequency
        duration_s = self.samples[index] / self.rate
        occupied = response_tables.occupied(
            dict(self.tags),
            flickering,
            response["intermodulation_order"],
            self.passband_hz,
            self.line_hz,
        )
        usable = tagging.usable_neighbours(
            frequency, offsets, duration_s, occupied, self.passband_hz
        )
        return [frequency + j / duration_s for j in offsets], usable


@dataclass(frozen=True)
class Material:
    """All that the report is made from, read and brought down to what is shown.

    Attributes
    ----------
    settings : mapping
        The whole settings, ``terms``, ``decisions`` (lines of the table) and ``left_out`` (why, by
        participant and recording).
    participants, flicker, responses, alpha, relation, attention, comparisons, group : rows
        The study's tables.
    relation_windows : rows
        Everybody's.
    recordings : mapping
        Tables of each recording, by its name and by `KINDS`.
    plans : mapping
        `Plan` by participant.
    plan_page : str
        The flicker plan as it was printed before the run.
    amplitudes_uv : mapping
        By participant and condition, at the region of the response: shape (n_terms, n_bins).
    spectra : list of figures.Spectrum
        At the region of alpha.
    info : mne.Info
        Channels with their positions.
    """

    settings: Mapping[str, Any]
    participants: Rows
    flicker: Rows
    responses: Rows
    alpha: Rows
    relation: Rows
    attention: Rows
    comparisons: Rows
    group: Rows
    relation_windows: Rows
    recordings: Mapping[str, Mapping[str, Rows]]
    plans: Mapping[str, Plan]
    plan_page: str
    amplitudes_uv: Mapping[str, Mapping[str, np.ndarray]]
    spectra: Sequence[figures.Spectrum]
    info: Any

    @property
    def in_study(self) -> list[str]:
        """Participants whose figures enter the study's."""
        return [row["participant"] for row in self.participants if row["in_study"]]

    @property
    def conditions(self) -> Mapping[str, Mapping[str, Any]]:
        """Conditions of the settings."""
        return self.settings["conditions"]

    @property
    def tags(self) -> dict[str, Fraction]:
        """Exact frequencies of the tags in Hz."""
        return tagging.study_tags(self.settings["terms"])

    def role(self, tag: str, condition: str) -> str:
        """What a tag does in a condition."""
        about = self.conditions[condition]
        if tag not in about["flickering"]:
            return figures.STILL
        if about["attended"] is None:
            return figures.FLICKERS
        return figures.ATTENDED if about["attended"] == tag else figures.UNATTENDED


def read(inputs: SimpleNamespace, settings: Mapping[str, Any]) -> Material:
    """Read the study's tables and reduce everybody's arrays to what is shown."""
    import mne

    participants = tables.read_table(inputs.participants)
    recorded = [row for row in participants if row["recordings"]]
    plans, amplitudes_uv, spectra = {}, {}, []
    for row, coefficients, psd in zip(recorded, inputs.coefficients, inputs.psd, strict=True):
        who, stored = row["participant"], arrays.read(coefficients)
        plans[who] = Plan.of(stored, settings)
        amplitudes_uv[who] = _amplitudes(stored, settings)
        spectra += _spectra(row, arrays.read(psd), settings)
    recordings: dict[str, dict[str, Rows]] = {}
    for kind in KINDS:
        for path in getattr(inputs, kind):
            name = Path(path).name.partition("_desc-")[0]
            recordings.setdefault(name, {})[kind] = tables.read_table(path)
    study = ("flicker", "responses", "alpha", "relation", "attention", "comparisons", "group")
    return Material(
        settings=settings,
        participants=participants,
        **{name: tables.read_table(getattr(inputs, name)) for name in study},
        relation_windows=[r for path in inputs.relation_windows for r in tables.read_table(path)],
        recordings=recordings,
        plans=plans,
        plan_page=Path(inputs.plan_page).read_text(encoding="utf-8"),
        amplitudes_uv=amplitudes_uv,
        spectra=sorted(spectra, key=lambda s: list(settings["conditions"]).index(s.condition)),
        info=mne.io.read_info(inputs.signal, verbose="error"),
    )


def _amplitudes(
    stored: Mapping[str, np.ndarray], settings: Mapping[str, Any]
) -> dict[str, np.ndarray]:
    """Evoked amplitude by term and bin; where it is not phase-locked the root mean square."""
    site = stored["site"].tolist().index(settings["relation"]["response_region"])
    found = {}
    for condition, about in settings["conditions"].items():
        windows_uv = stored["coefficients_uv"][stored["condition"] == condition, site]
        if len(windows_uv) and about["phase_locked"]:
            found[condition] = np.abs(windows_uv.mean(axis=0))
        elif len(windows_uv):
            found[condition] = np.sqrt((np.abs(windows_uv) ** 2).mean(axis=0))
    return found


def _spectra(
    row: Mapping[str, Any], stored: Mapping[str, np.ndarray], settings: Mapping[str, Any]
) -> Iterator[figures.Spectrum]:
    channels = np.isin(stored["channel"], settings["regions"][settings["alpha"]["region"]])
    for condition in settings["conditions"]:
        chosen = stored["condition"] == condition
        if chosen.any():
            psd = stored["psd_uv2_per_hz"][chosen][:, channels].mean(axis=(0, 1))
            yield figures.Spectrum(
                row["participant"], row["in_study"], condition, stored["frequencies_hz"], psd
            )


# --- the flicker ---------------------------------------------------------------------------------


def cautions(
    tags: Mapping[str, Fraction], settings_of: Mapping[str, Mapping[str, Any]]
) -> list[dict[str, Any]]:
    """How often each tag changes in a second: flashes, or reversals of a pattern.

    ``risk`` is a word for a caution, never a clearance, see `plan_page.risk`.
    """
    rows = []
    for tag, frequency in tags.items():
        reversing = settings_of[tag]["pattern_reversal"]
        rate = 2 * frequency if reversing else frequency
        rows.append({"tag": tag, "reversing": reversing, "rate": rate, "risk": risk(rate)})
    return rows


def flicker_plans(material: Material) -> list[dict[str, Any]]:
    """Terms as measured; people whose windows measure them alike share a table."""
    shared: dict[Plan, list[str]] = {}
    for who, plan in material.plans.items():
        shared.setdefault(plan, []).append(who)
    return [
        {
            "who": who,
            "rate": plan.rate,
            "passband_hz": plan.passband_hz,
            "terms": list(_term_rows(material, plan)),
        }
        for plan, who in shared.items()
    ]


def _term_rows(material: Material, plan: Plan) -> Iterator[dict[str, Any]]:
    settings, terms = material.settings, plan.terms
    low_hz, high_hz = settings["alpha"]["band_hz"]
    patterns: dict[tuple[str, ...], list[str]] = {}
    for name, about in material.conditions.items():
        patterns.setdefault(tuple(about["flickering"]), []).append(name)
    for index, term in enumerate(terms):
        duration_s = plan.samples[index] / plan.rate
        left_out = []
        for flickering, conditions in patterns.items():
            frequencies, usable = plan.neighbours(settings, index, flickering)
            missing = [f for f, is_usable in zip(frequencies, usable, strict=True) if not is_usable]
            if missing:
                above = [f for f in missing if f > 1 / duration_s]
                left_out.append(
                    {"conditions": conditions, "count": len(missing), "frequencies": above}
                )
        same = [f"{t.tag} {t.term}" for t in terms if t != term and t.frequency == term.frequency]
        yield {
            "term": term,
            "samples": plan.samples[index],
            "duration_s": duration_s,
            "cycles": term.frequency * duration_s,
            "bin_hz": 1 / duration_s,
            "neighbours": 2 * settings["response"]["neighbours"],
            "left_out": left_out,
            "same": same,
            "in_alpha": low_hz <= term.frequency <= high_hz,
        }


def flicker_findings(material: Material) -> dict[str, Any]:
    """Where the EEG shows the flicker: counts of verdicts, and the rows that need a look.

    A row needs one where the flicker is elsewhere than set, cannot be told, drifts, loses frames,
    or where the frequency found was adopted.
    """
    return {
        "counts": Counter(row["flicker_verdict"] for row in material.flicker),
        "rows": [row for row in material.flicker if _needs_a_look(row)],
        "lost": [
            row
            for row in material.flicker
            if row["flicker_verdict"] == flicker.OFFSET and row["frequency_source"] == AS_SET
        ],
    }


def _needs_a_look(row: Mapping[str, Any]) -> bool:
    still = not row["drift_low_hz_per_min"] > 0 and not row["drift_high_hz_per_min"] < 0
    as_set = row["flicker_verdict"] == flicker.AS_SET and row["frequency_source"] == AS_SET
    return not as_set or not still or bool(row["phase_steps"])


def neighbourhoods(material: Material) -> list[figures.Neighbourhood]:
    """Everybody's amplitude at each tag and its neighbouring bins, of the people in the study.

    Where people's windows differ in length, bins are matched by their number and the frequencies
    are those of the first person.
    """
    found = []
    for tag in material.tags:
        for condition, about in material.conditions.items():
            rows_uv, plan = [], None
            for who in material.in_study:
                terms = material.plans[who].terms
                index = next((i for i, t in enumerate(terms) if t.tag == tag), None)
                if index is not None and condition in material.amplitudes_uv[who]:
                    rows_uv.append(material.amplitudes_uv[who][condition][index])
                    plan = plan or (material.plans[who], index)
            if plan:
                frequency = plan[0].terms[plan[1]].frequency
                beside, usable = plan[0].neighbours(material.settings, plan[1], about["flickering"])
                found.append(
                    figures.Neighbourhood(
                        tag=tag,
                        condition=condition,
                        role=material.role(tag, condition),
                        frequencies_hz=np.array([float(f) for f in (frequency, *beside)]),
                        used=np.array([False, *usable]),
                        amplitude_uv=np.array(rows_uv),
                        evoked=about["phase_locked"],
                    )
                )
    return found


# --- recordings ----------------------------------------------------------------------------------


def recording_facts(material: Material) -> list[dict[str, Any]]:
    """What became of each recording: channels, components, windows, with reasons."""
    return [
        {"recording": name, "participant": f"sub-{layout.entities(name)['sub']}"}
        | {
            "channels": len(of["sensors"]),
            "bad": sum(r["verdict"] == "bad" for r in of["sensors"]),
            "marked": [r["name"] for r in of["sensors"] if r["status"] == "bad"],
            "found": [
                (r["name"], r["reason"])
                for r in of["sensors"]
                if (r["verdict"], r["status"]) == ("bad", "good")
            ],
            "sheet": layout.FILES["components_sheet"].format(recording=layout.full_name(name)),
            "components": len(of["components"]),
            "removed": Counter(
                r["component_class"] for r in of["components"] if r["verdict"] == "removed"
            ),
            "flagged": [
                (r["component"], r["component_class"], r["reason"])
                for r in of["components"]
                if r["flagged"]
            ],
            "windows": _windows(of["windows"], material.conditions),
            "reasons": Counter(
                reason
                for r in of["windows"]
                if r["verdict"] != "kept"
                for reason in (r["reason"] or "no reason given").split(", ")
            ),
        }
        for name, of in material.recordings.items()
    ]


def _windows(rows: Rows, conditions: Iterable[str]) -> dict[str, tuple[int, int]]:
    """Windows kept and placed, by condition."""
    placed = Counter(row["condition"] for row in rows)
    kept = Counter(row["condition"] for row in rows if row["verdict"] == "kept")
    return {name: (kept[name], placed[name]) for name in conditions if placed[name]}


def quality(material: Material) -> list[figures.Quality]:
    """The same by participant who has recordings."""
    facts = recording_facts(material)
    people = []
    for row in material.participants:
        if not row["recordings"]:
            continue
        own = [fact for fact in facts if fact["participant"] == row["participant"]]
        windows: dict[str, tuple[int, int]] = {}
        for fact in own:
            for condition, counts in fact["windows"].items():
                before = windows.get(condition, (0, 0))
                windows[condition] = (before[0] + counts[0], before[1] + counts[1])
        people.append(
            figures.Quality(
                participant=row["participant"],
                in_study=row["in_study"],
                windows=windows,
                bad_share=max(fact["bad"] / fact["channels"] for fact in own),
                removed=sum((fact["removed"] for fact in own), Counter()),
            )
        )
    return people


def filters(material: Material) -> list[dict[str, Any]]:
    """Filters as they ran, each once, with the number of recordings."""
    each: dict[str, dict[str, Any]] = {}
    for of in material.recordings.values():
        for row in of["designs"]:
            half_hz = [row["half_low_hz"], row["half_high_hz"]]
            shown = {**row, "half": [hz for hz in half_hz if np.isfinite(hz)], "count": 0}
            each.setdefault(str(shown), shown)["count"] += 1
    return list(each.values())


def survival(material: Material) -> list[dict[str, Any]]:
    """Gains of filters and cleaning at each term: lowest and highest over recordings."""
    found: dict[tuple, dict[str, list]] = {}
    columns = (
        ("gains", "gain"),
        ("cleaning", "gain"),
        ("cleaning", "peak_gain"),
        ("cleaning", "topography_correlation"),
    )
    for of in material.recordings.values():
        for kind, column in columns:
            for row in of[kind]:
                key = (row["tag"], row["term"], row["frequency_hz"])
                entry = found.setdefault(key, {})
                if np.isfinite(row[column]):
                    entry.setdefault(f"{kind}_{column}", []).append(row[column])
    return [
        {"tag": tag, "term": term, "frequency_hz": frequency_hz}
        | {name: (min(values), max(values)) for name, values in entry.items()}
        for (tag, term, frequency_hz), entry in found.items()
    ]


# --- responses, alpha, relation ------------------------------------------------------------------


def response_rows(material: Material) -> list[dict[str, Any]]:
    """Everybody's amplitude at each tag at the region of the response.

    Where the flicker is not phase-locked it is the root mean square over windows, without interval.
    """
    region = material.settings["relation"]["response_region"]
    chosen = []
    for row in material.responses:
        if row["tag"] in material.tags and (row["term"], row["site"]) == (FUNDAMENTAL, region):
            shown = row | {"role": material.role(row["tag"], row["condition"])}
            if np.isnan(row["amplitude_uv"]):
                shown["amplitude_uv"] = np.sqrt(row["total_power_uv2"])
            chosen.append(shown)
    order = list(material.conditions)
    return sorted(chosen, key=lambda row: order.index(row["condition"]))


def unmeasured(material: Material) -> list[dict[str, Any]]:
    """Who has too few windows in a condition for a response, and how many were kept."""
    measured = {(row["participant"], row["condition"]) for row in material.responses}
    return [
        {"participant": person.participant, "condition": condition, "kept": kept}
        for person in quality(material)
        for condition, (kept, _) in person.windows.items()
        if material.tags and (person.participant, condition) not in measured
    ]


def response_groups(material: Material) -> dict[str, list[dict[str, Any]]]:
    """Means over the people in the study: by region, terms with a cell for each condition."""
    of_study = [row for row in material.responses if row["in_study"]]
    first = material.settings["relation"]["response_region"]
    groups: dict[str, dict[tuple, dict]] = {first: {}}
    for row in of_study:
        if row["site_kind"] == "region":
            key = (row["tag"], row["term"])
            line = groups.setdefault(row["site"], {}).setdefault(
                key, {"tag": row["tag"], "term": row["term"], "cells": {}}
            )
            if row["term"] != SUM:
                line["frequency_hz"] = row["frequency_hz"]
            line["cells"].setdefault(row["condition"], []).append(row)
    for lines in groups.values():
        for line in lines.values():
            line["cells"] = {name: _cell(rows) for name, rows in line["cells"].items()}
    return {region: list(lines.values()) for region, lines in groups.items() if lines}


def _cell(rows: Rows) -> dict[str, Any]:
    total = rows[0]["term"] == SUM
    return {
        "n": len(rows),
        "driven": rows[0]["driven"],
        "amplitude_uv": np.mean([r["amplitude_sum_uv" if total else "amplitude_uv"] for r in rows]),
        "snr_db": np.mean([row["snr_db"] for row in rows]),
        "detected": None if total else sum(row["present"] for row in rows),
    }


def attention_groups(material: Material) -> list[dict[str, Any]]:
    """How well the attended tag can be told, over the people in the study."""
    rows = [row for row in material.attention if row["in_study"]]
    found = []
    for tags in dict.fromkeys(row["attended_tags"] for row in rows):
        told = [row for row in rows if row["attended_tags"] == tags]
        unknown = [(row["participant"], row["reason"]) for row in told if row["reason"]]
        for decision in dict.fromkeys(row["decision"] for row in told if not row["reason"]):
            known = [row for row in told if row["decision"] == decision and not row["reason"]]
            found.append(
                {
                    "tags": tags,
                    "decision": decision,
                    "unknown": unknown,
                    "n": len(known),
                    "decision_s": np.mean([row["decision_s"] for row in known]),
                    "accuracies": [row["accuracy"] for row in known],
                    "chance": known[0]["chance"],
                    "above": sum(row["accuracy_p"] <= ATTENTION_LEVEL for row in known),
                }
            )
        if len(unknown) == len(told):
            found.append({"tags": tags, "decision": None, "unknown": unknown, "n": 0})
    return found


def map_rows(material: Material) -> list[figures.MapRow]:
    """Maps of the response at each tag and of alpha, mean over the people in the study."""

    def means(rows: Rows, column: str) -> dict[str, dict[str, float]]:
        values: dict[str, dict[str, list]] = {name: {} for name in material.conditions}
        for row in rows:
            if row["in_study"] and row["site_kind"] == "channel" and np.isfinite(row[column]):
                values[row["condition"]].setdefault(row["site"], []).append(row[column])
        return {
            condition: {channel: float(np.mean(v)) for channel, v in channels.items()}
            for condition, channels in values.items()
        }

    maps = [
        figures.MapRow(
            f"{figures.words(tag)}, {float(frequency):.4g} Hz",
            "µV above the bins beside",
            means(
                [r for r in material.responses if (r["tag"], r["term"]) == (tag, FUNDAMENTAL)],
                "amplitude_baseline_uv",
            ),
            [material.role(tag, condition) for condition in material.conditions],
        )
        for tag, frequency in material.tags.items()
    ]
    alpha = means(material.alpha, "alpha_power_db")
    return [*maps, figures.MapRow("alpha power", "dB re 1 µV²", alpha, ["" for _ in alpha])]


def alpha_people(material: Material) -> list[dict[str, Any]]:
    """Each person's alpha frequency, and power in dB by condition, at the region of alpha."""
    people: dict[str, dict[str, Any]] = {}
    for row in material.alpha:
        if row["site"] == material.settings["alpha"]["region"]:
            entry = people.setdefault(row["participant"], {**row, "power_db": {}})
            entry["power_db"][row["condition"]] = row["alpha_power_db"]
    return list(people.values())


def alpha_split(material: Material) -> list[dict[str, Any]]:
    """Each person's mean response to a tag in the windows with little and with much alpha."""
    from onbin.relation import alpha_halves

    by_person: dict[tuple[str, str], list] = {}
    for row in material.relation_windows:
        by_person.setdefault((row["participant"], row["tag"]), []).append(row)
    found = []
    for (who, tag), rows in by_person.items():
        response_uv = np.array([row["projected_amplitude_uv"] for row in rows])
        little, much = alpha_halves(
            [row["log_alpha"] for row in rows], [row["condition"] for row in rows]
        )
        if little.any():
            found.append(
                {
                    "tag": tag,
                    "in_study": who in material.in_study,
                    "little_uv": response_uv[little].mean(),
                    "much_uv": response_uv[much].mean(),
                }
            )
    return found


def partial_means(material: Material) -> dict[str, float]:
    """Mean over people, by Fisher's z, of the relation with time on task held constant, by tag."""
    by_tag: dict[str, list[float]] = {}
    for row in material.relation:
        if row["in_study"] and np.isfinite(row["rho_partial"]):
            by_tag.setdefault(row["tag"], []).append(row["rho_partial"])
    return {
        tag: float(inference.fisher_z_inverse(np.mean(inference.fisher_z(np.array(values)))))
        for tag, values in by_tag.items()
    }
