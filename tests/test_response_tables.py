"""Rows of responses: what is driven, what is shared, what is corrected, what is left out."""

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from onbin import arrays, response_tables, tagging
from onbin.response_tables import Coefficients, occupied, response_rows, window_rows

PASSBAND_HZ = 80.0
BINS = np.array([0, -4, -3, -2, 2, 3, 4])
WINDOWS = {"both": 8, "left_only": 6, "rest": 4, "short": 2}
CONDITIONS = {
    "both": {"flickering": ["left", "right"], "phase_locked": True},
    "left_only": {"flickering": ["left"], "phase_locked": True},
    "rest": {"flickering": [], "phase_locked": True},
    "short": {"flickering": ["left"], "phase_locked": True},
}
SITES = ["O1", "Oz", "O2", "occipital"]


def terms_of(left="12", right="15", harmonics=2, order=2):
    return {
        "tags": [("left", left), ("right", right)],
        "harmonics": harmonics,
        "intermodulation_order": order,
    }


@pytest.fixture
def make(tmp_path):
    """Noise at every bin in windows of 1 s, and 3 µV at the fundamentals, stored and read."""

    def stored(settings=None, used=None, measured=(), sites=SITES):
        settings = settings or terms_of()
        terms = tagging.study_terms(settings, PASSBAND_HZ)
        condition = np.repeat(list(WINDOWS), list(WINDOWS.values()))
        rng = np.random.default_rng(20261201)
        shape = (len(condition), len(sites), len(terms), len(BINS))
        values_uv = rng.normal(0, 0.3, shape) + 1j * rng.normal(0, 0.3, shape)
        values_uv[:, :, [t.harmonic == 1 for t in terms], 0] += 3
        path = tmp_path / "coefficients.npz"
        arrays.write(
            path,
            coefficients_uv=values_uv.astype(np.complex64),
            bins=BINS,
            samples=[250] * len(terms),
            rate="250",
            used=used or [ratio for _, ratio in settings["tags"]],
            measured=list(measured),
            passband_hz=PASSBAND_HZ,
            condition=condition,
            recording=["sub-1/eeg/sub-1_task-x"] * len(condition),
            trial=np.arange(len(condition)) // 2 + 1,
            window=np.arange(len(condition)) + 11,
            site=sites,
            site_kind=["region" if name == "occipital" else "channel" for name in sites],
            site_channels=["O1 Oz O2" if name == "occipital" else name for name in sites],
        )
        return Coefficients.of(arrays.read(path), settings)

    return stored


def rows_of(coefficients, conditions=CONDITIONS, line_hz=None, level=0.05, correction="holm"):
    occupied_in = {
        name: occupied(coefficients.tags, about["flickering"], 2, PASSBAND_HZ, line_hz)
        for name, about in conditions.items()
    }
    return list(response_rows(coefficients, conditions, occupied_in, level, correction))


def sums(rows, condition="both", site="occipital"):
    """Harmonics in the sum of each tag."""
    return {
        row["tag"]: row["harmonics"]
        for row in rows
        if (row["condition"], row["site"], row["term"]) == (condition, site, "sum")
    }


def values(rows, name, **wanted):
    return np.array([r[name] for r in rows if all(r[k] == v for k, v in wanted.items())])


# what is occupied


def test_occupied_by_hand():
    tags = {"left": Fraction(12), "right": Fraction(15), "off": Fraction(7)}
    # harmonics below 40 Hz, right − left, left + right, and mains of 16.5 Hz
    expected = [3, 12, 15, Fraction("16.5"), 24, 27, 30, 33, 36]
    assert occupied(tags, ["left", "right"], 1, 40.0, 16.5) == expected
    third_order = {9, 18, 39}  # 2·12 − 15, 2·15 − 12, 2·12 + 15; 2·15 + 12 is above
    found = occupied(tags, ["left", "right"], 3, 40.0, 16.5)
    assert set(found) - set(expected) == third_order
    assert occupied(tags, ["left"], 3, 40.0, None) == [12, 24, 36]


def test_occupied_at_rest_is_the_mains():
    assert occupied({"left": Fraction(12)}, [], 2, 120.0, 50.0) == [50, 100]
    assert occupied({"left": Fraction(12)}, [], 2, 120.0, 0.0) == []


def test_occupied_twice_stands_there_twice():
    tags = {"left": Fraction(10), "right": Fraction(30)}
    assert occupied(tags, ["left", "right"], 2, 45.0, None) == [10, 20, 20, 30, 30, 40, 40]


# rows of the table


def test_stored_coefficients_are_taken_up(make):
    coefficients = make(used=["1201/100", "15"], measured=["left"])
    of = {f"{t.tag} {t.term}": t for t in coefficients.terms}
    assert of["left 2f"].frequency == Fraction(1201, 50)
    assert of["left+right f1+f2"].frequency == Fraction(2701, 100)
    assert set(coefficients.durations_s) == {1}
    assert coefficients.at("left_only", 0).shape == (6, 4, len(BINS))
    rows = rows_of(coefficients)
    sources = {(r["tag"], r["frequency_source"]) for r in rows if r["term"] != "sum"}
    assert sources == {("left", "measured"), ("right", "as set"), ("left+right", "measured")}


def test_every_term_at_every_site_where_enough_windows_are(make):
    coefficients = make()
    rows = [row for row in rows_of(coefficients) if row["term"] != "sum"]
    found = [(r["condition"], r["tag"], r["term"], r["site"]) for r in rows]
    assert len(set(found)) == len(found) == 3 * len(coefficients.terms) * len(SITES)
    assert {r["condition"]: r["windows"] for r in rows} == {"both": 8, "left_only": 6, "rest": 4}
    assert set(values(rows, "channels", site="occipital")) == {"O1 Oz O2"}


def test_driven(make):
    rows = rows_of(make())
    driven = {
        name: {(r["tag"], r["term"]) for r in rows if r["driven"] and r["condition"] == name}
        for name in ("both", "left_only", "rest")
    }
    of_left = {("left", "1f"), ("left", "2f"), ("left", "sum")}
    assert driven["left_only"] == of_left
    assert driven["rest"] == set()
    assert {("right", "1f"), ("left+right", "f1+f2")} | of_left <= driven["both"]


def test_a_neighbouring_bin_that_is_driven_is_no_noise(make):
    coefficients = make()
    loud = coefficients.values_uv.copy()
    loud[:, :, 0, BINS.tolist().index(3)] += 1000  # 15 Hz is bin 3 from left 1f, 12 Hz
    rows = rows_of(replace(coefficients, values_uv=loud))
    of_left = {"tag": "left", "term": "1f"}
    assert set(values(rows, "neighbours", condition="both", **of_left)) == {4}  # and its mirror
    assert set(values(rows, "neighbours", condition="left_only", **of_left)) == {6}
    assert (values(rows, "noise_uv2", condition="both", **of_left) < 1).all()
    assert (values(rows, "noise_uv2", condition="left_only", **of_left) > 1000).all()


def test_the_sum_is_that_of_the_corrected_amplitudes(make):
    rows = rows_of(make())
    assert sums(rows) == {"left": "1f 2f", "right": "1f 2f"}
    for site in SITES:
        here = {"condition": "both", "tag": "left", "site": site}
        (total,) = values(rows, "amplitude_sum_uv", term="sum", **here)
        parts = [values(rows, "amplitude_baseline_uv", term=t, **here)[0] for t in ("1f", "2f")]
        assert total == pytest.approx(sum(parts), rel=1e-12)  # one addition


@pytest.mark.parametrize(
    ("settings", "line_hz", "expected"),
    [
        # 30 Hz is 3f of left, which is not measured but there; 20 Hz is right − left
        (terms_of("10", "30"), None, {"left": "1f"}),
        # 24 Hz is 2f of left and 1f of right; 12 Hz is right − left
        (terms_of("12", "24"), None, {}),
        # closer than a bin of 1 Hz: 60.5 Hz to 3f of left, right − left = 40.5 Hz to 2f of left
        (terms_of("20", "60.5"), None, {"left": "1f"}),
        # 2f of left falls on the mains
        (terms_of("25", "33"), 50.0, {"left": "1f", "right": "1f 2f"}),
        (terms_of("25", "33"), None, {"left": "1f 2f", "right": "1f 2f"}),
    ],
)
def test_the_sum_leaves_out_shared_harmonics(make, settings, line_hz, expected):
    assert sums(rows_of(make(settings), line_hz=line_hz)) == expected


def test_a_harmonic_is_shared_only_with_what_flickers(make):
    rows = rows_of(make(terms_of("10", "30")))
    assert sums(rows, "left_only") == {"left": "1f 2f"}
    assert sums(rows, "rest") == {}


@pytest.mark.parametrize("correction", ["holm", "benjamini_hochberg"])
def test_correction_is_over_channels_and_leaves_regions_alone(make, correction):
    rows = rows_of(make(), level=0.2, correction=correction)
    for term in ("f1+f2", "f2-f1", "1f"):
        here = {"condition": "both", "term": term}
        if term == "1f":
            here["tag"] = "left"
        p = values(rows, "detection_p", **here)
        corrected = values(rows, "detection_p_corrected", **here)
        assert corrected[3] == p[3]
        small, middle, large = sorted(p[:3])
        if correction == "holm":  # Holm 1979: p₍₁₎·3, p₍₂₎·2, p₍₃₎, never falling
            steps = np.maximum.accumulate([3 * small, 2 * middle, large])
        else:  # Benjamini & Hochberg 1995: p₍ᵢ₎·3/i, never rising from the last on
            steps = np.minimum.accumulate([large, 1.5 * middle, 3 * small])[::-1]
        np.testing.assert_allclose(sorted(corrected[:3]), np.minimum(steps, 1), rtol=1e-12)
        present = values(rows, "present", **here)
        np.testing.assert_array_equal(present, corrected <= 0.2)
    assert values(rows, "present", condition="both", tag="left", term="1f").all()


def test_regions_alone_need_no_correction(make):
    rows = rows_of(make(sites=["occipital"]))
    one = {"condition": "both", "tag": "left", "term": "1f"}
    assert values(rows, "detection_p", **one) == values(rows, "detection_p_corrected", **one)


def test_without_phase_lock_there_is_power_only(make):
    coefficients = make()
    conditions = {"both": {"flickering": ["left", "right"], "phase_locked": False}}
    rows = rows_of(coefficients, conditions)
    assert {row["detection_test"] for row in rows} == {"total_snr"}
    assert sums(rows) == {}
    assert not any("phase_rad" in row for row in rows)
    assert list(window_rows(coefficients, conditions)) == []


# rows of windows


def test_windows_have_the_driven_fundamentals_of_regions(make):
    coefficients = make()
    rows = list(window_rows(coefficients, CONDITIONS))
    count = {key: 0 for key in ("both left", "both right", "left_only left")}
    for row in rows:
        count[f"{row['condition']} {row['tag']}"] += 1
        assert (row["site"], row["term"]) == ("occipital", "1f")
    assert count == {"both left": 8, "both right": 8, "left_only left": 6}
    first = next(row for row in rows if row["condition"] == "left_only")
    # 8 windows of the participant came before; numbers in the recording start at 11 here
    assert (first["window_number"], first["window"], first["trial"]) == (9, 19, 5)


def test_windows_mean_is_the_projected_amplitude_of_the_measures(make):
    coefficients = make()
    rows = list(window_rows(coefficients, CONDITIONS))
    here = {"condition": "both", "tag": "right", "term": "1f", "site": "occipital"}
    (mean_uv,) = values(rows_of(coefficients), "projected_amplitude_uv", **here)
    single_uv = values(rows, "projected_amplitude_uv", **here)
    assert single_uv.mean() == pytest.approx(mean_uv, rel=1e-12)
    # 3 µV with noise of 0.3 µV in 8 windows: a standard error of 0.1 µV
    assert mean_uv == pytest.approx(3, abs=0.4)


def test_fewest_windows_give_a_shape(make):
    """Hotelling's T² needs K − 2 > 0 degrees of freedom: three windows are the fewest."""
    coefficients = make()
    chosen = np.flatnonzero(coefficients.condition == "rest")[:3]
    names = ("values_uv", "condition", "recording", "trial", "window")
    three = replace(coefficients, **{name: getattr(coefficients, name)[chosen] for name in names})
    rows = rows_of(three)
    assert len(rows) == len(three.terms) * len(SITES)
    assert np.isfinite(values(rows, "detection_p")).all()
    assert response_tables.FEWEST_WINDOWS == 3
