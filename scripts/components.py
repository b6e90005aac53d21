"""Separate a recording into independent components and say which ones go."""

import logging

from onbin import arrays, components, dataset, sensors, tables, tagging
from onbin.runner import run

log = logging.getLogger("onbin")

COLUMNS = [
    "component", "verdict", "reason", "component_class", "probability", "variance_share",
    "tag_share", "flagged",
]  # fmt: skip


def separate(inputs, outputs, settings):
    """Fit, label and judge components; with too few channels there are none."""
    raw = dataset.read_signal(inputs.signal)
    chosen = settings["components"]
    good = [r for r in tables.read_table(inputs.sensors) if r["verdict"] == sensors.GOOD]
    rank = len(good) - (settings["sensors"]["reference"] != "as_recorded")
    separated = components.Separation.none(dataset.eeg_names(raw))
    verdicts = []
    if chosen["method"] != "none":
        fit = components.fit_components(raw, rank, chosen["method"], settings["seed"])
        notes = fit.notes
        if fit.ica is not None:
            separated = components.Separation.of(fit.ica)
            verdicts, more = judged(raw, fit.ica, separated, settings)
            notes += more
        for note in notes:
            log.warning(note)

    arrays.write(
        outputs.ica,
        maps=separated.maps,
        unmixing=separated.unmixing,
        channel=separated.channel,
    )
    tables.write_table(outputs.verdicts, verdicts, COLUMNS)


def judged(raw, ica, separated, settings):
    """Rows of the table of components, and what is to be said of the labels."""
    chosen = settings["components"]
    passband_hz = tagging.passband_end(
        settings["filter"]["lowpass_hz"], raw.info["sfreq"], settings["terms"]
    )
    terms = tagging.study_terms(settings["terms"], passband_hz)
    harmonics_hz = [
        [float(term.frequency) for term in terms if term.harmonic and term.tag == tag]
        for tag, _ in settings["terms"]["tags"]
    ]
    picked_uv = raw.get_data(picks=list(separated.channel)) * 1e6
    of_data = (picked_uv, separated.maps, separated.unmixing)
    probabilities, notes = components.label_components(raw, ica)
    verdicts = components.judge_components(
        probabilities,
        components.tag_shares(*of_data, raw.info["sfreq"], harmonics_hz),
        components.variance_shares(*of_data),
        components.ComponentLimits(chosen["remove"], chosen["max_tag_share"]),
        components.artifact_correlations(raw, separated),
    )
    rows = [
        {
            "component": verdict.component,
            "verdict": verdict.verdict,
            "reason": verdict.reason,
            "component_class": verdict.label,
            "probability": verdict.probability,
            "variance_share": verdict.variance_share,
            "tag_share": verdict.largest_tag_share,
            "flagged": verdict.flagged,
        }
        for verdict in verdicts
    ]
    return rows, notes


if "snakemake" in globals():
    run(separate, snakemake)  # noqa: F821
