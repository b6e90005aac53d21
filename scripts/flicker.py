"""Find where each tag's flicker truly is, from the recording alone."""

from onbin import dataset, flicker_tables, sites, tables, tagging
from onbin.runner import run

COLUMNS = [
    "tag", "signal", "set_hz", "flicker_verdict", "found_hz", "found_low_hz", "found_high_hz",
    "offset_hz", "offset_bins", "lost_db", "stretch_snr_db", "presence_p", "drift_hz_per_min",
    "drift_low_hz_per_min", "drift_high_hz_per_min", "phase_steps", "phase_steps_at", "used_hz",
    "frequency_source",
]  # fmt: skip


def find_flicker(inputs, outputs, settings):
    """Locate every tag in the region of the response, and in the photodiode's channel."""
    raw = dataset.read_signal(inputs.signal)
    kept = [row for row in tables.read_table(inputs.verdicts) if row["verdict"] == "kept"]
    names = dataset.eeg_names(raw)
    region = settings["relation"]["response_region"]
    place = sites.common_sites([names], {region: settings["regions"][region]})[-1]
    signals_uv = {region: (sites.averaging([place], names) @ dataset.eeg_uv(raw))[0]}
    photodiode = settings["flicker"]["photodiode"]
    if photodiode:
        signals_uv[photodiode] = dataset.channel_uv(raw, photodiode)
    found = flicker_tables.frequency_rows(
        signals_uv,
        kept,
        settings["conditions"],
        tagging.study_tags(settings["terms"]),
        settings["filter"]["line_hz"] or raw.info["line_freq"],
        raw.info["sfreq"],
        settings["windows"]["length_s"],
    )
    rows = flicker_tables.used_rows(
        list(found), settings["flicker"]["adopt"], settings["recording"]
    )
    tables.write_table(outputs.frequencies, rows, COLUMNS)


if "snakemake" in globals():
    run(find_flicker, snakemake)  # noqa: F821
