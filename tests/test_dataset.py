"""The edge to a dataset: events into trials, channels, scale, and plain errors."""

import mne
import numpy as np
import pytest
from onbin import dataset
from onbin.errors import DataError

CONDITIONS = {
    "left": {"events": {"trial_type": "left"}, "duration_s": None},
    "code": {"events": {"value": 1}, "duration_s": 2.0},
}


@pytest.fixture
def events(tmp_path):
    def _write(text):
        path = tmp_path / "sub-01_task-x_events.tsv"
        path.write_text(text)
        return path

    return _write


def raw_of(names=("O1", "Oz", "X9"), types="eeg", rate_hz=200.0, uv=10.0):
    info = mne.create_info(list(names), rate_hz, types)
    data = np.random.default_rng(0).normal(size=(len(names), 1000)) * uv * 1e-6
    return mne.io.RawArray(data, info, verbose="error")


def test_events_become_trials_in_order_of_onset(events):
    path = events(
        "onset\tduration\ttrial_type\tvalue\n9.5\t4\tleft\tn/a\n2\tn/a\tother\t1.0\n5\t3\tleft\t7\n"
    )
    trials = dataset.read_trials(path, CONDITIONS, {"task": "x"}, 20.0, 100.0)
    assert [(t["trial"], t["condition"], t["onset_s"], t["duration_s"]) for t in trials] == [
        (1, "code", 2.0, 2.0),  # 1.0 is 1; the duration comes from the settings
        (2, "left", 5.0, 3.0),
        (3, "left", 9.5, 4.0),
    ]


def test_a_whole_recording_can_be_a_trial():
    conditions = {"rest": {"events": {"task": "rest"}, "duration_s": None}}
    (trial,) = dataset.read_trials(None, conditions, {"task": "rest"}, 61.0, 100.0)
    assert (trial["onset_s"], trial["duration_s"]) == (0.0, 61.0)
    with pytest.raises(DataError, match=r"no events.tsv"):
        dataset.read_trials(None, conditions, {"task": "other"}, 61.0, 100.0)


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("onset\tduration\ttrial_type\n1\t2\tright\n", "It has trial_type: right"),
        ("onset\tduration\ttrial_type\n", "It has no rows"),
        ("onset\tduration\ttrial_type\n1\tn/a\tleft\n", "give conditions.left.duration_s"),
        ("onset\tduration\ttrial_type\nx\t2\tleft\n", "line 2: onset is 'x'"),
        ("onset\tduration\ttrial_type\n1\t-2\tleft\n", "line 2: duration is '-2'"),
        ("duration\ttrial_type\n2\tleft\n", "has no column onset"),
    ],
)
def test_events_that_cannot_be_used(events, text, expected):
    with pytest.raises(DataError, match=r".*") as caught:
        dataset.read_trials(events(text), CONDITIONS, {}, 20.0, 100.0)
    assert expected in str(caught.value)


def test_events_are_checked_before_anybody_reads_them(events):
    dataset.check_events(None)
    with pytest.raises(DataError, match="onset is 'abc', expected a number of seconds"):
        dataset.check_events(events("onset\tduration\nabc\t1\n"))


def test_the_nearest_events_file_is_taken():
    files = ["d/task-x_events.tsv", "d/sub-01/eeg/sub-01_task-x_events.tsv", "d/a_eeg.vhdr"]
    assert dataset.events_file(files) == files[1]
    assert dataset.events_file(files[2:]) is None


def test_channels_get_template_positions_and_keep_their_kind():
    raw = raw_of(["o1", "Oz", "X9", "HEOG", "STI"], ["eeg", "eeg", "eeg", "eog", "stim"])
    raw.info["bads"] = ["Oz"]
    rows = {row["name"]: row for row in dataset.choose_channels(raw)}
    assert set(rows) == {"o1", "Oz", "X9", "HEOG"}
    assert [rows[n]["position"] for n in ("o1", "Oz", "X9")] == ["template", "template", "none"]
    assert rows["Oz"]["status"] == "bad"
    positions_m = dataset.positions_m(raw)
    assert np.isfinite(positions_m[:2]).all()
    assert np.isnan(positions_m[2]).all()


def test_a_photodiode_is_kept_where_it_is_named():
    raw = raw_of(["Oz", "LIGHT"], ["eeg", "misc"])
    dataset.choose_channels(raw, "LIGHT")
    assert dataset.channel_uv(raw, "LIGHT").shape == (1000,)
    with pytest.raises(DataError, match="no channel 'LAMP'; it has Oz, LIGHT"):
        dataset.channel_uv(raw, "LAMP")


def test_without_eeg_there_is_nothing_to_do():
    with pytest.raises(DataError, match="no channel is EEG; the types are misc"):
        dataset.choose_channels(raw_of(["A"], ["misc"]))


@pytest.mark.parametrize(("uv", "wrong"), [(10, False), (10e6, True), (10e-6, True)])
def test_units_that_must_be_wrong_are_told(uv, wrong):
    raw = raw_of(uv=uv)
    if wrong:
        with pytest.raises(DataError, match="volts may be given as microvolts"):
            dataset.check_scale(raw.get_data() * 1e6, raw)
    else:
        dataset.check_scale(raw.get_data() * 1e6, raw)


def test_samples_that_are_no_numbers_are_told_by_channel():
    data_uv = raw_of().get_data() * 1e6
    data_uv[1, 5] = np.nan
    with pytest.raises(DataError, match="Oz: some samples are not finite"):
        dataset.check_scale(data_uv, raw_of())


def test_decimated_data_keep_bad_stretches_and_lose_other_marks():
    raw = raw_of()
    raw.set_annotations(mne.Annotations([1, 2], [0.5, 0.1], ["BAD_move", "stimulus"]))
    working = dataset.with_data(raw, raw.get_data()[:, ::2] * 1e6, 100.0)
    assert working.info["sfreq"] == 100
    assert dataset.bad_spans(working) == [(1.0, 0.5, "BAD_move")]
    # EEG is handed on in single precision: 24 bits
    np.testing.assert_allclose(dataset.eeg_uv(working), raw.get_data()[:, ::2] * 1e6, rtol=1e-6)


def test_the_scale_of_the_file_that_was_read_is_not_carried_on(tmp_path):
    """A scale beyond single precision would be written as 0, and the signal could not be read."""
    raw = raw_of()
    raw.info["chs"][1]["cal"] = 1e-300
    working = dataset.with_data(raw, raw.get_data() * 1e6, 200.0)
    dataset.write_signal(working, tmp_path / "a_eeg.fif")
    back = dataset.read_signal(tmp_path / "a_eeg.fif")
    # single precision: 24 bits
    np.testing.assert_allclose(dataset.eeg_uv(back), raw.get_data() * 1e6, rtol=1e-6)


def test_samples_that_single_precision_cannot_hold_are_told_by_channel():
    data_uv = raw_of().get_data() * 1e6
    data_uv[2, 5] = 1e40
    with pytest.raises(DataError, match="X9: some samples are not finite"):
        dataset.check_scale(data_uv, raw_of())


def test_recordings_of_one_person_need_one_rate():
    raws = [raw_of(rate_hz=256.0), raw_of(rate_hz=250.0)]
    with pytest.raises(DataError, match=r"different working rates .a: 256 Hz, b: 250 Hz."):
        dataset.common_rate(raws, ["a", "b"])
    assert dataset.common_rate(raws[:1], ["a"]) == 256


def test_signals_survive_writing_in_single_precision(tmp_path):
    path = tmp_path / "a_eeg.fif"
    dataset.write_signal(raw_of(), path)
    first = path.read_bytes()
    back = dataset.read_signal(path)
    # single precision: 24 bits
    np.testing.assert_allclose(dataset.eeg_uv(back), raw_of().get_data() * 1e6, rtol=1e-6)
    dataset.write_signal(raw_of(), path)
    assert path.read_bytes() == first
