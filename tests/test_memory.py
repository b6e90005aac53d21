"""An hour of 64 channels at 2048 Hz passes in bounded memory."""

import re

import pytest
from conftest import run_study
from large_recording import write_dataset

STEPS = ("intake", "filter", "sensors", "components", "windows")
MOST_MIB = 1.5 * 1024
SETTINGS = {
    "study": {"title": "One long recording"},
    "tags": {"lamp": {"frequency_hz": 15}},
    "conditions": {
        "watch": {"events": {"trial_type": "watch"}, "flickering": ["lamp"]},
        "rest": {"events": {"trial_type": "rest"}},
    },
    "regions": {"occipital": ["O1", "Oz", "O2"]},
    "windows": {"length_s": 2},
    "alpha": {"region": "occipital"},
    "relation": {"response_region": "occipital"},
}


def peaks_mib(finished):
    """Peak memory of each step, from its log."""
    found = {}
    for step in STEPS:
        (log,) = (finished.results / "logs" / step).rglob("*.log")
        found[step] = float(re.search(r"peak memory: (\d+) MiB", log.read_text())[1])
    return found


@pytest.mark.long
@pytest.mark.workflow
def test_an_hour_of_64_channels_at_2048_hz(tmp_path):
    write_dataset(tmp_path / "data")
    settings = SETTINGS | {"dataset": {"folder": str(tmp_path / "data")}}
    finished = run_study(tmp_path / "study", settings, "cleaned")
    assert finished.exit_code == 0, finished.output
    found = peaks_mib(finished)
    print(found)
    assert max(found.values()) < MOST_MIB
