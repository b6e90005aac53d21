"""Amplitude, SNR, phase and detection of each term in each condition at each site."""

from onbin import arrays, response_tables, tables
from onbin.runner import run

MEASURES = [
    "participant", "condition", "tag", "term", "frequency_hz", "frequency_source", "driven",
    "site", "site_kind", "channels", "windows", "amplitude_uv", "amplitude_low_uv",
    "amplitude_high_uv", "noise_uv2", "neighbours", "amplitude_corrected_uv",
    "amplitude_baseline_uv", "projected_amplitude_uv", "window_amplitude_uv", "total_power_uv2",
    "total_noise_uv2", "snr", "snr_db", "snr_p", "amplitude_ratio", "t2circ", "t2circ_p",
    "hotelling_t2", "hotelling_p", "condition_index", "condition_index_p", "detection_test",
    "detection_p", "detection_p_corrected", "present", "disc_radius_uv", "phase_rad",
    "phase_half_width_rad", "itpc", "ppc", "rayleigh_z", "rayleigh_p", "harmonics",
    "amplitude_sum_uv", "latency_ms",
    "latency_low_ms", "latency_high_ms",
]  # fmt: skip
WINDOWS = [
    "participant", "recording", "window", "window_number", "trial", "condition", "tag", "term",
    "frequency_source", "site", "projected_amplitude_uv",
]  # fmt: skip


def measure_response(inputs, outputs, settings):
    """Measure a participant's responses."""
    stored = arrays.read(inputs.coefficients)
    coefficients = response_tables.Coefficients.of(stored, settings["terms"])
    conditions, chosen = settings["conditions"], settings["response"]
    order = settings["terms"]["intermodulation_order"]
    line_hz = settings["filter"]["line_hz"] or float(stored["line_hz"])
    occupied_in = {
        name: response_tables.occupied(
            coefficients.tags, about["flickering"], order, float(stored["passband_hz"]), line_hz
        )
        for name, about in conditions.items()
    }
    who = {"participant": settings["participant"]}
    rows = response_tables.response_rows(
        coefficients, conditions, occupied_in, chosen["level"], chosen["correction"]
    )
    tables.write_table(outputs.measures, (who | row for row in rows), MEASURES)
    windows = response_tables.window_rows(coefficients, conditions)
    tables.write_table(outputs.windows, (who | row for row in windows), WINDOWS)


if "snakemake" in globals():
    run(measure_response, snakemake)  # noqa: F821
