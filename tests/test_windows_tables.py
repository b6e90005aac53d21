"""Rows of windows: how long, which verdict, and what the cleaning left of the response."""

from fractions import Fraction

import numpy as np
import pytest
from onbin import tagging
from onbin.columns import COLUMNS
from onbin.windows import KEPT, LEFT_OUT, Unplaced, Window, WindowVerdict
from onbin.windows_tables import (
    harmed_tags,
    noise_beside,
    samples_by_condition,
    survival_rows,
    verdict_rows,
)

FLICKERING = {"view": ["left"], "both": ["left", "right"], "rest": []}
TRIALS = [{"trial": 1}, {"trial": 2}, {"trial": 3}]


def terms_at(**frequencies_hz):
    return tagging.harmonics({n: Fraction(f) for n, f in frequencies_hz.items()}, 1)


def test_windows_hold_what_the_longest_term_needs():
    left, right = terms_at(left=12, right=15)
    lengths = samples_by_condition(
        FLICKERING, {left: 500, right: 480}, Fraction(250), length_s=2.1, rest_length_s=4.0
    )
    assert lengths == {"view": 500, "both": 500, "rest": 1000}


def test_windows_of_rest_are_never_shorter():
    (left,) = terms_at(left=12)
    lengths = samples_by_condition(FLICKERING, {left: 500}, Fraction(250), 2.1, rest_length_s=1.0)
    assert lengths["rest"] == 500


@pytest.mark.parametrize(("length_s", "rest_length_s"), [(2.3, 4.1), (4.6, 8.2)])
def test_lengths_are_taken_as_written(length_s, rest_length_s):
    """2.3 s at 100 Hz are 230 samples, though the float product 2.3 · 100 is below 230."""
    assert int(length_s * Fraction(100)) < round(length_s * 100)
    lengths = samples_by_condition(FLICKERING, {}, Fraction(100), length_s, rest_length_s)
    assert lengths["view"] == round(length_s * 100)
    assert lengths["rest"] == round(rest_length_s * 100)


def verdict(trial, index, kept):
    figures = {"peak_to_peak_uv": 80.0, "gradient_uv_per_ms": 1.0, "muscle_uv": 2.0, "flat_uv": 3.0}
    limits = {"peak_to_peak_uv": 90.0, "gradient_uv_per_ms": 9.0, "muscle_uv": 8.0, "flat_uv": 0.5}
    reasons = () if kept else ("peak-to-peak", "muscle")
    window = Window(trial, "view", index, 1000 * trial + 500 * index, 500, 0.5 + 2 * index)
    return WindowVerdict(window, KEPT if kept else LEFT_OUT, reasons, figures, limits)


def test_verdicts_are_numbered_and_those_without_samples_come_last():
    verdicts = [verdict(0, 0, True), verdict(2, 1, False)]
    unplaced = [
        Unplaced(1, "rest", None, "shorter than one window"),
        Unplaced(2, "view", 2, "recording ends"),
    ]
    kept, left_out, trial, window = rows = list(verdict_rows(verdicts, unplaced, TRIALS))
    assert [row["window"] for row in rows] == [1, 2, 3, 4]
    assert [row["trial"] for row in rows] == [1, 3, 2, 3]
    assert [row["index_in_trial"] for row in rows] == [1, 2, None, 3]
    assert [row["verdict"] for row in rows] == [KEPT, LEFT_OUT, LEFT_OUT, LEFT_OUT]
    assert (kept["reason"], left_out["reason"]) == (None, "peak-to-peak, muscle")
    assert (trial["reason"], window["reason"]) == ("shorter than one window", "recording ends")
    assert (left_out["start_sample"], left_out["offset_s"]) == (2500, 2.5)
    # figures under their own names, limits under theirs; the least amplitude has none
    assert (kept["peak_to_peak_uv"], kept["peak_to_peak_limit_uv"]) == (80, 90)
    assert (kept["muscle_limit_uv"], kept["gradient_limit_uv_per_ms"]) == (8, 9)
    assert kept["flat_uv"] == 3
    assert "start_sample" not in trial
    assert set(kept) | set(trial) <= set(COLUMNS)


RATE_HZ = 250.0


@pytest.fixture
def recorded():
    """10 s of 12 Hz: 1 µV at O1, 4 µV at Oz, in antiphase at Fz; 15 Hz at Fz alone."""
    time_s = np.arange(2500) / RATE_HZ
    left, right = np.cos(2 * np.pi * 12 * time_s), np.cos(2 * np.pi * 15 * time_s)
    return np.stack([left, 4 * left, -left + 2 * right])


def survivals(
    recorded, removal, gates=None, conditions=("view", "both"), n_samples=500, filter_gain=1.0
):
    terms = terms_at(left=12, right=15, off=20)
    kept = [Window(i, c, 0, 1000 * i, n_samples, 0.0) for i, c in enumerate(conditions)]
    gates = np.zeros((1, recorded.shape[1])) if gates is None else gates
    rows = survival_rows(
        recorded,
        ["O1", "Oz", "Fz"],
        removal,
        {(term.tag, "1f"): filter_gain for term in terms},
        gates,
        kept,
        terms,
        dict.fromkeys(terms, n_samples),
        RATE_HZ,
        FLICKERING,
        [0, 1],
    )
    return {row["tag"]: row for row in rows}


def test_what_is_not_touched_survives(recorded):
    rows = survivals(recorded, lambda share: np.eye(3))
    assert list(rows) == ["left", "right"]  # "off" flickers nowhere
    left = rows["left"]
    assert (left["term"], left["frequency_hz"], left["site"]) == ("1f", 12.0, "Oz")
    assert rows["right"]["site"] == "Fz"
    for row in rows.values():
        for name in ("gain", "peak_gain", "topography_correlation"):
            assert row[name] == pytest.approx(1, rel=1e-9)


def test_what_the_removal_takes_is_told(recorded):
    rows = survivals(recorded, lambda share: np.diag([1, 0.5, 1]))
    # topography (1, 4, −1) becomes (1, 2, −1): 10/18 by least squares, 10/√(18·6) as cosine
    assert rows["left"]["peak_gain"] == pytest.approx(0.5, rel=1e-9)
    assert rows["left"]["region_gain"] == pytest.approx(
        3 / 5, rel=1e-9
    )  # O1 and Oz: (1 + 2)/(1 + 4)
    assert rows["left"]["gain"] == pytest.approx(10 / 18, rel=1e-9)
    assert rows["left"]["topography_correlation"] == pytest.approx(10 / np.sqrt(108), rel=1e-9)
    assert rows["right"]["gain"] == pytest.approx(1, rel=1e-9)


def test_filters_count_too(recorded):
    left = survivals(recorded, lambda share: np.diag([1, 0.5, 1]), filter_gain=0.99)["left"]
    assert left["filter_gain"] == 0.99
    assert left["peak_gain"] == pytest.approx(0.99 * 0.5, rel=1e-9)
    assert left["gain"] == pytest.approx(0.99 * 10 / 18, rel=1e-9)


def test_terms_of_any_of_the_windows_are_told_apart(recorded):
    """15 Hz flickers in the second window only, but would leak into 12 Hz in windows off bin."""
    recorded[2] *= 1000
    rows = survivals(recorded[:, :1499], lambda share: np.diag([1, 0.5, 1]), n_samples=499)
    assert rows["left"]["site"] == "Fz"
    assert rows["left"]["gain"] == pytest.approx((1 + 8 + 1e6) / (1 + 16 + 1e6), rel=1e-9)


def test_removal_is_asked_for_the_share_of_time_in_the_windows(recorded):
    gates = np.zeros((2, recorded.shape[1]))
    gates[0, :500] = 1  # all of the first window
    gates[0, 500:1000] = 1  # between the windows: does not count
    gates[1, 1000:1250] = 1  # half of the second
    asked = []

    def removal(share):
        asked.append(share)
        return np.eye(3)

    survivals(recorded, removal, gates)
    # left flickers in both windows, right in the second
    np.testing.assert_allclose(asked, [[0.5, 0.25], [0, 0.5]])


def test_without_kept_windows_there_is_nothing_to_tell(recorded):
    assert survivals(recorded, lambda share: np.eye(3), conditions=()) == {}
    assert survivals(recorded, lambda share: np.eye(3), conditions=("rest",)) == {}


def test_noise_beside_the_tags_is_held_against_the_median_window():
    """An artifact at the neighbouring bins counts, one at the tag or far from it does not."""
    rng = np.random.default_rng(3)
    signal_uv = rng.normal(size=10 * 500)
    time_s = np.arange(500) / RATE_HZ
    signal_uv[1000:1500] += 3 * np.cos(2 * np.pi * 11 * time_s)  # two bins below 12 Hz
    signal_uv[2000:2500] += 30 * np.cos(2 * np.pi * 12 * time_s)
    signal_uv[3000:3500] += 30 * np.cos(2 * np.pi * 40 * time_s)
    placed = [Window(i, "view" if i < 8 else "rest", 0, 500 * i, 500, 0.0) for i in range(10)]
    (left,) = terms_at(left=12)
    ratios = noise_beside(signal_uv, placed, [left], {left: 500}, RATE_HZ, FLICKERING)
    assert np.isnan(ratios[8:]).all()
    # white noise of 1 µV has E|X|² = 4/500 µV² in a bin of amplitude 2/N: 9 µV² in one of 20 bins
    # is 0.45 µV², some 56 times that; without it the mean of 20 bins is within 0.3 to 3
    assert 30 < ratios[2] < 120
    assert (np.delete(ratios[:8], 2) < 3).all()


def test_harmed_tags_are_those_with_a_response_that_is_changed():
    def row(tag, peak_gain, p, filter_gain=1.0, region_gain=1.0, region_p=1e-9):
        return {
            "tag": tag, "peak_gain": peak_gain, "filter_gain": filter_gain, "t2circ_p": p,
            "region_gain": region_gain * filter_gain, "region_t2circ_p": region_p,
        }  # fmt: skip

    rows = [
        row("a", 0.93, 1e-9),
        row("b", 0.90, 1e-9),
        row("c", 0.99, 1e-9),
        row("d", 0.50, 0.01),  # noise
        row("e", 0.50, None),  # one window
        row("f", 0.93, 1e-9, filter_gain=0.94),  # the filters' doing
        row("g", 1.0, 1e-9, region_gain=0.8),
        row("h", 1.0, 1e-9, region_gain=0.8, region_p=0.01),
    ]
    assert harmed_tags(rows) == ["g", "b", "a"]
