"""Sidecars: which apply, and which goes first; `test_bad_input.py` has the damaged ones."""

import json
from pathlib import Path

import pytest
from onbin import sidecars
from onbin.errors import DataError
from onbin.headers import Header

HEADER = Header(Path("a_eeg.vhdr"), ("Oz", "Status"), 200.0, 6000)


def test_the_most_specific_goes_first():
    """BIDS 1.10, inheritance: deeper folders first, then names of more entities."""
    files = [
        "d/eeg.json",
        "d/task-with-a-long-name_acq-low_run-1_eeg.json",
        "d/sub-1/sub-1_eeg.json",
        "d/sub-1/eeg/sub-1_task-x_eeg.json",
        "d/sub-1/eeg/sub-1_eeg.json",
        "d/sub-1/eeg/sub-1_task-x_channels.tsv",
        "d/sub-1/eeg/sub-1_task-x_photoeeg.json",
    ]
    assert sidecars.nearest(files, "eeg.json") == [files[3], files[4], files[2], files[1], files[0]]


def test_keys_are_merged(tmp_path):
    top, own = tmp_path / "task-x_eeg.json", tmp_path / "sub-1" / "sub-1_task-x_eeg.json"
    own.parent.mkdir()
    top.write_text(json.dumps({"SamplingFrequency": 512, "PowerLineFrequency": 60}))
    own.write_text(json.dumps({"SamplingFrequency": 200}))
    files = [str(own), str(top)]
    told = sidecars.merged(files, "eeg.json")
    assert told == {"SamplingFrequency": 200, "PowerLineFrequency": 60}
    assert sidecars.check_eeg_json(told, HEADER, None) == 60
    assert sidecars.merged(files, "events.json") == {}


@pytest.mark.parametrize(
    ("kind", "expected"),
    [("EEG", "eeg"), ("VEOG", "eog"), ("HEOG", "eog"), ("ECG", "ecg"), ("TRIG", "misc")],
)
def test_types_as_mne_calls_them(tmp_path, kind, expected):
    path = tmp_path / "sub-1_channels.tsv"
    path.write_text(f"name\ttype\tunits\tstatus\nOz\t{kind}\tµV\tn/a\n")
    # the triggers of a BDF file need not be listed
    assert sidecars.read_channels([str(path)], HEADER) == {"Oz": sidecars.Channel(expected, False)}


def test_a_rate_that_was_rounded_is_the_same():
    """300 Hz in BrainVision, with an interval of whole µs: 3333 µs, 300.03 Hz."""
    header = Header(Path("a_eeg.vhdr"), ("Oz",), 1e6 / 3333, 6000)
    told = {"SamplingFrequency": 300, "PowerLineFrequency": 50}
    assert sidecars.check_eeg_json(told, header, None) == 50


@pytest.mark.parametrize("line_hz", [1e-6, 1e6])
def test_mains_of_no_country_are_told(line_hz):
    told = {"SamplingFrequency": 200, "PowerLineFrequency": line_hz}
    with pytest.raises(DataError, match=r"PowerLineFrequency in its eeg\.json is 1e.06, expected"):
        sidecars.check_eeg_json(told, HEADER, None)


@pytest.mark.parametrize("value", [10**400, float("inf"), float("nan"), True, "200"])
def test_numbers_that_are_none_are_told(value):
    told = {"SamplingFrequency": value, "PowerLineFrequency": 50}
    with pytest.raises(DataError, match=r"SamplingFrequency in its eeg\.json is .* above 0"):
        sidecars.check_eeg_json(told, HEADER, None)
