import base64
import re
from html.parser import HTMLParser
from pathlib import Path
from types import SimpleNamespace

import mne
import numpy as np
import pytest
import relation as relation_step
import report as report_step
import response as response_step
import study as study_step
from onbin import arrays, dataset, report, report_tables, tables, tagging
from onbin.settings import Settings, load_settings, part

CHANNELS = ["Oz", "O1", "O2", "POz", "PO3", "PO4", "Pz", "Cz", "Fz", "C3", "C4", "P7"]
RATE_HZ = 250.0
FIGURES = ("quality", "bins", "topographies", "responses", "alpha", "relation")


def study_settings(**changes):
    raw = {
        "study": {"title": "Two <b>panels</b> & a lamp"},
        "dataset": {"folder": "data"},
        "display": {"refresh_hz": 144},
        "tags": {"right": {"frames_per_cycle": 8}, "left": {"frames_per_cycle": 10}},
        "conditions": {
            "watch_left": {
                "events": {"trial_type": "a"},
                "flickering": ["right", "left"],
                "attended": "left",
            },
            "watch_right": {
                "events": {"trial_type": "b"},
                "flickering": ["right", "left"],
                "attended": "right",
            },
            "rest": {"events": {"trial_type": "c"}},
        },
        "regions": {"occipital": ["Oz", "O1", "O2"]},
        "windows": {"length_s": 2.5},
        "alpha": {"region": "occipital"},
        "relation": {"response_region": "occipital", "permutations": 20},
        "trust": {"min_windows": 4},
        "comparisons": {
            "watching": {
                "measure": "amplitude_uv",
                "region": "occipital",
                "plus": [{"condition": "watch_left", "tag": "left"}],
                "minus": [{"condition": "watch_right", "tag": "left"}],
            },
            "eyes": {
                "measure": "alpha_power_db",
                "region": "occipital",
                "plus": [{"condition": "rest"}],
                "minus": [{"condition": "watch_left"}],
            },
        },
    }
    return Settings.model_validate(raw | changes)


WITHOUT_TAGS = {
    "tags": {},
    "conditions": {"rest": {"events": {"task": "rest"}}, "work": {"events": {"task": "work"}}},
    "comparisons": {},
}


class Study:
    """Tables and arrays as the steps before leave them, of people who are made up.

    Parameters
    ----------
    folder : Path
    settings : Settings
    people : int
    channels : int
        How many of `CHANNELS`.
    bad : collection of int
        People with too many bad channels, who are set aside.
    lacking : mapping of int to str
        People without a condition.
    """

    def __init__(self, folder, settings, people=4, channels=12, bad=(), lacking=None):
        self.folder, self.settings = folder, settings
        self.channels = CHANNELS[:channels]
        self.rng = np.random.default_rng(7)
        self.whole = part(settings, *Settings.model_fields, "terms")
        self.names = [f"sub-{number:02}" for number in range(1, people + 1)]
        self.inputs = SimpleNamespace(
            coefficients=[], psd=[], relation_windows=[], responses=[], alphas=[], relations=[],
            people=[], channels=[], gains=[], sensors=[], components=[], windows=[], cleaning=[],
        )  # fmt: skip
        for number, who in enumerate(self.names):
            present = [
                name for name in settings.conditions if (lacking or {}).get(number) != name
            ]
            self._recording(who, present, number in bad)
            self._participant(who, present)
        self._study()

    def report(self):
        """Write the report and return its page."""
        outputs = SimpleNamespace(
            page=self.folder / "report.html",
            **{name: self.folder / f"{name}.png" for name in FIGURES},
        )
        report_step.write_report(self.inputs, outputs, self.whole)
        return outputs.page.read_text(encoding="utf-8")

    def material(self):
        return report_tables.read(self.inputs, self.whole)

    def _write(self, kind, who, rows, columns):
        path = self.folder / f"{who}_task-x_desc-{kind}_table.tsv"
        tables.write_table(path, rows, columns)
        getattr(self.inputs, kind).append(str(path))

    def _recording(self, who, present, is_bad):
        few = len(self.channels) // 2 if is_bad else who == "sub-01"
        self._write(
            "channels",
            who,
            [{"name": name, "position": "template"} for name in self.channels],
            ["name", "position"],
        )
        self._write(
            "sensors",
            who,
            [
                {
                    "name": name,
                    "verdict": "bad" if index < few else "good",
                    "reason": "flat" if index < few else None,
                }
                for index, name in enumerate(self.channels)
            ],
            ["name", "verdict", "reason"],
        )
        classes = [("eye", "removed", None), ("brain", "kept", None), ("eye", "kept", "tag <1f>")]
        self._write(
            "components",
            who,
            [
                {"component": i, "component_class": c, "verdict": v, "reason": r}
                for i, (c, v, r) in enumerate(classes)
            ],
            ["component", "component_class", "verdict", "reason"],
        )
        self._write(
            "windows",
            who,
            [
                {
                    "condition": name,
                    "verdict": "left out" if index == 0 else "kept",
                    "reason": "muscle, gradient" if index == 0 else None,
                }
                for name in present
                for index in range(9)
            ],
            ["condition", "verdict", "reason"],
        )
        terms = tagging.study_terms(self.whole["terms"], 100.0)
        gains = [
            {
                "tag": term.tag,
                "term": term.term,
                "frequency_hz": float(term.frequency),
                "gain": 0.999,
                "topography_correlation": 0.98,
            }
            for term in terms
        ]
        columns = ["tag", "term", "frequency_hz", "gain"]
        self._write("gains", who, gains, columns)
        self._write("cleaning", who, gains, [*columns, "topography_correlation"])

    def _participant(self, who, present):
        condition = np.repeat(present, 8)
        terms = tagging.study_terms(self.whole["terms"], 100.0)
        tags = tagging.study_tags(self.whole["terms"])
        samples = tagging.window_samples(
            tags, terms, tagging.exact_rate(RATE_HZ), self.whole["windows"]["length_s"]
        )
        bins = [0, *tagging.neighbour_offsets(10, 1)]
        regions = self.whole["regions"]
        sites = [*self.channels, *regions]
        shape = (len(condition), len(sites), len(terms), len(bins))
        values_uv = (self.rng.normal(size=(*shape, 2)) @ [1, 1j]) * 0.5
        for index, term in enumerate(terms):
            for window, name in enumerate(condition):
                about = self.whole["conditions"][name]
                if term.harmonic and term.driven_by(about["flickering"]):
                    size = (2.0 if about["attended"] == term.tag else 1.2) / term.harmonic
                    values_uv[window, :, index, 0] += size * np.exp(0.7j)
        marks = {
            "condition": condition,
            "recording": np.repeat(f"{who}/eeg/{who}_task-x", len(condition)),
            "trial": np.arange(len(condition)),
            "window": np.arange(len(condition)),
        }
        coefficients = self.folder / f"{who}_coefficients.npz"
        arrays.write(
            coefficients, coefficients_uv=values_uv.astype(np.complex64), bins=bins,
            samples=np.array(list(samples.values()), dtype=int), rate="250", passband_hz=100.0,
            line_hz=50.0, site=sites, site_kind=["channel"] * len(self.channels) + ["region"],
            site_channels=[*self.channels, " ".join(regions["occipital"])], **marks,
        )  # fmt: skip
        frequencies_hz = np.arange(0, 60, 0.5)
        psd = 20 / (1 + frequencies_hz) + 6 * np.exp(-((frequencies_hz - 10) ** 2) / 2)
        noise = self.rng.chisquare(20, size=(len(condition), len(self.channels), len(psd))) / 20
        arrays.write(
            self.folder / f"{who}_psd.npz", psd_uv2_per_hz=psd * noise,
            frequencies_hz=frequencies_hz, channel=self.channels, **marks,
        )  # fmt: skip
        self.inputs.coefficients.append(coefficients)
        self.inputs.psd.append(self.folder / f"{who}_psd.npz")
        self._measures(who, present, coefficients, condition)

    def _measures(self, who, present, coefficients, condition):
        paths = {name: self.folder / f"{who}_{name}.tsv" for name in ("r", "rw", "a", "aw", "l", "lw")}
        own = self.whole | {"participant": who}
        response_step.measure_response(
            SimpleNamespace(coefficients=coefficients),
            SimpleNamespace(measures=paths["r"], windows=paths["rw"]),
            own,
        )
        found = who != "sub-02"
        power_db = {name: self.rng.normal(8, 2) for name in present}
        alpha = [
            {
                "participant": who, "condition": name, "site": site, "site_kind": kind,
                "alpha_frequency_hz": self.rng.normal(10, 0.7) if found else np.nan,
                "alpha_centre_hz": 10.0, "alpha_found": "yes" if found else "no peak",
                "band_low_hz": 8.0, "band_high_hz": 12.0, "alpha_power_db": power_db[name],
            }
            for name in present
            for site, kind in [*((c, "channel") for c in self.channels), ("occipital", "region")]
        ]  # fmt: skip
        tables.write_table(paths["a"], alpha, list(alpha[0]))
        windows = [
            {
                "participant": who, "window_number": number + 1, "site": "occipital",
                "log_alpha": self.rng.normal(),
            }
            for number in range(len(condition))
        ]  # fmt: skip
        tables.write_table(paths["aw"], windows, list(windows[0]))
        relation_step.relate(
            SimpleNamespace(alpha=paths["aw"], response=paths["rw"]),
            SimpleNamespace(measures=paths["l"], windows=paths["lw"]),
            own,
        )
        self.inputs.responses.append(paths["r"])
        self.inputs.alphas.append(paths["a"])
        self.inputs.relations.append(paths["l"])
        self.inputs.relation_windows.append(paths["lw"])

    def _study(self):
        made = ("participants", "responses", "alpha", "relation", "comparisons", "group")
        outputs = SimpleNamespace(**{name: self.folder / f"{name}.tsv" for name in made})
        recordings = {who: [f"{who}/eeg/{who}_task-x"] for who in self.names}
        study_step.make_study(
            self.inputs,
            outputs,
            self.whole
            | {"participants": recordings, "recordings": [r for (r,) in recordings.values()]},
        )
        vars(self.inputs).update(vars(outputs))
        info = mne.create_info(self.channels, RATE_HZ, "eeg")
        raw = mne.io.RawArray(np.zeros((len(self.channels), 10)), info, verbose="error")
        raw.set_montage("colin27_1005")
        self.inputs.signal = self.folder / "signal_eeg.fif"
        dataset.write_signal(raw, self.inputs.signal)
