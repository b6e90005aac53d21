"""Rows of alpha: whose band, over which conditions, and regions as means of their channels."""

import numpy as np
import pytest
from onbin import arrays
from onbin.alpha_tables import Spectra, alpha_rows, find_band, window_rows
from onbin.sites import common_sites

GRID_HZ = np.arange(1, 45.01, 0.25)
CHANNELS = ["Fz", "O1", "O2"]
ALPHA_HZ = {"rest": 9.5, "task": 11.0}
REGIONS = {"left": ["O1"], "right": ["O2"], "occipital": ["O1", "O2", "Oz"]}
SEARCH_HZ, FIXED_HZ = (7.0, 13.0), (8.0, 12.0)


def psd_of(alpha_hz, height, scale=1.0):
    """1/f with a Gaussian bump of 1 Hz, in µV²/Hz; ``scale`` multiplies all of it."""
    bump = 10 ** (height * np.exp(-((GRID_HZ - alpha_hz) ** 2) / 2))
    return scale * 10 / GRID_HZ * bump


@pytest.fixture
def spectra(tmp_path):
    """Four windows at rest and two in the task: none at Fz, O2 twice as strong as O1."""
    condition = ["rest"] * 4 + ["task"] * 2
    psd = np.array(
        [[psd_of(ALPHA_HZ[name], h, s) for h, s in ((0, 1), (1, 1), (1, 2))] for name in condition]
    )
    psd *= np.array([0.5, 1, 1.5, 1, 0.8, 1.2])[:, None, None]
    path = tmp_path / "psd.npz"
    arrays.write(
        path,
        frequencies_hz=GRID_HZ,
        psd_uv2_per_hz=psd,
        subtracted_uv2=np.tile([0.0, 1.0, 3.0], (6, 1)),
        condition=condition,
        recording=["sub-1/eeg/sub-1_task-x"] * 6,
        window=[1, 2, 3, 4, 1, 2],
        channel=CHANNELS,
    )
    return Spectra.of(arrays.read(path))


def band_of(spectra, region="occipital", conditions=(), exclude_hz=()):
    channels = [c for c in REGIONS[region] if c in CHANNELS] if region in REGIONS else [region]
    return find_band(spectra, channels, conditions, SEARCH_HZ, 2.0, FIXED_HZ, exclude_hz)


def rows_of(spectra, band, conditions=None, right="right", left="left"):
    places = common_sites([CHANNELS], REGIONS)
    conditions = conditions or {"rest": [], "task": []}
    rows = alpha_rows(spectra, places, conditions, band, FIXED_HZ, right, left)
    return {(row["condition"], row["site"]): row for row in rows}


@pytest.mark.parametrize("condition", ["rest", "task"])
def test_band_is_about_the_peak_of_the_conditions_chosen(spectra, condition):
    band = band_of(spectra, conditions=[condition])
    # half a bin of the grid; the slope of 1/f pulls the peak down a little
    assert band.frequency.peak_hz == pytest.approx(ALPHA_HZ[condition], abs=0.125)
    assert band.low_hz == band.frequency.peak_hz - 2
    assert band.high_hz == band.frequency.peak_hz + 2
    assert band.columns["alpha_found"] == "yes"


def test_no_condition_chosen_means_all(spectra):
    with_all = band_of(spectra, conditions=["rest", "task"])
    assert band_of(spectra).columns == with_all.columns


def test_fixed_band_where_there_is_no_peak_or_no_window(spectra):
    flat = band_of(spectra, region="Fz")
    assert (flat.low_hz, flat.high_hz) == FIXED_HZ
    assert "0 of at least 1 channels have a peak" in flat.columns["alpha_found"]
    absent = band_of(spectra, conditions=["never"])
    assert (absent.low_hz, absent.high_hz) == FIXED_HZ
    assert absent.columns["alpha_found"] == "no window shows it"
    assert np.isnan(absent.columns["alpha_frequency_hz"])


def test_rows_are_means_over_windows_and_channels(spectra):
    band = band_of(spectra, conditions=["rest"])
    rows = rows_of(spectra, band)
    assert len(rows) == 2 * (len(CHANNELS) + len(REGIONS))
    region, o1, o2 = (rows["rest", site] for site in ("occipital", "O1", "O2"))
    assert (region["windows"], rows["task", "O1"]["windows"]) == (4, 2)
    assert (region["channels"], region["site_kind"]) == ("O1 O2", "region")
    # power is linear in the spectrum; the windows' factors have a mean of 1
    for name in ("alpha_power_uv2", "alpha_fixed_uv2", "subtracted_uv2"):
        assert region[name] == pytest.approx((o1[name] + o2[name]) / 2, rel=1e-12)
    assert o2["alpha_power_uv2"] == pytest.approx(2 * o1["alpha_power_uv2"], rel=1e-12)
    assert o1["alpha_power_db"] == pytest.approx(10 * np.log10(o1["alpha_power_uv2"]), rel=1e-12)
    # a share and a slope do not depend on the unit
    for name in ("alpha_relative", "aperiodic_exponent"):
        assert o2[name] == pytest.approx(o1[name], rel=1e-4)
    # Fz is 10/f and no more: exponent 1, offset log10 10, nothing above the fit
    fz = rows["rest", "Fz"]
    assert fz["aperiodic_exponent"] == pytest.approx(1, abs=1e-3)
    assert fz["aperiodic_offset"] == pytest.approx(1, abs=1e-3)
    assert fz["alpha_periodic_uv2"] == pytest.approx(0, abs=0.01)
    assert fz["subtracted_uv2"] == 0


def test_lateralisation_stands_at_the_right_region_alone(spectra):
    rows = rows_of(spectra, band_of(spectra))
    found = {k: r["alpha_lateralisation"] for k, r in rows.items()}
    finite = {key: value for key, value in found.items() if np.isfinite(value)}
    # (R − L)/(R + L) of 2 and 1
    third = pytest.approx(1 / 3, rel=1e-12)
    assert finite == {("rest", "right"): third, ("task", "right"): third}
    without = rows_of(spectra, band_of(spectra), right=None, left=None).values()
    assert all(np.isnan(row["alpha_lateralisation"]) for row in without)


def test_the_fit_leaves_out_the_flicker_of_each_condition(spectra):
    at_flicker = np.abs(GRID_HZ[:, None] - [18, 36]).min(axis=1) < 0.5
    loud = spectra.psd_uv2_per_hz.copy()
    loud[..., at_flicker] *= 1e4
    spectra = Spectra(**{**vars(spectra), "psd_uv2_per_hz": loud})
    rows = rows_of(spectra, band_of(spectra), {"rest": [], "task": [18.0, 36.0]})
    assert rows["task", "Fz"]["aperiodic_exponent"] == pytest.approx(1, abs=1e-3)
    assert rows["rest", "Fz"]["aperiodic_exponent"] != pytest.approx(1, abs=1e-3)


def test_a_condition_without_windows_has_no_rows(spectra):
    assert rows_of(spectra, band_of(spectra), {"never": []}) == {}


def test_windows_of_regions(spectra):
    band = band_of(spectra, conditions=["rest"])
    rows = list(window_rows(spectra, common_sites([CHANNELS], REGIONS), band))
    assert [row["site"] for row in rows[:3]] == ["left", "right", "occipital"]
    assert len(rows) == 6 * len(REGIONS)
    last = rows[-1]
    assert (last["window_number"], last["window"], last["condition"]) == (6, 2, "task")
    assert last["log_alpha"] == pytest.approx(np.log10(last["alpha_power_uv2"]), rel=1e-12)
    left = [row["alpha_power_uv2"] for row in rows if row["site"] == "left"]
    expected = rows_of(spectra, band)["rest", "left"]["alpha_power_uv2"]
    np.testing.assert_allclose(left[:4], expected * np.array([0.5, 1, 1.5, 1]), rtol=1e-12)
