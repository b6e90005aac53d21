"""Settings: every mistake at once, each with its place and what was expected."""

import copy
from pathlib import Path

import pytest
import yaml
from onbin.errors import SettingsError
from onbin.settings import Settings, json_schema, load_settings, part, plain

ROOT = Path(__file__).parents[1]
DEMO = ROOT / "config" / "config.yaml"


@pytest.fixture
def write(tmp_path):
    """Write a settings file: the demo's, changed."""

    def _write(change=None, text=None):
        path = tmp_path / "study.yaml"
        raw = copy.deepcopy(yaml.safe_load(DEMO.read_text()))
        if change:
            change(raw)
        path.write_text(yaml.safe_dump(raw, sort_keys=False) if text is None else text)
        return path

    return _write


def test_the_demo_is_valid():
    settings = load_settings(DEMO)
    assert {name: str(f) for name, f in settings.tag_frequencies.items()} == {
        "left_panel": "72/5",
        "right_panel": "18",
    }


def test_the_committed_schema_is_in_step():
    assert (ROOT / "config" / "settings.schema.json").read_text() == json_schema(), (
        "the settings changed: write onbin.settings.json_schema() to config/settings.schema.json"
    )


def test_every_mistake_is_told_at_once(write):
    def spoil(raw):
        raw["windows"]["lenght_s"] = raw["windows"].pop("length_s")
        raw["conditions"]["watch_left"]["flickering"] = ["left_pannel"]
        raw["alpha"]["region"] = "occipitl"
        raw["response"]["neighbours"] = "ten"
        raw["sensors"]["max_bad_share"] = 25

    with pytest.raises(SettingsError) as caught:
        load_settings(write(spoil))
    text = str(caught.value)
    assert "has 7 mistakes" in text
    assert "windows.lenght_s: is not a setting; did you mean length_s?" in text
    assert "windows.length_s: is required" in text
    assert "there is no tag 'left_pannel'; did you mean left_panel?" in text
    assert "alpha.region: there is no region 'occipitl'; did you mean occipital?" in text
    assert "response.neighbours: must be a whole number, found 'ten'" in text
    assert "sensors.max_bad_share: must be less than or equal to 1, found 25" in text
    assert "does not flicker in this condition" in text


def test_mistakes_name_their_line(tmp_path):
    path = tmp_path / "study.yaml"
    path.write_text(DEMO.read_text().replace("  neighbours: 10", "  neighbors: 10"))
    line = next(n for n, t in enumerate(path.read_text().splitlines(), 1) if "neighbors" in t)
    with pytest.raises(SettingsError, match=f"line {line}, response.neighbors.*neighbours"):
        load_settings(path)


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        (
            "study: {title: a}\nstudy: {title: b}\n",
            "line 2, column 1: the key 'study' stands twice",
        ),
        ("study:\n\ttitle: a\n", "Use spaces, not tabs"),
        ("- a\n- b\n", "holds ['a', 'b'], expected lines"),
        ("", "holds nothing, expected lines"),
        ("study: {title: [a\n", "line 2"),
        ("? [a, b]\n: 1\n", "a key must be a word"),
        ("study: !!python/object/apply:os.system [ls]\n", "has no meaning here; remove it"),
    ],
)
def test_broken_yaml_is_told_plainly(write, text, expected):
    with pytest.raises(SettingsError, match=r".*") as caught:
        load_settings(write(text=text))
    assert expected in str(caught.value)


def test_a_missing_file_a_folder_and_foreign_bytes(tmp_path):
    with pytest.raises(SettingsError, match="no such settings file"):
        load_settings(tmp_path / "none.yaml")
    with pytest.raises(SettingsError, match="is a folder"):
        load_settings(tmp_path)
    (tmp_path / "latin.yaml").write_bytes(b"study: {title: \xe9}\n")
    with pytest.raises(SettingsError, match="UTF-8"):
        load_settings(tmp_path / "latin.yaml")


@pytest.mark.parametrize(
    ("change", "expected"),
    [
        (lambda s: s["display"].clear(), "frames_per_cycle needs display.refresh_hz"),
        (lambda s: s["tags"].update(x={}), "either frames_per_cycle or frequency_hz"),
        (lambda s: s["tags"].update(x={"frequency_hz": "1/0"}), "positive number or ratio"),
        (lambda s: s["display"].update(refresh_hz="fast"), "positive number or ratio"),
        (lambda s: s["windows"].update(length_s=0.05), "shorter than one cycle of left_panel"),
        (lambda s: s["filter"].update(highpass_hz=16.0), "takes out left_panel"),
        (lambda s: s["comparisons"]["watching_a_panel"]["plus"][0].pop("tag"), "add tag:"),
        (lambda s: s["alpha"].pop("left_region"), "both right_region and left_region"),
        (lambda s: s["conditions"].update({"Bad Name": {"events": {"a": 1}}}), "lower-case"),
        (lambda s: s["windows"].update(skip_s=True), "must be a number, found true"),
    ],
)
def test_settings_that_cannot_work(write, change, expected):
    with pytest.raises(SettingsError) as caught:
        load_settings(write(change))
    assert expected in str(caught.value)


def test_the_command_line_goes_before_the_file():
    changed = load_settings(DEMO, {"seed": 7})
    assert changed.seed == 7
    with pytest.raises(SettingsError, match="sede: is not a setting; did you mean seed"):
        load_settings(DEMO, {"sede": 7})


def test_a_part_holds_what_was_asked_for_and_no_more():
    found = part(load_settings(DEMO), "response.skip", "conditions.*.flickering", "terms")
    assert list(found) == ["conditions", "response", "terms"]
    assert found["response"] == {"skip": 1}
    assert found["conditions"]["rest_open"] == {"flickering": []}
    assert found["terms"]["tags"] == [["left_panel", "72/5"], ["right_panel", "18"]]


def test_plain_values_do_not_depend_on_the_order_of_keys():
    raw = yaml.safe_load(DEMO.read_text())
    turned = dict(reversed(raw.items()))
    assert repr(plain(Settings.model_validate(raw))) == repr(plain(Settings.model_validate(turned)))


def test_the_order_of_tags_is_kept_since_it_names_terms():
    raw = yaml.safe_load(DEMO.read_text())
    raw["tags"] = dict(reversed(raw["tags"].items()))
    found = part(Settings.model_validate(raw), "terms")["terms"]["tags"]
    assert [name for name, _ in found] == ["right_panel", "left_panel"]
