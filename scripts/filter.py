"""Filter a recording without phase shift, take out mains hum, measure the gain at every term."""

from onbin import dataset, filtering, tables, tagging
from onbin.runner import run

DESIGNS = [
    "filter_kind", "filter_rate_hz", "edge_low_hz", "edge_high_hz", "half_low_hz", "half_high_hz",
    "transition_hz", "filter_window", "n_taps", "kernel_s",
]  # fmt: skip
GAINS = ["tag", "term", "frequency_hz", "gain"]


def filter_recording(inputs, outputs, settings):
    """Filter EEG and the channels that record eyes and heart alike."""
    raw = dataset.read_signal(inputs.signal)
    (recorded,) = tables.read_table(inputs.recording)
    chosen, rate_hz = settings["filter"], raw.info["sfreq"]
    line_hz = chosen["line_hz"] or raw.info["line_freq"]
    passband_hz = tagging.passband_end(chosen["lowpass_hz"], rate_hz, settings["terms"])
    terms = tagging.study_terms(settings["terms"], passband_hz)
    chain = filtering.FilterChain.design(
        rate_hz, chosen["highpass_hz"], passband_hz, line_hz, chosen["line_removal"]
    )
    antialias = filtering.antialias(recorded["recorded_rate_hz"], recorded["decimation_factor"])
    frequencies_hz = [float(term.frequency) for term in terms]
    chain.require_free_of_line(frequencies_hz)
    gains = chain.gains(frequencies_hz)
    for design in antialias:
        gains = gains * design.gain(frequencies_hz)
    labels = [f"{term.tag} {term.term}" for term in terms]
    filtering.require_gains(labels, gains, chosen["gain_tolerance"])

    # Channel by channel: no more than one more channel is in memory.
    raw.apply_function(chain, picks="all", verbose="error")
    dataset.write_signal(raw, outputs.signal)
    rows = [
        {"tag": term.tag, "term": term.term, "frequency_hz": frequency_hz, "gain": abs(gain)}
        for term, frequency_hz, gain in zip(terms, frequencies_hz, gains, strict=True)
    ]
    designs = [filtering.design_row(design) for design in (*antialias, *chain.designs)]
    tables.write_table(outputs.designs, [*designs, *chain.line_rows()], DESIGNS)
    tables.write_table(outputs.gains, rows, GAINS)


if "snakemake" in globals():
    run(filter_recording, snakemake)  # noqa: F821
