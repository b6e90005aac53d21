"""The study's tables: everybody's measures, who is in the study, comparisons, the relation."""

from pathlib import Path

from onbin import study_tables, tables
from onbin.runner import run

PARTICIPANTS = [
    "participant", "in_study", "reason", "recordings", "left_out", "channels_total", "channels_bad",
    "components_removed", "windows_placed", "windows_kept", "fewest_windows", "fewest_condition",
    "measured_tags",
]  # fmt: skip
COMPARISONS = [
    "comparison", "measure", "site", "plus", "minus", "kind", "n", "estimate", "estimate_unit",
    "estimate_low", "estimate_high", "effect_size", "p", "p_holm", "who",
    "measured_in",
]  # fmt: skip
GROUP = ["tag", "n", "windows", "rho_mean", "rho_low", "rho_high", "p", "rm_r", "rm_p"]


def make_study(inputs, outputs, settings):
    """Bring the participants' tables together."""
    verdicts = {
        name: dict(zip(settings["recordings"], map(tables.read_table, paths), strict=True))
        for name, paths in (
            ("sensors", inputs.sensors),
            ("components", inputs.components),
            ("windows", inputs.windows),
        )
    }
    fewest = {
        name: settings["trust"]["min_windows" if about["flickering"] else "min_rest_windows"]
        for name, about in settings["conditions"].items()
    }
    people = _people(inputs)
    everybody = {who: [] for who in _expected(people, settings)} | settings["participants"]
    participants = [
        study_tables.participant_row(
            participant,
            **{name: {r: of_all[r] for r in recordings} for name, of_all in verdicts.items()},
            max_bad_share=settings["sensors"]["max_bad_share"],
            min_windows=fewest,
            trusted=settings["trusted"],
            left_out=settings["left_out"].get(participant, {}),
        )
        for participant, recordings in sorted(everybody.items())
    ]
    flicker = [
        {"recording": recording, **row}
        for recording, path in zip(settings["recordings"], inputs.flicker, strict=True)
        for row in tables.read_table(path)
    ]
    measured = study_tables.measured_tags(flicker, settings["participants"])
    in_study = [row["participant"] for row in participants if row["in_study"]]
    responses, alphas, relations, attentions, windows = (
        [row for path in paths for row in tables.read_table(path)]
        for paths in (
            inputs.responses,
            inputs.alphas,
            inputs.relations,
            inputs.attentions,
            inputs.relation_windows,
        )
    )

    tables.write_table(
        outputs.participants,
        (
            row | {"measured_tags": ", ".join(measured.get(row["participant"], ()))}
            for row in participants
        ),
        PARTICIPANTS,
    )
    columns = ["recording", *tables.header(inputs.flicker[0])]
    tables.write_table(outputs.flicker, flicker, columns)
    for path, rows, first in (
        (outputs.responses, responses, inputs.responses[0]),
        (outputs.alpha, alphas, inputs.alphas[0]),
        (outputs.relation, relations, inputs.relations[0]),
        (outputs.attention, attentions, inputs.attentions[0]),
    ):
        marked = (row | {"in_study": row["participant"] in in_study} for row in rows)
        participant, *others = tables.header(first)
        tables.write_table(path, marked, [participant, "in_study", *others])
    comparisons = study_tables.comparison_rows(
        settings["planned"], responses, alphas, people, in_study, settings["seed"]
    )
    comparisons = study_tables.mark_measured(comparisons, settings["planned"], measured)
    tables.write_table(outputs.comparisons, comparisons, COMPARISONS)
    group = study_tables.group_rows(relations, windows, in_study, settings["seed"])
    tables.write_table(outputs.group, group, GROUP)


def _expected(people, settings):
    """Participants that the dataset names in its table or by a folder, among those taken."""
    named = {*people, *settings["folders"]}
    taken = {f"sub-{label}" for label in settings["dataset"]["participants"]}
    return named & taken if taken else named


def _people(inputs):
    """Read the dataset's participants.tsv, if it has one."""
    rows = [row for path in inputs.people for row in tables.read_foreign(Path(path))]
    return {row.get("participant_id"): row for row in rows}


if "snakemake" in globals():
    run(make_study, snakemake)  # noqa: F821
