"""Judge each channel, interpolate the bad ones, take the reference."""

import logging

from onbin import dataset, sensors, tables
from onbin.runner import run

log = logging.getLogger("onbin")

COLUMNS = [
    "name", "verdict", "reason", "status", "flat_uv", "saturated_share", "dropout_share",
    "pops_per_min", "deviation_z", "deviation_ratio", "noise_z", "noise_ratio", "noise_whiteness",
    "uncorrelated_share", "unpredicted_share",
]  # fmt: skip
AS_THE_DATASET_SAYS = "bad in the dataset"


def judge_sensors(inputs, outputs, settings):
    """Judge the EEG channels of a recording; a channel that the dataset calls bad stays bad."""
    raw = dataset.read_signal(inputs.signal)
    names = dataset.eeg_names(raw)
    verdicts = sensors.judge_channels(
        dataset.eeg_uv(raw),
        names,
        raw.info["sfreq"],
        dataset.positions_m(raw),
        sensors.SensorLimits(),
        settings["seed"],
        recorded_uv=dataset.eeg_uv(dataset.read_signal(inputs.recorded)),
    )
    rows = []
    for verdict in verdicts:
        marked = verdict.channel in raw.info["bads"]
        reasons = [AS_THE_DATASET_SAYS] * marked + list(verdict.reasons)
        rows.append(
            {
                "name": verdict.channel,
                "verdict": sensors.BAD if reasons else sensors.GOOD,
                "reason": ", ".join(reasons) or None,
                "status": "bad" if marked else "good",
                **verdict.figures,
            }
        )
    bad = [row["name"] for row in rows if row["verdict"] == sensors.BAD]
    chosen = settings["sensors"]["reference"]
    done = sensors.interpolate_and_reference(raw, bad, None if chosen == "as_recorded" else chosen)
    log.info("interpolated: %s", ", ".join(done.interpolated) or "none")
    for name, reason in done.left_out.items():
        log.warning("%s left out: %s", name, reason)
    done.raw.info["bads"] = []

    dataset.write_signal(done.raw, outputs.signal)
    tables.write_table(outputs.verdicts, rows, COLUMNS)


if "snakemake" in globals():
    run(judge_sensors, snakemake)  # noqa: F821
