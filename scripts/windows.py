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
    "gradient_limit_uv_per_ms", "muscle_uv", "muscle_limit_uv", "flat_uv", "noise_beside",
]  # fmt: skip
GAINS = [
    "tag", "term", "frequency_hz", "site", "filter_gain", "gain", "peak_gain",
    "topography_correlation", "t2circ_p", "region_gain", "region_t2circ_p",
]  # fmt: skip


def clean_and_cut(inputs, outputs, settings):
    """Clean a recording and place its windows."""
    raw = dataset.open_signal(inputs.signal)
    rate = tagging.exact_rate(raw.info["sfreq"])
    evidence = components.Evidence.of(arrays.read(inputs.ica))
    decided = decisions.by_item(
        settings["decisions"],
        evidence.separation.items,
        settings["decisions_file"],
        settings["recording"],
    )
    filter_gains = {
        (row["tag"], row["term"]): row["gain"] for row in tables.read_table(inputs.gains)
    }
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
    names = dataset.eeg_names(raw)
    region = [names.index(name) for name in response_channels(settings) if name in names]

    def attempt(before_uv, judged):
        """Take out the components that go, judge the windows, see what is left of the response."""
        removed = {v.component: v.label for v in judged if v.verdict == components.REMOVED}
        clean_uv, gates = components.remove_components(
            before_uv, evidence.separation, removed, float(rate)
        )
        verdicts = windows.judge_windows(
            clean_uv,
            placed,
            float(rate),
            windows.WindowLimits(peak_to_peak_uv=tuple(chosen["peak_to_peak_uv"])),
            dataset.bad_spans(raw),
            [float(term.frequency) for term in terms],
            windows_tables.noise_beside(
                clean_uv[region].mean(axis=0),
                placed,
                terms,
                samples,
                float(rate),
                flickering,
            ),
        )
        survival = windows_tables.survival_rows(
            before_uv,
            names,
            lambda open_share: evidence.separation.removal(removed, open_share),
            filter_gains,
            gates,
            [v.window for v in verdicts if v.verdict == windows.KEPT],
            terms,
            samples,
            float(rate),
            flickering,
            region,
        )
        return clean_uv, verdicts, list(survival)

    judged = evidence.judge(
        components.ComponentLimits(
            settings["components"]["remove"], settings["components"]["max_tag_share"]
        ),
        decided,
    )
    before_uv = dataset.eeg_uv(raw)
    clean_uv, verdicts, survival = attempt(before_uv, judged)
    while spared := evidence.spare(judged, windows_tables.harmed_tags(survival), decided):
        judged = spared
        clean_uv, verdicts, survival = attempt(before_uv, judged)

    del before_uv
    raw.load_data(verbose="error")
    dataset.put_eeg(raw, clean_uv)
    dataset.write_signal(raw, outputs.signal)
    peaks = evidence.separation.peak_channels
    rows = [v.row(peak) for v, peak in zip(judged, peaks, strict=True)]
    tables.write_table(outputs.components, rows, COMPONENTS)
    rows = windows_tables.verdict_rows(verdicts, unplaced, trials)
    tables.write_table(outputs.verdicts, rows, VERDICTS)
    tables.write_table(outputs.gains, survival, GAINS)


def response_channels(settings):
    """Channels of the region of the response."""
    return settings["regions"][settings["relation"]["response_region"]]


if "snakemake" in globals():
    run(clean_and_cut, snakemake)  # noqa: F821
