"""A draft of decisions: those that stand, and what the tool would decide, for a person to judge."""

from onbin import decisions, tables
from onbin.runner import run

COLUMNS = ["recording", "kind", "item", "verdict", "reason", "by", "date"]


def draft_decisions(inputs, outputs, settings):
    """Write a draft; a person takes over what holds."""
    suggested = [
        *decisions.of_participants(tables.read_table(inputs.participants), settings["recordings"]),
        *(
            line
            for recording, sensors, components in zip(
                settings["recordings"], inputs.sensors, inputs.components, strict=True
            )
            for line in (
                *decisions.of_channels(recording, tables.read_table(sensors)),
                *decisions.of_components(recording, tables.read_table(components)),
            )
        ),
    ]
    decided = {(row["recording"], row["kind"], row["item"]) for row in settings["decisions"]}
    open_lines = [
        line for line in suggested if (line["recording"], line["kind"], line["item"]) not in decided
    ]
    tables.write_table(outputs.decisions, [*settings["decisions"], *open_lines], COLUMNS)


if "snakemake" in globals():
    run(draft_decisions, snakemake)  # noqa: F821
