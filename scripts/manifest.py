"""List every file of the results: step, size, SHA-256, inputs."""

from pathlib import Path

from onbin import provenance, tables
from onbin.runner import run

COLUMNS = ["file", "step", "bytes", "sha256", "inputs"]


def list_files(inputs, outputs, settings):
    """Write the manifest from the files and their sidecars."""
    results = Path(settings["dataset"]["results"])
    rows = [provenance.manifest_row(Path(path), results) for path in sorted(inputs.files)]
    tables.write_table(outputs.files, rows, COLUMNS)


if "snakemake" in globals():
    run(list_files, snakemake)  # noqa: F821
