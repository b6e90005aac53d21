"""Tell from a participant's windows which tag was attended, where conditions differ in that."""

import numpy as np
from onbin import attention, dataset, flicker_tables, sites, tables, tagging
from onbin.runner import run

MEASURES = [
    "participant", "attended_tags", "conditions", "harmonics", "decision", "decision_s", "windows",
    "trials", "accuracy", "accuracy_low", "accuracy_high", "chance", "accuracy_p",
    "itr_bits_per_min", "reason",
]  # fmt: skip


def measure_attention(inputs, outputs, settings):
    """Decide on the windows that were kept of all of a participant's recordings."""
    rows = [
        {"participant": settings["participant"], **row}
        for contrast in attention.contrasts(settings["conditions"])
        for row in _rows(contrast, inputs, settings)
    ]
    tables.write_table(outputs.measures, rows, MEASURES)


def _rows(contrast, inputs, settings):
    raws = [dataset.read_signal(path) for path in inputs.signals]
    rate = dataset.common_rate(raws, settings["recordings"])
    channels = [site.name for site in sites.common_sites(map(dataset.eeg_names, raws), {})]
    used = flicker_tables.Used.of(
        [tables.read_table(path) for path in inputs.flicker],
        tagging.study_tags(settings["terms"]),
    )
    windows = [
        row | {"recording": recording, "tags": tags, "raw": raw}
        for recording, raw, tags, path in zip(
            settings["recordings"], raws, used.of_recordings, inputs.verdicts, strict=True
        )
        for row in tables.read_table(path)
        if row["verdict"] == "kept" and row["condition"] in contrast.attended_in
    ]
    n_samples = min((row["n_samples"] for row in windows), default=1)
    passband_hz = tagging.passband_end(
        settings["filter"]["lowpass_hz"], float(rate), settings["terms"]
    )
    terms = tagging.retuned(tagging.study_terms(settings["terms"], passband_hz), used.tags)
    harmonics = attention.own_harmonics(terms, contrast.flickering, rate / n_samples)
    starts = [row["start_sample"] for row in windows]
    windows_uv = np.array(
        [
            row["raw"].get_data(channels, start, start + n_samples) * 1e6
            for row, start in zip(windows, starts, strict=True)
        ]
    )
    return attention.contrast_rows(
        contrast, harmonics, windows, windows_uv, float(rate), settings["seed"]
    )


if "snakemake" in globals():
    run(measure_attention, snakemake)  # noqa: F821
