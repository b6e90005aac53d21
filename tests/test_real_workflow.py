"""The whole job on recordings that nobody here made."""

import numpy as np
import pytest
from conftest import run_study
from realdata import LED_TAGS_HZ, eyes_dataset, led_dataset
from scipy.stats import binom

pytestmark = pytest.mark.workflow

TAGS = {f"led_{hz}hz": {"frequency_hz": hz} for hz in LED_TAGS_HZ}
LED_SETTINGS = {
    "study": {"title": "A light at 5, 6, 7 or 8 Hz"},
    "tags": TAGS,
    "conditions": {
        name: {"events": {"trial_type": name}, "flickering": [name], "phase_locked": True}
        for name in TAGS
    },
    "regions": {"occipital": ["O1", "Oz", "O2"]},
    # 16 channels, none below the ears: their average holds a good part of the response itself
    "sensors": {"reference": "as_recorded"},
    # whole seconds hold whole cycles of all four: 10 windows of 3 s
    "windows": {"length_s": 3.0, "skip_s": 0.0, "peak_to_peak_uv": [300.0, 800.0]},
    "response": {"harmonics": 2, "intermodulation_order": 1},
    "alpha": {"region": "occipital"},
    "relation": {"response_region": "occipital"},
    "trust": {"min_windows": 4},
}
EYES_SETTINGS = {
    "study": {"title": "Eyes open and closed"},
    "conditions": {
        "eyes_open": {"events": {"trial_type": "eyes_open"}},
        "eyes_closed": {"events": {"trial_type": "eyes_closed"}},
    },
    "regions": {"occipital": ["O1", "Oz", "O2"]},
    # this person's alpha with closed eyes is up to 0.5 mV from peak to peak
    "windows": {"length_s": 4.0, "skip_s": 0.0, "peak_to_peak_uv": [150.0, 800.0]},
    "alpha": {"region": "occipital", "frequency_from": ["eyes_closed"]},
    "relation": {"response_region": "occipital"},
    "comparisons": {
        "closing_the_eyes": {
            "measure": "alpha_power_db",
            "region": "occipital",
            "plus": [{"condition": "eyes_closed"}],
            "minus": [{"condition": "eyes_open"}],
        }
    },
}


@pytest.fixture(
    scope="module",
    params=[
        pytest.param(["01"], id="one_person"),
        pytest.param(["01", "02", "03", "04", "05"], marks=pytest.mark.long, id="all_five"),
    ],
)
def led(request, tmp_path_factory):
    folder = tmp_path_factory.mktemp("led")
    dataset = led_dataset(folder / "dataset")
    settings = {
        **LED_SETTINGS,
        "dataset": {"folder": str(dataset), "participants": request.param},
    }
    finished = run_study(folder / "run", settings)
    assert finished.exit_code == 0, finished.output[-3000:]
    rows = [row for row in finished.table("responses") if row["site"] == "occipital"]
    return finished, [row for row in rows if row["term"] == "1f"]


def recordings(rows):
    """Rows of each recording: a person under one light, measured at all four frequencies."""
    return {
        key: [row for row in rows if (row["participant"], row["condition"]) == key]
        for key in sorted({(row["participant"], row["condition"]) for row in rows})
    }


def test_the_light_is_the_largest_of_four_in_every_recording(led):
    _, rows = led
    found = recordings(rows)
    assert len(found) in (4, 20)
    for (_, condition), four in found.items():
        assert len(four) == 4
        assert max(four, key=lambda row: row["amplitude_uv"])["tag"] == condition


def test_the_light_is_detected_and_other_frequencies_are_not(led):
    _, rows = led
    lights = [row for row in rows if row["driven"]]
    assert sum(row["t2circ_p"] < 0.05 for row in lights) >= len(lights) - 1
    others = [row for row in rows if not row["driven"]]
    assert len(others) == 3 * len(lights)
    # at a level of 5 % by chance, with a probability of 99.5 %, no more than so many
    assert sum(row["present"] for row in others) <= binom.ppf(0.995, len(others), 0.05)


def test_the_light_is_where_the_settings_say(led):
    finished, _ = led
    for row in finished.table("flicker"):
        if row["flicker_verdict"] != "cannot tell":
            assert abs(row["offset_hz"]) < 0.02  # no one knows it better than the 30 s can tell


@pytest.mark.long
def test_alpha_grows_when_the_eyes_close(tmp_path):
    # Goldberger et al. 2000; Schalk et al. 2004: eyes-open and eyes-closed baselines of S001
    dataset = eyes_dataset(tmp_path / "dataset")
    settings = {**EYES_SETTINGS, "dataset": {"folder": str(dataset)}}
    finished = run_study(tmp_path / "run", settings)
    assert finished.exit_code == 0, finished.output[-3000:]
    rows = {(row["site"], row["condition"]): row for row in finished.table("alpha")}
    for site in ("O1", "Oz", "O2"):
        closed, opened = rows[site, "eyes_closed"], rows[site, "eyes_open"]
        assert closed["alpha_power_uv2"] / opened["alpha_power_uv2"] > 10
    frequency_hz = rows["occipital", "eyes_closed"]["alpha_frequency_hz"]
    np.testing.assert_allclose(frequency_hz, 10.0, atol=0.3)
