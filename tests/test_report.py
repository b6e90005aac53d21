import base64
import re
from html import unescape
from html.parser import HTMLParser
from itertools import pairwise
from types import SimpleNamespace

import attention as attention_step
import filter as filter_step
import flicker as flicker_step
import mne
import numpy as np
import pytest
import relation as relation_step
import report as report_step
import response as response_step
import study as study_step
from onbin import arrays, dataset, filtering, report, report_tables, tables, tagging
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
        self.whole = part(settings, *Settings.model_fields, "terms", "least_rate_hz")
        self.whole |= {"decisions": [], "left_out": {}}
        self.names = [f"sub-{number:02}" for number in range(1, people + 1)]
        self.inputs = SimpleNamespace(
            coefficients=[], psd=[], relation_windows=[], responses=[], alphas=[], relations=[],
            people=[], flicker=[], channels=[], designs=[], gains=[], sensors=[],
            components=[], windows=[], cleaning=[], attentions=[],
            plan_page=str(folder / "flicker_plan.txt"),
        )  # fmt: skip
        (folder / "flicker_plan.txt").write_text("The plan can work as it stands.\n")
        for number, who in enumerate(self.names):
            present = [name for name in settings.conditions if (lacking or {}).get(number) != name]
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
                    "status": "bad" if index == len(self.channels) - 1 else "good",
                }
                for index, name in enumerate(self.channels)
            ],
            ["name", "verdict", "reason", "status"],
        )
        classes = [("eye", "removed", None), ("brain", "kept", None), ("eye", "kept", "tag <1f>")]
        self._write(
            "components",
            who,
            [
                {
                    "component": i,
                    "component_class": c,
                    "verdict": v,
                    "reason": r,
                    "flagged": bool(r),
                }
                for i, (c, v, r) in enumerate(classes)
            ],
            ["component", "component_class", "verdict", "reason", "flagged"],
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
        offset = who == "sub-02"
        found = [
            {
                "tag": tag, "signal": "occipital", "set_hz": float(frequency),
                "flicker_verdict": "offset" if offset else "as set",
                "found_hz": float(frequency) + 0.2 * offset,
                "found_low_hz": float(frequency) + 0.2 * offset - 0.001,
                "found_high_hz": float(frequency) + 0.2 * offset + 0.001,
                "offset_bins": 0.5 * offset, "lost_db": -3.92 * offset,
                "drift_low_hz_per_min": -0.01, "drift_high_hz_per_min": 0.01,
                "phase_steps": 0, "phase_steps_at": None, "frequency_source": "as set",
            }
            for tag, frequency in tagging.study_tags(self.whole["terms"]).items()
        ]  # fmt: skip
        self._write("flicker", who, found, flicker_step.COLUMNS)
        told = {
            "participant": who, "attended_tags": "left, right", "decision": "window",
            "decision_s": 2.5, "chance": 0.5, "accuracy": 0.75, "accuracy_p": 0.01,
        }  # fmt: skip
        if offset:
            told = {"participant": who, "attended_tags": "left, right", "reason": "too few trials"}
        self._write("attentions", who, [told] if found else [], attention_step.MEASURES)
        columns = ["tag", "term", "frequency_hz", "gain"]
        self._write("gains", who, gains, columns)
        cleaning = [row | {"peak_gain": row["gain"]} for row in gains]
        self._write("cleaning", who, cleaning, [*columns, "peak_gain", "topography_correlation"])
        designs = [filtering.design_row(filtering.design_highpass(RATE_HZ, 0.5))]
        self._write("designs", who, designs, filter_step.DESIGNS)

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
            line_hz=50.0, used=[str(f) for f in tags.values()], measured=np.array([], dtype=str),
            site=sites, site_kind=["channel"] * len(self.channels) + ["region"],
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
        paths = {
            name: self.folder / f"{who}_{name}.tsv" for name in ("r", "rw", "a", "aw", "l", "lw")
        }
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
                "band_low_hz": 8.0, "band_high_hz": 12.0,
                "alpha_power_db": power_db[name] + len(site) / 3 + index / 9,
            }
            for name in present
            for index, (site, kind) in enumerate(
                [("occipital", "region"), *((c, "channel") for c in self.channels)]
            )
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
        made = (
            "participants",
            "flicker",
            "responses",
            "alpha",
            "relation",
            "attention",
            "comparisons",
            "group",
        )
        outputs = SimpleNamespace(**{name: self.folder / f"{name}.tsv" for name in made})
        recordings = {who: [f"{who}/eeg/{who}_task-x"] for who in self.names}
        study_step.make_study(
            self.inputs,
            outputs,
            self.whole
            | part(self.settings, "planned")
            | {
                "participants": recordings,
                "recordings": [r for (r,) in recordings.values()],
                "folders": self.names,
                "left_out": {},
                "trusted": {},
            },
        )
        vars(self.inputs).update(vars(outputs))
        info = mne.create_info(self.channels, RATE_HZ, "eeg")
        raw = mne.io.RawArray(np.zeros((len(self.channels), 10)), info, verbose="error")
        raw.set_montage("colin27_1005")
        self.inputs.signal = self.folder / "signal_eeg.fif"
        dataset.write_signal(raw, self.inputs.signal)


class Page(HTMLParser):
    """Checks that elements are closed in order, and collects what the tests ask about."""

    VOID = ("meta", "img", "br")

    def __init__(self, text):
        super().__init__()
        self.open, self.elements, self.text = [], [], ""
        self.feed(text)
        assert not self.open

    def handle_starttag(self, tag, attributes):
        self.elements.append((tag, dict(attributes)))
        if tag not in self.VOID:
            self.open.append(tag)

    def handle_endtag(self, tag):
        assert self.open.pop() == tag
        self.text += " " * (tag in ("td", "th"))

    def handle_data(self, data):
        if self.open and self.open[-1] != "style":
            self.text += data

    @property
    def words(self):
        return " ".join(self.text.split())

    def all(self, tag, attribute):
        return [of[attribute] for name, of in self.elements if name == tag and attribute in of]


@pytest.fixture(scope="module")
def usual(tmp_path_factory):
    """Six people: one has too many bad channels, another lacks a condition."""
    folder = tmp_path_factory.mktemp("usual")
    made = Study(folder, study_settings(), people=6, channels=6, bad=[3], lacking={4: "rest"})
    return made, made.report()


def test_page_needs_no_other_file_and_no_script(usual):
    page = Page(usual[1])
    assert all(source.startswith("data:image/png;base64,") for source in page.all("img", "src"))
    assert not {"script", "link", "iframe", "object"} & {tag for tag, _ in page.elements}
    links = page.all("a", "href")
    ours = re.compile(r"#[a-z]+|study/[a-z/_]+\.(tsv|png|txt)|manifest\.tsv|sub-[\w/-]+_sheet\.png")
    assert all(ours.fullmatch(link) for link in links)
    assert "url(" not in usual[1]
    assert "@import" not in usual[1]


def test_page_can_be_read_without_seeing_the_figures(usual):
    page = Page(usual[1])
    assert len(page.all("img", "alt")) == len(FIGURES)
    assert all(len(alt) > 60 for alt in page.all("img", "alt"))
    assert page.all("html", "lang") == ["en"]
    headings = [int(tag[1]) for tag, _ in page.elements if re.fullmatch("h[1-6]", tag)]
    assert headings[0] == 1
    assert all(after - before <= 1 for before, after in pairwise(headings))


def test_embedded_figures_are_the_files(usual):
    made, text = usual
    for name in FIGURES:
        embedded = base64.b64encode((made.folder / f"{name}.png").read_bytes()).decode()
        assert embedded in text


def test_text_of_datasets_is_escaped(usual):
    assert "<b>panels</b>" not in usual[1]
    assert "Two &lt;b&gt;panels&lt;/b&gt; &amp; a lamp" in usual[1]
    assert "tag &lt;1f&gt;" in usual[1]


def test_answers_stand_first_and_say_who_is_missing(usual):
    words = Page(usual[1]).words
    assert words.index("Evoked amplitude at occipital is") < words.index("Who is in the study")
    assert "higher for left in watch left than for left in watch right" in words
    assert "Not in this comparison, since a value is missing: sub-05." in words
    # sign-flip floor of 4 people 2/2^4; Holm over 2 comparisons doubles it
    assert "With 4 people no p below 0.12 is possible" in words


def test_nothing_is_silently_dropped(usual):
    words = Page(usual[1]).words
    assert "In the study (5 of 6): sub-01, sub-02, sub-03, sub-05 and sub-06." in words
    assert "sub-04: sub-04/eeg/sub-04_task-x: 3 of 6 channels are bad, more than 25%" in words
    assert "PO4 1 of 6: Oz: flat" in words  # bad in the dataset; found bad
    assert "gradient 3, muscle 3" in words  # a window with two reasons counts under each
    assert "not there" in words  # the condition that sub-05 lacks


def test_estimates_are_those_of_the_table(usual):
    made, text = usual
    for row in tables.read_table(made.inputs.comparisons):
        assert f"{report.number(abs(row['estimate']))} {row['estimate_unit']} " in Page(text).words


def test_group_means_are_means_over_the_people_in_the_study(usual):
    made, _ = usual
    rows = tables.read_table(made.inputs.responses)
    amplitudes = [
        row["amplitude_uv"]
        for row in rows
        if (row["tag"], row["term"], row["condition"], row["site"])
        == ("left", "1f", "watch_left", "occipital")
        and row["participant"] != "sub-04"
    ]
    lines = report_tables.response_groups(made.material())["occipital"]
    cell = next(x for x in lines if (x["tag"], x["term"]) == ("left", "1f"))["cells"]["watch_left"]
    np.testing.assert_allclose(cell["amplitude_uv"], np.mean(amplitudes), rtol=1e-9)  # same floats
    assert (cell["n"], cell["detected"]) == (5, 5)


def test_bins_agree_with_the_table_of_responses(usual):
    # two ways to the same number: coefficients of single precision, and the step response
    made, _ = usual
    material = made.material()
    for hood in report_tables.neighbourhoods(material):
        shown = [
            row["amplitude_uv"]
            for row in report_tables.response_rows(material)
            if (row["tag"], row["condition"]) == (hood.tag, hood.condition) and row["in_study"]
        ]
        np.testing.assert_allclose(hood.amplitude_uv[:, 0], shown, rtol=1e-5)
        rows = [
            row["neighbours"]
            for row in material.responses
            if (row["tag"], row["term"], row["condition"]) == (hood.tag, "1f", hood.condition)
        ]
        assert set(rows) == {hood.used.sum()}


def test_flicker_table_is_exact(usual):
    plans = report_tables.flicker_plans(usual[0].material())
    rows = {f"{row['term'].tag} {row['term'].term}": row for row in plans[0]["terms"]}
    # 144 Hz, 8 and 10 frames; 2.5 s at 250 Hz holds 45 and 36 cycles (common practice)
    assert [str(rows["left 1f"][k]) for k in ("cycles", "bin_hz")] == ["36", "2/5"]
    assert rows["right 1f"]["cycles"] == 45
    # 14.4 Hz, the other tag, is 9 bins below 18 Hz; with it goes the bin opposite, 21.6 Hz
    own, other = (rows[f"{tag} 1f"]["term"].frequency for tag in ("right", "left"))
    assert rows["right 1f"]["left_out"][0]["frequencies"] == [other, 2 * own - other]
    assert "72/5 = 14.4" in Page(usual[1]).words


def test_flicker_elsewhere_than_set_is_told_at_the_top(usual):
    words = Page(usual[1]).words
    assert words.index("In 2 cases the flicker is not") < words.index("Who is in the study")
    assert "as set 10, offset 2" in words
    # half a bin off: 20·log10(sin(π/2)/(π/2)) = -3.92 dB
    assert "sub-02_task-x left occipital offset 14.4 14.6000 14.5990 to 14.6010 0.500 −3.9" in words


def test_attended_tag_is_told_over_those_who_have_a_figure(usual):
    words = Page(usual[1]).words
    assert "window 2.50 4 75.0 75.0 to 75.0 50.0 4 of 4 sub-02 (too few trials)" in words


def test_settings_on_the_page_make_the_same_study(usual, tmp_path):
    made, text = usual
    listing = next(part for part in re.findall(r"<pre>(.*?)</pre>", text, re.S) if "study:" in part)
    path = tmp_path / "study.yaml"
    path.write_text(unescape(listing), encoding="utf-8")
    again = load_settings(path)
    assert again == made.settings
    assert list(again.tags) == ["right", "left"]  # f1 and f2 are counted in this order
    assert list(again.comparisons) == ["watching", "eyes"]


def test_same_in_same_out(usual):
    made, text = usual
    before = {name: (made.folder / f"{name}.png").read_bytes() for name in FIGURES}
    assert made.report() == text
    assert {name: (made.folder / f"{name}.png").read_bytes() for name in FIGURES} == before


@pytest.mark.parametrize(
    ("rate_hz", "risk"),
    [
        (2.9, "outside"),  # WCAG 2.2, 2.3.1, and Harding et al. 2005: from 3 flashes a second
        (3, "provocative"),
        (14.9, "provocative"),
        (15, "most"),  # 15-25 Hz: Harding & Jeavons, Fisher et al. 2005, from memory
        (25, "most"),
        (25.1, "provocative"),
        (60, "provocative"),
        (60.1, "outside"),
    ],
)
def test_caution_by_flashes_a_second(rate_hz, risk):
    tag = tagging.exact(rate_hz)
    flashing, reversing = ({"lamp": {"pattern_reversal": it}} for it in (False, True))
    (light,) = report_tables.cautions({"lamp": tag}, flashing)
    (pattern,) = report_tables.cautions({"lamp": tag / 2}, reversing)  # two reversals a cycle
    assert light["risk"] == pattern["risk"] == risk


def test_cautions_on_the_page(usual):
    words = Page(usual[1]).words
    assert "right: 18 flashes a second. This lies in 15–25 a second" in words
    assert "left: 14.4 flashes a second. This lies in 3–60" in words
    assert "not a diagnosis" in words
    assert "personal health data" in words
    assert "ethics board" in words
    assert "safe" not in words.lower()


@pytest.mark.parametrize(
    ("changes", "told"),
    [
        ({"settings": study_settings(**WITHOUT_TAGS)}, ["the settings name no flicker"]),
        ({"people": 1}, ["in one person: too few for an interval or a test"]),
        ({"people": 2, "bad": [0, 1]}, ["Nobody is in the study.", "none. Set aside (2)"]),
        (
            {"settings": study_settings(comparisons={}), "channels": 3},
            ["The settings plan no comparison", "3 channels have a position, 4 are needed"],
        ),
    ],
)
def test_unusual_studies(tmp_path, changes, told):
    made = Study(tmp_path, **({"settings": study_settings(), "people": 3, "channels": 5} | changes))
    words = Page(made.report()).words
    assert all(text in words for text in told)
    assert all((tmp_path / f"{name}.png").stat().st_size > 1000 for name in FIGURES)


def test_flicker_without_a_fixed_phase(tmp_path):
    conditions = study_settings().model_dump()["conditions"]
    for condition in conditions.values():
        condition["phase_locked"] = condition["flickering"] == []
    made = Study(tmp_path, study_settings(conditions=conditions), people=2, channels=3)
    words = Page(made.report()).words
    assert "In watch left and watch right the flicker does not start at a fixed phase" in words
    row = report_tables.response_rows(made.material())[-1]
    # a table keeps 10 digits
    np.testing.assert_allclose(row["amplitude_uv"] ** 2, row["total_power_uv2"], rtol=1e-9)


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (0.8124, "0.812"), (12.345, "12.3"), (-0.5, "−0.500"), (1234.5, "1234"), (0, "0"),
        (0.00012345, "0.000123"), (None, "n/a"), (float("nan"), "n/a"), (9.999, "10.0"),
    ],
)  # fmt: skip
def test_numbers_have_three_significant_digits(value, text):
    assert report.number(value) == text


def test_list_in_words():
    assert report.listed([]) == "none"
    assert report.listed(["a"]) == "a"
    assert report.listed(["a", "b", "c"]) == "a, b and c"
