"""Filter a recording without phase shift, take out mains hum, measure the gain at every term."""

from onbin import dataset, filtering, tables, tagging
from onbin.runner import run

COLUMNS = ["tag", "term", "frequency_hz", "gain"]


def filter_recording(inputs, outputs, settings):
    """Filter EEG and the channels that record eyes and heart alike."""
    raw = dataset.read_signal(inputs.signal)
    chosen, rate_hz = settings["filter"], raw.info["sfreq"]
    line_hz = chosen["line_hz"] or raw.info["line_freq"]
    passband_hz = tagging.passband_end(chosen["lowpass_hz"], rate_hz, settings["terms"])
    terms = tagging.study_terms(settings["terms"], passband_hz)
    chain = filtering.FilterChain.design(
        rate_hz, chosen["highpass_hz"], passband_hz, line_hz, chosen["line_removal"]
    )
    frequencies_hz = [float(term.frequency) for term in terms]
    chain.require_free_of_line(frequencies_hz)
    gains = chain.gains(frequencies_hz)
    labels = [f"{term.tag} {term.term}" for term in terms]
    filtering.require_gains(labels, gains, chosen["gain_tolerance"])

    raw.apply_function(chain, channel_wise=False, picks="all", verbose="error")
    dataset.write_signal(raw, outputs.signal)
    rows = [
        {"tag": term.tag, "term": term.term, "frequency_hz": frequency_hz, "gain": abs(gain)}
        for term, frequency_hz, gain in zip(terms, frequencies_hz, gains, strict=True)
    ]
    tables.write_table(outputs.gains, rows, COLUMNS)


if "snakemake" in globals():
    run(filter_recording, snakemake)  # noqa: F821
