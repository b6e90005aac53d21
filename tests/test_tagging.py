"""Exact frequencies; frame tables are arithmetic (common practice), see each test."""

from fractions import Fraction

import pytest
from onbin import tagging
from onbin.tagging import Term

# Frequencies that displays can show by whole frames, rounded to four decimals (common practice).
FRAME_TABLE = {
    60: {2: 30, 3: 20, 4: 15, 5: 12, 6: 10, 7: 8.5714, 8: 7.5, 9: 6.6667, 10: 6, 12: 5, 15: 4},
    75: {3: 25, 4: 18.75, 5: 15, 6: 12.5, 7: 10.7143, 8: 9.375, 10: 7.5, 15: 5},
    85: {4: 21.25, 5: 17, 6: 14.1667, 7: 12.1429, 8: 10.625, 10: 8.5},
    100: {2: 50, 4: 25, 5: 20, 6: 16.6667, 7: 14.2857, 8: 12.5, 10: 10, 12: 8.3333, 20: 5},
    120: {5: 24, 7: 17.1429, 8: 15, 9: 13.3333, 10: 12, 11: 10.9091, 15: 8, 16: 7.5},
    144: {5: 28.8, 7: 20.5714, 8: 18, 10: 14.4, 11: 13.0909, 13: 11.0769, 14: 10.2857, 18: 8},
    240: {4: 60, 6: 40, 8: 30, 10: 24, 12: 20, 15: 16, 16: 15, 20: 12, 24: 10},
}


@pytest.mark.parametrize("refresh", FRAME_TABLE)
def test_frame_table(refresh):
    for frames, expected_hz in FRAME_TABLE[refresh].items():
        found = tagging.tag_frequency(refresh_hz=refresh, frames_per_cycle=frames)
        assert float(found) == pytest.approx(expected_hz, abs=5e-5)  # the table's rounding


def test_frequencies_are_exact_fractions():
    assert tagging.tag_frequency(120, 7) == Fraction(120, 7)
    assert tagging.tag_frequency(59.94, 4) == Fraction(5994, 400)
    assert tagging.tag_frequency(frequency_hz="120/7") == Fraction(120, 7)


@pytest.mark.parametrize(
    ("frequency", "rate", "samples", "cycles"),
    [(15, 500, 100, 3), (12, 512, 128, 3), (12, 1000, 250, 3), (12, 500, 125, 3),
     ("25/2", 500, 40, 1), ("15/2", 250, 100, 3)],
)  # fmt: skip
def test_shortest_window_of_whole_cycles_and_samples(frequency, rate, samples, cycles):
    # denominators of frequency / rate, common practice
    frequency = Fraction(frequency)
    assert tagging.whole_cycle_samples([frequency], Fraction(rate)) == samples
    assert frequency * samples / rate == cycles


def test_four_tags_of_a_120_hz_display_share_7_s():
    # frames 5, 6, 7 and 8: the least common multiple is 840 frames, 7 s (common practice)
    tags = {f"m{m}": Fraction(120, m) for m in (5, 6, 7, 8)}
    terms = tagging.harmonics(tags, 2)
    samples = tagging.window_samples(tags, terms, Fraction(1000), 8.0)
    assert set(samples.values()) == {7000}
    own = tagging.window_samples(tags, terms, Fraction(1000), 4.0)
    assert all((term.frequency * n / 1000).denominator == 1 for term, n in own.items())
    assert len(set(own.values())) > 1


@pytest.mark.parametrize("rate", [256, 300, 512, Fraction(1000, 3)])
def test_windows_never_exceed_the_length_and_miss_whole_cycles_by_half_a_sample(rate):
    tags = {"a": Fraction("14.32"), "b": Fraction("17.9")}
    rate = Fraction(rate)
    for term, n in tagging.window_samples(tags, tagging.harmonics(tags, 3), rate, 2.5).items():
        assert n <= 2.5 * rate
        fundamental = tags[term.tag]
        cycles = fundamental * n / rate
        assert abs(cycles - round(cycles)) <= fundamental / rate / 2


def test_intermodulations_of_two_tags():
    tags = {"a": Fraction(72, 5), "b": Fraction(18)}
    found = {t.term: t.frequency for t in tagging.intermodulations(tags, 3)}
    assert found == {
        "f2-f1": Fraction(18, 5),
        "f1+f2": Fraction(162, 5),
        "2f1-f2": Fraction(54, 5),
        "2f2-f1": Fraction(108, 5),
        "2f1+f2": Fraction(234, 5),
        "f1+2f2": Fraction(252, 5),
    }


def test_a_term_is_driven_when_all_of_its_tags_flicker():
    term = Term("a+b", "f1+f2", (("a", 1), ("b", 1)), Fraction(30))
    assert term.driven_by(["b", "a", "c"])
    assert not term.driven_by(["a"])
    assert term.harmonic is None


def test_study_terms_stop_at_the_passband():
    settings = {"tags": [["a", "18"]], "harmonics": 6, "intermodulation_order": 2}
    assert [t.term for t in tagging.study_terms(settings, 90.0)] == ["1f", "2f", "3f", "4f"]


def test_neighbours_leave_out_bins_that_hold_a_term():
    # bins of 0.4 Hz beside 14.4 Hz: 18 Hz is 9 bins above, 15 Hz lies between bins 1 and 2, and
    # 18.4 Hz is beyond the filter
    offsets = [-10, -9, -3, -2, 2, 3, 9, 10]
    usable = tagging.usable_neighbours(
        Fraction(72, 5), offsets, Fraction(5, 2), [Fraction(18), Fraction(15)], 18.2
    )
    assert [j for j, use in zip(offsets, usable, strict=True) if use] == [-3, 3]


def test_neighbours_stay_above_zero_frequency():
    offsets = [-4, -3, -2, 2, 3, 4]
    usable = tagging.usable_neighbours(Fraction(2), offsets, Fraction(2), [], 90.0)
    assert usable == [False, False, True, True, False, False]  # in mirrored pairs


@pytest.mark.parametrize("rate", [Fraction(1000, 3), Fraction(512), Fraction(256), Fraction(200)])
def test_sampling_rates_are_recovered(rate):
    assert tagging.exact_rate(float(rate)) == rate
