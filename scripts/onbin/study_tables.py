"""From participants' tables to the study's: who is in it, comparisons, the relation over people."""

from collections.abc import Iterable, Iterator, Mapping, Sequence
from typing import Any

import numpy as np

from onbin import inference, relation
from onbin.columns import COLUMNS
from onbin.errors import SettingsError
from onbin.flicker_tables import MEASURED
from onbin.relation_tables import ATTENDED, UNATTENDED
from onbin.response_tables import SUM

Rows = Sequence[Mapping[str, Any]]

NO_RECORDING = "no EEG recording of the tasks taken in the dataset"


def participant_row(
    participant: str,
    sensors: Mapping[str, Rows],
    components: Mapping[str, Rows],
    windows: Mapping[str, Rows],
    max_bad_share: float,
    min_windows: Mapping[str, int],
    trusted: Mapping[str, str],
    left_out: Mapping[str, str],
) -> dict[str, Any]:
    """What became of one participant's recordings, and whether the study rests on them.

    Parameters
    ----------
    participant : str
    sensors, components, windows : mapping
        Tables of verdicts by recording; empty where none is left.
    max_bad_share : float
        Share of bad channels above which a participant is set aside.
    min_windows : mapping
        Fewest windows of each condition, where it was recorded.
    trusted : mapping of str to str
        Recordings that a person keeps whatever these limits say, and why. Where they are all of a
        participant's, windows are not counted against them either.
    left_out : mapping of str to str
        Recordings of the participant that are left out, and why.
    """
    left_out_told = "; ".join(f"{name}: {why}" for name, why in left_out.items()) or None
    if not sensors:
        return {
            "participant": participant,
            "in_study": False,
            "reason": left_out_told or NO_RECORDING,
            "recordings": 0,
            "left_out": left_out_told,
        }
    kept: dict[str, int] = {}
    for rows in windows.values():
        for row in rows:
            kept[row["condition"]] = kept.get(row["condition"], 0) + (row["verdict"] == "kept")
    bad = {name: sum(r["verdict"] == "bad" for r in rows) for name, rows in sensors.items()}
    too_many = [
        f"{name}: {bad[name]} of {len(rows)} channels are bad, more than {max_bad_share:.0%}"
        for name, rows in sensors.items()
        if bad[name] / len(rows) > max_bad_share and name not in trusted
    ]
    too_few = [
        f"{condition}: {count} windows kept, fewer than {min_windows[condition]}"
        for condition, count in kept.items()
        if count < min_windows[condition] and not set(sensors) <= set(trusted)
    ]
    reasons = too_many + too_few
    fewest = min(kept, key=kept.get, default=None)
    return {
        "participant": participant,
        "in_study": not reasons,
        "reason": "; ".join(reasons) or None,
        "recordings": len(windows),
        "left_out": left_out_told,
        "channels_total": min(len(rows) for rows in sensors.values()),
        "channels_bad": max(bad.values()),
        "components_removed": sum(
            row["verdict"] == "removed" for rows in components.values() for row in rows
        ),
        "windows_placed": sum(len(rows) for rows in windows.values()),
        "windows_kept": sum(kept.values()),
        "fewest_windows": kept.get(fewest),
        "fewest_condition": fewest,
    }


def comparison_rows(
    comparisons: Sequence[Mapping[str, Any]],
    responses: Rows,
    alphas: Rows,
    people: Mapping[str, Mapping[str, str]],
    in_study: Sequence[str],
    seed: int,
) -> Iterator[dict[str, Any]]:
    """Planned comparisons over the people in the study.

    Parameters
    ----------
    comparisons : sequence of mapping
        From the settings, with their names.
    responses, alphas : rows
        Of all participants.
    people : mapping
        Rows of the dataset's participants.tsv by participant.
    in_study : sequence of str
        Participants.
    seed : int
    """
    rows = []
    for comparison in comparisons:
        table = alphas if comparison["measure"].startswith("alpha") else responses
        values = {
            who: difference
            for who in in_study
            if (difference := _difference(table, who, comparison)) is not None
        }
        rows.append(
            {
                "comparison": comparison["name"],
                "measure": comparison["measure"],
                "site": comparison["region"],
                "plus": _words(comparison["plus"]),
                "minus": _words(comparison["minus"]) or "zero",
                **_tested(comparison, values, people, seed),
            }
        )
    corrected = inference.holm(np.array([row["p"] for row in rows])) if rows else []
    for row, p in zip(rows, corrected, strict=True):
        yield row | {"p_holm": p}


def measured_tags(flicker: Rows, participants: Mapping[str, Sequence[str]]) -> dict[str, list]:
    """Tags of each participant whose measured frequency was adopted in some recording.

    Parameters
    ----------
    flicker : rows
        Where each recording shows each tag.
    participants : mapping
        Recordings of each participant.
    """
    return {
        who: sorted(
            {
                row["tag"]
                for row in flicker
                if row["recording"] in recordings and row["frequency_source"] == MEASURED
            }
        )
        for who, recordings in participants.items()
    }


def mark_measured(
    rows: Iterable[Mapping[str, Any]],
    comparisons: Sequence[Mapping[str, Any]],
    measured: Mapping[str, Sequence[str]],
) -> Iterator[dict[str, Any]]:
    """Name in each comparison the people of whom it uses a measured frequency."""
    for row, comparison in zip(rows, comparisons, strict=True):
        tags = {cell["tag"] for side in ("plus", "minus") for cell in comparison[side]}
        people = [who for who in row["who"].split() if tags & set(measured[who])]
        yield {**row, "measured_in": " ".join(people)}


def _difference(table: Rows, who: str, comparison: Mapping[str, Any]) -> float | None:
    """Mean of plus less mean of minus of one person; None where a value is missing."""
    means = []
    for cells in (comparison["plus"], comparison["minus"]):
        found = [_value(table, who, comparison, cell) for cell in cells]
        if any(value is None or not np.isfinite(value) for value in found):
            return None
        means.append(np.mean(found) if found else 0.0)
    return float(means[0] - means[1])


def _value(
    table: Rows, who: str, comparison: Mapping[str, Any], cell: Mapping[str, Any]
) -> float | None:
    wanted = {"participant": who, "site": comparison["region"], "condition": cell["condition"]}
    if cell["tag"] is not None:
        total = comparison["measure"] == "amplitude_sum_uv"
        wanted |= {"tag": cell["tag"], "term": SUM if total else comparison["term"]}
    for row in table:
        if all(row[key] == value for key, value in wanted.items()):
            return row[comparison["measure"]]
    return None


def _words(cells: Sequence[Mapping[str, Any]]) -> str:
    return ", ".join(" ".join(filter(None, (c["tag"], c["condition"]))) for c in cells)


def _tested(
    comparison: Mapping[str, Any],
    values: Mapping[str, float],
    people: Mapping[str, Mapping[str, str]],
    seed: int,
) -> dict[str, Any]:
    key = f"comparisons.{comparison['name']}"
    unit = COLUMNS[comparison["measure"]].unit
    if comparison["covariate"]:
        column = comparison["covariate"]
        labels = _column(people, values, column, f"{key}.covariate")
        known = {who: float(labels[who]) for who in values if _is_number(labels[who])}
        x, y = np.array(list(known.values())), np.array([values[who] for who in known])
        test = inference.spearman_test(x, y, seed)
        interval = inference.bca_interval(inference.spearman, x, y, seed=seed)
        kind, who, effect, unit = f"correlation with {column}", list(known), np.nan, "rho"
        estimate = test.statistic
    elif comparison["groups"]:
        column, first_label, second_label = comparison["groups"]
        labels = _column(people, values, column, f"{key}.groups")
        found = {row.get(column) for row in people.values()} - {None}
        if absent := sorted({first_label, second_label} - found):
            raise SettingsError(
                f"{key}.groups: nobody in participants.tsv has {column} {', '.join(absent)}; "
                f"found {', '.join(sorted(found))}."
            )
        first, second = (
            np.array([values[who] for who in values if labels[who] == label])
            for label in (first_label, second_label)
        )
        test = inference.two_group_test(first, second, seed)
        interval = inference.bca_interval(
            inference.mean_difference, first, second, paired=False, seed=seed
        )
        kind, effect = f"{first_label} less {second_label}", inference.hedges_g(first, second)
        who = [w for w in values if labels[w] in (first_label, second_label)]
        estimate = test.statistic
    else:
        sample = np.array(list(values.values()))
        test = inference.sign_flip_test(sample, seed)
        interval = inference.bca_interval(inference.mean, sample, seed=seed)
        kind, who, effect = "within people", list(values), inference.cohen_dz(sample)
        estimate = test.statistic
    return {
        "kind": kind,
        "n": len(who),
        "who": " ".join(who),
        "estimate": estimate,
        "estimate_unit": unit or "none",
        "estimate_low": interval.low,
        "estimate_high": interval.high,
        "effect_size": effect,
        "p": test.p,
    }


def _is_number(text: str) -> bool:
    try:
        return np.isfinite(float(text))
    except ValueError:
        return False


def _column(
    people: Mapping[str, Mapping[str, str]], who: Iterable[str], column: str, key: str
) -> dict[str, str]:
    found = {name: people.get(name, {}).get(column) for name in who}
    if any(value is None for value in found.values()):
        columns = sorted({c for row in people.values() for c in row} - {"participant_id"})
        raise SettingsError(
            f"{key}: participants.tsv has no {column!r} for everybody; it has "
            f"{', '.join(columns) or 'no columns'}."
        )
    return found


def group_rows(
    measures: Rows, windows: Rows, in_study: Sequence[str], seed: int
) -> Iterator[dict[str, Any]]:
    """Take the relation of alpha and response over people, at each tag and role."""
    measures = [row for row in measures if row["participant"] in in_study]
    for tag in dict.fromkeys(row["tag"] for row in measures):
        rhos = [row["rho"] for row in measures if row["tag"] == tag]
        group = relation.group_relation(rhos, seed)
        chosen = [w for w in windows if w["participant"] in in_study and _belongs(w, tag)]
        pooled = relation.pooled_relation(
            [w["participant"] for w in chosen],
            [f"{w['condition']} {w['tag']}" for w in chosen],
            [w["log_alpha"] for w in chosen],
            [w["projected_amplitude_uv"] for w in chosen],
        )
        yield {
            "tag": tag,
            "n": group.n_people,
            "windows": pooled.n_observations,
            "rho_mean": group.mean_rho,
            "rho_low": group.interval.low,
            "rho_high": group.interval.high,
            "p": group.test.p,
            "rm_r": pooled.r,
            "rm_p": pooled.p,
        }


def _belongs(window: Mapping[str, Any], tag: str) -> bool:
    if tag in (ATTENDED, UNATTENDED):
        return window["attended"] is (tag == ATTENDED)
    return window["tag"] == tag
