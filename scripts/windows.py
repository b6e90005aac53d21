"""Remove components, cut trials into windows, judge each, and see that the response survived."""

from onbin import (
    arrays,
    components,
    dataset,
    decisions,
    tables,
    tagging,
    windows,
    windows_tables,
)
from onbin.runner import run

COMPONENTS = [
    "component", "peak_channel", "verdict", "reason", "component_class", "probability",
    "variance_share", "tag_share", "flagged",
]  # fmt: skip
VERDICTS = [
    "window", "trial", "condition", "index_in_trial", "start_sample", "n_samples", "offset_s",
    "verdict", "reason", "peak_to_peak_uv", "peak_to_peak_limit_uv", "gradient_uv_per_ms",
    "gradient_limit_uv_per_ms", "muscle_uv", "muscle_limit_uv", "flat_uv",
]  # fmt: skip
GAINS = [
    "tag", "term", "frequency_hz", "site", "filter_gain", "gain", "peak_gain",
    "topography_correlation",
]  # fmt: skip


def clean_and_cut(inputs, outputs, settings):
    """Clean a recording and place its windows."""
    raw = dataset.open_signal(inputs.signal)
    rate = tagging.exact_rate(raw.info["sfreq"])
    evidence = components.Evidence.of(arrays.read(inputs.ica))
    separated = evidence.separation
    judged = evidence.judge(
        components.ComponentLimits(
            settings["components"]["remove"], settings["components"]["max_tag_share"]
        ),
        decisions.by_item(
            settings["decisions"],
            separated.items,
            settings["decisions_file"],
            settings["recording"],
        ),
    )
    removed = {v.component: v.label for v in judged if v.verdict == components.REMOVED}
    before_uv = dataset.eeg_uv(raw)
    clean_uv, gates = components.remove_components(before_uv, separated, removed, float(rate))

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
        raw.n_times,
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
        dataset.bad_spans(raw),
        [float(term.frequency) for term in terms],
    )
    survival = windows_tables.survival_rows(
        before_uv,
        dataset.eeg_names(raw),
        lambda open_share: separated.removal(removed, open_share),
        {(row["tag"], row["term"]): row["gain"] for row in tables.read_table(inputs.gains)},
        gates,
        [v.window for v in verdicts if v.verdict == windows.KEPT],
        terms,
        samples,
        float(rate),
        flickering,
    )

    del before_uv
    raw.load_data(verbose="error")
    dataset.put_eeg(raw, clean_uv)
    dataset.write_signal(raw, outputs.signal)
    tables.write_table(
        outputs.components,
        [v.row(peak) for v, peak in zip(judged, separated.peak_channels, strict=True)],
        COMPONENTS,
    )
    rows = windows_tables.verdict_rows(verdicts, unplaced, trials)
    tables.write_table(outputs.verdicts, rows, VERDICTS)
    tables.write_table(outputs.gains, survival, GAINS)


if "snakemake" in globals():
    run(clean_and_cut, snakemake)  # noqa: F821
