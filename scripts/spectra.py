"""Coefficients at every term and its neighbouring bins, and power spectra, window by window."""

import numpy as np
from onbin import arrays, dataset, flicker_tables, sites, spectra, tables, tagging
from onbin.errors import DataError
from onbin.runner import run

ALPHA_TERMS_HZ = (5.0, 15.0)  # driven terms in this range are subtracted before alpha is measured


def measure_spectra(inputs, outputs, settings):
    """Measure the windows that were kept of all of a participant's recordings."""
    raws = [dataset.read_signal(path) for path in inputs.signals]
    names = [dataset.eeg_names(raw) for raw in raws]
    rate = dataset.common_rate(raws, settings["recordings"])
    places = sites.common_sites(names, settings["regions"])
    kept_of = [
        [row for row in tables.read_table(path) if row["verdict"] == "kept"]
        for path in inputs.verdicts
    ]
    shortest = min((row["n_samples"] for kept in kept_of for row in kept), default=None)
    if shortest is None:
        raise DataError("no window was kept; the tables of windows tell the reasons.")

    used = flicker_tables.Used.of(
        [tables.read_table(path) for path in inputs.flicker],
        tagging.study_tags(settings["terms"]),
    )
    passband_hz = tagging.passband_end(
        settings["filter"]["lowpass_hz"], float(rate), settings["terms"]
    )
    terms = tagging.study_terms(settings["terms"], passband_hz)
    length_s = shortest / rate
    samples = list(
        tagging.window_samples(
            used.tags, tagging.retuned(terms, used.tags), rate, length_s
        ).values()
    )
    line_hz = raws[0].info["line_freq"] or 0.0  # 0 where the dataset does not tell
    response = settings["response"]
    bins = [0, *tagging.neighbour_offsets(response["neighbours"], response["skip"])]

    windows, coefficients, densities, subtracted = [], [], [], []
    for raw, channels, kept, tags, recording in zip(
        raws, names, kept_of, used.of_recordings, settings["recordings"], strict=True
    ):
        here = tagging.retuned(terms, tags)
        windows += [row | {"recording": recording} for row in kept]
        sites_uv = sites.averaging(places, channels) @ dataset.eeg_uv(raw)
        n_channels = sum(site.kind == "channel" for site in places)
        shape = (len(kept), len(places), len(terms), len(bins))
        of_recording = np.empty(shape, dtype=np.complex64)
        for condition in {row["condition"] for row in kept}:
            chosen = [i for i, row in enumerate(kept) if row["condition"] == condition]
            driven = settings["conditions"][condition]["flickering"]
            of_recording[chosen] = spectra.bin_coefficients(
                sites_uv,
                np.array([kept[i]["start_sample"] for i in chosen], dtype=int),
                np.array([kept[i]["offset_s"] for i in chosen], dtype=float),
                float(rate),
                np.array([float(term.frequency) for term in here]),
                np.array(samples, dtype=int),
                np.array(bins),
                [float(term.frequency) for term in here if term.driven_by(driven)],
            )
        coefficients.append(of_recording)
        for row in kept:
            driven = settings["conditions"][row["condition"]]["flickering"]
            stretch = slice(row["start_sample"], row["start_sample"] + row["n_samples"])
            window_uv = sites_uv[:n_channels, stretch]
            remaining_uv, removed_uv2 = spectra.remove_sinusoids(
                window_uv, float(rate), _alpha_terms_hz(here, driven)
            )
            alpha = settings["alpha"]
            frequencies_hz, psd = spectra.power_spectral_density(
                remaining_uv, float(rate), alpha["segment_s"], alpha["grid_hz"]
            )
            densities.append(psd)
            subtracted.append(removed_uv2.sum(axis=-1))

    of_windows = arrays.from_rows(
        windows, ["recording", "condition", "trial", "window", "offset_s"]
    )
    arrays.write(
        outputs.coefficients,
        coefficients_uv=np.concatenate(coefficients),
        bins=bins,
        samples=samples,
        rate=str(rate),
        used=[str(frequency) for frequency in used.tags.values()],
        measured=used.measured,
        passband_hz=passband_hz,
        line_hz=line_hz,
        site=[site.name for site in places],
        site_kind=[site.kind for site in places],
        site_channels=[" ".join(site.channels) for site in places],
        **of_windows,
    )
    arrays.write(
        outputs.psd,
        psd_uv2_per_hz=np.stack(densities).astype(np.float32),
        frequencies_hz=frequencies_hz,
        subtracted_uv2=np.stack(subtracted),
        channel=[site.name for site in places if site.kind == "channel"],
        passband_hz=passband_hz,
        line_hz=line_hz,
        **of_windows,
    )


def _alpha_terms_hz(terms, flickering):
    low_hz, high_hz = ALPHA_TERMS_HZ
    driven = [float(term.frequency) for term in terms if term.driven_by(flickering)]
    return np.array([f for f in driven if low_hz <= f <= high_hz])


if "snakemake" in globals():
    run(measure_spectra, snakemake)  # noqa: F821
