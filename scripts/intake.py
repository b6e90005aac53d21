"""Read a raw BIDS recording: EEG with positions, trials in the study's terms, working rate."""

import logging

from onbin import dataset, filtering, headers, layout, sidecars, tables, tagging
from onbin.runner import run

log = logging.getLogger("onbin")


def intake(inputs, outputs, settings):
    """Bring a recording to its working rate, once its files are seen to be sound."""
    recording = settings["recording"]
    headers.require_files(inputs.files)
    header = headers.read_header(inputs.files[0])
    told = sidecars.read_eeg_json(inputs.files, recording)
    line_hz = sidecars.check_eeg_json(told, header, settings["filter"]["line_hz"])
    described = sidecars.read_channels(inputs.files, header)
    sidecars.check_positions(inputs.files)
    sidecars.merged(inputs.files, "events.json")
    sidecars.check_people(settings["folder"], recording)
    events = dataset.events_file(inputs.files)
    dataset.check_events(events)
    trials = dataset.read_trials(
        events,
        settings["conditions"],
        layout.entities(recording),
        header.duration_s,
        header.rate_hz,
    )

    raw = dataset.read_recording(
        settings["folder"], recording, settings["extension"], described, line_hz
    )
    photodiode = settings["flicker"]["photodiode"]
    channels = dataset.choose_channels(raw, photodiode)
    if sidecars.nearest(inputs.files, "electrodes.tsv") and all(
        row["position"] != "dataset" for row in channels
    ):
        log.warning("no position of electrodes.tsv could be used; see EEGCoordinateSystem")
    dataset.require_photodiode(raw, photodiode)
    rate = tagging.exact_rate(raw.info["sfreq"])
    least = tagging.exact(settings["least_rate_hz"])
    factor = tagging.decimation_factor(rate, least)

    data_uv = filtering.decimate(
        lambda start, stop: dataset.read_samples_uv(raw, start, stop),
        raw.n_times,
        float(rate),
        factor,
    )
    dataset.check_scale(data_uv, raw)
    working = dataset.with_data(raw, data_uv, float(rate / factor))

    dataset.write_signal(working, outputs.signal)
    tables.write_table(outputs.trials, trials, ["trial", "condition", "onset_s", "duration_s"])
    tables.write_table(
        outputs.recording,
        [
            {
                "recorded_rate_hz": float(rate),
                "decimation_factor": factor,
                "working_rate_hz": float(rate / factor),
                "recorded_s": raw.n_times / float(rate),
            }
        ],
        ["recorded_rate_hz", "decimation_factor", "working_rate_hz", "recorded_s"],
    )
    tables.write_table(outputs.channels, channels, ["name", "type", "units", "status", "position"])


if "snakemake" in globals():
    run(intake, snakemake)  # noqa: F821
