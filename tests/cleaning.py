"""The workflow's cleaning and its measures, step by step, on signals that a test has in memory."""

from pathlib import Path
from types import SimpleNamespace

import alpha as alpha_step
import components as components_step
import filter as filter_step
import mne
import numpy as np
import response as response_step
import sensors as sensors_step
import spectra as spectra_step
import windows as windows_step
from onbin import dataset, layout, sensors, tables
from onbin.settings import Settings, load_settings, part
from workflow import DEMO_SETTINGS

WHO = "sub-21"
RECORDING = f"{WHO}/eeg/{WHO}_task-panels"
LINE_HZ = 50.0


def settings():
    """What the steps take: all settings of the demo, for one recording of one person."""
    whole = load_settings(DEMO_SETTINGS)
    return part(whole, *Settings.model_fields, "terms") | {
        "participant": WHO,
        "recording": RECORDING,
        "recordings": [RECORDING],
        "decisions": [],
        "decisions_file": None,
    }


def places(folder, step, *names):
    """Files of a step's results below a folder, by name, as a script has them."""
    paths = {
        name: Path(
            layout.result(str(folder), f"{step}_{name}").format(
                recording=RECORDING, participant=WHO
            )
        )
        for name in names
    }
    for path in paths.values():
        path.parent.mkdir(parents=True, exist_ok=True)
    return paths


def take_in(folder, signal_uv, signals, blocks):
    """Leave a signal of the demo's program as the step intake would."""
    positions, _ = signals.electrodes()
    info = mne.create_info(list(signals.CHANNELS), signals.RATE_HZ, "eeg", verbose="error")
    info["line_freq"] = LINE_HZ
    raw = mne.io.RawArray(signal_uv * 1e-6, info, verbose="error")
    montage = mne.channels.make_dig_montage(
        {name: positions[name] for name in (*signals.CHANNELS, signals.REFERENCE)},
        *(positions[name] for name in ("NAS", "LPA", "RPA")),
        coord_frame="head",
    )
    raw.set_montage(montage, verbose="error")
    made = places(folder, "intake", "signal", "trials", "recording")
    dataset.write_signal(raw, made["signal"])
    trials = [
        {
            "trial": number,
            "condition": block.kind,
            "onset_s": block.onset_s,
            "duration_s": block.duration_s,
        }
        for number, block in enumerate((b for b in blocks if b.marked), start=1)
    ]
    tables.write_table(made["trials"], trials, list(trials[0]))
    recorded = {"recorded_rate_hz": signals.RATE_HZ, "decimation_factor": 1}
    tables.write_table(made["recording"], [recorded], list(recorded))


def filtered(folder, chosen):
    """Run the step filter."""
    filter_step.filter_recording(
        SimpleNamespace(**places(folder, "intake", "signal", "recording")),
        SimpleNamespace(**places(folder, "filter", "signal", "designs", "gains")),
        chosen,
    )


def cleaned(folder, chosen):
    """Clean what was taken in, as the workflow does: from filters to windows."""
    filtered(folder, chosen)
    recorded = places(folder, "intake", "signal", "trials")
    of_filter = places(folder, "filter", "signal", "gains")
    of_sensors = places(folder, "sensors", "signal", "verdicts")
    of_components = places(folder, "components", "ica", "evidence", "sheet")
    sensors_step.judge_sensors(
        SimpleNamespace(signal=of_filter["signal"], recorded=recorded["signal"]),
        SimpleNamespace(**of_sensors),
        chosen,
    )
    components_step.separate(
        SimpleNamespace(signal=of_sensors["signal"], sensors=of_sensors["verdicts"]),
        SimpleNamespace(**of_components),
        chosen,
    )
    windows_step.clean_and_cut(
        SimpleNamespace(
            signal=of_sensors["signal"],
            ica=of_components["ica"],
            gains=of_filter["gains"],
            trials=recorded["trials"],
        ),
        SimpleNamespace(**places(folder, "windows", "signal", "components", "verdicts", "gains")),
        chosen,
    )


def uncleaned(folder, chosen, windows):
    """Filter what was taken in, but for the mains, and take the reference: nothing else.

    ``windows`` is the table of windows to be measured, all of those placed, whatever its verdicts.
    """
    filtered(folder, chosen | {"filter": chosen["filter"] | {"line_removal": "none"}})
    raw = dataset.read_signal(places(folder, "filter", "signal")["signal"])
    made = places(folder, "windows", "signal", "verdicts")
    sensors.interpolate_and_reference(raw, [], chosen["sensors"]["reference"])
    dataset.write_signal(raw, made["signal"])
    placed = [row | {"verdict": "kept"} for row in windows if row["start_sample"] is not None]
    tables.write_table(made["verdicts"], placed, list(placed[0]))


def measured(folder, chosen):
    """Measure the windows: rows of the tables of responses and of alpha."""
    of_windows = places(folder, "windows", "signal", "verdicts")
    flicker = places(folder, "flicker", "frequencies")
    tables.write_table(flicker["frequencies"], [], ["tag", "used_hz", "frequency_source"])
    spectra = places(folder, "spectra", "coefficients", "psd")
    response = places(folder, "response", "measures", "windows")
    alpha = places(folder, "alpha", "measures", "windows")
    spectra_step.measure_spectra(
        SimpleNamespace(
            signals=[of_windows["signal"]],
            verdicts=[of_windows["verdicts"]],
            flicker=[flicker["frequencies"]],
        ),
        SimpleNamespace(**spectra),
        chosen,
    )
    response_step.measure_response(
        SimpleNamespace(coefficients=spectra["coefficients"]), SimpleNamespace(**response), chosen
    )
    alpha_step.measure_alpha(SimpleNamespace(psd=spectra["psd"]), SimpleNamespace(**alpha), chosen)
    return tables.read_table(response["measures"]), tables.read_table(alpha["measures"])


def by_measure(responses, alphas, peaks):
    """Figures by measure, each an array over tags and conditions.

    ``peaks`` is the channel at which each tag and term is largest.
    """
    found = {}
    for row in responses:
        if not row["driven"] or row["term"] not in ("1f", "2f"):
            continue
        for place, site in (("region", "occipital"), ("peak", peaks[row["tag"], row["term"]])):
            if row["site"] == site:
                name = f"{row['term']} {place}"
                found.setdefault(f"amplitude µV, {name}", []).append(row["amplitude_uv"])
                found.setdefault(f"SNR dB, {name}", []).append(row["snr_db"])
                if row["term"] == "1f":
                    found.setdefault(f"phase rad, {name}", []).append(row["phase_rad"])
    for row in alphas:
        if row["site"] == "occipital":
            name = f"alpha dB, {row['condition']}"
            found.setdefault(name, []).append(row["alpha_power_db"])
            found["alpha frequency Hz"] = [row["alpha_frequency_hz"]]
        elif row["site"] == "right_posterior":
            found.setdefault("alpha lateralisation", []).append(row["alpha_lateralisation"])
    return {name: np.array(values, dtype=float) for name, values in found.items()}


def peak_channels(responses):
    """Channel at which each tag and term is largest, over the conditions."""
    sizes = {}
    for row in responses:
        if row["driven"] and row["site_kind"] == "channel" and row["term"] in ("1f", "2f"):
            of_site = sizes.setdefault((row["tag"], row["term"]), {})
            of_site[row["site"]] = of_site.get(row["site"], 0.0) + row["amplitude_uv"]
    return {key: max(of_site, key=of_site.get) for key, of_site in sizes.items()}
