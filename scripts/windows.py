"""Remove components, cut trials into windows, judge each, and see that the response survived."""

from onbin import arrays, components, dataset, tables, tagging, windows, windows_tables
from onbin.runner import run

VERDICTS = [
    "window", "trial", "condition", "index_in_trial", "start_sample", "n_samples", "offset_s",
    "verdict", "reason", "peak_to_peak_uv", "peak_to_peak_limit_uv", "gradient_uv_per_ms",
    "gradient_limit_uv_per_ms", "muscle_uv", "muscle_limit_uv", "flat_uv",
]  # fmt: skip
GAINS = ["tag", "term", "frequency_hz", "site", "gain", "peak_gain", "topography_correlation"]


def clean_and_cut(inputs, outputs, settings):
    """Clean a recording and place its windows."""
    raw = dataset.read_signal(inputs.signal)
    rate = tagging.exact_rate(raw.info["sfreq"])
    separated = components.Separation(**arrays.read(inputs.ica))
    removed = {
        row["component"]: row["component_class"]
        for row in tables.read_table(inputs.components)
        if row["verdict"] == components.REMOVED
    }
    before_uv = dataset.eeg_uv(raw)
    clean_uv, gates = components.remove_components(before_uv, separated, removed, float(rate))
    clean = dataset.with_eeg(raw, clean_uv)

    flickering = {name: about["flickering"] for name, about in settings["conditions"].items()}
    chosen = settings["windows"]
    passband_hz = tagging.passband_end(
        settings["filter"]["lowpass_hz"], float(rate), settings["terms"]
    )
    terms = tagging.study_terms(settings["terms"], passband_hz)
    samples = tagging.window_samples(
        tagging.study_tags(settings["terms"]), terms, rate, chosen["length_s"]
    )
    trials = tables.read_table(inputs.trials)
    placed, unplaced = windows.place_windows(
        trials,
        float(rate),
        clean.n_times,
        windows_tables.samples_by_condition(
            flickering, samples, rate, chosen["length_s"], chosen["rest_length_s"]
        ),
        chosen["skip_s"],
    )
    verdicts = windows.judge_windows(
        clean_uv,
        placed,
        float(rate),
        windows.WindowLimits(peak_to_peak_uv=tuple(chosen["peak_to_peak_uv"])),
        dataset.bad_spans(clean),
        [float(term.frequency) for term in terms],
    )
    survival = windows_tables.survival_rows(
        before_uv,
        dataset.eeg_names(raw),
        lambda open_share: separated.removal(removed, open_share),
        gates,
        [v.window for v in verdicts if v.verdict == windows.KEPT],
        terms,
        samples,
        float(rate),
        flickering,
    )

    dataset.write_signal(clean, outputs.signal)
    rows = windows_tables.verdict_rows(verdicts, unplaced, trials)
    tables.write_table(outputs.verdicts, rows, VERDICTS)
    tables.write_table(outputs.gains, survival, GAINS)


if "snakemake" in globals():
    run(clean_and_cut, snakemake)  # noqa: F821
