"""Write the report: one page for people, and its figures as files of their own."""

from pathlib import Path

from onbin import report, report_tables
from onbin.drawing import save
from onbin.runner import run


def write_report(inputs, outputs, settings):
    """Draw the figures and write the page."""
    material = report_tables.read(inputs, settings)
    drawings = report.draw(material)
    for name, drawing in drawings.items():
        save(drawing.figure, getattr(outputs, name))
    images = {name: Path(getattr(outputs, name)).read_bytes() for name in drawings}
    Path(outputs.page).write_text(report.page(material, drawings, images), encoding="utf-8")


if "snakemake" in globals():
    run(write_report, snakemake)  # noqa: F821
