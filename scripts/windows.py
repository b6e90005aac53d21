"""Remove components, cut trials into windows, judge each, and see that the response survived."""

import mne
from onbin import components, dataset, tables, tagging, windows
from onbin.runner import run

VERDICTS = [
    "window", "trial", "condition", "index_in_trial", "start_sample", "n_samples", "offset_s",
    "verdict", "reason", "peak_to_peak_uv", "peak_to_peak_limit_uv", "gradient_uv_per_ms",
    "gradient_limit_uv_per_ms", "muscle_uv", "muscle_limit_uv", "flat_uv",
]  # fmt: skip
GAINS = ["tag", "term", "frequency_hz", "site", "gain", "peak_gain", "topography_correlation"]


def clean_and_cut(inputs, outputs, settings):
    """Cut a recording into windows."""
    referenced = dataset.read_signal(inputs.signal)
    rate = tagging.exact_rate(referenced.info["sfreq"])
    removed = [
        row["component"]
        for row in tables.read_table(inputs.components)
        if row["verdict"] == "removed"
    ]
    ica = mne.preprocessing.read_ica(inputs.ica, verbose="error") if removed else None
    clean = components.remove_components(referenced, ica, removed) if removed else referenced

    trials = tables.read_table(inputs.trials)
    terms = tagging.study_terms(
        settings["terms"], tagging.passband_end(settings["filter"]["lowpass_hz"], float(rate))
    )
    samples = windows.samples_by_condition(
        {name: about["flickering"] for name, about in settings["conditions"].items()},
        tagging.window_samples(
            tagging.study_tags(settings["terms"]), terms, rate, settings["windows"]["length_s"]
        ),
        int(settings["windows"]["rest_length_s"] * rate),
    )
    data_uv = dataset.eeg_uv(clean)
    placed, unplaced = windows.place_windows(
        trials, float(rate), clean.n_times, samples, settings["windows"]["skip_s"]
    )
    verdicts = windows.judge_windows(
        data_uv,
        placed,
        float(rate),
        windows.WindowLimits(peak_to_peak_uv=tuple(settings["windows"]["peak_to_peak_uv"])),
        dataset.bad_spans(clean),
        [float(term.frequency) for term in terms],
    )
    dataset.write_signal(clean, outputs.signal)
    tables.write_table(outputs.verdicts, windows.verdict_rows(verdicts, unplaced), VERDICTS)
