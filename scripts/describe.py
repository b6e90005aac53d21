"""Make the results a BIDS derivative: what it is, what made it, what BIDS has no names for yet."""

import json
from pathlib import Path

from onbin import provenance
from onbin.runner import run


def describe(inputs, outputs, settings):
    """Write dataset_description.json, README and .bidsignore."""
    title, source = settings["study"]["title"], settings["dataset"]["folder"]
    description = provenance.dataset_description(title, source)
    Path(outputs.description).write_text(
        json.dumps(description, indent=2, ensure_ascii=False) + "\n", encoding="utf-8"
    )
    Path(outputs.readme).write_text(provenance.results_readme(title), encoding="utf-8")
    Path(outputs.ignore).write_text("\n".join(provenance.IGNORED) + "\n", encoding="utf-8")


if "snakemake" in globals():
    run(describe, snakemake)  # noqa: F821
