"""The flicker plan: what cannot work stops with advice, what lies where, and words of caution."""

import copy
import json
import subprocess
import sys
from fractions import Fraction
from pathlib import Path
from types import SimpleNamespace

import plan as script
import pytest
import yaml
from onbin import layout, plan, plan_page, response_tables, tables, tagging
from onbin.errors import DataError, SettingsError
from onbin.plan import Recorded, Setup
from onbin.settings import load_settings, part

ROOT = Path(__file__).parents[1]
DEMO_SETTINGS = ROOT / "config" / "config.yaml"


def study(refresh=None, length_s=2.5, line_hz=None, line_removal="fit", conditions=None, **tags):
    """The demo's settings with other tags, as a plain dict; all flicker together unless told."""
    raw = copy.deepcopy(yaml.safe_load(DEMO_SETTINGS.read_text()))
    for name in ("comparisons", "flicker"):
        raw.pop(name, None)
    raw["alpha"].pop("frequency_from")
    raw["display"] = {"refresh_hz": refresh}
    raw["tags"] = {
        name: tag if isinstance(tag, dict) else {"frequency_hz": tag} for name, tag in tags.items()
    }
    conditions = {"all": list(tags)} if conditions is None else conditions
    raw["conditions"] = {
        name: {"events": {"trial_type": name}, "flickering": flickering}
        for name, flickering in conditions.items()
    }
    raw["windows"]["length_s"] = length_s
    raw["filter"] |= {"line_hz": line_hz, "line_removal": line_removal}
    return raw


@pytest.fixture
def load(tmp_path):
    """Load a study, as the job graph does."""

    def _load(raw):
        path = tmp_path / "study.yaml"
        path.write_text(yaml.safe_dump(raw, sort_keys=False))
        return part(load_settings(path), *plan.SETTINGS, "regions", "sensors.reference")

    return _load


def planned(settings, rate=250, line_hz=None, recorded=None):
    setup = Setup(Fraction(rate), line_hz, Fraction(recorded) if recorded else None, 1)
    return {plan.label(p.term): p for p in plan.planned_terms(settings, setup)}


def names(terms):
    return {plan.label(term) for term in terms}


def told(settings, rate=250, recorded=(), line_hz=None, recorded_rate=None):
    """All findings of a study in one text."""
    setup = Setup(Fraction(rate), line_hz, recorded_rate and Fraction(recorded_rate), len(recorded))
    plans = {setup: plan.planned_terms(settings, setup)}
    return "\n".join(
        f"{f.level}: {f.found}; {f.advice}" for f in plan_page.findings(settings, recorded, plans)
    )


# --- the display ----------------------------------------------------------------------------------


@pytest.mark.parametrize("hz", [9, 11, 13, 14, 16, 18, 25])
def test_what_a_60_hz_display_cannot_show(hz):
    # common practice: none of these is 60 over a whole number
    assert plan.whole_frames(Fraction(60), Fraction(hz)) is None


@pytest.mark.parametrize(
    ("refresh", "hz", "frames"), [(60, "8.57", 7), (60, "6.666", 9), (120, "120/7", 7), (60, 30, 2)]
)
def test_nominal_frequencies_of_whole_frames(refresh, hz, frames):
    assert plan.whole_frames(Fraction(refresh), Fraction(hz)) == frames


def test_nearest_to_13_hz_at_60_hz():
    # 15 or 12 Hz (common practice)
    assert [60 / frames for frames in plan.nearest_frames(Fraction(60), Fraction(13))] == [15, 12]


# --- what cannot work -----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("raw", "key", "found", "advice"),
    [
        (study(60, a=13), "tags.a.frequency_hz", "60 Hz cannot show 13 Hz",
         "15 Hz (frames_per_cycle: 4) or 12 Hz (frames_per_cycle: 5)"),
        (study(60, a={"frequency_hz": 25, "waveform": "sine"}), "tags.a.waveform",
         "a sine needs 3 frames", "waveform: square"),
        (study(length_s=0.05, a=15), "windows.length_s", "0.05 s is shorter than one cycle of a",
         "at least 0.067 s is needed"),
        (study(length_s=1, a=15, b=15.5), "windows.length_s", "fall in one bin",
         "at least 2 s is needed"),
        (study(a=15, b="30/2"), "tags.b", "cannot be told apart", "another frequency"),
        (study(line_hz=50, a=50), "tags.a", "taken out with the mains at 50 Hz",
         "another frequency"),
        (study(line_hz=50, line_removal="notch", a=25), "response.harmonics",
         "a 2f (50 Hz) would be taken out", "measure 1 or fewer"),
        (study(line_hz=60, a=20, b=40.2), "response.intermodulation_order",
         "f1+f2 (60.2 Hz) would be taken out", "to order 1 or lower"),
        (study(a=0.4, length_s=5), "filter.highpass_hz", "0.5 Hz takes out a", "lower it"),
    ],
)  # fmt: skip
def test_a_plan_that_cannot_work_stops_before_the_run(load, raw, key, found, advice):
    with pytest.raises(SettingsError) as caught:
        load(raw)
    line = next(line for line in str(caught.value).splitlines() if f" {key}: " in line)
    assert found in line
    assert advice in line


def test_a_tag_above_the_low_pass(load):
    raw = study(a=120)
    raw["filter"]["lowpass_hz"] = 100
    with pytest.raises(SettingsError, match=r"ends at 100 Hz and takes out a.*set it above"):
        load(raw)


@pytest.mark.parametrize(
    ("tag_hz", "lowpass_hz", "passband_hz", "rate_hz"),
    [
        (15, None, 100, 250),  # 3 harmonics: 45 Hz
        (40, None, 121, 302.5),  # 120 Hz, and 0.4 of the rate
        (15, 120, 120, 300),
        (15, 40, 40, 250),
    ],
)
def test_the_working_rate_follows_from_the_terms_and_the_low_pass(
    load, tag_hz, lowpass_hz, passband_hz, rate_hz
):
    raw = study(a=tag_hz)
    raw["filter"]["lowpass_hz"] = lowpass_hz
    settings = load(raw)
    assert settings["least_rate_hz"] == rate_hz
    assert plan.passband_hz(settings, plan.assumed_setup(settings)) == passband_hz
    highest = max(term.frequency for term in plan.measured_terms(settings, Setup(rate_hz, None)))
    assert highest <= 0.4 * rate_hz


def test_a_tag_above_what_the_working_rate_shows(load):
    raw = study(a=48)
    raw["intake"] = {"working_rate_hz": 100}
    with pytest.raises(SettingsError, match=r"from 45 Hz on.*a \(48 Hz\) is lost; raise it to 107"):
        load(raw)


def test_a_tag_above_what_the_recordings_show(load):
    settings = load(study(a=60))
    assert list(plan.blocking(settings)) == []
    (stop,) = plan.blocking(settings, Setup(Fraction(100), None, Fraction(100), 3))
    assert stop.where == ("tags", "a")
    assert "recordings at 100 Hz cannot show a (60 Hz)" in stop.found


def test_the_mains_of_the_dataset_count_where_the_settings_are_silent(load):
    settings = load(study(a=12.5, b=50.2, line_removal="fit"))
    stop = next(plan.blocking(settings, Setup(Fraction(250), 50.0)))
    assert "b 1f (50.2 Hz) would be taken out" in stop.found
    kept = load(study(a=12.5, b=50.2, line_removal="none"))
    assert list(plan.blocking(kept, Setup(Fraction(250), 50.0))) == []


def test_tags_that_never_flicker_together_may_share_a_frequency(load):
    settings = load(study(a=15, b=15, conditions={"left": ["a"], "right": ["b"]}))
    assert settings["terms"]["tags"] == [["a", "15"], ["b", "15"]]


def test_a_notch_gives_way_to_a_fit_where_that_spares_the_term(load):
    notched = load(study(a=12.5, b=51, line_removal="notch"))
    stop = next(plan.blocking(notched, Setup(Fraction(250), 50.0)))
    assert "b 1f (51 Hz) would be taken out" in stop.found
    assert "set filter.line_removal: fit" in stop.advice
    fitted = load(study(a=12.5, b=51, line_removal="fit"))
    assert list(plan.blocking(fitted, Setup(Fraction(250), 50.0))) == []


def test_terms_that_the_filters_change_stop_the_run(load):
    settings = load(study(a=12))
    term = plan.measured_terms(settings, Setup(Fraction(250), None))[0]
    (stop,) = plan.changed_by_filters(settings, {term: 0.93})
    assert "leave 0.9300 of a 1f (12 Hz)" in stop.found
    assert not list(plan.changed_by_filters(settings, {term: 0.995}))


def test_gains_hold_the_decimation_too(load):
    # the pass band of the filter before decimation ends at 0.4 of the new rate
    settings = load(study(a=15.5, length_s=4))
    settings["least_rate_hz"] = 100.0
    setup = Setup(Fraction(100), None, Fraction(1000), 1)
    gains = {plan.label(t): g for t, g in script.filter_gains(settings, setup).items()}
    assert gains["a 2f"] == pytest.approx(1, abs=0.01)
    settings["filter"]["lowpass_hz"] = 48.0
    gains = {plan.label(t): g for t, g in script.filter_gains(settings, setup).items()}
    assert gains["a 3f"] < 0.5  # 46.5 Hz lies beyond 45 Hz, where half is left


# --- what lies where ------------------------------------------------------------------------------


def test_12_hz_meets_the_mains_at_its_fifth_harmonic(load):
    found = planned(load(study(a=12)), line_hz=60.0)
    assert not found["a 5f"].measured
    raw = study(a=12, line_removal="none")
    raw["response"]["harmonics"] = 5
    found = planned(load(raw), line_hz=60.0)
    assert names(found["a 5f"].collides) == {"mains 1f"}
    assert names(found["mains 1f"].collides) == {"a 5f"}


def test_harmonics_that_meet_and_terms_that_crowd(load):
    found = planned(load(study(a=7.5, b=15, length_s=2)))
    assert "b 1f" in names(found["a 2f"].collides)
    assert "a 2f" in names(found["b 1f"].collides)
    # 18 Hz lies 9 bins of 0.4 Hz above 14.4 Hz, among bins 2 to 11
    found = planned(load(study(left=14.4, right=18)), rate=200)
    assert ("right 1f", (9,)) in found["left 1f"].left_out
    assert found["left 1f"].neighbours == 18  # and bin -9 with it
    assert "left 1f" in names(found["right 1f"].crowds)
    assert not found["left 1f"].collides


@pytest.mark.parametrize("rate", [200, 250, 256])
def test_neighbours_are_those_that_the_step_response_uses(load, rate):
    settings = load(study(a=14.4, b=18, c="120/7", conditions={"x": ["a", "b"], "y": ["b", "c"]}))
    setup = Setup(Fraction(rate), 50.0)
    tags = tagging.study_tags(settings["terms"])
    end_hz = plan.passband_hz(settings, setup)
    terms = plan.measured_terms(settings, setup)
    samples = tagging.window_samples(tags, terms, setup.working_rate, 2.5)
    for p in plan.planned_terms(settings, setup):
        if p.measured and p.driven:
            counts = [
                sum(
                    tagging.usable_neighbours(
                        p.term.frequency,
                        tagging.neighbour_offsets(10, 1),
                        samples[p.term] / setup.working_rate,
                        response_tables.occupied(tags, together, 2, end_hz, 50.0),
                        end_hz,
                    )
                )
                for together in (["a", "b"], ["b", "c"])
                if p.term.driven_by(together)
            ]
            assert p.neighbours == min(counts)


def test_aliases_fold_about_the_sampling_rate(load):
    # 200 Hz: 8 × 14.4 = 115.2 Hz folds to 84.8 Hz, and the third multiple of 60 Hz to 20 Hz
    found = planned(load(study(a=14.4)), rate=200, recorded=200, line_hz=60.0)
    assert found["a alias of 8f"].term.frequency == Fraction("84.8")
    assert found["mains alias of 3f"].term.frequency == 20
    assert "a alias of 8f" not in planned(load(study(a=14.4)), rate=200, recorded=1000)


def test_images_of_a_sampled_sine_about_the_refresh_rate(load):
    found = planned(load(study(60, a={"frequency_hz": 13, "waveform": "sine"})))
    assert found["a refresh less 1f"].term.frequency == 47
    whole = planned(load(study(60, a={"frequency_hz": 12, "waveform": "sine"})))
    assert not any("refresh" in name for name in whole)


def test_alpha_and_half_of_a_tag(load):
    settings = load(study(a=10, b=18))
    setup = Setup(Fraction(250), None)
    rows = {
        (row["tag"], row["term"]): row
        for row in (plan.term_row(settings, setup, p) for p in plan.planned_terms(settings, setup))
    }
    assert rows["a", "1f"]["in_alpha"]
    assert rows["a+b", "f2-f1"]["in_alpha"]
    assert not rows["b", "1f"]["in_alpha"]
    assert rows["b", "1f"]["half_in_alpha"]
    text = told(settings)
    assert "caution: within alpha (7-13 Hz): a 1f (10 Hz); f2-f1 (8 Hz)" in text
    assert "note: half the frequency of a tag lies within alpha (7-13 Hz): b 9 Hz" in text


# --- what to do -----------------------------------------------------------------------------------


def test_four_tags_are_advised_a_window_of_7_s(load):
    # frames 5, 6, 7 and 8 at 120 Hz: the least common multiple is 840 frames (common practice)
    tags = {f"m{m}": {"frames_per_cycle": m} for m in (5, 6, 7, 8)}
    text = told(load(study(120, length_s=4, **tags)))
    assert "lengthen windows.length_s to 7 s, and all 4 tags fall on bins" in text
    assert "m7 has 7 frames a cycle" in text
    assert "choose 6 or 8 frames" in text
    assert "no window" not in told(load(study(120, length_s=7, **tags)))


def test_even_frames_and_sines_need_no_advice(load):
    text = told(load(study(120, a={"frames_per_cycle": 7, "waveform": "sine"})))
    assert "even halves" not in text
    assert "even halves" not in told(load(study(120, a={"frames_per_cycle": 8})))


def test_a_nominal_frequency_is_set_right(load):
    # 4 frames of a display at 59.94 Hz show 14.985 Hz: 0.15 bins and 0.324 dB over 10 s
    text = told(load(study(59.94, length_s=10, a=15)))
    assert "4 frames of 59.94 Hz show 14.985 Hz: 0.15 bins beside, a loss of 0.32 dB" in text
    assert "give frames_per_cycle: 4" in text


def test_refresh_rates_that_disagree(load):
    settings = load(study(60, length_s=10, a={"frames_per_cycle": 4}))
    recorded = [Recorded(refresh_hz=59.94), Recorded(refresh_hz=60.0)]
    text = told(settings, recorded=recorded)
    assert "caution: the dataset gives a refresh rate of 59.94 Hz for 1 of 2 recordings" in text
    assert "0.15 bins beside where it is measured and loses 0.32 dB" in text
    assert "refresh" not in told(settings, recorded=[Recorded(refresh_hz=60.0)])
    silent = told(load(study(a=15)), recorded=recorded[:1])
    assert "set it to 59.94 and give frames_per_cycle" in silent


def test_a_reversing_pattern_needs_its_second_harmonic(load):
    raw = study(a={"frequency_hz": 4, "pattern_reversal": True})
    raw["response"]["harmonics"] = 1
    assert "measure 2 harmonics or more" in told(load(raw))


def test_what_is_lost_or_unused_is_told(load):
    raw = study(a=40, b=11, conditions={"x": ["a"]})
    raw["filter"]["lowpass_hz"] = 100
    text = told(load(raw))
    assert "b flickers in no condition" in text
    assert "beyond the filters (from 100 Hz on), so not measured: a 3f (120 Hz)" in text


# --- the dataset's metadata -----------------------------------------------------------------------


@pytest.fixture
def dataset(tmp_path):
    """Two recordings; the task's JSON stands at the top, one recording has its own besides."""
    folder = tmp_path / "bids"
    screen = {"ScreenRefreshRate": 60, "ScreenDistance": 0.6, "ScreenSize": [0.5, 0.3]}
    own = {"StimulusPresentation": screen | {"ScreenRefreshRate": 59.94, "ScreenDistance": "n/a"}}
    files = {
        "dataset_description.json": {"Name": "x", "BIDSVersion": "1.10.0"},
        "task-x_events.json": {"StimulusPresentation": screen},
        "task-x_eeg.json": {"SamplingFrequency": 512, "PowerLineFrequency": 50},
        "sub-2/eeg/sub-2_task-x_events.json": own,
        "sub-2/eeg/sub-2_task-x_eeg.json": {"SamplingFrequency": 1000},
    }
    for who in ("sub-1", "sub-2"):
        (folder / who / "eeg").mkdir(parents=True)
        (folder / who / "eeg" / f"{who}_task-x_eeg.edf").touch()
    for name, content in files.items():
        (folder / name).write_text(json.dumps(content))
    return folder


def test_metadata_are_inherited_and_the_nearest_goes_first(dataset):
    first, second = (script.read_metadata(r.files) for r in layout.find_recordings(dataset))
    assert first == Recorded(512.0, 50.0, 60.0, 0.6, (0.5, 0.3))
    assert second == Recorded(1000.0, 50.0, 59.94, None, (0.5, 0.3))


def test_damaged_metadata_are_named(dataset):
    (dataset / "task-x_eeg.json").write_text("{")
    with pytest.raises(DataError, match=r"task-x_eeg.json, line 1, column 2: is not valid JSON"):
        script.read_metadata(layout.find_recordings(dataset)[0].files)


def test_recordings_are_planned_by_rate_and_mains(load):
    settings = load(study(a=15))
    recorded = [Recorded(1000.0, 50.0), Recorded(512.0, 50.0), Recorded(1000.0, 50.0), Recorded()]
    found = plan.setups(settings, recorded)
    assert [(s.working_rate, s.recordings, s.factor) for s in found] == [
        (250, 1, 1),
        (256, 1, 2),
        (250, 2, 4),
    ]
    assert found[0].recorded_rate is None


def run_plan(settings, folder, out):
    out.mkdir()
    outputs = SimpleNamespace(terms=out / "plan.tsv", page=out / "plan.txt")
    chosen = {"folder": str(folder), "tasks": [], "participants": []}
    names = [recording.name for recording in layout.find_recordings(folder)]
    script.plan_flicker(None, outputs, settings | {"dataset": chosen, "recordings": names})
    return tables.read_table(outputs.terms), outputs.page.read_text(encoding="utf-8")


def test_two_rates_make_two_plans_on_one_page(load, dataset, tmp_path):
    rows, text = run_plan(load(study(60, a={"frames_per_cycle": 4})), dataset, tmp_path / "out")
    assert {(row["working_rate_hz"], row["recordings"]) for row in rows} == {(256, 1), (250, 1)}
    assert "Terms of 1 recording at 512 Hz, worked on at 256 Hz" in text
    assert "59.94 Hz for 1 of 2 recordings, 60 Hz for 1 of 2 recordings" in " ".join(text.split())


def test_what_only_the_dataset_tells_stops_the_step(load, dataset, tmp_path):
    with pytest.raises(SettingsError, match=r"cannot work.*\n  response.harmonics: a 2f \(50 Hz\)"):
        run_plan(load(study(a=25)), dataset, tmp_path / "out")


# --- people's safety ------------------------------------------------------------------------------


def test_solid_angles():
    # a quarter of the central 10 degrees: 0.005977 sr, the 0.006 sr of WCAG 2.3.1; discs computed
    # by 2π(1 − cos(angle / 2))
    assert plan_page.cone_sr(10) == pytest.approx(0.023909, abs=5e-7)
    assert plan_page.cone_sr(10) / 4 == pytest.approx(plan_page.SMALL_AREA_SR, rel=0.005)
    for size_m, angle_deg, area_sr in [(0.0525, 5.01, 0.006005), (0.10, 9.53, 0.0217)]:
        found = plan_page.visual_angle_deg(size_m, 0.6)
        assert found == pytest.approx(angle_deg, abs=0.005)  # as printed
        assert plan_page.cone_sr(found) == pytest.approx(area_sr, rel=0.002)


def test_a_rectangle_from_one_face_of_a_cube_to_a_small_patch():
    assert plan_page.rectangle_sr(2, 2, 1) == pytest.approx(
        4 * 3.14159265358979 / 6
    )  # of the sphere
    assert plan_page.rectangle_sr(0.01, 0.02, 1) == pytest.approx(
        2e-4, rel=1e-3
    )  # area / distance²


@pytest.mark.parametrize(
    ("tag", "word"),
    [
        (2, "by itself clears nothing"),
        (3, "CAUTION: a (3 flashes"),
        (14.9, "CAUTION: a (14.9 flashes"),
        (15, "STRONG CAUTION"),
        (25, "STRONG CAUTION"),
        (60, "CAUTION: a (60 flashes"),
        (61, "by itself clears nothing"),
        ({"frequency_hz": 9, "pattern_reversal": True}, "STRONG CAUTION: a (18 reversals"),
    ],
)
def test_cautions_by_rate(load, tag, word):
    # 3-60 a second, most of all 15-25 (Harding et al. 2005; Fisher et al. 2005, from memory)
    text = plan_page.safety(load(study(a=tag)), [])
    assert word in text[0]
    assert "STRONG" in word or "STRONG" not in text[0]
    assert "ethics board" in text[-1]
    assert "not known" in text[1]
    assert "is safe" not in " ".join(text)


def test_the_display_of_the_settings_goes_before_the_datasets(load):
    raw = study(a=15)
    seen = [Recorded(distance_m=0.6, size_m=(0.5, 0.3))]
    text = " ".join(plan_page.safety(load(raw), seen))
    assert "At 0.6 m a display of 0.5 × 0.3 m" in text
    assert "0.006 sr" in text
    assert "a disc 5.2 cm across" in text  # 5.25 cm at 60 cm is 0.006005 sr
    raw["display"]["distance_m"] = 1.2
    assert "At 1.2 m a display of 0.5 × 0.3 m" in " ".join(plan_page.safety(load(raw), seen))


# --- the whole page -------------------------------------------------------------------------------


def test_the_page_of_the_demo(tmp_path):
    settings = part(load_settings(DEMO_SETTINGS), *plan.SETTINGS, "regions", "sensors.reference")
    rows, text = run_plan(settings, ROOT / "demo_bids", tmp_path / "out")
    assert "Display: 144 Hz by the settings; the dataset says 144 Hz for 8 of 8 recordings" in text
    assert "The plan can work as it stands." in text
    assert "left_panel   14.4 Hz    10      5 on, 5 off" in text
    assert "One window for all: 500 samples, 2.5 s, bins 0.4 Hz apart." in text
    assert "mains 50 Hz, filters pass up to 90 Hz" in text
    assert "STRONG CAUTION: right_panel (18 flashes a second)" in text
    assert max(map(len, text.splitlines())) <= plan_page.WIDTH
    fundamentals = {row["tag"]: row for row in rows if row["term"] == "1f" and row["measured"]}
    assert fundamentals["left_panel"]["frequency_exact"] == "72/5"
    assert fundamentals["left_panel"]["cycles"] == 36
    assert fundamentals["right_panel"]["cycles"] == 45
    for row in rows:
        assert row["measured"] == (row["cycles"] == row["cycles"])  # n/a where not measured
        if row["measured"]:
            assert row["planned_gain"] == pytest.approx(1, abs=0.01)  # filter.gain_tolerance


def test_a_study_without_tags(load, tmp_path):
    rows, text = run_plan(
        load(study(conditions={"rest": []})), ROOT / "demo_bids", tmp_path / "out"
    )
    assert rows == []
    assert "nothing flickers" in text


def test_the_job_graph_needs_no_arrays_for_the_plan():
    check = (
        "import sys; sys.path.insert(0, 'scripts');import onbin.plan; print('numpy' in sys.modules)"
    )
    done = subprocess.run(
        [sys.executable, "-c", check], cwd=ROOT, capture_output=True, text=True, check=True
    )
    assert done.stdout.strip() == "False"
