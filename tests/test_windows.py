import dataclasses
import json

import numpy as np
import pytest
from onbin.windows import (
    Window,
    WindowLimits,
    chain_gain,
    judge_windows,
    place_windows,
)

SAMPLING_HZ = 250.0


def trial(condition, onset_s, duration_s):
    return {"condition": condition, "onset_s": onset_s, "duration_s": duration_s}


# ---------------------------------------------------------------------------------------- places


def test_trials_are_tiled_with_whole_windows():
    trials = [trial("flicker", 1.0, 10.0), trial("rest", 20.0, 9.0)]
    windows, unplaced = place_windows(
        trials, SAMPLING_HZ, 10_000, {"flicker": 750, "rest": 500}, start_s=0.5
    )
    assert unplaced == []
    # 9.5 s hold three windows of 3 s; 8.5 s hold four of 2 s.
    assert [window.start_sample for window in windows[:3]] == [375, 1125, 1875]
    assert [window.start_sample for window in windows[3:]] == [5125, 5625, 6125, 6625]
    assert windows[1] == Window(0, "flicker", 1, 1125, 750, 3.5)
    assert {window.condition for window in windows[3:]} == {"rest"}


def test_offset_is_the_exact_time_to_the_first_sample():
    # At 250 Hz an onset of 1.0015 s lies between samples; the window starts at sample 250.
    (window,), _ = place_windows([trial("a", 1.0015, 2.0)], SAMPLING_HZ, 1000, {"a": 500})
    assert window.start_sample == 250
    np.testing.assert_allclose(window.offset_s, 1.0 - 1.0015, atol=1e-12)


def test_what_has_no_samples_is_told():
    trials = [
        trial("a", -1.0, 5.0),
        trial("a", 4.0, 1.0),
        trial("b", 5.0, 4.0),
        trial("a", 7.0, 4.0),
    ]
    windows, unplaced = place_windows(trials, SAMPLING_HZ, 2500, {"a": 500}, start_s=0.0)
    assert [(w.trial, w.index_in_trial) for w in windows] == [(0, 1), (3, 0)]
    told = [(gone.trial, gone.index_in_trial, gone.reason) for gone in unplaced]
    assert told == [
        (0, 0, "begins before the recording"),
        (1, None, "1.000 s of the trial can be used, a window takes 2.000 s"),
        (2, None, "no window length is given for this condition"),
        (3, 1, "ends after the recording"),
    ]


# -------------------------------------------------------------------------------------- verdicts


@pytest.fixture
def quiet():
    """Twenty windows of 2 s of 8 channels with alpha-like amplitude."""
    rng = np.random.default_rng(0)
    n_times = 20 * 500
    times_s = np.arange(n_times) / SAMPLING_HZ
    data_uv = 10 * np.sin(2 * np.pi * 10 * times_s + rng.uniform(0, 6, (8, 1)))
    data_uv += 3 * rng.standard_normal((8, n_times))
    windows, _ = place_windows([trial("a", 0.0, 40.0)], SAMPLING_HZ, n_times, {"a": 500})
    return data_uv, windows


def left_out(verdicts):
    return {
        index: verdict.reasons
        for index, verdict in enumerate(verdicts)
        if verdict.verdict == "left out"
    }


def test_clean_windows_are_kept(quiet):
    data_uv, windows = quiet
    verdicts = judge_windows(data_uv, windows, SAMPLING_HZ, WindowLimits())
    assert len(verdicts) == 20
    assert left_out(verdicts) == {}
    assert judge_windows(data_uv, [], SAMPLING_HZ, WindowLimits()) == []


def test_each_planted_artifact_has_its_reason(quiet):
    data_uv, windows = quiet
    times = np.arange(500)
    data_uv[0, 1000:1500] += 200 * np.exp(-0.5 * ((times - 250) / 60) ** 2)  # slow and large
    data_uv[1, 2250:] += 60  # a step of 60 µV in one sample, 15 µV/ms
    data_uv[2, 3000:3500] = 0.1
    rng = np.random.default_rng(1)
    data_uv[3, 4000:4500] += 20 * rng.standard_normal(500)
    limits = WindowLimits(peak_to_peak_uv=(150, 150), gradient_uv_per_ms=(8, 8), muscle_uv=(10, 10))
    verdicts = judge_windows(data_uv, windows, SAMPLING_HZ, limits)
    told = left_out(verdicts)
    assert told[2] == ("peak to peak",)
    assert "gradient" in told[4]
    assert told[6] == ("flat",)
    assert "muscle" in told[8]
    assert set(told) == {2, 4, 6, 8}


def test_figures_of_a_known_window():
    times_s = np.arange(500) / SAMPLING_HZ
    data_uv = np.vstack(
        [30 * np.cos(2 * np.pi * 5 * times_s), 4 * np.cos(2 * np.pi * 40 * times_s)]
    )
    (verdict,) = judge_windows(
        data_uv, [Window(0, "a", 0, 0, 500, 0.0)], SAMPLING_HZ, WindowLimits()
    )
    # Peaks at whole cycles and half cycles; the steepest step of A·cos is 2A·sin(πf/fs).
    np.testing.assert_allclose(verdict.figures["peak_to_peak_uv"], 60, rtol=1e-9)
    steepest = max(60 * np.sin(np.pi * 5 / 250), 8 * np.sin(np.pi * 40 / 250)) * 0.25
    np.testing.assert_allclose(verdict.figures["gradient_uv_per_ms"], steepest, rtol=0.02)
    np.testing.assert_allclose(verdict.figures["muscle_uv"], 4 / np.sqrt(2), rtol=1e-6)
    assert verdict.figures.keys() == verdict.limits.keys()
    assert json.loads(json.dumps(dataclasses.asdict(verdict)))["window"]["n_samples"] == 500


def test_limits_follow_the_recording_within_their_bounds(quiet):
    data_uv, windows = quiet
    limits = WindowLimits(peak_to_peak_uv=(1.0, 1e4), mad_factor=5)
    verdict = judge_windows(data_uv, windows, SAMPLING_HZ, limits)[0]
    values = [np.ptp(data_uv[:, w.start_sample :][:, :500], axis=1).max() for w in windows]
    expected = np.median(values) + 5 * 1.4826 * np.median(np.abs(values - np.median(values)))
    np.testing.assert_allclose(verdict.limits["peak_to_peak_uv"], expected, rtol=1e-12)
    for bounds, limit in (((100, 300), 100), ((1, 2), 2)):
        verdict = judge_windows(
            data_uv, windows, SAMPLING_HZ, WindowLimits(peak_to_peak_uv=bounds)
        )[0]
        assert verdict.limits["peak_to_peak_uv"] == limit


def test_a_tag_above_30_hz_is_not_muscle(quiet):
    data_uv, windows = quiet
    times_s = np.arange(data_uv.shape[1]) / SAMPLING_HZ
    data_uv[:, 5000:] += 15 * np.cos(2 * np.pi * 36 * times_s[5000:])
    limits = WindowLimits(muscle_uv=(5, 10))
    assert "muscle" in left_out(judge_windows(data_uv, windows, SAMPLING_HZ, limits))[15]
    spared = judge_windows(data_uv, windows, SAMPLING_HZ, limits, terms_hz=[12, 36])
    assert left_out(spared) == {}


def test_annotated_stretches_leave_their_windows_out(quiet):
    data_uv, windows = quiet
    spans = [(2.0, 0.5, "BAD_cough"), (7.9, 0.2, "BAD_move"), (10.0, 0.0, "BAD_none")]
    told = left_out(judge_windows(data_uv, windows, SAMPLING_HZ, WindowLimits(), spans))
    # A span that only touches a border is in neither window.
    assert told == {
        1: ("annotated BAD_cough",),
        3: ("annotated BAD_move",),
        4: ("annotated BAD_move",),
    }


def test_noise_beside_the_tags_leaves_a_window_out(quiet):
    data_uv, windows = quiet
    noise = np.ones(len(windows))
    noise[[2, 5, 6]] = 7.9, 8.1, np.nan  # nothing flickers in the last
    verdicts = judge_windows(data_uv, windows, SAMPLING_HZ, WindowLimits(), noise_beside=noise)
    assert left_out(verdicts) == {5: ("noise beside the tags",)}
    assert verdicts[5].figures["noise_beside"] == 8.1


def test_not_a_number_is_never_kept(quiet):
    data_uv, windows = quiet
    data_uv[0, 700] = np.nan
    verdicts = judge_windows(data_uv, windows, SAMPLING_HZ, WindowLimits())
    assert 1 in left_out(verdicts)


# -------------------------------------------------------------------------- the response survives


def test_chain_gain_of_known_matrices():
    topography = np.array([0.0, 1.0, 2.0]) * np.exp(0.7j)
    (same,) = chain_gain(np.eye(3), np.eye(3), topography)
    np.testing.assert_allclose([same.gain, same.peak_gain, same.correlation], [1, 1, 1], rtol=1e-12)
    assert same.peak_channel == 2
    (half,) = chain_gain(0.5 * np.eye(3), np.eye(3), topography)
    np.testing.assert_allclose(
        [half.gain, half.peak_gain, half.correlation], [0.5, 0.5, 1], rtol=1e-12
    )
    # The second channel is taken out: 4/5 of the power, a cosine of 2/√5, the peak as it was.
    (part,) = chain_gain(np.diag([1.0, 0.0, 1.0]), np.eye(3), topography)
    np.testing.assert_allclose(
        [part.gain, part.peak_gain, part.correlation], [0.8, 1, 2 / np.sqrt(5)], rtol=1e-12
    )


def test_chain_gain_of_nothing_is_not_a_number():
    (silent,) = chain_gain(np.eye(2), np.eye(2), np.zeros(2))
    assert np.isnan([silent.gain, silent.peak_gain, silent.correlation]).all()
    (gone,) = chain_gain(np.zeros((2, 2)), np.eye(2), np.ones(2))
    assert gone.gain == 0
    assert np.isnan(gone.correlation)
