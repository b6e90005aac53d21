"""Separate a recording into independent components and gather the evidence on each."""

import logging

import numpy as np
from onbin import arrays, component_sheet, components, dataset, sensors, tables, tagging
from onbin.drawing import save
from onbin.runner import run

log = logging.getLogger("onbin")

COLUMNS = [
    "component", "peak_channel", "component_class", "probability", "brain_p", "muscle_p", "eye_p",
    "heart_p", "line_noise_p", "channel_noise_p", "other_p", "eye_correlation",
    "heart_correlation", "variance_share", "tag_share", "tag_shares",
]  # fmt: skip


def separate(inputs, outputs, settings):
    """Fit and label components; with too few channels there are none."""
    raw = dataset.open_signal(inputs.signal)
    chosen = settings["components"]
    good = [r for r in tables.read_table(inputs.sensors) if r["verdict"] == sensors.GOOD]
    rank = len(good) - (settings["sensors"]["reference"] != "as_recorded")
    evidence = components.Evidence.none(dataset.eeg_names(raw))
    if chosen["method"] != "none":
        fit = components.fit_components(raw, rank, chosen["method"], settings["seed"])
        notes = fit.notes
        if fit.ica is not None:
            evidence, more = gathered(raw, fit.ica, settings)
            notes += more
        for note in notes:
            log.warning(note)

    arrays.write(outputs.ica, **evidence.arrays())
    tables.write_table(outputs.evidence, evidence.rows(), COLUMNS)
    draw(raw, evidence, settings, outputs.sheet)


def gathered(raw, ica, settings):
    """Evidence on each component, and what is to be said of the labels."""
    separated = components.Separation.of(ica)
    terms = tagging.study_terms(
        settings["terms"],
        tagging.passband_end(
            settings["filter"]["lowpass_hz"], raw.info["sfreq"], settings["terms"]
        ),
    )
    tags = [name for name, _ in settings["terms"]["tags"]]
    harmonics_hz = [
        [float(term.frequency) for term in terms if term.harmonic and term.tag == tag]
        for tag in tags
    ]
    probabilities, notes = components.label_components(raw, ica)
    correlations = components.artifact_correlations(raw, separated)
    of_data = (dataset.eeg_uv(raw), separated.maps, separated.unmixing)
    unknown = np.full(len(separated.unmixing), np.nan)
    evidence = components.Evidence(
        separation=separated,
        probabilities=probabilities,
        eye_correlation=correlations.get("eye", unknown),
        heart_correlation=correlations.get("heart", unknown),
        variance_share=components.variance_shares(*of_data),
        tag=np.array(tags, dtype=str),
        tag_share=components.tag_shares(*of_data, raw.info["sfreq"], harmonics_hz),
    )
    return evidence, notes


def draw(raw, evidence, settings, path):
    """Draw map, spectrum and trace of each component."""
    rate_hz, separated = raw.info["sfreq"], evidence.separation
    data_uv = dataset.eeg_uv(raw)
    items, frequencies_hz = [], np.empty(0)
    for number, row in enumerate(evidence.rows()):
        source = separated.unmixing[number] @ data_uv
        frequencies_hz, spectrum_db = component_sheet.spectrum(source, rate_hz)
        trace, from_s = component_sheet.largest_stretch(source, rate_hz)
        items.append(
            component_sheet.Evidence(
                title=separated.items[number],
                about=components.words(row),
                map_uv=separated.maps[:, number],
                spectrum_db=spectrum_db,
                trace=trace,
                trace_from_s=from_s,
            )
        )
    tags_hz = {name: float(hz) for name, hz in tagging.study_tags(settings["terms"]).items()}
    title = f"{settings['recording']}: {len(items) or 'no'} independent components"
    figure = component_sheet.sheet(items, frequencies_hz, dataset.positions_m(raw), tags_hz, title)
    save(figure, path, component_sheet.SHEET_DPI)


if "snakemake" in globals():
    run(separate, snakemake)  # noqa: F821
