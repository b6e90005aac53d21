"""Individual alpha frequency, alpha power and the aperiodic part, by condition and by window."""

from onbin import alpha_tables, arrays, sites, tables, tagging
from onbin.runner import run

MEASURES = [
    "participant", "condition", "site", "site_kind", "channels", "windows", "alpha_frequency_hz",
    "alpha_centre_hz", "alpha_found", "band_low_hz", "band_high_hz", "alpha_power_uv2",
    "alpha_power_db", "alpha_fixed_uv2", "alpha_periodic_uv2", "alpha_relative",
    "alpha_lateralisation", "aperiodic_offset", "aperiodic_exponent", "aperiodic_r2",
    "subtracted_uv2",
]  # fmt: skip
WINDOWS = [
    "participant", "recording", "window", "window_number", "condition", "site", "alpha_power_uv2",
    "log_alpha",
]  # fmt: skip


def measure_alpha(inputs, outputs, settings):
    """Measure a participant's alpha."""
    stored = arrays.read(inputs.psd)
    spectra = alpha_tables.Spectra.of(stored)
    places = sites.common_sites([spectra.channels], settings["regions"])
    chosen = settings["alpha"]
    line_hz = settings["filter"]["line_hz"] or float(stored["line_hz"])
    terms = tagging.study_terms(settings["terms"], float(stored["passband_hz"]))
    excluded = {
        name: [line_hz, *(float(t.frequency) for t in terms if t.driven_by(about["flickering"]))]
        for name, about in settings["conditions"].items()
    }
    shown_in = chosen["frequency_from"] or list(excluded)
    band = alpha_tables.find_band(
        spectra,
        settings["regions"][chosen["region"]],
        shown_in,
        chosen["search_hz"],
        chosen["half_width_hz"],
        chosen["band_hz"],
        sorted({f for name in shown_in for f in excluded[name]}),
    )
    who = {"participant": settings["participant"]}
    rows = alpha_tables.alpha_rows(
        spectra,
        places,
        excluded,
        band,
        chosen["band_hz"],
        chosen["right_region"],
        chosen["left_region"],
    )
    tables.write_table(outputs.measures, (who | row for row in rows), MEASURES)
    windows = alpha_tables.window_rows(spectra, places, band)
    tables.write_table(outputs.windows, (who | row for row in windows), WINDOWS)


if "snakemake" in globals():
    run(measure_alpha, snakemake)  # noqa: F821
