"""Alpha and the response of one participant, window by window."""

from onbin import relation_tables, tables
from onbin.runner import run

WINDOWS = [
    "participant", "recording", "window", "window_number", "trial", "condition", "tag",
    "frequency_source", "attended", "log_alpha", "projected_amplitude_uv",
]  # fmt: skip
MEASURES = [
    "participant", "tag", "frequency_source", "windows", "rho", "rho_partial", "rho_p", "reason",
]  # fmt: skip


def relate(inputs, outputs, settings):
    """Relate alpha to the response at each tag and at the attended one."""
    windows = relation_tables.join(
        tables.read_table(inputs.alpha),
        tables.read_table(inputs.response),
        settings["alpha"]["region"],
        settings["relation"]["response_region"],
        {name: about["attended"] for name, about in settings["conditions"].items()},
    )
    who = {"participant": settings["participant"]}
    measures = relation_tables.relation_rows(
        windows, settings["relation"]["permutations"], settings["seed"]
    )
    tables.write_table(outputs.measures, (who | row for row in measures), MEASURES)
    tables.write_table(outputs.windows, windows, WINDOWS)


if "snakemake" in globals():
    run(relate, snakemake)  # noqa: F821
