"""Judge each channel, interpolate the bad ones, take the reference."""

import logging

from onbin import dataset, decisions, sensors, tables
from onbin.runner import run

log = logging.getLogger("onbin")

COLUMNS = [
    "name", "verdict", "reason", "status", "flat_uv", "saturated_share", "dropout_share",
    "pops_per_min", "deviation_z", "deviation_ratio", "noise_z", "noise_ratio", "noise_whiteness",
    "uncorrelated_share", "unpredicted_share",
]  # fmt: skip


def judge_sensors(inputs, outputs, settings):
    """Judge the EEG channels of a recording; the dataset may call one bad, a person either."""
    found = judged(inputs, settings["seed"])
    raw = dataset.read_signal(inputs.signal)
    decided = decisions.by_item(
        settings["decisions"],
        dataset.eeg_names(raw),
        settings["decisions_file"],
        settings["recording"],
    )
    rows = [
        sensors.verdict_row(verdict, raw.info["bads"], decided.get(verdict.channel))
        for verdict in found
    ]
    bad = [row["name"] for row in rows if row["verdict"] == sensors.BAD]
    chosen = settings["sensors"]["reference"]
    done = sensors.interpolate_and_reference(raw, bad, None if chosen == "as_recorded" else chosen)
    log.info("interpolated: %s", ", ".join(done.interpolated) or "none")
    for name, reason in done.left_out.items():
        log.warning("%s left out: %s", name, reason)
    raw.info["bads"] = []

    dataset.write_signal(raw, outputs.signal)
    tables.write_table(outputs.verdicts, rows, COLUMNS)


def judged(inputs, seed):
    """Verdicts of the tool on each channel; the signals are let go before the next are read."""
    raw = dataset.open_signal(inputs.signal)
    return sensors.judge_channels(
        dataset.eeg_uv(raw),
        dataset.eeg_names(raw),
        raw.info["sfreq"],
        dataset.positions_m(raw),
        sensors.SensorLimits(),
        seed,
        recorded_uv=dataset.eeg_uv(dataset.open_signal(inputs.recorded)),
    )


if "snakemake" in globals():
    run(judge_sensors, snakemake)  # noqa: F821
