"""Where a flicker is: simulations with known frequency, the demo's odd display, real recordings."""

import json
from fractions import Fraction
from pathlib import Path

import mne
import numpy as np
import pytest
from onbin import flicker, flicker_tables
from onbin.flicker import CANNOT_TELL, OFFSET, Stretches
from realdata import weeg_dataset

RATE_HZ, NOISE_UV = 100, 10.0
DEMO = Path(__file__).parents[1] / "demo_bids"


def simulate(rng, snr_db, frequency_hz=14.4, count=8, length_s=5.0, step=None):
    """Stretches with phases of their own; the SNR is that of a bin of one stretch."""
    n = int(length_s * RATE_HZ)
    t = np.arange(n) / RATE_HZ
    amplitude_uv = 0 if snr_db is None else NOISE_UV * np.sqrt(4 / n * 10 ** (snr_db / 10))
    signals = []
    for number in range(count):
        phase = 2 * np.pi * frequency_hz * t + rng.uniform(0, 2 * np.pi)
        if step and number == step[0]:
            phase = phase + step[1] * (t > length_s / 2)
        signals.append(amplitude_uv * np.cos(phase) + NOISE_UV * rng.normal(size=n))
    return Stretches(tuple(signals), tuple(7.0 * k for k in range(count)), RATE_HZ), amplitude_uv


def located(seed, runs, snr_db, **how):
    rng = np.random.default_rng(seed)
    return [flicker.locate(simulate(rng, snr_db, **how)[0], 14.4, [18.0]) for _ in range(runs)]


@pytest.mark.parametrize(
    ("bins", "loss_db"), [(0.15, -0.324), (0.1225, -0.215), (0, 0.0), (0.5, -3.922)]
)
def test_amplitude_that_an_offset_costs(bins, loss_db):
    # 59.94 for 60 Hz at 4 frames over 10 s is 0.15 bins: 20·log10|sin(πd)/(πd)| (common practice)
    assert flicker.amplitude_loss_db(bins) == pytest.approx(loss_db, abs=1e-3)


@pytest.mark.parametrize("runs", [150, pytest.param(2000, marks=pytest.mark.long)])
def test_noise_is_not_taken_for_a_flicker_elsewhere(runs):
    verdicts = [found.verdict for found in located(1, runs, None)]
    assert verdicts.count(OFFSET) <= 0.05 * runs
    assert verdicts.count(CANNOT_TELL) >= 0.9 * runs


@pytest.mark.parametrize("snr_db", [10, 20])
@pytest.mark.parametrize("runs", [100, pytest.param(500, marks=pytest.mark.long)])
def test_estimates_reach_the_bound(runs, snr_db):
    stretches, amplitude_uv = simulate(np.random.default_rng(0), snr_db)
    bound_hz = flicker.cramer_rao_sd_hz(
        amplitude_uv, NOISE_UV, [s.size for s in stretches.signals_uv], RATE_HZ
    )
    found = located(2, runs, snr_db)
    errors_hz = np.array([one.frequency_hz for one in found]) - 14.4
    # 100 runs tell a standard deviation to 7 %: 20 % wanted, and three standard errors
    assert np.sqrt(np.mean(errors_hz**2)) < (1.2 if runs >= 500 else 1.4) * bound_hz
    assert sum(one.verdict == OFFSET for one in found) <= 0.05 * runs
    covered = [one.low_hz <= 14.4 <= one.high_hz for one in found]
    assert np.mean(covered) > 0.95  # 99 % intervals


def test_an_offset_is_found_with_its_interval():
    for found in located(3, 20, 15, frequency_hz=14.32):
        assert found.verdict == OFFSET
        assert found.low_hz < 14.32 < found.high_hz or abs(found.frequency_hz - 14.32) < 0.01


def test_a_lost_frame_is_found_where_it_was():
    # a cycle of 10 frames lags by 36° after one is lost
    stretches, _ = simulate(np.random.default_rng(4), 30, step=(3, -2 * np.pi / 10))
    found = flicker.locate(stretches, 14.4, [18.0])
    ((time_s, size_rad),) = found.steps
    assert time_s == pytest.approx(3 * 7.0 + 2.5, abs=0.6)  # pieces of 8 cycles
    # the frequency is fitted along, and the step lies within a piece: a frame is 36°
    assert np.degrees(size_rad) == pytest.approx(-36, abs=18)


def test_no_frame_is_lost_where_none_was():
    assert sum(len(found.steps) for found in located(5, 50, 20)) <= 2


def test_a_drift_is_found():
    rng, t0 = np.random.default_rng(6), 0.0
    signals, starts = [], []
    t = np.arange(5 * RATE_HZ) / RATE_HZ
    for number in range(12):
        t0 = 7.0 * number
        phase = 2 * np.pi * (14.4 * t + 0.06 / 60 * ((t0 + t) ** 2 - t0**2) / 2)
        signals.append(3 * np.cos(phase) + rng.normal(size=t.size))
        starts.append(t0)
    found = flicker.locate(Stretches(tuple(signals), tuple(starts), RATE_HZ), 14.4)
    assert found.drift_low < 0.06 < found.drift_high
    assert found.drift_low > 0
    still = located(7, 20, 15)
    assert sum(not one.drift_low <= 0 <= one.drift_high for one in still) <= 2


def test_a_drift_is_not_seen_in_a_weak_response():
    told = [one for one in located(8, 60, 3) if one.verdict != CANNOT_TELL]
    assert len(told) > 20
    # 99 % intervals: 1 % wanted, three standard errors
    assert sum(not one.drift_low <= 0 <= one.drift_high for one in told) <= 3


def rhythm(rng, frequency_hz, width_hz, n):
    """Gaussian noise whose spectrum is a bell of that full width at half maximum."""
    away = (np.fft.rfftfreq(n, 1 / RATE_HZ) - frequency_hz) / (width_hz / np.sqrt(8 * np.log(2)))
    noise = np.fft.irfft(np.fft.rfft(rng.normal(size=n)) * np.exp(-(away**2) / 4), n)
    return noise / noise.std()


def test_alpha_at_a_tag_is_not_taken_for_a_flicker():
    rng, runs, length, verdicts = np.random.default_rng(9), 60, int(7.5 * RATE_HZ), []
    for _ in range(runs):
        signal = rhythm(rng, 10.0, 1.0, 110 * RATE_HZ) + rng.normal(size=110 * RATE_HZ)
        starts = np.arange(12) * 9 * RATE_HZ
        stretches = Stretches(
            tuple(signal[start : start + length] for start in starts),
            tuple(starts / RATE_HZ),
            RATE_HZ,
        )
        verdicts.append(flicker.locate(stretches, 10.0).verdict)
    # 5 % wanted, and two standard errors
    assert verdicts.count(OFFSET) <= 0.11 * runs


def test_a_term_within_a_bin_cannot_be_told_from_the_tag():
    # the second harmonic of 7.2 Hz is a tag of 14.4 Hz
    stretches, _ = simulate(np.random.default_rng(10), 20)
    assert flicker.locate(stretches, 14.4, [14.4]).verdict == CANNOT_TELL
    assert flicker.locate(stretches, 14.4, [14.3]).verdict == CANNOT_TELL
    assert flicker.locate(stretches, 14.4, [14.0]).verdict != CANNOT_TELL


def test_noise_of_which_nothing_is_free_cannot_be_told():
    stretches, _ = simulate(np.random.default_rng(11), 20, length_s=0.5)
    crowd_hz = np.arange(6.0, 24, 2) + 0.4
    assert flicker.locate(stretches, 14.4, crowd_hz[crowd_hz != 14.4]).verdict == CANNOT_TELL


def test_a_photodiode_goes_before_the_eeg():
    rng = np.random.default_rng(12)
    t = np.arange(60 * RATE_HZ) / RATE_HZ
    signals = {
        "occipital": rng.normal(size=t.size),
        "light": (np.sin(2 * np.pi * 14.32 * t + 1) > 0) + 0.01 * rng.normal(size=t.size),
    }
    events = [(7.0 * k, 6.0, "watch") for k in range(8)]
    rows = list(
        flicker_tables.frequency_rows(
            signals,
            windows_of(events, 0.5, RATE_HZ, 2.5),
            {"watch": {"flickering": ["a"]}},
            {"a": Fraction(72, 5)},
            50.0,
            RATE_HZ,
            2.5,
        )
    )
    assert [row["flicker_verdict"] for row in rows] == [CANNOT_TELL, OFFSET]
    assert rows[1]["found_hz"] == pytest.approx(14.32, abs=1e-3)
    used = flicker_tables.used_rows(rows, [{"tag": "a", "recordings": []}], "sub-01")
    assert [row["used_hz"] for row in used] == pytest.approx([14.32, 14.32], abs=1e-3)


def test_stretches_join_windows_that_touch_within_a_trial():
    rows = [
        {"trial": trial, "condition": condition, "start_sample": start, "n_samples": 10}
        for trial, condition, start in [
            (1, "a", 0), (1, "a", 10), (1, "a", 30), (2, "b", 40), (3, "a", 50), (4, "a", 60),
        ]
    ]  # fmt: skip
    found = flicker_tables.stretches_of(np.arange(100.0), rows, ["a"], 10.0)
    assert [signal.size for signal in found.signals_uv] == [20, 10, 10, 10]
    assert found.starts_s == (0.0, 3.0, 5.0, 6.0)
    assert found.longest_s == 2.0
    assert flicker_tables.stretches_of(np.arange(100.0), rows, ["c"], 10.0) is None


def windows_of(events, skip_s, rate_hz, length_s):
    rows = []
    for trial, (onset_s, duration_s, condition) in enumerate(events, start=1):
        n = int(length_s * rate_hz)
        start = round((onset_s + skip_s) * rate_hz)
        while start + n <= (onset_s + duration_s) * rate_hz:
            rows.append(
                {"trial": trial, "condition": condition, "start_sample": start, "n_samples": n}
            )
            start += n
    return rows


def test_the_demo_display_that_ran_off_its_rate_is_found():
    raw = mne.io.read_raw_brainvision(
        DEMO / "sub-05/eeg/sub-05_task-panels_eeg.vhdr", preload=True, verbose="error"
    )
    raw.filter(1, 80, verbose="error")
    truth = json.loads((DEMO / "sourcedata/truth/sub-05.json").read_text())
    assert truth["refresh_hz"] == pytest.approx(143.2)
    data_uv = raw.get_data() * 1e6
    names = raw.ch_names
    signal = (data_uv - data_uv.mean(axis=0))[[names.index(n) for n in ("O1", "Oz", "O2")]]
    events = [
        line.split("\t")
        for line in (DEMO / "sub-05/eeg/sub-05_task-panels_events.tsv").read_text().splitlines()[1:]
    ]
    watched = [(float(e[0]), float(e[1]), "watch") for e in events if e[2].startswith("watch")]
    tags = {"left": Fraction(72, 5), "right": Fraction(18)}
    rows = list(
        flicker_tables.frequency_rows(
            {"occipital": signal.mean(axis=0)},
            windows_of(watched, 0.5, 200, 2.5),
            {"watch": {"flickering": ["left", "right"]}},
            tags,
            50.0,
            200.0,
            2.5,
        )
    )
    for row, true_hz in zip(rows, (14.32, 17.9), strict=True):
        assert row["flicker_verdict"] == OFFSET
        assert row["found_low_hz"] < true_hz < row["found_high_hz"]
    used = list(
        flicker_tables.used_rows(rows, [{"tag": "left", "recordings": ["sub-05"]}], "sub-05")
    )
    assert [row["frequency_source"] for row in used] == ["measured", "as set"]


@pytest.mark.parametrize(
    ("run", "nominal_hz", "true_hz", "within_hz"),
    [
        (1, "6.6", 60 / 9, 0.01),
        (2, "6.6", 60 / 9, 0.01),
        (3, "7.5", 7.5, 0.015),
        (4, "7.5", 7.5, 0.01),
    ],
)
def test_real_displays(tmp_path, run, nominal_hz, true_hz, within_hz):
    # weeg-vnu (MIT): nominal 6.6 Hz on a 60 Hz display with 9 frames a cycle
    dataset = weeg_dataset(tmp_path / "weeg")
    raw = mne.io.read_raw_brainvision(
        dataset / f"sub-01/eeg/sub-01_task-flicker_run-{run}_eeg.vhdr", verbose="error"
    )
    signal_uv = raw.get_data().mean(axis=0) * 1e6
    events = [(onset_s, 10.0, "flicker") for onset_s in (1, 21, 41, 61)]
    (row,) = flicker_tables.frequency_rows(
        {"all": signal_uv},
        windows_of(events, 1.0, 256, 3.0),
        {"flicker": {"flickering": ["light"]}},
        {"light": Fraction(nominal_hz)},
        None,
        256.0,
        3.0,
    )
    # the second harmonic of run 3 peaks at 15.025 Hz: its display was not quite at its rate
    assert row["found_hz"] == pytest.approx(true_hz, abs=within_hz)
    assert row["found_low_hz"] < true_hz < row["found_high_hz"]
    assert (row["flicker_verdict"] == OFFSET) == (nominal_hz == "6.6")


def test_a_tag_that_was_never_shown_cannot_be_told():
    (row,) = flicker_tables.frequency_rows(
        {"all": np.zeros(100)},
        [],
        {"rest": {"flickering": []}},
        {"a": Fraction(10)},
        50.0,
        200.0,
        2,
    )
    assert row["flicker_verdict"] == CANNOT_TELL
    (used,) = flicker_tables.used_rows([row], [{"tag": "a", "recordings": []}], "sub-01")
    assert used["frequency_source"] == "as set"
    assert used["used_hz"] == 10


def test_used_frequencies_are_exact_as_printed():
    rows = [{"tag": "a", "used_hz": 14.31802, "frequency_source": "measured"}]
    used = flicker_tables.Used.of([rows, []], {"a": Fraction(72, 5), "b": Fraction(18)})
    assert used.of_recordings[0]["a"] == Fraction("14.31802")
    assert used.of_recordings[1]["a"] == Fraction(72, 5)
    assert used.tags["b"] == 18
    assert used.measured == ["a"]
